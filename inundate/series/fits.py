"""Fits of the predictors of level to views and stage.

Observations are one-sided where the bowl is dry or full. Fits maximise the posterior under a normal prior by damped
Gauss-Newton steps with Huber weights.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from inundate.series.balance import balance_path, balance_slopes
from inundate.series.maps import level_at

_HUBER = 2.5
# Gain in half a squared standardised residual below which a fit ends.
_ENOUGH = 0.01


@njit(cache=True, nogil=True)
def linear_path(theta: np.ndarray, design: np.ndarray, full: float, path: np.ndarray) -> None:
    """Level (m) a day: ``full`` times ``design`` (time, column) times ``theta``."""
    for t in range(design.shape[0]):
        total = 0.0
        for j in range(theta.size):
            total += theta[j] * design[t, j]
        path[t] = full * total


@njit(cache=True, nogil=True)
def level_targets(
    value: np.ndarray,
    sd: np.ndarray,
    table: np.ndarray,
    full: float,
    level: np.ndarray,
    inv_low: np.ndarray,
    inv_high: np.ndarray,
) -> None:
    """Turn views into levels with one inverse error below and one above (0 where the side is unbounded)."""
    top = table[-1]
    for n in range(value.size):
        here = level_at(value[n], table, full)
        level[n] = here
        low, high = value[n] - sd[n], value[n] + sd[n]
        inv_low[n] = 0.0 if low <= 0.0 else 1.0 / max(here - level_at(low, table, full), 1e-3)
        inv_high[n] = 0.0 if high >= top else 1.0 / max(level_at(high, table, full) - here, 1e-3)


@njit(cache=True, nogil=True)
def _cost(
    path: np.ndarray,
    day: np.ndarray,
    level: np.ndarray,
    inv_low: np.ndarray,
    inv_high: np.ndarray,
    resid: np.ndarray,
    weight: np.ndarray,
) -> float:
    """Huber cost of a path; fills residuals (observed minus path, m) and Gauss-Newton weights (1 / m2)."""
    total = 0.0
    for n in range(day.size):
        gap = level[n] - path[day[n]]
        inv = inv_low[n] if gap > 0.0 else inv_high[n]
        z = abs(gap) * inv
        resid[n] = gap
        if z <= _HUBER:
            weight[n] = inv * inv
            total += 0.5 * z * z
        else:
            weight[n] = inv * inv * _HUBER / z
            total += _HUBER * (z - 0.5 * _HUBER)
    return total


@njit(cache=True, nogil=True)
def _prior_cost(theta: np.ndarray, mean: np.ndarray, precision: np.ndarray) -> float:
    delta = theta - mean
    return 0.5 * delta @ (precision @ delta)


@njit(cache=True, nogil=True)
def _normal_equations(
    jac: np.ndarray,
    resid: np.ndarray,
    weight: np.ndarray,
    precision: np.ndarray,
    pull: np.ndarray,
    hess: np.ndarray,
    grad: np.ndarray,
) -> None:
    size = jac.shape[0]
    for a in range(size):
        for b in range(size):
            total = precision[a, b]
            for n in range(resid.size):
                total += jac[a, n] * jac[b, n] * weight[n]
            hess[a, b] = total
        down = -pull[a]
        for n in range(resid.size):
            down += jac[a, n] * weight[n] * resid[n]
        grad[a] = down


@njit(cache=True, nogil=True)
def fit_balance(
    theta: np.ndarray,
    mean: np.ndarray,
    precision: np.ndarray,
    rain: np.ndarray,
    pet: np.ndarray,
    region: np.ndarray,
    table: np.ndarray,
    full: float,
    day: np.ndarray,
    level: np.ndarray,
    inv_low: np.ndarray,
    inv_high: np.ndarray,
    rounds: int,
) -> np.ndarray:
    """Fit the mass balance in place; return the Hessian (parameter, parameter) of the cost at the end."""
    size = theta.size
    count = day.size
    path = np.empty(rain.size)
    moved = np.empty(rain.size)
    resid, weight = np.empty(count), np.empty(count)
    resid2, weight2 = np.empty(count), np.empty(count)
    jac, hess, grad = np.zeros((size, count)), np.zeros((size, size)), np.zeros(size)
    damp = 1e-2
    balance_path(theta, rain, pet, region, table, full, path)
    cost = _cost(path, day, level, inv_low, inv_high, resid, weight) + _prior_cost(theta, mean, precision)
    for step in range(rounds + 1):
        balance_slopes(theta, rain, pet, region, table, full, day, jac)
        _normal_equations(jac, resid, weight, precision, precision @ (theta - mean), hess, grad)
        if step == rounds:
            break
        better = False
        for _ in range(4):
            damped = hess.copy()
            for a in range(size):
                damped[a, a] *= 1.0 + damp
            trial = theta + np.linalg.solve(damped, grad)
            balance_path(trial, rain, pet, region, table, full, moved)
            new = _cost(moved, day, level, inv_low, inv_high, resid2, weight2) + _prior_cost(trial, mean, precision)
            if new < cost:
                better = True
                break
            damp *= 8.0
        if not better:
            break
        gained = cost - new
        theta[:] = trial
        path[:] = moved
        resid[:] = resid2
        weight[:] = weight2
        cost = new
        damp = max(damp * 0.2, 1e-4)
        if gained < _ENOUGH:
            rounds = step + 1
    return hess


@njit(cache=True, nogil=True)
def fit_linear(
    theta: np.ndarray,
    mean: np.ndarray,
    precision: np.ndarray,
    design: np.ndarray,
    full: float,
    day: np.ndarray,
    level: np.ndarray,
    inv_low: np.ndarray,
    inv_high: np.ndarray,
    rounds: int,
) -> np.ndarray:
    """Fit the linear predictor in place; return the Hessian (parameter, parameter) of the cost at the end."""
    size = theta.size
    count = day.size
    path = np.empty(design.shape[0])
    resid, weight = np.empty(count), np.empty(count)
    jac, hess, grad = np.zeros((size, count)), np.zeros((size, size)), np.zeros(size)
    for n in range(count):
        for a in range(size):
            jac[a, n] = full * design[day[n], a]
    for _ in range(rounds + 1):
        linear_path(theta, design, full, path)
        _cost(path, day, level, inv_low, inv_high, resid, weight)
        _normal_equations(jac, resid, weight, precision, precision @ (theta - mean), hess, grad)
        step = np.linalg.solve(hess, grad)
        theta += step
        if np.abs(step).max() < 1e-5:
            break
    return hess
