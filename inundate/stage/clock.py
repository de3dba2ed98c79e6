"""Wrong clocks: hours by which a logger's time is off, found against the barometer by lag correlation."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from inundate.stage.signals import HOUR_NS, best_path, hourly, interpolate, spread

_LAGS = np.arange(-13, 14)
#: Log likelihood that a change of the clock must bring; a spell that is off by more than two hours (no summer time, and
#: where the air's half-daily tide deceives: near 12 h) must gain more. Common practice, no source.
_CHANGE = 20.0
_LEAST_GAIN, _FAR_GAIN = 40.0, 120.0
_LEAST_HOURS = 72
_WINDOW_NS = 24 * HOUR_NS


@dataclass(frozen=True, slots=True)
class ClockSpell:
    """A stretch of a record whose clock is off.

    Attributes
    ----------
    start, end : int
        First and last time of the stretch by the logger's own clock, ns.
    hours : int
        Hours to add to the logger's time.
    gain : float
        How much better (in log likelihood of hourly pressure changes) than the clock as told.
    """

    start: int
    end: int
    hours: int
    gain: float


def lag_costs(time: np.ndarray, pressure_pa: np.ndarray, baro_time: np.ndarray, baro_pa: np.ndarray) -> np.ndarray:
    """Return how badly total pressure follows the air's at each lag of -13..13 hours, hour by hour.

    What is left of total pressure without the air's, and without its own mean over two days (the water, which changes
    more slowly), is noise at the right lag and holds the air's slope times the lag's error at any other.

    Parameters
    ----------
    time, pressure_pa : ndarray of int64 (ns) and float64, shape (hour,)
    baro_time, baro_pa : ndarray of int64 (ns) and float64, shape (m,)

    Returns
    -------
    ndarray of float64, shape (hour, 27)
        Half squared standardised misfits, none over 8 (a sudden change of water level says nothing of the clock), times
        the share of them that is independent, by the correlation of neighbours; 0 where the air is not known at
        every lag or the two days are not half full.
    """
    miss = np.empty((time.size, _LAGS.size))
    for k, lag in enumerate(_LAGS):
        miss[:, k] = pressure_pa - interpolate(time + lag * HOUR_NS, baro_time, baro_pa, 3 * HOUR_NS)
    known = np.isfinite(miss).all(axis=1)
    miss[~known] = 0.0
    lo, hi = np.searchsorted(time, time - _WINDOW_NS), np.searchsorted(time, time + _WINDOW_NS, side="right")
    total = np.vstack([np.zeros((1, _LAGS.size)), np.cumsum(miss, axis=0)])
    count = np.r_[0, np.cumsum(known)]
    n = count[hi] - count[lo]
    known &= n > _WINDOW_NS // HOUR_NS
    miss -= (total[hi] - total[lo]) / np.maximum(n, 1)[:, None]
    if known.sum() < _LEAST_HOURS:
        return np.zeros_like(miss)
    sample = miss[np.flatnonzero(known)[:: max(known.sum() // 5000, 1)]]
    scales = np.array([spread(column) for column in sample.T])
    best = int(np.argmin(scales))
    if not scales[best] > 0:
        return np.zeros_like(miss)
    cost = np.minimum(0.5 * (miss / scales[best]) ** 2, 8.0)
    cost[~known] = 0.0
    pair = np.flatnonzero(known[1:] & known[:-1])
    z = np.clip(miss[:, best] / scales[best], -4.0, 4.0)
    rho = float(np.clip((z[pair] @ z[pair + 1]) / max(float(z[pair] @ z[pair]), 1e-12), 0.0, 0.95))
    return cost * (1.0 - rho) / (1.0 + rho)


def clock_spells(
    time: np.ndarray, pressure_pa: np.ndarray, baro_time: np.ndarray, baro_pa: np.ndarray
) -> list[ClockSpell]:
    """Find stretches of an absolute logger's record whose clock is off by whole hours.

    Changes of total pressure within a day are mostly those of the air; the lag at which they agree is followed through time by the cheapest path (a change of lag must pay for itself), and stretches of under three days don't
    count.

    Parameters
    ----------
    time, pressure_pa : ndarray of int64 (ns) and float64, shape (reading,)
        Total pressure by the logger's own clock; no NaN.
    baro_time, baro_pa : ndarray of int64 (ns) and float64, shape (m,)

    Returns
    -------
    list of ClockSpell
        Empty where the clock is right or nothing can be said.
    """
    hours = hourly(time, pressure_pa)
    if hours.hour.size < 2 * _LEAST_HOURS or baro_time.size < _LEAST_HOURS:
        return []
    cost = lag_costs(hours.time, hours.mean, baro_time, baro_pa)
    path = best_path(cost, _CHANGE)
    bounds = np.flatnonzero(np.r_[True, path[1:] != path[:-1], True])
    told = int(np.flatnonzero(_LAGS == 0)[0])
    spells = []
    for a, b in pairwise(bounds.tolist()):
        gain = float((cost[a:b, told] - cost[a:b, path[a]]).sum())
        least = _LEAST_GAIN if abs(int(_LAGS[path[a]])) <= 2 else _FAR_GAIN
        if path[a] == told or b - a < _LEAST_HOURS or gain < least:
            continue
        start = time[0] if a == 0 else int(hours.hour[a] * HOUR_NS)
        end = time[-1] if b == path.size else int(hours.hour[b - 1] * HOUR_NS + HOUR_NS - 1)
        spells.append(ClockSpell(int(start), int(end), int(_LAGS[path[a]]), gain))
    return spells


def set_clock(time: np.ndarray, spells: list[ClockSpell]) -> tuple[np.ndarray, np.ndarray]:
    """Return corrected times (int64 ns) and the positions of the readings, sorted by them and each time once."""
    fixed = time.copy()
    for spell in spells:
        a, b = np.searchsorted(time, [spell.start, spell.end + 1])
        fixed[a:b] += spell.hours * HOUR_NS
    order = np.argsort(fixed, kind="stable")
    fixed = fixed[order]
    once = np.r_[True, fixed[1:] != fixed[:-1]]
    return fixed[once], order[once]
