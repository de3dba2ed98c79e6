"""Level to share of the largest extent, one table a wetland: from its relation, its elevation, or a bowl."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
import pandas as pd
from numba import njit

NODES = 129
# Shape of a bowl without any other knowledge, below and from 1 ha: prairie wetlands, tagged SEEN in public
# documentation of the Smith Creek basin; form of Hayashi and van der Kamp, J. Hydrol. 237:74, 2000.
BOWL_SHAPE_SMALL, BOWL_SHAPE_LARGE = 1.72, 3.3
# Depth of a full bowl of 1 ha, m; common practice, no source. The rain multiplier is free, so the scale hardly matters.
BOWL_DEPTH_M = 0.6


class Relations(Protocol):
    """What the filled series asks of a set of stage-area relations."""

    def predict(self, wetland_id: str, stage_m: np.ndarray) -> pd.DataFrame:
        """Return area_m2, area_lo_m2, area_hi_m2 and area_sd_m2 at stages (m); KeyError or ValueError if unknown."""
        ...


@dataclass(frozen=True, slots=True)
class LevelMaps:
    """Tables of share against level.

    Attributes
    ----------
    share : ndarray of float64, shape (wetland, node)
        Share of the largest extent at levels ``node / (NODES - 1) * full_m``; 0 first, never falling.
    sd : ndarray of float64, shape (wetland, node)
        Standard deviation of that share (0 where unknown).
    full_m : ndarray of float64, shape (wetland,)
        Level at which the largest share is reached, m above lowest ground.
    source : tuple of str
        ``relation``, ``elevation`` or ``bowl``.
    """

    share: np.ndarray
    sd: np.ndarray
    full_m: np.ndarray
    source: tuple[str, ...]


@njit(cache=True, nogil=True)
def share_at(level: float, table: np.ndarray, full: float) -> float:
    """Share of the largest extent at a level (m), linear between nodes; 0 at or below level 0."""
    if level <= 0.0:
        return 0.0
    last = table.size - 1
    x = level / full * last
    if x >= last:
        return table[last]
    k = int(x)
    return table[k] + (x - k) * (table[k + 1] - table[k])


@njit(cache=True, nogil=True)
def level_at(share: float, table: np.ndarray, full: float) -> float:
    """Lowest level (m) at which the share is reached; 0 for a share of 0 or less, ``full`` above the largest."""
    last = table.size - 1
    if share <= 0.0:
        return 0.0
    if share >= table[last]:
        return full
    lo = 0
    hi = last
    while hi - lo > 1:
        mid = (lo + hi) // 2
        if table[mid] < share:
            lo = mid
        else:
            hi = mid
    rise = table[hi] - table[lo]
    part = (share - table[lo]) / rise if rise > 0.0 else 0.0
    return (lo + part) / last * full


@njit(cache=True, nogil=True)
def slope_at(level: float, table: np.ndarray, full: float) -> float:
    """Rise of the share per metre at a level (m), over a window of two nodes; 0 outside the bowl."""
    if level <= 0.0 or level >= full:
        return 0.0
    step = full / (table.size - 1)
    low = max(level - step, 0.0)
    high = min(level + step, full)
    return (share_at(high, table, full) - share_at(low, table, full)) / (high - low)


def _tabulate(stage: np.ndarray, share: np.ndarray, sd: np.ndarray) -> tuple[np.ndarray, np.ndarray, float] | None:
    """Turn a curve into nodes; None if it holds no bowl."""
    ok = np.isfinite(stage) & np.isfinite(share)
    stage, share, sd = stage[ok], np.maximum.accumulate(np.clip(share[ok], 0, 1)), np.nan_to_num(sd[ok])
    if share.size < 2 or share[-1] < 0.05:
        return None
    reached = np.flatnonzero(share >= 0.995 * share[-1])[0]
    full = max(float(stage[reached]), 0.02)
    nodes = np.linspace(0, full, NODES)
    table = np.interp(nodes, stage, share)
    table = np.maximum(table - table[0] * np.linspace(1, 0, NODES) ** 8, 0)
    table[0], table[-1] = 0.0, share[-1]
    table = np.maximum.accumulate(table + np.linspace(0, 1e-6, NODES))
    return table, np.interp(nodes, stage, sd), full


def _from_relation(relations: Relations | None, wetland: str, area_max: float) -> object:
    if relations is None:
        return None
    stage = np.arange(0.0, 6.0, 0.01)
    try:
        got = relations.predict(wetland, stage)
    except (KeyError, ValueError, LookupError):
        return None
    if got is None or len(got["area_m2"]) != stage.size:
        return None
    share = np.asarray(got["area_m2"], float) / area_max
    return _tabulate(stage, share, np.asarray(got["area_sd_m2"], float) / area_max)


def _bowls(missing: np.ndarray, area_max: np.ndarray, full: np.ndarray, share: np.ndarray) -> None:
    """Fill tables of wetlands without own shape from the others' depth against size, or from a plain bowl."""
    known = np.isfinite(full)
    depth = np.log(BOWL_DEPTH_M) + 0.25 * np.log(area_max / 1e4)
    if known.sum() >= 5:
        x = np.column_stack([np.ones(known.sum()), np.log(area_max[known] / 1e4)])
        gram = x.T @ x + np.diag([0.0, 1.0])
        coef = np.linalg.solve(gram, x.T @ np.log(full[known]))
        depth = coef[0] + coef[1] * np.log(area_max / 1e4)
    nodes = np.linspace(0, 1, NODES)
    typical = np.median(share[known], axis=0) if known.sum() >= 5 else None
    for i in np.flatnonzero(missing):
        shape = BOWL_SHAPE_SMALL if area_max[i] < 1e4 else BOWL_SHAPE_LARGE
        full[i] = math.exp(depth[i])
        share[i] = nodes ** (2 / shape) if typical is None else typical


def build_maps(
    wetland_ids: Sequence[str],
    area_max_m2: np.ndarray,
    relations: Relations | None,
    hypsometry: pd.DataFrame | None,
) -> LevelMaps:
    """Build level maps: the own relation first, then the elevation model's bowl, then a bowl pooled from the others.

    Parameters
    ----------
    wetland_ids : sequence of str
    area_max_m2 : ndarray, shape (wetland,)
    relations : Relations or None
    hypsometry : DataFrame or None
        wetland_id, stage_m, area_m2.

    Returns
    -------
    LevelMaps
    """
    count = len(wetland_ids)
    share, sd = np.zeros((count, NODES)), np.zeros((count, NODES))
    full, source = np.full(count, np.nan), ["bowl"] * count
    groups: dict[str, pd.DataFrame] = {}
    if hypsometry is not None and len(hypsometry):
        groups = {str(k): g for k, g in hypsometry.sort_values(["wetland_id", "stage_m"]).groupby("wetland_id")}
    for i, wetland in enumerate(wetland_ids):
        got = _from_relation(relations, wetland, float(area_max_m2[i]))
        name = "relation"
        if got is None and wetland in groups:
            own = groups[wetland]
            area = own["area_m2"].to_numpy(float) / area_max_m2[i]
            got, name = _tabulate(own["stage_m"].to_numpy(float), area, np.zeros(len(own))), "elevation"
        if got is not None:
            share[i], sd[i], full[i] = got  # type: ignore[misc]
            source[i] = name
    missing = ~np.isfinite(full)
    if missing.any():
        _bowls(missing, np.asarray(area_max_m2, float), full, share)
    return LevelMaps(share, sd, full, tuple(source))
