"""Steps from archived views to observed extents: scoring of what is new, and the extents of the whole archive."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from inundate.batch.compute import run_units
from inundate.batch.extents import observe_groups
from inundate.batch.imagery import Settled, array_mark
from inundate.batch.layout import Layout
from inundate.batch.mapping import ScoreJob, score_scene
from inundate.batch.seasons import ScenePlace
from inundate.batch.training import Trained
from inundate.batch.work import Inputs, Work, code_mark, settings_mark, table_mark
from inundate.common.codes import LeafCode
from inundate.common.writing import write_table

if TYPE_CHECKING:
    from inundate.leaves import LeafCalendar

Leaves = tuple["LeafCalendar", Settled]


def _days(places: list[ScenePlace]) -> np.ndarray:
    """Return the scenes' days, datetime64[ns]."""
    return np.array([p.datetime.normalize() for p in places], "datetime64[ns]")


def settled_states(calendar: LeafCalendar, ids: np.ndarray, days: np.ndarray, settled: Settled) -> np.ndarray:
    """Return leaf state codes (scene, wetland) that go with settled shares: the side of the season, by the next fortnight."""
    _, now = calendar.grid(ids, days)
    _, later = calendar.grid(ids, days + np.timedelta64(15, "D"))
    between = np.where(later >= now, np.uint8(LeafCode.GREEN_UP), np.uint8(LeafCode.LEAF_FALL))
    between[settled.tenths <= 1] = LeafCode.LEAF_OFF
    between[settled.tenths >= 9] = LeafCode.LEAF_ON
    return between


def map_new(work: Work, layout: Layout, places: list[ScenePlace], leaves: Leaves, trained: Trained) -> None:
    """Score views that are new, or whose leaf share or classifier changed; leaves scores and maps."""
    archive, ledger = work.archive, work.ledger
    calendar, settled = leaves
    ids = layout.wetlands["wetland_id"].to_numpy()
    owner = array_mark(layout.owner)
    states = settled_states(calendar, ids, _days(places), settled)
    jobs, parts_of = [], []
    for place, state in zip(places, states, strict=True):
        share = settled.share(place.scene_id)
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
    code, share = calendar.grid(ids, _days(places))
    parts = {
        "scores": {p.scene_id: units[p.scene_id].fingerprint for p in places},
        "leaf states": array_mark(code, np.round(share, 3)),
        "wetlands": table_mark(layout.weights, layout.wetlands, layout.cells),
        "decisions": table_mark(inputs.decisions),
        "code": code_mark("extent", "leaves", "batch/extents.py"),
        **settings_mark(work.pipeline, "extent"),
    }
    with work.progress.step("observed extent"):
        if ledger.why("extent", "all", parts, path) is None:
            return pd.read_parquet(path)
        table = observe_groups(work, inputs, layout, places, code, share)
        write_table(path, table)
        ledger.put("extent", "all", parts)
    return table
