"""Wrong clocks: hours by which a logger's time is off, found against the barometer by lag correlation."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from inundate.stage.signals import HOUR_NS, best_path, hourly, interpolate, spread

_LAGS = np.arange(-13, 14)
_CHANGE = 60.0
_LEAST_HOURS = 72


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
    """Return the misfit of hourly changes of total pressure to those of the air at each lag of -13..13 hours.

    Parameters
    ----------
    time, pressure_pa : ndarray of int64 (ns) and float64, shape (hour,)
    baro_time, baro_pa : ndarray of int64 (ns) and float64, shape (m,)

    Returns
    -------
    ndarray of float64, shape (hour - 1, 27)
        Half squared standardised misfits, none over 8 (a sudden change of water level says nothing of the clock); 0
        where the air is not known at every lag.
    """
    step = np.diff(pressure_pa)
    miss = np.empty((step.size, _LAGS.size))
    for k, lag in enumerate(_LAGS):
        air = interpolate(time + lag * HOUR_NS, baro_time, baro_pa, 3 * HOUR_NS)
        miss[:, k] = step - np.diff(air)
    close = np.diff(time) <= 2 * HOUR_NS
    known = np.isfinite(miss).all(axis=1) & close
    sample = miss[np.flatnonzero(known)[:: max(known.sum() // 5000, 1)]]
    scale = min(spread(column) for column in sample.T) if known.any() else np.nan
    if not scale > 0:
        return np.zeros_like(miss)
    cost = np.minimum(0.5 * (miss / scale) ** 2, 8.0)
    cost[~known] = 0.0
    return cost


def clock_spells(
    time: np.ndarray, pressure_pa: np.ndarray, baro_time: np.ndarray, baro_pa: np.ndarray
) -> list[ClockSpell]:
    """Find stretches of an absolute logger's record whose clock is off by whole hours.

    Changes of total pressure from hour to hour are mostly those of the air; the lag at which they agree is followed
    through time by the cheapest path (a change of lag must pay for itself), and stretches of under three days don't
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
        if path[a] == told or b - a < _LEAST_HOURS or gain < _CHANGE:
            continue
        start = time[0] if a == 0 else int(hours.hour[a + 1] * HOUR_NS)
        end = time[-1] if b == path.size else int(hours.hour[b] * HOUR_NS + HOUR_NS - 1)
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
