"""Times at which the water stands at or below the sensor: it then reads the air, about its zero."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from inundate.stage.signals import Hours, best_path, spread

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
    block = hours.hour // _BLOCK_H
    start = np.flatnonzero(np.r_[True, block[1:] != block[:-1]])
    count = np.diff(np.r_[start, n])
    level = np.add.reduceat(hours.mean, start) / count
    zero, zero_sd = zero_m[start].copy(), zero_sd_m[start]
    small = max(noise_m / np.sqrt(_BLOCK_H), 0.002)
    scatter = np.hypot(zero_sd, small)
    top = max(float(np.quantile(level, 0.99)), 0.1)
    path = np.zeros(level.size, np.int64)
    steady = small
    for _ in range(5):
        u = (level - zero) / scatter
        cost = np.empty((level.size, 2))
        cost[:, 0] = np.log(top / (scatter * np.sqrt(2 * np.pi))) + np.where(u < -2.5, 20.0, 0.0)
        cost[:, 1] = np.where(u > 0, 0.5 * np.minimum(u, 12.0) ** 2, 0.5 * np.minimum(u**2, 4.0))
        before, path = path, best_path(cost, _CHANGE)
        zero, scatter, steady = _learn(level, path, zero_m[start], zero_sd, small)
        if (before == path).all():
            break
    dry = np.repeat(path.astype(bool), count)
    spells = _spells(hours, level, path, (start, count), steady)
    return Dryness(dry, np.repeat(zero, count), steady, spells, _day_spread(level, path))


def _runs(path: np.ndarray) -> list[tuple[int, int]]:
    edge = np.flatnonzero(np.diff(np.r_[0, path, 0]))
    return list(zip(edge[::2], edge[1::2], strict=True))


def _learn(
    level: np.ndarray, path: np.ndarray, zero: np.ndarray, zero_sd: np.ndarray, small: float
) -> tuple[np.ndarray, np.ndarray, float]:
    """Zero and scatter by what the dry spells show, drawn to what was expected."""
    runs = _runs(path)
    rest = [level[a:b] - np.median(level[a:b]) for a, b in runs if b - a >= _SURE]
    steady = float(np.clip(spread(np.concatenate(rest)), small, 0.015)) if rest else small
    zero, scatter = zero.copy(), np.hypot(zero_sd, steady)
    for a, b in runs:
        # neighbouring six-hour means share slow errors: count one independent value in four
        own = steady / np.sqrt(max((b - a) / 4.0, 0.25))
        gain = zero_sd[a:b] ** 2 / (zero_sd[a:b] ** 2 + own**2)
        fitted = zero[a:b] + gain * (np.median(level[a:b]) - zero[a:b])
        lo, hi = max(a - 40, 0), min(b + 40, level.size)
        zero[lo:a], zero[b:hi] = fitted[0], fitted[-1]
        zero[a:b] = fitted
        scatter[lo:hi] = np.hypot(steady, np.sqrt(gain[0]) * own)
    return zero, scatter, steady


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
