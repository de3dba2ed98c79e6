"""Compiled reading of fitted curves: shares, volumes and bands of many wetlands in one pass."""

from __future__ import annotations

from typing import NamedTuple

import numba as nb
import numpy as np

from inundate.relation.families import N_WORK, prepare, share_at


class Ground(NamedTuple):
    """Hypsometry of all units: ``tables`` (table, level, column), ``spans`` (table, 2), ``which`` (unit,), -1 for none."""

    tables: np.ndarray
    spans: np.ndarray
    which: np.ndarray


@nb.njit(cache=True, nogil=True)
def share_of_units(
    family: np.ndarray, theta: np.ndarray, unit: np.ndarray, ground: Ground, stage: np.ndarray
) -> np.ndarray:
    """Return the share at each row's stage on the curve of the row's unit; ``family`` (unit,), ``unit`` (row,)."""
    out = np.empty(stage.size)
    work = np.zeros(N_WORK)
    last = -1
    for i in range(stage.size):
        u = unit[i]
        if u != last:
            prepare(family[u], theta[u], work)
            last = u
        out[i] = np.nan
        if not np.isnan(stage[i]):
            t = max(ground.which[u], 0)
            out[i] = share_at(family[u], work, ground.tables[t], ground.spans[t], stage[i])
    return out


@nb.njit(cache=True, nogil=True)
def volume_of_rows(
    family: np.ndarray, theta: np.ndarray, unit: np.ndarray, ground: Ground, stage: np.ndarray
) -> np.ndarray:
    """Return the integral of share over stage (m) from 0 to each row's stage.

    Rows of a unit must follow each other with rising stage, the first at or below 0; each step is integrated by the
    three-point Gauss-Legendre rule on four parts.
    """
    out = np.zeros(stage.size)
    work = np.zeros(N_WORK)
    node = np.sqrt(0.6)
    for i in range(stage.size):
        u = unit[i]
        t = max(ground.which[u], 0)
        table, span = ground.tables[t], ground.spans[t]
        if i == 0 or unit[i - 1] != u:
            prepare(family[u], theta[u], work)
            continue
        total = 0.0
        half = (stage[i] - stage[i - 1]) / 8.0
        for part in range(4):
            middle = stage[i - 1] + (2 * part + 1) * half
            total += 5.0 * share_at(family[u], work, table, span, middle - node * half)
            total += 8.0 * share_at(family[u], work, table, span, middle)
            total += 5.0 * share_at(family[u], work, table, span, middle + node * half)
        out[i] = out[i - 1] + total * half / 9.0
    return out


@nb.njit(cache=True, nogil=True)
def band_at(grid: np.ndarray, values: np.ndarray, unit: np.ndarray, stage: np.ndarray) -> np.ndarray:
    """Interpolate band values (unit, kind, step) on rising stages ``grid`` (unit, step) at each row; returns (row, kind)."""
    kinds, steps = values.shape[1], values.shape[2]
    out = np.empty((stage.size, kinds))
    for i in range(stage.size):
        u = unit[i]
        h = stage[i]
        if np.isnan(h):
            out[i] = np.nan
            continue
        if h <= 0.0:
            out[i] = 0.0
            continue
        j = np.searchsorted(grid[u], h) - 1
        j = min(max(j, 0), steps - 2)
        part = min((h - grid[u, j]) / (grid[u, j + 1] - grid[u, j]), 1.0)
        for k in range(kinds):
            out[i, k] = values[u, k, j] + part * (values[u, k, j + 1] - values[u, k, j])
    return out


class Drawn(NamedTuple):
    """Drawn curves: ``family`` (unit, draw), ``theta`` (unit, draw, N_PARAM), ``shift`` (unit, draw) m of stage datum."""

    family: np.ndarray
    theta: np.ndarray
    shift: np.ndarray


@nb.njit(cache=True, nogil=True)
def bands(drawn: Drawn, ground: Ground, grid: np.ndarray, centre: np.ndarray, tail: float) -> np.ndarray:
    """Quantiles of area and volume over drawn curves.

    Parameters
    ----------
    drawn : Drawn
    ground : Ground
    grid : ndarray, shape (unit, step)
        Stages from 0 up, m.
    centre : ndarray, shape (unit, step)
        The chosen curve.
    tail : float
        Share of draws left out on each side.

    Returns
    -------
    ndarray, shape (unit, 6, step)
        Area low, high, sd about the chosen curve; volume (share x m) of it, low, high.
    """
    units, n = drawn.family.shape
    steps = grid.shape[1]
    out = np.zeros((units, 6, steps))
    works = np.zeros((n, N_WORK))
    last, volume, ends = np.zeros(n), np.zeros(n), np.empty((2, n))
    place = tail * (n - 1)
    for u in range(units):
        t = max(ground.which[u], 0)
        table, span = ground.tables[t], ground.spans[t]
        for d in range(n):
            prepare(drawn.family[u, d], drawn.theta[u, d], works[d])
        last[:] = 0.0
        volume[:] = 0.0
        for g in range(1, steps):
            h = grid[u, g]
            width = h - grid[u, g - 1]
            square = 0.0
            for d in range(n):
                value = share_at(drawn.family[u, d], works[d], table, span, h + drawn.shift[u, d])
                volume[d] += 0.5 * width * (value + last[d])
                last[d] = value
                square += (value - centre[u, g]) ** 2
            out[u, 0, g], out[u, 1, g] = _both_quantiles(last, place, ends)
            out[u, 2, g] = np.sqrt(square / n)
            out[u, 3, g] = out[u, 3, g - 1] + 0.5 * width * (centre[u, g] + centre[u, g - 1])
            out[u, 4, g], out[u, 5, g] = _both_quantiles(volume, place, ends)
    return out


@nb.njit(cache=True, nogil=True)
def _both_quantiles(values: np.ndarray, place: float, ends: np.ndarray) -> tuple[float, float]:
    """Interpolated quantiles as far from either end: at position ``place`` of the rising and of the falling order.

    Only the ends are put in order; ``ends`` (2, at least ``int(place) + 2``) is room for them.
    """
    k = min(int(place), values.size - 2) + 2
    low, high = ends[0], ends[1]
    low[:k], high[:k] = np.inf, -np.inf
    for value in values:
        if value < low[k - 1]:
            j = k - 1
            while j > 0 and low[j - 1] > value:
                low[j] = low[j - 1]
                j -= 1
            low[j] = value
        if value > high[k - 1]:
            j = k - 1
            while j > 0 and high[j - 1] < value:
                high[j] = high[j - 1]
                j -= 1
            high[j] = value
    part = place - (k - 2)
    return low[k - 2] + part * (low[k - 1] - low[k - 2]), high[k - 2] + part * (high[k - 1] - high[k - 2])
