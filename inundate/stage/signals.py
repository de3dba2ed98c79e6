"""Small compiled kernels over sorted series: interpolation that respects holes, running medians, best paths, hours."""

from __future__ import annotations

from dataclasses import dataclass

import numba
import numpy as np

HOUR_NS = 3_600_000_000_000
DAY_NS = 24 * HOUR_NS


@numba.njit(cache=True, nogil=True)
def interpolate(at: np.ndarray, time: np.ndarray, value: np.ndarray, hole: int) -> np.ndarray:
    """Interpolate linearly, never across a hole.

    Parameters
    ----------
    at : ndarray of int64, shape (n,)
        Times wanted, ns, not falling.
    time, value : ndarray of int64 and float64, shape (m,)
        Known points, strictly rising in time.
    hole : int
        Widest distance (ns) between two known points that may be bridged.

    Returns
    -------
    ndarray of float64, shape (n,)
        NaN before the first, after the last and inside holes.
    """
    out = np.full(at.size, np.nan)
    j = 0
    for i in range(at.size):
        t = at[i]
        while j + 1 < time.size and time[j + 1] <= t:
            j += 1
        if time.size == 0 or time[j] > t:
            continue
        if time[j] == t:
            out[i] = value[j]
        elif j + 1 < time.size and time[j + 1] - time[j] <= hole:
            w = (t - time[j]) / (time[j + 1] - time[j])
            out[i] = value[j] * (1.0 - w) + value[j + 1] * w
    return out


@numba.njit(cache=True, nogil=True)
def _median(buffer: np.ndarray, n: int) -> float:
    for i in range(1, n):
        x = buffer[i]
        j = i - 1
        while j >= 0 and buffer[j] > x:
            buffer[j + 1] = buffer[j]
            j -= 1
        buffer[j + 1] = x
    half = n // 2
    return buffer[half] if n % 2 else 0.5 * (buffer[half - 1] + buffer[half])


@numba.njit(cache=True, nogil=True)
def outliers(time: np.ndarray, x: np.ndarray, reach: int, span: int, least: float) -> np.ndarray:
    """Mark values far from the running median of their neighbours.

    A value is marked where it departs from the median of the values around it (up to ``reach`` on each side within
    ``span``) by more than ``least`` and by more than six times their scaled median absolute deviation.

    Parameters
    ----------
    time : ndarray of int64, shape (n,)
        ns, rising.
    x : ndarray of float64, shape (n,)
        No NaN.
    reach : int
        Neighbours on each side.
    span : int
        Widest distance to a neighbour, ns.
    least : float
        Smallest departure that counts.

    Returns
    -------
    ndarray of bool, shape (n,)
    """
    out = np.zeros(x.size, np.bool_)
    buffer = np.empty(2 * reach + 1)
    for i in range(x.size):
        lo, hi = max(i - reach, 0), min(i + reach, x.size - 1)
        low = high = x[i]
        for j in range(lo, hi + 1):
            low = min(low, x[j])
            high = max(high, x[j])
        if high - low <= least:
            continue
        n = 0
        for j in range(lo, hi + 1):
            if abs(time[j] - time[i]) <= span:
                buffer[n] = x[j]
                n += 1
        if n < 4:
            continue
        middle = _median(buffer, n)
        off = abs(x[i] - middle)
        if off <= least:
            continue
        for j in range(n):
            buffer[j] = abs(buffer[j] - middle)
        out[i] = off > 6.0 * 1.4826 * _median(buffer, n)
    return out


@numba.njit(cache=True, nogil=True)
def best_path(cost: np.ndarray, change: float) -> np.ndarray:
    """Find the cheapest path through states.

    Parameters
    ----------
    cost : ndarray of float, shape (n, state)
    change : float
        Cost of a change from any state to any other.

    Returns
    -------
    ndarray of int64, shape (n,)
    """
    n, m = cost.shape
    come = np.empty((n, m), np.int16)
    total = np.zeros(m)
    for i in range(n):
        best = 0
        for s in range(m):
            if total[s] < total[best]:
                best = s
        least = total[best] + change
        for s in range(m):
            if i and least < total[s]:
                come[i, s] = best
                total[s] = least + cost[i, s]
            else:
                come[i, s] = s
                total[s] += cost[i, s]
    path = np.empty(n, np.int64)
    state = int(np.argmin(total)) if n else 0
    for i in range(n - 1, -1, -1):
        path[i] = state
        state = come[i, state]
    return path


def stamp(time: int) -> str:
    """Return a time (ns since 1970) as text to the minute."""
    return str(np.datetime64(int(time), "ns"))[:16]


def spread(x: np.ndarray) -> float:
    """Return a robust standard deviation (scaled median absolute deviation) of finite values; NaN where none."""
    x = x[np.isfinite(x)]
    return float(1.4826 * np.median(np.abs(x - np.median(x)))) if x.size else float("nan")


def resolution(x: np.ndarray) -> float:
    """Return the smallest step between the values of a series (its resolution); 0 where all are equal."""
    sample = np.unique(x[np.isfinite(x)][:20000])
    step = np.diff(sample)
    step = step[step > 1e-9 * max(1.0, float(np.abs(sample).max(initial=0.0)))]
    return float(step.min()) if step.size else 0.0


def noise_of(x: np.ndarray, step: float = 0.0) -> float:
    """Return the noise (sd) of single values from second differences, at least that of a resolution ``step``."""
    if x.size < 10:
        return step
    second = x[2:] - 2.0 * x[1:-1] + x[:-2]
    return max(spread(second[:200_000]) / np.sqrt(6.0), step / np.sqrt(12.0))


def day_noise(hours: Hours) -> float:
    """Return the scatter (sd) of daily means about a smooth course in the quietest quarter of fortnights.

    From second differences; infinite where there are too few days.
    """
    day = hours.hour // 24
    start = np.flatnonzero(np.r_[True, day[1:] != day[:-1]]) if day.size else np.empty(0, np.int64)
    if start.size < 10:
        return float("inf")
    mean = np.add.reduceat(hours.mean, start) / np.diff(np.r_[start, day.size])
    row = (day[start][2:] - day[start][:-2]) == 2
    second = (mean[2:] - 2.0 * mean[1:-1] + mean[:-2])[row]
    if second.size < 60:
        return float("inf")
    parts = second[: second.size // 15 * 15].reshape(-1, 15)
    return float(np.quantile([spread(p) for p in parts], 0.25) / np.sqrt(6.0))


@dataclass(slots=True)
class Hours:
    """A record in hours that hold at least one good reading.

    Attributes
    ----------
    hour : ndarray of int64, shape (hour,)
        Hours since 1970, rising.
    time : ndarray of int64, shape (hour,)
        Mean time of the good readings, ns.
    n : ndarray of int64
        Good readings.
    mean, low, high : ndarray of float64
        Mean, least and greatest value.
    """

    hour: np.ndarray
    time: np.ndarray
    n: np.ndarray
    mean: np.ndarray
    low: np.ndarray
    high: np.ndarray


def hourly(time: np.ndarray, x: np.ndarray) -> Hours:
    """Gather values (no NaN, times int64 ns rising) into hours."""
    hour = time // HOUR_NS
    start = np.flatnonzero(np.r_[True, hour[1:] != hour[:-1]]) if hour.size else np.empty(0, np.int64)
    if not start.size:
        none = np.empty(0)
        return Hours(start, start, start, none, none, none)
    n = np.diff(np.r_[start, hour.size])
    return Hours(
        hour[start],
        hour[start] * HOUR_NS + np.add.reduceat(time % HOUR_NS, start) // n,
        n,
        np.add.reduceat(x, start) / n,
        np.minimum.reduceat(x, start),
        np.maximum.reduceat(x, start),
    )
