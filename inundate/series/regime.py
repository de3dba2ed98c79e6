"""Measures of a flow regime on daily series: spells, circular timing, flashiness, rates of change.

Grouping after "The natural flow regime", BioScience 47:769, 1997: magnitude, frequency, duration, timing, rate of change.
"""

from __future__ import annotations

import numpy as np
from numba import njit

YEAR_DAYS = 365.25


def spells(wet: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return start positions and lengths (days, int64) of runs of true in a boolean series (day,)."""
    padded = np.concatenate([[False], np.asarray(wet, bool), [False]]).astype(np.int8)
    step = np.diff(padded)
    start = np.flatnonzero(step == 1)
    return start, np.flatnonzero(step == -1) - start


def circular_timing(day: np.ndarray, period: float = YEAR_DAYS) -> tuple[float, float]:
    """Return the circular mean day and its concentration r (0..1).

    Parameters
    ----------
    day : ndarray
        Days of the year (any start).
    period : float
        Days in a year.

    Returns
    -------
    mean : float
        In (0, period]; NaN without days or where they cancel (r below 1e-9).
    r : float
        1: always the same day; 0: no preferred day; NaN without days.

    References
    ----------
    Burn, Catchment similarity for regional flood frequency analysis using seasonality measures, J. Hydrol. 202, 1997.
    """
    day = np.asarray(day, float)
    if day.size == 0:
        return float("nan"), float("nan")
    turn = 2 * np.pi * day / period
    x, y = np.cos(turn).mean(), np.sin(turn).mean()
    r = float(np.hypot(x, y))
    if r < 1e-9:
        return float("nan"), 0.0
    mean = float(np.arctan2(y, x) * period / (2 * np.pi) % period)
    return mean if mean > 0 else period, r


def flashiness(q: np.ndarray) -> float:
    """Return the Richards-Baker index: summed absolute daily changes over the summed values, first day left out of both sums.

    Parameters
    ----------
    q : ndarray, shape (day,)
        Flow, volume or area, not negative.

    Returns
    -------
    float
        NaN for fewer than two days or where the sum is 0.

    References
    ----------
    Baker et al., A new flashiness index, J. Am. Water Resour. Assoc. 40:503, 2004.
    """
    q = np.asarray(q, float)
    total = q[1:].sum()
    return float(np.abs(np.diff(q)).sum() / total) if q.size > 1 and total > 0 else float("nan")


MEASURES = (
    "mean_area_m2", "max_area_m2", "max_day", "days_inundated", "share_inundated", "n_events", "mean_event_days",
    "longest_event_days", "longest_dry_days", "first_wet_day", "first_dry_day", "mean_rise_m2_per_day",
    "mean_fall_m2_per_day", "n_reversals", "flashiness", "variability",
)  # fmt: skip


@njit(cache=True, nogil=True)
def year_measures(area: np.ndarray, threshold: float, largest: float, out: np.ndarray) -> None:
    """Fill ``out`` (len(MEASURES),) for one wetland's days (day,) of one water year; days count from 1, NaN where none.

    Wet is at or above ``threshold`` (m2). The first dry day is the first dry one after the first wet one. Variability is
    the standard deviation of area as a share of the largest extent. Reversals are changes of direction between days that
    differ.
    """
    n = area.size
    out[:] = np.nan
    total = 0.0
    square = 0.0
    best = -1.0
    for t in range(n):
        total += area[t]
        square += area[t] * area[t]
        if area[t] > best:
            best = area[t]
            out[2] = t + 1.0
    out[0] = total / n
    out[1] = best
    wet_days, events, run, longest, dry_run, longest_dry = 0, 0, 0, 0, 0, 0
    for t in range(n):
        if area[t] >= threshold:
            wet_days += 1
            run += 1
            dry_run = 0
            if run == 1:
                events += 1
            longest = max(longest, run)
            if wet_days == 1:
                out[9] = t + 1.0
        else:
            run = 0
            dry_run += 1
            longest_dry = max(longest_dry, dry_run)
            if wet_days > 0 and np.isnan(out[10]):
                out[10] = t + 1.0
    out[3], out[4], out[5] = wet_days, wet_days / n, events
    out[6] = wet_days / events if events > 0 else 0.0
    out[7], out[8] = longest, longest_dry
    out[15] = np.sqrt(max(square / n - out[0] * out[0], 0.0)) / largest
    _rates(area, out)


@njit(cache=True, nogil=True)
def _rates(area: np.ndarray, out: np.ndarray) -> None:
    """Fill rise, fall, reversals and flashiness."""
    rise, fall, n_rise, n_fall, turns, last, change = 0.0, 0.0, 0, 0, 0, 0, 0.0
    for t in range(1, area.size):
        step = area[t] - area[t - 1]
        change += abs(step)
        if step > 0.0:
            rise += step
            n_rise += 1
            turns += 1 if last == -1 else 0
            last = 1
        elif step < 0.0:
            fall += step
            n_fall += 1
            turns += 1 if last == 1 else 0
            last = -1
    out[11] = rise / n_rise if n_rise > 0 else 0.0
    out[12] = fall / n_fall if n_fall > 0 else 0.0
    out[13] = turns
    rest = area[1:].sum()
    if rest > 0.0:
        out[14] = change / rest
