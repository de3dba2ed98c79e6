"""Robust fits of many wetlands in one compiled pass: Levenberg-Marquardt on a Student-t likelihood with a Gaussian prior.

Stage and area both carry errors: the variance of a residual is the area's plus (slope x stage sd)^2, renewed at every
step (effective variance; Orear 1982, Am. J. Phys. 50, 912). Student-t weights follow Lange, Little & Taylor (1989,
JASA 84, 881). The spread of the parameters is the inverse curvature at the optimum (Laplace).

Arrays over pairs are flat, sorted by unit; ``first[u]:first[u + 1]`` are the pairs of unit ``u`` (a wetland, or one
confirmed period of it). Areas are shares of the largest extent.
"""

from __future__ import annotations

from typing import NamedTuple

import numba as nb
import numpy as np

from inundate.relation.families import N_PARAM, N_WORK, prepare, share_at
from inundate.relation.reading import Ground

MAX_STEPS = 40
STAGE, STAGE_SD, SHARE, SHARE_SD, CENSORED = range(5)


class Flat(NamedTuple):
    """Pairs of all units: ``pairs`` (pair, 5) stage, stage sd, share, share sd, censored; ``first`` (unit + 1,)."""

    pairs: np.ndarray
    first: np.ndarray


class Belief(NamedTuple):
    """Gaussian prior: ``mean`` (unit, N_PARAM) and ``precision`` (unit, N_PARAM, N_PARAM)."""

    mean: np.ndarray
    precision: np.ndarray


class One(NamedTuple):
    """Everything that one unit's fit reads."""

    mean: np.ndarray
    precision: np.ndarray
    pairs: np.ndarray
    use: np.ndarray
    table: np.ndarray
    span: np.ndarray
    nu: float


class Space(NamedTuple):
    """Scratch of one fit: Jacobian (pair, N_PARAM), value, raw sd, sd (pair,), slope (N_PARAM,), curve numbers (N_WORK,)."""

    jac: np.ndarray
    value: np.ndarray
    raw: np.ndarray
    sigma: np.ndarray
    slope: np.ndarray
    work: np.ndarray


@nb.njit(cache=True, nogil=True)
def _cholesky(matrix: np.ndarray, size: int, lower: np.ndarray) -> bool:
    for i in range(size):
        for j in range(i + 1):
            total = matrix[i, j]
            for k in range(j):
                total -= lower[i, k] * lower[j, k]
            if i == j:
                if total <= 0.0:
                    return False
                lower[i, i] = np.sqrt(total)
            else:
                lower[i, j] = total / lower[j, j]
    return True


@nb.njit(cache=True, nogil=True)
def _solve_lower(lower: np.ndarray, size: int, right: np.ndarray, out: np.ndarray) -> None:
    for i in range(size):
        total = right[i]
        for k in range(i):
            total -= lower[i, k] * out[k]
        out[i] = total / lower[i, i]
    for i in range(size - 1, -1, -1):
        total = out[i]
        for k in range(i + 1, size):
            total -= lower[k, i] * out[k]
        out[i] = total / lower[i, i]


@nb.njit(cache=True, nogil=True)
def _invert(matrix: np.ndarray, size: int, out: np.ndarray) -> None:
    lower = np.zeros((N_PARAM, N_PARAM))
    _cholesky(matrix, size, lower)
    unit, column = np.zeros(N_PARAM), np.zeros(N_PARAM)
    for j in range(size):
        unit[:] = 0.0
        unit[j] = 1.0
        _solve_lower(lower, size, unit, column)
        for i in range(size):
            out[i, j] = column[i]


@nb.njit(cache=True, nogil=True)
def _residual(y: float, value: float, censored: float) -> float:
    gap = y - value
    return max(gap, 0.0) if censored > 0.5 else gap


@nb.njit(cache=True, nogil=True)
def raw_sigma(family: int, work: np.ndarray, table: np.ndarray, span: np.ndarray, pair: np.ndarray) -> float:
    """Return the effective sd of one pair: area sd, and stage sd times the slope over that sd."""
    h, sh, sy = pair[STAGE], pair[STAGE_SD], pair[SHARE_SD]
    reach = max(sh, 0.005)
    rise = share_at(family, work, table, span, h + reach) - share_at(family, work, table, span, h - reach)
    return np.sqrt(sy * sy + (rise / (2.0 * reach) * sh) ** 2)


@nb.njit(cache=True, nogil=True)
def _cost(family: int, size: int, theta: np.ndarray, one: One, space: Space) -> float:
    prepare(family, theta, space.work)
    total = 0.0
    for i in range(size):
        for j in range(size):
            total += 0.5 * (theta[i] - one.mean[i]) * one.precision[i, j] * (theta[j] - one.mean[j])
    for i in range(one.use.size):
        if one.use[i]:
            value = share_at(family, space.work, one.table, one.span, one.pairs[i, STAGE])
            z = _residual(one.pairs[i, SHARE], value, one.pairs[i, CENSORED]) / space.sigma[i]
            total += 0.5 * (one.nu + 1.0) * np.log1p(z * z / one.nu)
    return total


@nb.njit(cache=True, nogil=True)
def gradient(
    family: int, size: int, theta: np.ndarray, ground: tuple[np.ndarray, np.ndarray], h: float, out: np.ndarray
) -> None:
    """Write d share / d parameter at stage ``h`` into ``out`` (central differences); ``ground`` is (table, span)."""
    table, span = ground
    work = np.zeros(N_WORK)
    probe = theta.copy()
    for j in range(size):
        probe[j] = theta[j] + 1e-4
        prepare(family, probe, work)
        up = share_at(family, work, table, span, h)
        probe[j] = theta[j] - 1e-4
        prepare(family, probe, work)
        out[j] = (up - share_at(family, work, table, span, h)) / 2e-4
        probe[j] = theta[j]


@nb.njit(cache=True, nogil=True)
def _linearise(family: int, size: int, theta: np.ndarray, phi: float, one: One, space: Space) -> None:
    prepare(family, theta, space.work)
    n = one.use.size
    for i in range(n):
        space.value[i] = share_at(family, space.work, one.table, one.span, one.pairs[i, STAGE])
        space.raw[i] = raw_sigma(family, space.work, one.table, one.span, one.pairs[i])
        space.sigma[i] = phi * space.raw[i]
    probe = theta.copy()
    for j in range(size):
        probe[j] = theta[j] + 1e-5
        prepare(family, probe, space.work)
        for i in range(n):
            value = share_at(family, space.work, one.table, one.span, one.pairs[i, STAGE])
            space.jac[i, j] = (value - space.value[i]) / 1e-5
        probe[j] = theta[j]


@nb.njit(cache=True, nogil=True)
def _curvature(size: int, theta: np.ndarray, one: One, space: Space, info: np.ndarray) -> None:
    """Fill the pairs' information matrix and the downhill slope at ``theta``."""
    info[:, :] = 0.0
    for a in range(size):
        space.slope[a] = 0.0
        for b in range(size):
            space.slope[a] += one.precision[a, b] * (one.mean[b] - theta[b])
    for i in range(one.use.size):
        gap = _residual(one.pairs[i, SHARE], space.value[i], one.pairs[i, CENSORED])
        if not one.use[i] or (one.pairs[i, CENSORED] > 0.5 and gap == 0.0):
            continue
        z = gap / space.sigma[i]
        heft = (one.nu + 1.0) / (one.nu + z * z) / (space.sigma[i] * space.sigma[i])
        for a in range(size):
            space.slope[a] += heft * space.jac[i, a] * gap
            for b in range(size):
                info[a, b] += heft * space.jac[i, a] * space.jac[i, b]


@nb.njit(cache=True, nogil=True)
def _step(size: int, damp: float, one: One, space: Space, info: np.ndarray, move: np.ndarray) -> bool:
    matrix = np.zeros((N_PARAM, N_PARAM))
    lower = np.zeros((N_PARAM, N_PARAM))
    for a in range(size):
        for b in range(size):
            matrix[a, b] = info[a, b] + one.precision[a, b]
        matrix[a, a] *= 1.0 + damp
    if not _cholesky(matrix, size, lower):
        return False
    _solve_lower(lower, size, space.slope, move)
    return True


@nb.njit(cache=True, nogil=True)
def fit_one(
    family: int, size: int, theta: np.ndarray, phi: float, one: One, info: np.ndarray
) -> tuple[float, float, float]:
    """Fit one curve from ``theta`` (changed in place); ``info`` receives the information of the pairs.

    Returns the cost, the weighted sum of squared raw residuals (for the noise scale) and the number of pairs that count.
    """
    n = one.use.size
    space = Space(np.zeros((n, N_PARAM)), np.zeros(n), np.ones(n), np.ones(n), np.zeros(N_PARAM), np.zeros(N_WORK))
    move, trial = np.zeros(N_PARAM), theta.copy()
    damp, cost, fresh = 1e-3, 0.0, True
    for _ in range(MAX_STEPS):
        if fresh:
            _linearise(family, size, theta, phi, one, space)
            cost = _cost(family, size, theta, one, space)
            _curvature(size, theta, one, space, info)
        if not _step(size, damp, one, space, info, move):
            damp, fresh = damp * 10.0 + 1e-6, False
            continue
        longest = 0.0
        for a in range(size):
            move[a] = min(max(move[a], -1.0), 1.0)
            trial[a] = theta[a] + move[a]
            longest = max(longest, abs(move[a]))
        new = _cost(family, size, trial, one, space)
        fresh = new <= cost
        if fresh:
            theta[:] = trial
            damp = max(damp * 0.2, 1e-9)
            if longest < 1e-4 or cost - new < 1e-7 * (1.0 + abs(cost)):
                break
        else:
            damp *= 6.0
            if longest < 1e-5 or damp > 1e8:
                break
    return cost, *_spread_of_residuals(phi, one, space)


@nb.njit(cache=True, nogil=True)
def _spread_of_residuals(phi: float, one: One, space: Space) -> tuple[float, float]:
    """Sum weighted squares of raw residuals and count them; near empty and full, where extents are cut off, none counts."""
    total, count = 0.0, 0.0
    for i in range(one.use.size):
        gap = _residual(one.pairs[i, SHARE], space.value[i], one.pairs[i, CENSORED])
        edge = min(space.value[i], 1.0 - space.value[i]) < space.raw[i]
        if one.use[i] and not edge and not (one.pairs[i, CENSORED] > 0.5 and gap == 0.0):
            z = gap / space.raw[i]
            total += (one.nu + 1.0) / (one.nu + (z / phi) ** 2) * z * z
            count += 1.0
    return total, count


@nb.njit(cache=True, nogil=True)
def posterior(size: int, info: np.ndarray, precision: np.ndarray, cov: np.ndarray) -> float:
    """Write the posterior covariance into ``cov``; return how many parameters the pairs decide."""
    matrix = np.zeros((N_PARAM, N_PARAM))
    for a in range(size):
        for b in range(size):
            matrix[a, b] = info[a, b] + precision[a, b]
        matrix[a, a] += 1e-9
    _invert(matrix, size, cov)
    own = 0.0
    for a in range(size):
        for b in range(size):
            own += cov[a, b] * info[b, a]
    return own


@nb.njit(cache=True, nogil=True)
def _with_scale(
    family: int, size: int, theta: np.ndarray, one: One, noise: np.ndarray, info: np.ndarray, cov: np.ndarray
) -> tuple[float, float, float]:
    """Fit with the noise scale renewed between rounds; ``noise`` holds its prior value and that value's worth in pairs."""
    phi, cost, own = noise[0], 0.0, 0.0
    for _ in range(4):
        cost, total, count = fit_one(family, size, theta, phi, one, info)
        own = posterior(size, info, one.precision, cov)
        old = phi
        phi = np.sqrt((total + noise[1] * noise[0] ** 2) / (max(count - own, 0.25 * count) + noise[1]))
        phi = min(max(phi, 0.2), 8.0)
        if abs(phi / old - 1.0) < 0.01:
            break
    return cost, phi, own


@nb.njit(cache=True, nogil=True)
def fit_units(
    family: int, size: int, starts: np.ndarray, belief: Belief, flat: Flat, ground: Ground, noise: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Fit one family to every unit.

    Parameters
    ----------
    family, size : int
        Family code and its number of parameters.
    starts : ndarray, shape (unit, start, N_PARAM)
        Starting points; the fit of lowest cost is kept.
    belief : Belief
    flat : Flat
    ground : Ground
    noise : ndarray, shape (3,)
        Prior noise scale, its worth in pairs, and the degrees of freedom of the Student-t.

    Returns
    -------
    theta (unit, N_PARAM), info (unit, N_PARAM, N_PARAM), cov (same), phi (unit,), own (unit,)
        ``own`` is the effective number of parameters that the pairs decide.
    """
    units = flat.first.size - 1
    theta = np.zeros((units, N_PARAM))
    info = np.zeros((units, N_PARAM, N_PARAM))
    cov = np.zeros((units, N_PARAM, N_PARAM))
    phi, own = np.ones(units), np.zeros(units)
    one_info, one_cov = np.zeros((N_PARAM, N_PARAM)), np.zeros((N_PARAM, N_PARAM))
    for u in range(units):
        mine = flat.pairs[flat.first[u] : flat.first[u + 1]]
        t = max(ground.which[u], 0)
        use = np.ones(mine.shape[0], np.bool_)
        one = One(belief.mean[u], belief.precision[u], mine, use, ground.tables[t], ground.spans[t], noise[2])
        best = np.inf
        for s in range(starts.shape[1]):
            guess = starts[u, s].copy()
            one_cov[:, :] = 0.0
            got = _with_scale(family, size, guess, one, noise, one_info, one_cov)
            rank = got[0] + mine.shape[0] * np.log(got[1])
            if rank < best - 1e-9:
                best = rank
                theta[u], info[u], cov[u] = guess, one_info, one_cov
                phi[u], own[u] = got[1], got[2]
    return theta, info, cov, phi, own


@nb.njit(cache=True, nogil=True)
def hold_out(
    family: int,
    size: int,
    fitted: tuple[np.ndarray, np.ndarray, float],
    belief: Belief,
    flat: Flat,
    ground: Ground,
    blocks: np.ndarray,
) -> np.ndarray:
    """Refit without each block in turn and predict the block.

    Parameters
    ----------
    fitted : (theta (unit, N_PARAM), phi (unit,), nu)
        Full fits, where each refit starts.
    blocks : ndarray of int, shape (pair,)
        Blocks of each unit numbered from 0; -1 is never held out. Others as in :func:`fit_units`.

    Returns
    -------
    ndarray, shape (pair, 4)
        Predicted share, its model sd, the noise sd there, and 1 where the stage lies outside the stages fitted to; NaN where
        nothing was held out.
    """
    theta, phi, nu = fitted
    out = np.full((flat.pairs.shape[0], 4), np.nan)
    info = np.zeros((N_PARAM, N_PARAM))
    for u in range(flat.first.size - 1):
        lo, hi = flat.first[u], flat.first[u + 1]
        if hi - lo < 2:
            continue
        t = max(ground.which[u], 0)
        for k in range(blocks[lo:hi].max() + 1):
            use = blocks[lo:hi] != k
            if use.sum() == 0 or use.all():
                continue
            one = One(
                belief.mean[u], belief.precision[u], flat.pairs[lo:hi], use, ground.tables[t], ground.spans[t], nu
            )
            guess = theta[u].copy()
            fit_one(family, size, guess, phi[u], one, info)
            _predict_left_out(family, size, guess, phi[u], one, info, out[lo:hi])
    return out


@nb.njit(cache=True, nogil=True)
def _predict_left_out(
    family: int, size: int, theta: np.ndarray, phi: float, one: One, info: np.ndarray, out: np.ndarray
) -> None:
    cov = np.zeros((N_PARAM, N_PARAM))
    posterior(size, info, one.precision, cov)
    low, high = np.inf, -np.inf
    for i in range(one.use.size):
        if one.use[i]:
            low, high = min(low, one.pairs[i, STAGE]), max(high, one.pairs[i, STAGE])
    got = predict_from(family, size, theta, cov, one.pairs, (one.table, one.span))
    for i in range(one.use.size):
        if not one.use[i]:
            out[i, 0], out[i, 1], out[i, 2] = got[i, 0], got[i, 1], phi * got[i, 2]
            out[i, 3] = 1.0 if one.pairs[i, STAGE] < low or one.pairs[i, STAGE] > high else 0.0


@nb.njit(cache=True, nogil=True)
def predict_from(
    family: int, size: int, theta: np.ndarray, cov: np.ndarray, pairs: np.ndarray, ground: tuple[np.ndarray, np.ndarray]
) -> np.ndarray:
    """Return share, its sd under ``cov``, and the raw noise sd at each pair, (pair, 3); ``ground`` is (table, span)."""
    out = np.zeros((pairs.shape[0], 3))
    slope, work = np.zeros(N_PARAM), np.zeros(N_WORK)
    table, span = ground
    prepare(family, theta, work)
    for i in range(pairs.shape[0]):
        gradient(family, size, theta, ground, pairs[i, STAGE], slope)
        spread = 0.0
        for a in range(size):
            for b in range(size):
                spread += slope[a] * cov[a, b] * slope[b]
        out[i, 0] = share_at(family, work, table, span, pairs[i, STAGE])
        out[i, 1] = np.sqrt(max(spread, 0.0))
        out[i, 2] = raw_sigma(family, work, table, span, pairs[i])
    return out
