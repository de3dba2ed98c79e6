"""Times at which the water stands at or below the sensor: it then reads the air, about its zero."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from inundate.stage.signals import HOUR_NS, Hours, best_path, spread

_BLOCK_H = 6
_CHANGE = 6.0
_SURE = 20


@dataclass(slots=True)
class Dryness:
    """Which hours are dry.

    Attributes
    ----------
    dry : ndarray of bool, shape (hour,)
    zero_m : ndarray of float64, shape (hour,)
        Depth that the sensor reads when dry.
    spread_m : float
        Scatter of six-hour means about it.
    spells : list of (int, int, float, float)
        Of at least five days: first and last time (ns), depth read, and its standard error.
    day_spread_m : float
        Scatter of daily means about the spells' own; NaN without spells. What a day does not average out: the two
        sensors' slow errors.
    """

    dry: np.ndarray
    zero_m: np.ndarray
    spread_m: float
    spells: list[tuple[int, int, float, float]]
    day_spread_m: float = float("nan")


def find_dry(hours: Hours, zero_m: np.ndarray, zero_sd_m: np.ndarray, noise_m: float) -> Dryness:
    """Find dry hours by a two-state path over six-hour means.

    Dry: the reading lies about the zero within its scatter, or under it. Wet: any depth up to the greatest, all alike
    likely. A change of state must pay for itself. Zero and scatter are then taken from the dry spells themselves and
    the path is found again.

    Parameters
    ----------
    hours : Hours
        Depth above the sensor, m.
    zero_m, zero_sd_m : ndarray of float64, shape (hour,)
        Expected reading of a dry sensor and its uncertainty.
    noise_m : float
        Noise (sd) of a reading.

    Returns
    -------
    Dryness
    """
    n = hours.hour.size
    if n == 0:
        return Dryness(np.zeros(0, bool), zero_m, noise_m, [])
    _, start, count = _blocks(hours)
    level = np.add.reduceat(hours.mean, start) / count
    zero, zero_sd = zero_m[start].copy(), zero_sd_m[start]
    small = max(noise_m / np.sqrt(_BLOCK_H), 0.002)
    scatter = np.hypot(zero_sd, small)
    top = max(float(np.quantile(level, 0.99)), 0.1)
    path = np.zeros(level.size, np.int64)
    steady = small
    unsteady = np.zeros(level.size, bool)
    for _ in range(6):
        u = (level - zero) / scatter
        cost = np.empty((level.size, 2))
        cost[:, 0] = np.log(top / (scatter * np.sqrt(2 * np.pi))) + np.where(u < -2.5, 20.0, 0.0)
        cost[:, 1] = np.where(u > 0, 0.5 * np.minimum(u, 12.0) ** 2, 0.5 * np.minimum(u**2, 4.0))
        cost[unsteady, 1] += 20.0
        before, path = path, best_path(cost, _CHANGE)
        was = unsteady.sum()
        zero, scatter, steady, unsteady = _learn(level, path, (zero_m[start], zero_sd), small, unsteady)
        if (before == path).all() and unsteady.sum() == was:
            break
    dry = np.repeat(path.astype(bool), count)
    spells = _spells(hours, level, path, (start, count), steady)
    return Dryness(dry, np.repeat(zero, count), steady, spells, _day_spread(level, path))


def _runs(path: np.ndarray) -> list[tuple[int, int]]:
    edge = np.flatnonzero(np.diff(np.r_[0, path, 0]))
    return list(zip(edge[::2], edge[1::2], strict=True))


def first_zero(
    hours: Hours, zero_m: np.ndarray, zero_sd_m: np.ndarray, noise_m: float
) -> tuple[np.ndarray, np.ndarray]:
    """Guess the reading of a dry sensor from the record alone.

    A dry sensor reads flat for days, and lower than at any other time within half a year (but for 2 cm of drift and
    scatter). Where such five-day windows are found near the expected zero, zero is drawn through them.

    Parameters
    ----------
    hours : Hours
    zero_m, zero_sd_m : ndarray of float64, shape (hour,)
        Expected reading and its uncertainty before anything is seen.
    noise_m : float

    Returns
    -------
    zero_m, zero_sd_m : ndarray of float64, shape (hour,)
    """
    _, start, count = _blocks(hours)
    level = np.add.reduceat(hours.mean, start) / count
    tight = np.minimum(zero_sd_m, 0.01)
    if level.size < 2 * _SURE:
        return zero_m, tight
    limit = _limit(max(noise_m / np.sqrt(_BLOCK_H), 0.002))
    series = pd.Series(level)
    window = series.rolling(_SURE, center=True)
    middle = window.median()
    half = (window.quantile(0.9) - window.quantile(0.1)) / 2
    lowest = middle.rolling(4 * 365, center=True, min_periods=1).min()
    near = (middle - zero_m[start]).abs() <= 3.0 * zero_sd_m[start]
    at = np.flatnonzero((half <= limit) & near & (middle - lowest <= 0.02))
    if not at.size:
        return zero_m, tight
    time = hours.time[start]
    zero = np.interp(hours.time, time[at], middle.to_numpy()[at])
    after = np.searchsorted(time[at], hours.time).clip(0, at.size - 1)
    before = np.maximum(after - 1, 0)
    far = np.minimum(np.abs(hours.time - time[at][after]), np.abs(hours.time - time[at][before]))
    years = far / (365.25 * 24 * HOUR_NS)
    return zero, np.hypot(limit, 0.02 * years)


def _limit(small: float) -> float:
    """Greatest half width of a dry spell's readings."""
    return max(2.5 * small, 0.005)


def _blocks(hours: Hours) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    block = hours.hour // _BLOCK_H
    start = np.flatnonzero(np.r_[True, block[1:] != block[:-1]])
    return block, start, np.diff(np.r_[start, hours.hour.size])


def _floor(level: np.ndarray) -> tuple[float, float]:
    """Middle and half width of the narrowest interval that holds two fifths of the values."""
    order = np.sort(level)
    k = max(int(0.4 * order.size), min(_SURE, order.size) - 1)
    width = order[k:] - order[: order.size - k]
    i = int(np.argmin(width))
    return float(np.median(order[i : i + k + 1])), float(width[i] / 2)


def _learn(
    level: np.ndarray,
    path: np.ndarray,
    expected: tuple[np.ndarray, np.ndarray],
    small: float,
    unsteady: np.ndarray,
) -> tuple[np.ndarray, np.ndarray, float, np.ndarray]:
    """Zero and scatter by what the dry spells show, drawn to what was expected; and spells too unsteady to be dry."""
    zero, zero_sd = expected[0].copy(), expected[1]
    runs = _runs(path)
    # what is expected may drift within a spell, so only the difference is learnt
    above = level - expected[0]
    floors = [_floor(above[a:b]) for a, b in runs]
    limit = _limit(small)
    steady_runs = [(r, f) for r, f in zip(runs, floors, strict=True) if r[1] - r[0] >= _SURE and f[1] <= limit]
    rest = [above[a:b] - f[0] for (a, b), f in steady_runs]
    steady = float(np.clip(spread(np.concatenate(rest)), small, limit)) if rest else small
    scatter = np.hypot(zero_sd, steady)
    unsteady = unsteady.copy()
    for (a, b), (floor, half) in zip(runs, floors, strict=True):
        if b - a >= _SURE and half > limit:
            unsteady[a:b] = True
            continue
        # neighbouring six-hour means share slow errors: count one independent value in four
        own = steady / np.sqrt(max((b - a) / 4.0, 0.25))
        gain = zero_sd[a:b] ** 2 / (zero_sd[a:b] ** 2 + own**2)
        shift = gain * floor
        lo, hi = max(a - 40, 0), min(b + 40, level.size)
        zero[lo:a] = expected[0][lo:a] + shift[0]
        zero[b:hi] = expected[0][b:hi] + shift[-1]
        zero[a:b] = expected[0][a:b] + shift
        scatter[lo:hi] = np.hypot(steady, np.sqrt(gain[0]) * own)
    return zero, scatter, steady, unsteady


def _day_spread(level: np.ndarray, path: np.ndarray) -> float:
    rest = []
    for a, b in _runs(path):
        if b - a >= _SURE:
            # the first and last day may hold water
            days = level[a + 4 : b - 4][: (b - a - 8) // 4 * 4].reshape(-1, 4).mean(axis=1)
            if days.size >= 3:
                # a drift within the spell is no scatter
                rest.append(days - np.polyval(np.polyfit(np.arange(days.size), days, 1), np.arange(days.size)))
    return spread(np.concatenate(rest)) if rest else float("nan")


def _spells(
    hours: Hours, level: np.ndarray, path: np.ndarray, blocks: tuple[np.ndarray, np.ndarray], steady: float
) -> list[tuple[int, int, float, float]]:
    start, count = blocks
    out = []
    for a, b in _runs(path):
        if b - a >= _SURE:
            own = steady / np.sqrt((b - a) / 4.0)
            last = start[b - 1] + count[b - 1] - 1
            out.append((int(hours.time[start[a]]), int(hours.time[last]), float(np.median(level[a:b])), own))
    return out
