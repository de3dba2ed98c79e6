"""Steps from archived views to observed extents: scoring of what is new, and the extents of the whole archive."""

from __future__ import annotations

import warnings
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from inundate.batch.archive import ROWS, read_score
from inundate.batch.compute import run_units
from inundate.batch.imagery import array_mark
from inundate.batch.layout import Layout
from inundate.batch.mapping import (
    SCORE_COLUMNS,
    UNLIKE_SCALE,
    ScoreJob,
    dark_value,
    haze_value,
    ndvi_value,
    score_scene,
)
from inundate.batch.seasons import ScenePlace
from inundate.batch.training import Trained
from inundate.batch.work import Inputs, Work, code_mark, settings_mark, table_mark
from inundate.common.codes import LeafCode, ViewCode
from inundate.common.writing import write_table

if TYPE_CHECKING:
    from inundate.extent import SceneStack
    from inundate.leaves import LeafCalendar

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
            "code": code_mark("pixels"),
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
        "code": code_mark("extent", "leaves"),
        **settings_mark(work.pipeline, "extent"),
    }
    with work.progress.step("observed extent"):
        if ledger.why("extent", "all", parts, path) is None:
            return pd.read_parquet(path)
        table = _observe_groups(work, inputs, layout, places, code, share)
        write_table(path, table)
        ledger.put("extent", "all", parts)
    return table


def _observe_groups(
    work: Work, inputs: Inputs, layout: Layout, places: list[ScenePlace], code: np.ndarray, share: np.ndarray
) -> pd.DataFrame:
    from inundate.extent import ExtentObserver, other_shares

    errors = None
    weights = layout.weights.copy()
    weights["row"] = layout.site.rows[weights["pixel"]]
    weights["col"] = layout.site.cols[weights["pixel"]]
    weights["other_share"] = other_shares(weights["pixel"].to_numpy(), weights["share"].to_numpy())
    tables, noise = [], None
    for group, low, high in wetland_groups(work, layout, len(places)):
        wetlands = layout.wetlands.iloc[group]
        mine = weights[weights["wetland_id"].isin(wetlands["wetland_id"])].copy()
        mine["pixel"] -= low
        cells = layout.cells
        if cells is not None:
            cells = cells[cells["wetland_id"].isin(wetlands["wetland_id"])].copy()
            cells["pixel"] -= low
        stack = build_stack(work, layout, places, (group, low, high), code[:, group], share)
        observer = ExtentObserver(
            mine, wetlands, pixel_area_m2=layout.grid.pixel_area_m2, cells=cells, errors=errors, noise=noise
        ).fit(stack)
        noise = observer.noise_
        tables.append(observer.observe(stack, inputs.decisions))
    return (
        pd.concat(tables, ignore_index=True).sort_values(["wetland_id", "datetime", "scene_id"]).reset_index(drop=True)
    )


def wetland_groups(work: Work, layout: Layout, n_scenes: int) -> list[tuple[np.ndarray, int, int]]:
    """Split wetlands into groups whose stacks keep to the memory bound.

    Returns
    -------
    list of (rows of the wetlands table, first site pixel, last site pixel + 1)
    """
    n, size = len(layout.wetlands), layout.site.size
    low, high = np.full(n, size, np.int64), np.zeros(n, np.int64)
    held = np.flatnonzero(layout.owner >= 0)  # also the pixels around a wetland, which tell of shadow and haze
    np.minimum.at(low, layout.owner[held], held)
    np.maximum.at(high, layout.owner[held], held + 1)
    low = np.minimum(low, high)
    order = np.argsort(low, kind="stable")
    most = max(int(work.pipeline.compute.memory_mb * 0.4e6 / (max(n_scenes, 1) * 16)), 1)
    groups, start = [], 0
    while start < order.size:
        stop = start + 1
        while stop < order.size and high[order[start : stop + 1]].max() - low[order[start]] <= most:
            stop += 1
        rows = np.sort(order[start:stop])
        groups.append((rows, int(low[rows].min()), int(high[rows].max())))
        start = stop
    return groups


def build_stack(
    work: Work,
    layout: Layout,
    places: list[ScenePlace],
    where: tuple[np.ndarray, int, int],
    code: np.ndarray,
    share: np.ndarray,
) -> SceneStack:
    """Read the scores of a range of site pixels into a stack in time; share is (scene, wetland of the layout)."""
    from inundate.extent import SceneStack, shaded, veiled

    group, low, high = where
    n = len(places)
    span = (low // ROWS, -(-high // ROWS))
    cut = slice(low - span[0] * ROWS, high - span[0] * ROWS)
    stack = {name: np.full((n, high - low), 255, np.uint8) for name in SCORE_COLUMNS}
    names = ("fraction", "fraction_sd", "unlike", "ndvi", "haze", "dark", "code")
    for i, place in enumerate(places):
        for name, values in zip(names, read_score(work.archive.score(place.scene_id), names, span), strict=True):
            stack[name][i] = values[cut]
    owner = layout.owner[low:high]
    leafy = share[:, owner] > 0.5
    veil = veiled(haze_value(stack["haze"]), stack["code"], owner)
    spot = np.column_stack([layout.site.rows[low:high], layout.site.cols[low:high]]).astype(float)
    veil |= shaded(dark_value(stack["dark"]), stack["code"], owner, layout.dry_ground()[low:high], spot, leafy)
    stack["code"][veil] = ViewCode.CLOUD
    stack["fraction"][veil] = 255
    view = canopy_view(stack["ndvi"], share[:, owner])
    return SceneStack(
        scene_id=np.array([p.scene_id for p in places], object),
        datetime=np.array([p.datetime for p in places], "datetime64[ns]"),
        fraction=stack["fraction"],
        code=stack["code"],
        wetland_id=layout.wetlands["wetland_id"].to_numpy()[group],
        leaf_state=code,
        view=view,
        fraction_sd=stack["fraction_sd"],
        unlike=(stack["unlike"] > 100 * UNLIKE_SCALE) & (stack["unlike"] != 255) & (stack["code"] == ViewCode.CLEAR),
    )


def canopy_view(ndvi: np.ndarray, leaf_share: np.ndarray) -> np.ndarray:
    """Return the share of each pixel's ground that its canopy lets through, percent (scene, pixel), from its own greenness.

    Parameters
    ----------
    ndvi : ndarray of uint8, shape (scene, pixel)
        0..200, 255 missing (see mapping.ndvi_code).
    leaf_share : ndarray of float32, shape (scene, pixel)
    """
    from inundate.leaves import view_fraction

    out = np.empty(ndvi.shape, np.uint8)
    for start in range(0, ndvi.shape[1], 4096):
        part = slice(start, start + 4096)
        values, leaf = ndvi_value(ndvi[:, part]), leaf_share[:, part]
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", RuntimeWarning)
            peak = np.nanpercentile(np.where(leaf >= 0.9, values, np.nan), 80, axis=0)
            bare = np.nanmedian(np.where(leaf <= 0.1, values, np.nan), axis=0)
        for i in range(ndvi.shape[0]):
            seen = view_fraction(peak, bare, leaf[i])
            out[i, part] = np.where(np.isfinite(seen), np.round(100 * np.clip(seen, 0, 1)), 100).astype(np.uint8)
    return out
