"""Scalar Kalman filter and smoother with uneven errors, gaps and an exact diffuse start, compiled.

The state follows ``x[t+1] = phi x[t] + eta``, ``eta ~ N(0, q)``, and is seen as ``y[t] = x[t] + eps``,
``eps ~ N(0, r[t])``. ``phi = 1`` with an infinite first variance is the local-level model with exact diffuse start
(Durbin and Koopman, Time Series Analysis by State Space Methods, 2nd ed., 2012, chapters 2 and 5).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numba import njit

from inundate.common.errors import InputError

_LOG_2PI = math.log(2.0 * math.pi)


@njit(cache=True, nogil=True)
def filter_one(
    y: np.ndarray, r: np.ndarray, phi: float, q: float, p0: float, mean: np.ndarray, var: np.ndarray
) -> float:
    """Filter one series in place; return the log-likelihood.

    ``y`` and ``r`` have shape (time,); a day without observation has a non-finite ``r``. ``mean`` and ``var`` take the
    filtered moments. ``p0`` is the variance of the first state; infinite means diffuse (only with ``phi = 1``).
    """
    a = 0.0
    p = p0
    loglik = 0.0
    for t in range(y.size):
        if t > 0:
            a = phi * a
            p = phi * phi * p + q
        if math.isfinite(r[t]):
            if math.isfinite(p):
                f = p + r[t]
                gain = p / f
                innovation = y[t] - a
                loglik -= 0.5 * (_LOG_2PI + math.log(f) + innovation * innovation / f)
                a += gain * innovation
                p = p * (1.0 - gain)
            else:
                a = y[t]
                p = r[t]
                loglik -= 0.5 * _LOG_2PI
        mean[t] = a
        var[t] = p
    return loglik


@njit(cache=True, nogil=True)
def smooth_one(
    y: np.ndarray, r: np.ndarray, phi: float, q: float, p0: float, mean: np.ndarray, var: np.ndarray
) -> float:
    """Filter and smooth one series in place (backward pass of Rauch, Tung and Striebel); return the log-likelihood."""
    loglik = filter_one(y, r, phi, q, p0, mean, var)
    for t in range(y.size - 2, -1, -1):
        if math.isfinite(var[t]):
            ahead = phi * phi * var[t] + q
            if ahead > 0.0:
                gain = phi * var[t] / ahead
                mean[t] += gain * (mean[t + 1] - phi * mean[t])
                var[t] += gain * gain * (var[t + 1] - ahead)
        else:
            mean[t] = mean[t + 1]
            var[t] = var[t + 1] + q
    return loglik


@njit(cache=True, nogil=True)
def smooth_rows(
    y: np.ndarray,
    r: np.ndarray,
    phi: np.ndarray,
    q: np.ndarray,
    p0: np.ndarray,
    mean: np.ndarray,
    var: np.ndarray,
    loglik: np.ndarray,
) -> None:
    """Smooth every row of ``y`` (series, time); ``phi``, ``q``, ``p0`` and ``loglik`` have shape (series,)."""
    for i in range(y.shape[0]):
        loglik[i] = smooth_one(y[i], r[i], phi[i], q[i], p0[i], mean[i], var[i])


@dataclass(frozen=True, slots=True)
class LocalLevel:
    """Moments of a local-level model.

    Attributes
    ----------
    filtered, filtered_var, smoothed, smoothed_var : ndarray of float64, shape (time,)
        Moments given the past, and given the whole series, in the unit of the series and its square.
    loglik : float
        Log-likelihood with exact diffuse start; the first observation counts -ln(2 pi) / 2.
    """

    filtered: np.ndarray
    filtered_var: np.ndarray
    smoothed: np.ndarray
    smoothed_var: np.ndarray
    loglik: float


def local_level(y: np.ndarray, noise_var: np.ndarray | float, step_var: float) -> LocalLevel:
    """Smooth a series by the local-level model with exact diffuse start.

    Parameters
    ----------
    y : ndarray, shape (time,)
        Observations; NaN where there is none.
    noise_var : float or ndarray, shape (time,)
        Variance of the observation error, one value or one a day (>= 0).
    step_var : float
        Variance of the daily step of the level (>= 0).

    Returns
    -------
    LocalLevel

    Raises
    ------
    InputError
        If a variance is negative or nothing was observed.
    """
    y = np.asarray(y, float)
    noise = np.broadcast_to(np.asarray(noise_var, float), y.shape)
    if not step_var >= 0 or not np.all(noise[np.isfinite(y)] >= 0):
        msg = f"noise_var, step_var: got a negative or missing value (step_var {step_var}): variances must be 0 or more"
        raise InputError(msg)
    if not np.isfinite(y).any():
        msg = f"y: none of {y.size} values is a number: give at least one observation"
        raise InputError(msg)
    r = np.where(np.isfinite(y), noise, np.inf)
    seen = np.where(np.isfinite(y), y, 0.0)
    out = np.empty((4, y.size))
    filter_one(seen, r, 1.0, float(step_var), np.inf, out[0], out[1])
    loglik = smooth_one(seen, r, 1.0, float(step_var), np.inf, out[2], out[3])
    return LocalLevel(out[0], out[1], out[2], out[3], float(loglik))
