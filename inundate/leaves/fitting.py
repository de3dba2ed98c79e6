"""Robust fit of a canopy's greenness curve to many short series at once.

One code path serves the landscape, a wetland over all years, and a wetland in one year: they differ only in their
prior. The fit is a maximum a posteriori estimate: least squares with a normal prior on each parameter, solved by
Levenberg-Marquardt, reweighted by Tukey's biweight.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numba as nb
import numpy as np

from inundate.leaves.curves import BRIGHTEST, DARK, GROUND_PASSAGE_DAYS, RATE, RATE_BRIGHT, TURN, Optics

N_PARAMETERS = 8
SPRING, AUTUMN, LEAF_AREA, DECLINE, RISE, RISE_SCALE, FALL, FALL_SCALE = range(N_PARAMETERS)
LOWER = np.array([-0.6, -0.6, math.log(0.005), -0.5, -90.0, math.log(1.0), -30.0, math.log(1.0)])
UPPER = np.array([0.98, 0.98, math.log(9.0), 0.5, 400.0, math.log(45.0), 460.0, math.log(45.0)])
TUKEY = 4.685
"""Tuning constant of the biweight: 95 % efficiency for normal errors (Holland & Welsch 1977; value from memory)."""
_ROUNDS = 4
_STEPS = 15


@dataclass(frozen=True, slots=True)
class Series:
    """Many short series laid end to end.

    Attributes
    ----------
    day, value, weight : ndarray of float64, shape (n,)
        Day of the season year, greenness, weight (above 0).
    start : ndarray of int64, shape (group + 1,)
        Where each series begins.
    """

    day: np.ndarray
    value: np.ndarray
    weight: np.ndarray
    start: np.ndarray


@dataclass(frozen=True, slots=True)
class Fitted:
    """Result of :func:`fit_series`.

    Attributes
    ----------
    parameters, sd : ndarray of float64, shape (group, 8)
        Estimate and posterior standard deviation.
    noise : ndarray, shape (group,)
        Robust spread of the residuals, shrunk towards ``noise`` of the call.
    count : ndarray, shape (group,)
        Sum of the robust weights: how many views bear the fit.
    """

    parameters: np.ndarray
    sd: np.ndarray
    noise: np.ndarray
    count: np.ndarray


@nb.njit(cache=True, nogil=True)
def _state(t, p, optics, out):  # type: ignore[no-untyped-def]
    """Curve at day ``t`` (returned) and, in ``out``, what its derivatives need."""
    top, centre, drop, lead, plain = optics
    k1, k2 = math.exp(-p[5]), math.exp(-p[7])
    s1 = 0.5 * (1.0 + math.tanh(0.5 * (t - p[4]) * k1))
    s2 = 0.5 * (1.0 + math.tanh(0.5 * (t - p[6]) * k2))
    colour = 0.5 * (1.0 + math.tanh(0.5 * (t - p[6] + lead) * k2))
    passage = 0.5 * (1.0 + math.tanh(0.5 * (t - centre) / GROUND_PASSAGE_DAYS))
    ground = p[0] + (p[1] - p[0]) * passage
    bright, slope, rate = 1.0, 0.0, 1.0
    if plain < 0.5:
        bright = DARK / (TURN - min(ground, BRIGHTEST))
        slope = bright / (TURN - ground) if ground < BRIGHTEST else 0.0
        rate = RATE + RATE_BRIGHT * bright
    leaf = math.exp(p[2])
    share = s1 - s2
    gap = math.exp(-rate * leaf * share)
    canopy = top - drop * colour
    bottom = 1.0 - gap + bright * gap
    value = ((1.0 - gap) * canopy + bright * gap * ground) / bottom
    out[0], out[1], out[2], out[3], out[4] = s1, s2, colour, passage, share
    out[5] = (bright * ground - canopy - value * (bright - 1.0)) / bottom  # by gap
    by_bright = gap * (ground - value) / bottom - out[5] * RATE_BRIGHT * (1.0 - plain) * leaf * share * gap
    out[6] = bright * gap / bottom + by_bright * slope  # by ground
    out[7] = (1.0 - gap) / bottom  # by canopy
    out[8] = -rate * leaf * gap  # gap by share
    lag = (t - centre) / 100.0
    return value - p[3] * lag * share


@nb.njit(cache=True, nogil=True)
def _residuals(day, value, p, optics, out):  # type: ignore[no-untyped-def]
    """Fill ``out`` with value minus curve."""
    state = np.empty(9)
    for i in range(day.size):
        out[i] = value[i] - _state(day[i], p, optics, state)


@nb.njit(cache=True, nogil=True)
def _normal(day, residual, weight, p, optics, a, b):  # type: ignore[no-untyped-def]
    """Fill the normal matrix ``a`` (8, 8) and right-hand side ``b`` (8,) of the weighted least squares."""
    _, centre, drop, lead, _ = optics
    k1, k2 = math.exp(-p[5]), math.exp(-p[7])
    j, state = np.empty(8), np.empty(9)
    a[:] = 0.0
    b[:] = 0.0
    for i in range(day.size):
        if weight[i] <= 0.0:
            continue
        t = day[i]
        _state(t, p, optics, state)
        s1, s2, colour, passage, share = state[0], state[1], state[2], state[3], state[4]
        lag = (t - centre) / 100.0
        by_share = state[5] * state[8] - p[3] * lag
        d1, d2 = s1 * (1.0 - s1) * k1, s2 * (1.0 - s2) * k2
        fade = state[7] * drop * colour * (1.0 - colour) * k2
        j[0], j[1] = state[6] * (1.0 - passage), state[6] * passage
        j[2], j[3] = state[5] * state[8] * share, -lag * share
        j[4], j[5] = -by_share * d1, -by_share * d1 * (t - p[4])
        j[6], j[7] = by_share * d2 + fade, by_share * d2 * (t - p[6]) + fade * (t - p[6] + lead)
        for m in range(8):
            wj = weight[i] * j[m]
            b[m] += wj * residual[i]
            for n in range(m + 1):
                a[m, n] += wj * j[n]


@nb.njit(cache=True, nogil=True)
def _cholesky(a, low):  # type: ignore[no-untyped-def]
    """Lower Cholesky factor of a positive definite matrix given by its lower half."""
    n = a.shape[0]
    for i in range(n):
        for k in range(i + 1):
            total = a[i, k]
            for m in range(k):
                total -= low[i, m] * low[k, m]
            if i == k:
                low[i, i] = math.sqrt(max(total, 1e-300))
            else:
                low[i, k] = total / low[k, k]


@nb.njit(cache=True, nogil=True)
def _solve(low, b, x):  # type: ignore[no-untyped-def]
    """Solve ``L L' x = b``."""
    n = b.size
    for i in range(n):
        total = b[i]
        for k in range(i):
            total -= low[i, k] * x[k]
        x[i] = total / low[i, i]
    for i in range(n - 1, -1, -1):
        total = x[i]
        for k in range(i + 1, n):
            total -= low[k, i] * x[k]
        x[i] = total / low[i, i]


@nb.njit(cache=True, nogil=True)
def _cost(residual, weight, p, mean, precision):  # type: ignore[no-untyped-def]
    total = 0.0
    for i in range(residual.size):
        total += weight[i] * residual[i] * residual[i]
    for m in range(p.size):
        total += precision[m] * (p[m] - mean[m]) ** 2
    return total


@nb.njit(cache=True, nogil=True)
def _descend(day, value, weight, p, mean, precision, optics):  # type: ignore[no-untyped-def]
    """Levenberg-Marquardt from ``p`` (changed in place); weights already divided by the noise variance."""
    n = day.size
    residual, trial_residual = np.empty(n), np.empty(n)
    a, b, low = np.empty((8, 8)), np.empty(8), np.zeros((8, 8))
    step, trial = np.empty(8), np.empty(8)
    damp = 1e-2
    _residuals(day, value, p, optics, residual)
    cost = _cost(residual, weight, p, mean, precision)
    for _ in range(_STEPS):
        _normal(day, residual, weight, p, optics, a, b)
        for m in range(8):
            b[m] += precision[m] * (mean[m] - p[m])
            a[m, m] += precision[m]
            a[m, m] *= 1.0 + damp
        _cholesky(a, low)
        _solve(low, b, step)
        for m in range(8):
            trial[m] = min(max(p[m] + step[m], LOWER[m]), UPPER[m])
        _residuals(day, value, trial, optics, trial_residual)
        new = _cost(trial_residual, weight, trial, mean, precision)
        if new <= cost:
            gain = cost - new
            p[:] = trial
            residual[:] = trial_residual
            cost = new
            damp = max(damp * 0.2, 1e-9)
            if gain < 1e-6 * (1.0 + cost):
                break
        else:
            damp *= 8.0
            if damp > 1e7:
                break


@nb.njit(cache=True, nogil=True)
def _fit_one(day, value, weight, p, mean, precision, optics, setting, sd):  # type: ignore[no-untyped-def]
    """Robust fit of one series; returns its noise and effective count."""
    common_noise, trust = setting
    n = day.size
    residual, robust = np.empty(n), np.empty(n)
    noise = common_noise
    _residuals(day, value, p, optics, residual)
    for round_ in range(_ROUNDS):
        if round_ > 0 and n > 0:
            mad = 1.4826 * np.median(np.abs(residual))
            noise = math.sqrt((n * mad * mad + trust * common_noise * common_noise) / (n + trust))
        reach = (2.0 if round_ == 0 else 1.0) * TUKEY * noise
        for i in range(n):
            u = residual[i] / reach
            robust[i] = weight[i] / (noise * noise) * ((1.0 - u * u) ** 2 if abs(u) < 1.0 else 0.0)
            if round_ == 0:  # the start may be far off: no view is thrown away yet
                robust[i] = weight[i] / (noise * noise) / (1.0 + u * u)
        _descend(day, value, robust, p, mean, precision, optics)
        _residuals(day, value, p, optics, residual)
    a, b, low, unit, x = np.empty((8, 8)), np.empty(8), np.zeros((8, 8)), np.zeros(8), np.empty(8)
    _normal(day, residual, robust, p, optics, a, b)
    for m in range(8):
        a[m, m] += precision[m]
    _cholesky(a, low)
    for m in range(8):
        unit[:] = 0.0
        unit[m] = 1.0
        _solve(low, unit, x)
        sd[m] = math.sqrt(max(x[m], 0.0))
    return noise, np.sum(robust) * noise * noise


@nb.njit(cache=True, nogil=True, parallel=False)
def _fit_all(day, value, weight, start, p, mean, precision, optics, setting, sd, noise, count):  # type: ignore[no-untyped-def]
    for g in range(start.size - 1):
        lo, hi = start[g], start[g + 1]
        noise[g], count[g] = _fit_one(
            day[lo:hi], value[lo:hi], weight[lo:hi], p[g], mean[g], precision[g], optics, setting, sd[g]
        )


def fit_series(
    series: Series,
    mean: np.ndarray,
    spread: np.ndarray,
    *,
    optics: Optics,
    noise: float,
    trust: float = 8.0,
) -> Fitted:
    """Fit the greenness curve of :func:`inundate.leaves.curves.canopy_greenness` to every series.

    Parameters
    ----------
    series : Series
    mean, spread : ndarray of float64, shape (group, 8) or (8,)
        Normal prior of the parameters; the mean is also the start.
    optics : Optics
    noise : float
        Expected spread of one view about the curve.
    trust : float
        How many views ``noise`` is worth against a series' own residuals.

    Returns
    -------
    Fitted
    """
    groups = series.start.size - 1
    shape = (groups, N_PARAMETERS)
    mean = np.ascontiguousarray(np.broadcast_to(np.asarray(mean, float), shape))
    precision = np.ascontiguousarray(np.broadcast_to(1.0 / np.square(np.asarray(spread, float)), shape))
    parameters = np.clip(mean, LOWER, UPPER)
    sd, spread_out, count = np.empty(shape), np.empty(groups), np.empty(groups)
    _fit_all(
        series.day,
        series.value,
        series.weight,
        series.start,
        parameters,
        mean,
        precision,
        optics.values,
        (float(noise), float(trust)),
        sd,
        spread_out,
        count,
    )
    return Fitted(parameters, sd, spread_out, count)
