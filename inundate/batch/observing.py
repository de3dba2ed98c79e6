"""Steps from archived views to observed extents: scoring of what is new, and the extents of the whole archive."""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from inundate.batch.archive import ROWS, read_score
from inundate.batch.compute import run_units
from inundate.batch.imagery import array_mark
from inundate.batch.layout import Layout
from inundate.batch.mapping import UNLIKE_SCALE, ScoreJob, dark_value, haze_value, ndvi_value, score_scene
from inundate.batch.seasons import ScenePlace
from inundate.batch.training import Trained
from inundate.batch.work import Inputs, Work, code_mark, settings_mark, table_mark
from inundate.common.codes import LeafCode, ViewCode
from inundate.common.seeds import seed_for
from inundate.common.writing import write_table

if TYPE_CHECKING:
    from inundate.extent import ExtentObserver, SceneStack
    from inundate.extent.noise import NoiseModel
    from inundate.leaves import LeafCalendar

STACK_SHARE = 0.4  # of the memory setting, for the stack of one group of wetlands
STACK_BYTES = 16  # of a pixel in a scene while a stack is built, the veil's floats beside it
SAMPLE_BYTES = 200e6  # of the stack that noise is learnt from, whatever the memory setting
Leaves = tuple["LeafCalendar", pd.DataFrame]


def settled_state(calendar: LeafCalendar, ids: np.ndarray, when: pd.Timestamp, share: np.ndarray) -> np.ndarray:
    """Return the leaf state code that goes with a settled leaf share: its side of the season, by the next fortnight."""
    _, later = calendar.states(ids, np.full(ids.size, np.datetime64(when + pd.Timedelta(days=15), "ns")))
    _, now = calendar.states(ids, np.full(ids.size, np.datetime64(when, "ns")))
    between = np.where(later >= now, int(LeafCode.GREEN_UP), int(LeafCode.LEAF_FALL))
    state = np.where(share <= 0.1, int(LeafCode.LEAF_OFF), np.where(share >= 0.9, int(LeafCode.LEAF_ON), between))
    return state.astype(np.uint8)


def map_new(work: Work, layout: Layout, places: list[ScenePlace], leaves: Leaves, trained: Trained) -> None:
    """Score views that are new, or whose leaf share or classifier changed; leaves scores and maps."""
    archive, ledger = work.archive, work.ledger
    calendar, settled = leaves
    ids = layout.wetlands["wetland_id"].to_numpy()
    owner = array_mark(layout.owner)
    jobs, parts_of = [], []
    for place in places:
        share = settled.loc[place.scene_id].to_numpy(np.float32)
        state = settled_state(calendar, ids, place.datetime.normalize(), share)
        parts = {
            "view": place.mark,
            "leaf share": array_mark(share, state),
            "classifier": trained.mark,
            "wetlands": owner,
            "code": code_mark("pixels", "batch/mapping.py"),
        }
        score, made = archive.score(place.scene_id), archive.map(place.scene_id)
        why = ledger.why("score", place.scene_id, parts, score)
        if why is not None or not made.exists():
            job = ScoreJob(
                place.scene_id,
                share,
                state,
                layout.owner,
                place.sun_elevation_deg,
                place.ground,
                layout.site,
                archive.out,
                trained.mark,
            )
            jobs.append(job)
            parts_of.append(parts)
    with work.progress.step("mapping water", len(jobs)) as advance:
        for outcome in run_units(score_scene, jobs, work.pipeline.compute, work.progress.say):
            scene_id = jobs[outcome.index].scene_id
            if outcome.error is not None:
                raise RuntimeError(outcome.error)
            ledger.put("score", scene_id, parts_of[outcome.index], detail=outcome.result)
            advance(1, outcome.result["bytes"])


def observe(
    work: Work, inputs: Inputs, layout: Layout, places: list[ScenePlace], calendar: LeafCalendar
) -> pd.DataFrame:
    """Return extent_observed of every wetland and scene, learnt and observed group by group of wetlands."""
    archive, ledger = work.archive, work.ledger
    path = archive.table("extent_observed")
    ids = layout.wetlands["wetland_id"].to_numpy()
    units = ledger.all("score")
    days = np.array([p.datetime.normalize() for p in places], "datetime64[ns]")
    code, share = calendar.states(np.tile(ids, days.size), np.repeat(days, ids.size))
    code, share = code.reshape(days.size, ids.size), share.reshape(days.size, ids.size).astype(np.float32)
    parts = {
        "scores": {p.scene_id: units[p.scene_id].fingerprint for p in places},
        "leaf states": array_mark(code, np.round(share, 3)),
        "wetlands": table_mark(layout.weights, layout.wetlands, layout.cells),
        "decisions": table_mark(inputs.decisions),
        "code": code_mark("extent", "leaves", "batch/observing.py"),
        **settings_mark(work.pipeline, "extent"),
    }
    with work.progress.step("observed extent"):
        if ledger.why("extent", "all", parts, path) is None:
            return pd.read_parquet(path)
        table = _observe_groups(work, inputs, layout, places, code, share)
        write_table(path, table)
        ledger.put("extent", "all", parts)
    return table


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


def _observe_groups(
    work: Work, inputs: Inputs, layout: Layout, places: list[ScenePlace], code: np.ndarray, share: np.ndarray
) -> pd.DataFrame:
    """Learn noise from a sample of wetlands, then observe group by group; how they are grouped changes no value."""
    from inundate.extent import ExtentObserver, other_shares

    weights = layout.weights.copy()
    weights["row"] = layout.site.rows[weights["pixel"]]
    weights["col"] = layout.site.cols[weights["pixel"]]
    weights["other_share"] = other_shares(weights["pixel"].to_numpy(), weights["share"].to_numpy())

    def learnt(group: Group, noise: NoiseModel | None) -> tuple[ExtentObserver, SceneStack]:
        wetlands = layout.wetlands.iloc[group.rows]
        mine = _onto(weights, wetlands, group)
        cells = None if layout.cells is None else _onto(layout.cells, wetlands, group)
        stack = build_stack(work, layout, places, group, code, share)
        observer = ExtentObserver(mine, wetlands, pixel_area_m2=layout.grid.pixel_area_m2, cells=cells, noise=noise)
        return observer.fit(stack), stack

    pixel_bytes = STACK_BYTES * max(len(places), 1)
    groups = wetland_groups(layout, int(STACK_SHARE * work.pipeline.compute.memory_mb * 1e6 / pixel_bytes))
    sample = noise_sample(layout, int(SAMPLE_BYTES / pixel_bytes))
    noise = None
    if len(groups) > 1 or sample.size < len(layout.wetlands):
        noise = learnt(_group(layout, sample), None)[0].noise_
    tables = []
    for group in groups:
        observer, stack = learnt(group, noise)
        tables.append(observer.observe(stack, inputs.decisions))
        del observer, stack  # before the next is built
    return (
        pd.concat(tables, ignore_index=True).sort_values(["wetland_id", "datetime", "scene_id"]).reset_index(drop=True)
    )


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


def build_stack(
    work: Work, layout: Layout, places: list[ScenePlace], group: Group, code: np.ndarray, share: np.ndarray
) -> SceneStack:
    """Read the scores of a group's pixels into a stack in time; code and share are (scene, wetland of the layout)."""
    from inundate.extent import SceneStack, shaded, veiled

    n, pixels = len(places), group.pixels
    span = (int(pixels[0]) // ROWS, int(pixels[-1]) // ROWS + 1) if pixels.size else (0, 1)
    names = ("fraction", "fraction_sd", "unlike", "ndvi", "haze", "dark", "code")
    stack = {name: np.full((n, pixels.size), 255, np.uint8) for name in names}
    for i, place in enumerate(places):
        for name, values in zip(names, read_score(work.archive.score(place.scene_id), names, span), strict=True):
            stack[name][i] = values[pixels - span[0] * ROWS]
    owner = layout.owner[pixels]
    leafy = share[:, owner] > 0.5
    veil = veiled(haze_value(stack.pop("haze")), stack["code"], owner)
    spot = np.column_stack([layout.site.rows[pixels], layout.site.cols[pixels]]).astype(float)
    veil |= shaded(dark_value(stack.pop("dark")), stack["code"], owner, layout.dry_ground()[pixels], spot, leafy)
    stack["code"][veil] = ViewCode.CLOUD
    stack["fraction"][veil] = 255
    view = canopy_view(stack.pop("ndvi"), share, owner)
    return SceneStack(
        scene_id=np.array([p.scene_id for p in places], object),
        datetime=np.array([p.datetime for p in places], "datetime64[ns]"),
        fraction=stack["fraction"],
        code=stack["code"],
        wetland_id=layout.wetlands["wetland_id"].to_numpy()[group.rows],
        leaf_state=code[:, group.rows],
        view=view,
        fraction_sd=stack["fraction_sd"],
        unlike=(stack["unlike"] > 100 * UNLIKE_SCALE) & (stack["unlike"] != 255) & (stack["code"] == ViewCode.CLEAR),
    )


def canopy_view(ndvi: np.ndarray, leaf_share: np.ndarray, owner: np.ndarray) -> np.ndarray:
    """Return the share of each pixel's ground that its canopy lets through, percent (scene, pixel), from its own greenness.

    Parameters
    ----------
    ndvi : ndarray of uint8, shape (scene, pixel)
        0..200, 255 missing (see mapping.ndvi_code).
    leaf_share : ndarray of float32, shape (scene, wetland)
    owner : ndarray of int, shape (pixel,)
        Wetland of each pixel.
    """
    from inundate.leaves import view_fraction

    out = np.empty(ndvi.shape, np.uint8)
    for start in range(0, ndvi.shape[1], 4096):
        part = slice(start, start + 4096)
        values, leaf = ndvi_value(ndvi[:, part]), leaf_share[:, owner[part]]
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", RuntimeWarning)
            peak = np.nanpercentile(np.where(leaf >= 0.9, values, np.nan), 80, axis=0)
            bare = np.nanmedian(np.where(leaf <= 0.1, values, np.nan), axis=0)
        for i in range(ndvi.shape[0]):
            seen = view_fraction(peak, bare, leaf[i])
            out[i, part] = np.where(np.isfinite(seen), np.round(100 * np.clip(seen, 0, 1)), 100).astype(np.uint8)
    return out
