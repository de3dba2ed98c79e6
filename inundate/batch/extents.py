"""Observed extents group by group of wetlands: what each group needs, so that groups can be done anywhere and in any order."""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from inundate.batch.archive import ROWS, Archive, read_score
from inundate.batch.compute import IN_FLIGHT, run_units
from inundate.batch.layout import Layout
from inundate.batch.mapping import DARK, HAZE, NDVI, UNLIKE_SCALE
from inundate.batch.seasons import ScenePlace
from inundate.batch.work import Inputs, Work
from inundate.common.codes import ViewCode
from inundate.common.seeds import seed_for

if TYPE_CHECKING:
    from inundate.extent import SceneStack
    from inundate.extent.noise import NoiseModel

STACK_SHARE = 0.4  # of the memory setting, for the stacks of groups of wetlands, all workers together
STACK_BYTES = 20  # of a pixel in a scene while a stack is built, the veil's floats beside it
SAMPLE_BYTES = 200e6  # of the stack that noise is learnt from, whatever the memory setting


@dataclass(frozen=True, slots=True)
class Group:
    """Wetlands that are observed together.

    Attributes
    ----------
    rows : ndarray of int64, shape (wetland,)
        Rows of the wetlands table, ascending.
    pixels : ndarray of int64, shape (pixel,)
        Positions of their site pixels, ascending: those with a share in them, and all of every wetland that owns one.
    """

    rows: np.ndarray
    pixels: np.ndarray


@dataclass(frozen=True, slots=True)
class GroupJob:
    """One group of wetlands to observe.

    Attributes
    ----------
    archive : Archive
    places : list of ScenePlace
    pixels : ndarray of int64, shape (pixel,)
        The group's site pixels.
    owner : ndarray of int64, shape (pixel,)
        Column of ``share`` of each pixel's wetland.
    ring : ndarray of bool, shape (pixel,)
        Pixels outside every wetland.
    where : ndarray of float64, shape (pixel, 2)
        Row and column.
    wetlands, weights : DataFrame
        Of the group; ``pixel`` counts in ``pixels``.
    cells : DataFrame or None
    state : ndarray of uint8, shape (scene, wetland of the group)
    share : ndarray of float32, shape (scene, owner)
        Leaf shares of the wetlands that own pixels.
    pixel_area_m2 : float
    decisions : DataFrame or None
    noise : NoiseModel or None
        None: learnt from this group itself.
    """

    archive: Archive
    places: list[ScenePlace]
    pixels: np.ndarray
    owner: np.ndarray
    ring: np.ndarray
    where: np.ndarray
    wetlands: pd.DataFrame
    weights: pd.DataFrame
    cells: pd.DataFrame | None
    state: np.ndarray
    share: np.ndarray
    pixel_area_m2: float
    decisions: pd.DataFrame | None = None
    noise: NoiseModel | None = None


def observe_group(job: GroupJob) -> tuple[pd.DataFrame, NoiseModel]:
    """Return extent_observed of a group's wetlands, and the noise that it rests on."""
    from inundate.extent import ExtentObserver

    stack = build_stack(job)
    observer = ExtentObserver(
        job.weights, job.wetlands, pixel_area_m2=job.pixel_area_m2, cells=job.cells, noise=job.noise
    ).fit(stack)
    return observer.observe(stack, job.decisions), observer.noise_


def observe_groups(
    work: Work, inputs: Inputs, layout: Layout, places: list[ScenePlace], code: np.ndarray, share: np.ndarray
) -> pd.DataFrame:
    """Learn noise from a sample of wetlands, then observe group by group; how they are grouped changes no value.

    Parameters
    ----------
    work, inputs, layout, places
    code : ndarray of uint8, shape (scene, wetland)
        Leaf states.
    share : ndarray of float32, shape (scene, wetland)
        Leaf shares.

    Returns
    -------
    DataFrame
        extent_observed, sorted by wetland_id, datetime, scene_id.
    """
    from inundate.extent import other_shares

    compute, dry = work.pipeline.compute, layout.dry_ground()
    weights = layout.weights.copy()
    weights["row"] = layout.site.rows[weights["pixel"]]
    weights["col"] = layout.site.cols[weights["pixel"]]
    weights["other_share"] = other_shares(weights["pixel"].to_numpy(), weights["share"].to_numpy())

    def job(group: Group, noise: NoiseModel | None) -> GroupJob:
        wetlands = layout.wetlands.iloc[group.rows]
        owners, owner = np.unique(layout.owner[group.pixels], return_inverse=True)
        return GroupJob(
            work.archive,
            places,
            group.pixels,
            owner,
            dry[group.pixels],
            np.column_stack([layout.site.rows[group.pixels], layout.site.cols[group.pixels]]).astype(float),
            wetlands,
            _onto(weights, wetlands, group),
            None if layout.cells is None else _onto(layout.cells, wetlands, group),
            code[:, group.rows],
            share[:, owners],
            layout.grid.pixel_area_m2,
            inputs.decisions,
            noise,
        )

    pixel_bytes = STACK_BYTES * max(len(places), 1)
    most = int(STACK_SHARE * compute.memory_mb * 1e6 / pixel_bytes / compute.workers)
    sample = noise_sample(layout, int(SAMPLE_BYTES / pixel_bytes))
    if holds_all(layout, sample):
        return observe_group(job(_group(layout, np.arange(len(layout.wetlands))), None))[0]
    noise = observe_group(job(_group(layout, sample), None))[1]
    groups = wetland_groups(layout, min(most, -(-layout.site.size // compute.workers)))
    tables: dict[int, pd.DataFrame] = {}
    batch = IN_FLIGHT * compute.workers
    for start in range(0, len(groups), batch):  # jobs hold their part of the tables: few are made at a time
        jobs = [job(group, noise) for group in groups[start : start + batch]]
        for outcome in run_units(observe_group, jobs, compute, work.progress.say):
            if outcome.error is not None:
                raise RuntimeError(outcome.error)
            tables[start + outcome.index] = outcome.result[0]
    every = pd.concat([tables[i] for i in sorted(tables)], ignore_index=True)
    return every.sort_values(["wetland_id", "datetime", "scene_id"]).reset_index(drop=True)


def _onto(table: pd.DataFrame, wetlands: pd.DataFrame, group: Group) -> pd.DataFrame:
    """Return the rows of a group's wetlands, with ``pixel`` counted in the group's pixels."""
    mine = table[table["wetland_id"].isin(wetlands["wetland_id"])].copy()
    mine["pixel"] = np.searchsorted(group.pixels, mine["pixel"].to_numpy())
    return mine


def noise_sample(layout: Layout, most_pixels: int, most_wetlands: int = 300) -> np.ndarray:
    """Return rows (ascending) of the wetlands that noise is learnt from: by lot of their names, until there are enough.

    The sample depends on no setting of memory or workers, so that values do not either.
    """
    ids = layout.wetlands["wetland_id"].to_numpy()
    size = np.bincount(layout.owner[layout.owner >= 0], minlength=ids.size)
    lot = sorted(range(ids.size), key=lambda i: seed_for(0, "noise", ids[i]))
    order = np.array([i for i in lot if size[i]], np.int64)[:most_wetlands]
    enough = max(int(np.searchsorted(np.cumsum(size[order]), most_pixels, side="right")), 1)
    return np.sort(order[:enough])


def holds_all(layout: Layout, sample: np.ndarray) -> bool:
    """Tell whether a sample holds every wetland that owns a pixel: then it is observed as it is learnt from."""
    return sample.size == np.unique(layout.owner[layout.owner >= 0]).size


def wetland_groups(layout: Layout, most_pixels: int) -> list[Group]:
    """Split wetlands, by the row of their first pixel, into groups of so many site pixels at most (or one wetland)."""
    count = len(layout.wetlands)
    size = np.bincount(layout.owner[layout.owner >= 0], minlength=count)
    first = layout.weights.groupby("wetland_id")["pixel"].min().reindex(layout.wetlands["wetland_id"])
    order = np.argsort(first.fillna(-1).to_numpy(), kind="stable")
    groups, start, held = [], 0, 0
    for stop, row in enumerate(order):
        if stop > start and held + size[row] > most_pixels:
            groups.append(_group(layout, np.sort(order[start:stop])))
            start, held = stop, 0
        held += size[row]
    return [*groups, _group(layout, np.sort(order[start:]))]


def _group(layout: Layout, rows: np.ndarray) -> Group:
    ids = layout.wetlands["wetland_id"].iloc[rows]
    shared = layout.weights.loc[layout.weights["wetland_id"].isin(ids), "pixel"].to_numpy()
    owners = np.union1d(rows, layout.owner[shared])
    return Group(rows, np.union1d(shared, np.flatnonzero(np.isin(layout.owner, owners))))


def build_stack(job: GroupJob) -> SceneStack:
    """Read the scores of a group's pixels into a stack in time."""
    from inundate.extent import SceneStack, shaded, veiled

    n, pixels = len(job.places), job.pixels
    span = (int(pixels[0]) // ROWS, int(pixels[-1]) // ROWS + 1) if pixels.size else (0, 1)
    names = ("fraction", "fraction_sd", "unlike", "ndvi", "haze", "dark", "code")
    stack = {name: np.full((n, pixels.size), 255, np.uint8) for name in names}
    for i, place in enumerate(job.places):
        for name, values in zip(names, read_score(job.archive.score(place.scene_id), names, span), strict=True):
            stack[name][i] = values[pixels - span[0] * ROWS]
    veil = veiled(HAZE.value(stack.pop("haze")), stack["code"], job.owner)
    dark, leafy = DARK.value(stack.pop("dark")), job.share[:, job.owner] > 0.5
    veil |= shaded(dark, stack["code"], job.owner, job.ring, job.where, leafy)
    stack["code"][veil] = ViewCode.CLOUD
    stack["fraction"][veil] = 255
    return SceneStack(
        scene_id=np.array([p.scene_id for p in job.places], object),
        datetime=np.array([p.datetime for p in job.places], "datetime64[ns]"),
        fraction=stack["fraction"],
        code=stack["code"],
        wetland_id=job.wetlands["wetland_id"].to_numpy(),
        leaf_state=job.state,
        view=canopy_view(stack.pop("ndvi"), job.share, job.owner),
        fraction_sd=stack["fraction_sd"],
        unlike=(stack["unlike"] > 100 * UNLIKE_SCALE) & (stack["unlike"] != 255) & (stack["code"] == ViewCode.CLEAR),
    )


def canopy_view(ndvi: np.ndarray, leaf_share: np.ndarray, owner: np.ndarray) -> np.ndarray:
    """Return the share of each pixel's ground that its canopy lets through, percent (scene, pixel), from its own greenness.

    Parameters
    ----------
    ndvi : ndarray of uint8, shape (scene, pixel)
        0..200, 255 missing (see mapping.NDVI).
    leaf_share : ndarray of float32, shape (scene, wetland)
    owner : ndarray of int, shape (pixel,)
        Wetland of each pixel.
    """
    from inundate.leaves import view_fraction

    out = np.empty(ndvi.shape, np.uint8)
    for start in range(0, ndvi.shape[1], 4096):
        part = slice(start, start + 4096)
        values, leaf = NDVI.value(ndvi[:, part]), leaf_share[:, owner[part]]
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", RuntimeWarning)
            peak = np.nanpercentile(np.where(leaf >= 0.9, values, np.nan), 80, axis=0)
            bare = np.nanmedian(np.where(leaf <= 0.1, values, np.nan), axis=0)
        for i in range(ndvi.shape[0]):
            seen = view_fraction(peak, bare, leaf[i])
            out[i, part] = np.where(np.isfinite(seen), np.round(100 * np.clip(seen, 0, 1)), 100).astype(np.uint8)
    return out
