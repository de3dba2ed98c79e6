"""Training labels as an analyst and field visitors would give them, a few per cent wrong."""

from __future__ import annotations

from dataclasses import dataclass

import geopandas as gpd
import numpy as np
import pandas as pd

from inundate.common.codes import ViewCode
from inundate.common.grid import Grid
from inundate.common.seeds import rng_for
from inundate.reserve.canopy import leaf_share
from inundate.reserve.plan import CRS
from inundate.reserve.scenes import Landscape, ViewPlan

WRONG_SHARE = 0.03
SEASON_SHARES = {"off": 0.60, "up": 0.12, "on": 0.18, "fall": 0.10}


@dataclass(frozen=True, slots=True)
class _Scope:
    """Where labels may lie: wetland and share of each pixel, the labelled wetlands, the truth of the views."""

    own: tuple[np.ndarray, np.ndarray]
    allowed: np.ndarray
    truths: dict[str, np.ndarray]


@dataclass(frozen=True, slots=True)
class LabelSet:
    """labels: the layer of the inputs (wetland_id, date, scene_id, label, source); truth: row, correct, water_share."""

    labels: gpd.GeoDataFrame
    truth: pd.DataFrame


def season_of(land: Landscape, view: ViewPlan) -> str:
    """Return ``off``, ``up``, ``on`` or ``fall`` for the region on a view's day."""
    share = float(leaf_share(land.years, view.day, np.array([0.0]))[0][0])
    if share < 0.05:
        return "off"
    if share > 0.85:
        return "on"
    return "up" if view.day.day_of_year < 200 else "fall"


def _pixel_wetland(land: Landscape) -> tuple[np.ndarray, np.ndarray]:
    """Wetland that holds most of each 10 m pixel (-1 none) and the share of the pixel inside it."""
    n = land.plan.side_px
    share = np.where(land.ground.wetland >= 0, land.ground.share, 0.0)
    inside = share.reshape(n, 4, n, 4).mean(axis=(1, 3))
    block = land.ground.wetland.reshape(n, 4, n, 4).transpose(0, 2, 1, 3).reshape(n, n, 16)
    return block.max(axis=2), inside


def _candidates(
    rng: np.random.Generator, truth: np.ndarray, own: tuple[np.ndarray, np.ndarray], allowed: np.ndarray, n: int
) -> tuple[np.ndarray, np.ndarray]:
    """Pick pixels of one view: wet and dry in labelled wetlands, some just outside, some anywhere."""
    water, _, code = truth
    wetland, inside = own
    mine = (wetland >= 0) & np.isin(wetland, allowed) & (inside > 0.5) & (code == ViewCode.CLEAR)
    wet, dry = mine & (water > 50), mine & (water <= 50)
    # an analyst avoids most pixels of doubt
    sure = np.abs(water.astype(int) - 50) > 35
    weight = np.where(sure, 1.0, 0.25)
    away = (wetland < 0) & (code == ViewCode.CLEAR)
    picks = []
    for mask, share in ((wet, 0.42), (dry, 0.38), (away, 0.20)):
        cells = np.flatnonzero(mask)
        if cells.size == 0:
            continue
        p = weight.ravel()[cells]
        count = min(max(1, round(share * n)), int(cells.size))
        picks.append(rng.choice(cells, count, replace=False, p=p / p.sum()))
    if not picks:
        return np.empty(0, np.int64), np.empty(0, np.int64)
    flat = np.concatenate(picks)
    return flat // water.shape[1], flat % water.shape[1]


def make_labels(land: Landscape, views: list[ViewPlan], truths: dict[str, np.ndarray]) -> LabelSet:
    """Draw the labels.

    Parameters
    ----------
    land : Landscape
    views : list of ViewPlan
    truths : dict of scene_id to ndarray of uint8, shape (3, row, column)
        Truth of each view: water percent, visible percent, view code.
    """
    plan = land.plan
    rng = rng_for(plan.seed, "labels", plan.size)
    n_wetlands = len(land.bowls)
    allowed = np.sort(rng.choice(n_wetlands, max(2, round(0.67 * n_wetlands)), replace=False))
    scope = _Scope(_pixel_wetland(land), allowed, truths)
    seasons = np.array([season_of(land, v) for v in views])
    clear = np.array([float((truths[v.scene_id][2] == ViewCode.CLEAR).mean()) for v in views])
    rows: list[dict] = []
    for season, share in SEASON_SHARES.items():
        usable = np.flatnonzero((seasons == season) & (clear > 0.25))
        if usable.size == 0:
            continue
        total = round(share * plan.n_labels)
        chosen = np.sort(rng.choice(usable, min(usable.size, max(3, total // 22)), replace=False))
        for place in chosen:
            rows.extend(_label_view(land, rng, views[place], scope, season, -(-total // chosen.size)))
    frame = pd.DataFrame(rows).drop_duplicates(["scene_id", "row", "col"])
    frame = frame.sort_values(["date", "scene_id", "wetland_id", "row", "col"], ignore_index=True)
    return _finish(plan.grid, rng, frame)


def _label_view(
    land: Landscape, rng: np.random.Generator, view: ViewPlan, scope: _Scope, season: str, n: int
) -> list[dict]:
    """Labels of one view; under full leaf only what shows through openings, or what a visitor saw on the ground."""
    truth, own = scope.truths[view.scene_id], scope.own
    rows, cols = _candidates(rng, truth, own, scope.allowed, n)
    out = []
    for r, c in zip(rows, cols, strict=True):
        visible = truth[1, r, c] / 100.0
        hidden = visible < 0.25
        if season in ("on", "up", "fall") and hidden and own[0][r, c] >= 0 and rng.random() < 0.5:
            continue
        inside = own[0][r, c] >= 0
        out.append(
            {
                "wetland_id": land.bowls[own[0][r, c]].wetland_id if inside else "",
                "date": f"{view.day:%Y-%m-%d}",
                "scene_id": view.scene_id,
                "water": bool(truth[0, r, c] > 50),
                "source": "field" if hidden and inside else ("screen" if rng.random() < 0.8 else "field"),
                "row": int(r),
                "col": int(c),
                "water_share": truth[0, r, c] / 100.0,
            }
        )
    return out


def _finish(grid: Grid, rng: np.random.Generator, frame: pd.DataFrame) -> LabelSet:
    """Turn pixels into points, and some labels wrong."""
    wrong = rng.random(len(frame)) < WRONG_SHARE
    said = frame["water"].to_numpy() ^ wrong
    x, y = grid.centres(frame["row"].to_numpy(), frame["col"].to_numpy())
    x = np.round(x + rng.uniform(-2.5, 2.5, len(frame)), 2)
    y = np.round(y + rng.uniform(-2.5, 2.5, len(frame)), 2)
    layer = gpd.GeoDataFrame(
        {
            "wetland_id": frame["wetland_id"].to_numpy(),
            "date": frame["date"].to_numpy(),
            "scene_id": frame["scene_id"].to_numpy(),
            "label": np.where(said, "water", "dry"),
            "source": frame["source"].to_numpy(),
        },
        geometry=gpd.points_from_xy(x, y),
        crs=CRS,
    )
    truth = pd.DataFrame({"row": np.arange(len(frame)), "correct": ~wrong, "water_share": frame["water_share"]})
    return LabelSet(layer, truth)
