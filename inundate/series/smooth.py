"""Level of a wetland given its predictor's members, its views and its stage: compiled smoothing with bounded views.

The level is the predictor plus a departure that follows a first-order autoregression. A view sees the bounded share of
the largest extent with error; its information is turned into an equivalent normal observation of the level by matching
moments (assumed density, then one pass of expectation propagation), so dry and full views count as one-sided.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from inundate.series.kalman import smooth_one
from inundate.series.maps import share_at

# Least share of members that must count after weighing; common practice, no source.
_EFFECTIVE = 0.1
_GRID = 81
_REACH = 5.0
# Gauss-Hermite nodes and weights for a standard normal, 11 points.
_X, _W = np.polynomial.hermite_e.hermegauss(11)
_W = _W / _W.sum()


@njit(cache=True, nogil=True)
def matched(
    mean: float,
    var: float,
    value: float,
    sd: float,
    kind: int,
    is_stage: bool,
    table: np.ndarray,
    full: float,
    outlier: float,
) -> tuple[float, float]:
    """Mean and variance of the level (m) after one event, by quadrature over the level before it."""
    if is_stage and kind == 0:
        gain = var / (var + sd * sd)
        return mean + gain * (value - mean), var * (1.0 - gain)
    spread = math.sqrt(var)
    total = 0.0
    first = 0.0
    second = 0.0
    for k in range(_GRID):
        z = _REACH * (2.0 * k / (_GRID - 1) - 1.0)
        level = mean + spread * z
        if is_stage:
            like = 0.5 * math.erfc((level - value) / (sd * 1.4142135623730951))
        else:
            miss = (value - share_at(level, table, full)) / sd
            like = (1.0 - outlier) * math.exp(-0.5 * miss * miss) / (sd * 2.5066282746310002) + outlier
        mass = math.exp(-0.5 * z * z) * (like + 1e-12)
        total += mass
        first += mass * z
        second += mass * z * z
    first /= total
    second = second / total - first * first
    return mean + spread * first, var * max(second, 1e-6)


@njit(cache=True, nogil=True)
def _site(mean: float, var: float, new_mean: float, new_var: float) -> tuple[float, float]:
    """Normal observation (value, variance) that turns one pair of moments into the other; infinite if it says nothing."""
    if new_var >= 0.9999 * var:
        return 0.0, np.inf
    precision = 1.0 / new_var - 1.0 / var
    return (new_mean / new_var - mean / var) / precision, 1.0 / precision


@njit(cache=True, nogil=True)
def find_sites(
    path: np.ndarray,
    spread_var: np.ndarray,
    day: np.ndarray,
    value: np.ndarray,
    sd: np.ndarray,
    kind: np.ndarray,
    is_stage: np.ndarray,
    table: np.ndarray,
    full: float,
    phi: float,
    q: float,
    s0: float,
    outlier: float,
    site: np.ndarray,
    site_var: np.ndarray,
) -> None:
    """Fill ``site`` and ``site_var`` (time,): normal observations of the level; infinite variance where none."""
    site_var[:] = np.inf
    site[:] = 0.0
    a, p, n = 0.0, s0, 0
    for t in range(path.size):
        if t > 0:
            a *= phi
            p = phi * phi * p + q
        while n < day.size and day[n] == t:
            var = p + spread_var[t]
            new_mean, new_var = matched(path[t] + a, var, value[n], sd[n], kind[n], is_stage[n], table, full, outlier)
            seen, seen_var = _site(path[t] + a, var, new_mean, new_var)
            _add(site, site_var, t, seen, seen_var)
            if math.isfinite(seen_var):
                gain = p / (p + spread_var[t] + seen_var)
                a += gain * (seen - path[t] - a)
                p *= 1.0 - gain
            n += 1
    _second_pass(path, spread_var, day, value, sd, kind, is_stage, table, full, phi, q, s0, outlier, site, site_var)


@njit(cache=True, nogil=True)
def _add(site: np.ndarray, site_var: np.ndarray, t: int, seen: float, seen_var: float) -> None:
    if not math.isfinite(seen_var):
        return
    if math.isfinite(site_var[t]):
        total = 1.0 / site_var[t] + 1.0 / seen_var
        site[t] = (site[t] / site_var[t] + seen / seen_var) / total
        site_var[t] = 1.0 / total
    else:
        site[t] = seen
        site_var[t] = seen_var


@njit(cache=True, nogil=True)
def _second_pass(
    path: np.ndarray,
    spread_var: np.ndarray,
    day: np.ndarray,
    value: np.ndarray,
    sd: np.ndarray,
    kind: np.ndarray,
    is_stage: np.ndarray,
    table: np.ndarray,
    full: float,
    phi: float,
    q: float,
    s0: float,
    outlier: float,
    site: np.ndarray,
    site_var: np.ndarray,
) -> None:
    """Match moments again with what all other events say (days with two events keep their first sites)."""
    size = path.size
    mean, var = np.empty(size), np.empty(size)
    smooth_one(site - path, site_var + spread_var, phi, q, s0, mean, var)
    for n in range(day.size):
        t = day[n]
        single = (n == 0 or day[n - 1] != t) and (n == day.size - 1 or day[n + 1] != t)
        if not single or (is_stage[n] and kind[n] == 0):
            continue
        m, v = path[t] + mean[t], var[t]
        if math.isfinite(site_var[t]):
            left = 1.0 / v - 1.0 / (site_var[t] + spread_var[t])
            if left <= 1e-9:
                continue
            m = (m / v - site[t] / (site_var[t] + spread_var[t])) / left
            v = 1.0 / left
        v += spread_var[t]
        new_mean, new_var = matched(m, v, value[n], sd[n], kind[n], is_stage[n], table, full, outlier)
        site[t], site_var[t] = _site(m, v, new_mean, new_var)


@njit(cache=True, nogil=True)
def member_weights(like: np.ndarray) -> np.ndarray:
    """Weights (member,) from logs of likelihood times prior over density drawn from, tempered until enough members count."""
    size = like.size
    least = max(_EFFECTIVE * size, 1.0)
    weight = np.full(size, 1.0 / size)
    temper = 1.0
    for _ in range(60):
        weight[:] = np.exp(temper * (like - like.max()))
        weight /= weight.sum()
        if 1.0 / (weight * weight).sum() >= least:
            break
        temper *= 0.85
    return weight


@njit(cache=True, nogil=True)
def smooth_members(
    paths: np.ndarray,
    score: np.ndarray,
    site: np.ndarray,
    site_var: np.ndarray,
    phi: float,
    q: float,
    s0: float,
    mean: np.ndarray,
    var: np.ndarray,
) -> None:
    """Level mean and variance (time,) over members (member, time), each smoothed given the sites and weighed by its likelihood.

    ``score`` (member,) is the log of a member's prior over the density it was drawn from; infinite: all members count alike.
    """
    members, size = paths.shape
    own, own_var = np.empty((members, size)), np.empty(size)
    like = np.zeros(members)
    for m in range(members):
        like[m] = smooth_one(site - paths[m], site_var, phi, q, s0, own[m], own_var)
    weight = member_weights(like + score) if np.isfinite(score[0]) else np.full(members, 1.0 / members)
    mean[:] = 0.0
    var[:] = 0.0
    for m in range(members):
        for t in range(size):
            total = paths[m, t] + own[m, t]
            mean[t] += weight[m] * total
            var[t] += weight[m] * total * total
    for t in range(size):
        var[t] = max(var[t] - mean[t] * mean[t], 0.0) + own_var[t]


@njit(cache=True, nogil=True)
def area_moments(
    mean: np.ndarray,
    sd: np.ndarray,
    table: np.ndarray,
    full: float,
    share: np.ndarray,
    low: np.ndarray,
    high: np.ndarray,
    width: float,
) -> None:
    """Mean share and interval of shares (time,) of a normal level; ``width`` standard deviations to each side."""
    for t in range(mean.size):
        total = 0.0
        for k in range(_X.size):
            total += _W[k] * share_at(mean[t] + sd[t] * _X[k], table, full)
        low[t] = share_at(mean[t] - width * sd[t], table, full)
        high[t] = share_at(mean[t] + width * sd[t], table, full)
        share[t] = min(max(total, low[t]), high[t])


@njit(cache=True, nogil=True)
def spread_shares(
    mean: np.ndarray, sd: np.ndarray, table: np.ndarray, full: float, share: np.ndarray, spread: np.ndarray
) -> None:
    """Fill mean and standard deviation of the share (event,) of normal levels."""
    for n in range(mean.size):
        first, second = 0.0, 0.0
        for k in range(_X.size):
            here = share_at(mean[n] + sd[n] * _X[k], table, full)
            first += _W[k] * here
            second += _W[k] * here * here
        share[n] = first
        spread[n] = math.sqrt(max(second - first * first, 0.0))
