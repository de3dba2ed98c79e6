"""Robust fits of many wetlands in one compiled pass: Levenberg-Marquardt on a Student-t likelihood with a Gaussian prior.

Stage and area both carry errors: the variance of a residual is the area's plus (slope x stage sd)^2, renewed at every
step (effective variance; Orear 1982, Am. J. Phys. 50, 912). Student-t weights follow Lange, Little & Taylor (1989,
JASA 84, 881). The spread of the parameters is the inverse curvature at the optimum (Laplace).

Arrays over pairs are flat, sorted by unit; ``first[u]:first[u + 1]`` are the pairs of unit ``u`` (a wetland, or one
confirmed period of it). Areas are shares of the largest extent.
"""

from __future__ import annotations

import numba as nb
import numpy as np

from inundate.relation.families import N_PARAM, N_WORK, prepare, share_at

MAX_STEPS = 40


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
def inverse(matrix: np.ndarray, size: int, out: np.ndarray) -> bool:
    """Invert the leading ``size`` block of a positive definite matrix into ``out``; false when it is not one."""
    lower = np.zeros((N_PARAM, N_PARAM))
    if not _cholesky(matrix, size, lower):
        return False
    unit = np.zeros(N_PARAM)
    column = np.zeros(N_PARAM)
    for j in range(size):
        unit[:] = 0.0
        unit[j] = 1.0
        _solve_lower(lower, size, unit, column)
        for i in range(size):
            out[i, j] = column[i]
    return True


@nb.njit(cache=True, nogil=True)
def _residual(y: float, value: float, censored: bool) -> float:
    gap = y - value
    return max(gap, 0.0) if censored else gap


@nb.njit(cache=True, nogil=True)
def raw_sigma(family, work, table, span, h, sh, sy):  # noqa: ANN001, ANN201
    """Return the effective sd of one pair: area sd and stage sd times the local slope."""
    reach = max(sh, 0.005)
    rise = share_at(family, work, table, span, h + reach) - share_at(family, work, table, span, h - reach)
    return np.sqrt(sy * sy + (rise / (2.0 * reach) * sh) ** 2)


@nb.njit(cache=True, nogil=True)
def _prior_cost(theta, mean, precision, size):  # noqa: ANN001, ANN202
    total = 0.0
    for i in range(size):
        for j in range(size):
            total += (theta[i] - mean[i]) * precision[i, j] * (theta[j] - mean[j])
    return 0.5 * total


@nb.njit(cache=True, nogil=True)
def _cost(family, size, theta, mean, precision, pairs, use, sigma, nu, table, span, work):  # noqa: ANN001, ANN202
    prepare(family, theta, work)
    total = _prior_cost(theta, mean, precision, size)
    for i in range(pairs.shape[0]):
        if use[i]:
            value = share_at(family, work, table, span, pairs[i, 0])
            z = _residual(pairs[i, 2], value, pairs[i, 4] > 0.5) / sigma[i]
            total += 0.5 * (nu + 1.0) * np.log1p(z * z / nu)
    return total


@nb.njit(cache=True, nogil=True)
def gradient(family, size, theta, table, span, h, work, out):  # noqa: ANN001, ANN201
    """Write d share / d parameter at one stage into ``out`` (central differences)."""
    probe = theta.copy()
    for j in range(size):
        step = 1e-4
        probe[j] = theta[j] + step
        prepare(family, probe, work)
        up = share_at(family, work, table, span, h)
        probe[j] = theta[j] - step
        prepare(family, probe, work)
        out[j] = (up - share_at(family, work, table, span, h)) / (2.0 * step)
        probe[j] = theta[j]


@nb.njit(cache=True, nogil=True)
def _jacobian(family, size, theta, pairs, table, span, work, out, value):  # noqa: ANN001, ANN202
    prepare(family, theta, work)
    n = pairs.shape[0]
    for i in range(n):
        value[i] = share_at(family, work, table, span, pairs[i, 0])
    probe = theta.copy()
    for j in range(size):
        probe[j] = theta[j] + 1e-5
        prepare(family, probe, work)
        for i in range(n):
            out[i, j] = (share_at(family, work, table, span, pairs[i, 0]) - value[i]) / 1e-5
        probe[j] = theta[j]
    prepare(family, theta, work)


@nb.njit(cache=True, nogil=True)
def fit_one(family, size, theta, mean, precision, pairs, use, phi, nu, table, span, info):  # noqa: ANN001, ANN201
    """Fit one curve from ``theta`` (changed in place); ``info`` receives the data's information matrix.

    ``pairs`` has columns stage, stage sd, share, share sd, censored (0/1). Returns the cost, the weighted sum of squared
    raw residuals (for the noise scale) and the number of pairs in use.
    """
    n = pairs.shape[0]
    work = np.zeros(N_WORK)
    jac = np.zeros((n, N_PARAM))
    value = np.zeros(n)
    raw = np.zeros(n)
    sigma = np.ones(n)
    matrix = np.zeros((N_PARAM, N_PARAM))
    lower = np.zeros((N_PARAM, N_PARAM))
    slope = np.zeros(N_PARAM)
    move = np.zeros(N_PARAM)
    trial = theta.copy()
    damp = 1e-3
    cost = 0.0
    fresh = True
    for _ in range(MAX_STEPS):
        if fresh:
            _jacobian(family, size, theta, pairs, table, span, work, jac, value)
            for i in range(n):
                raw[i] = raw_sigma(family, work, table, span, pairs[i, 0], pairs[i, 1], pairs[i, 3])
                sigma[i] = phi * raw[i]
            cost = _cost(family, size, theta, mean, precision, pairs, use, sigma, nu, table, span, work)
            info[:, :] = 0.0
            for a in range(size):
                slope[a] = 0.0
                for b in range(size):
                    slope[a] += precision[a, b] * (mean[b] - theta[b])
            for i in range(n):
                if not use[i]:
                    continue
                gap = _residual(pairs[i, 2], value[i], pairs[i, 4] > 0.5)
                if pairs[i, 4] > 0.5 and gap == 0.0:
                    continue
                z = gap / sigma[i]
                heft = (nu + 1.0) / (nu + z * z) / (sigma[i] * sigma[i])
                for a in range(size):
                    slope[a] += heft * jac[i, a] * gap
                    for b in range(a + 1):
                        info[a, b] += heft * jac[i, a] * jac[i, b]
            for a in range(size):
                for b in range(a):
                    info[b, a] = info[a, b]
        for a in range(size):
            for b in range(size):
                matrix[a, b] = info[a, b] + precision[a, b]
            matrix[a, a] *= 1.0 + damp
        if not _cholesky(matrix, size, lower):
            damp = damp * 10.0 + 1e-6
            fresh = False
            continue
        _solve_lower(lower, size, slope, move)
        longest = 0.0
        for a in range(size):
            move[a] = min(max(move[a], -1.0), 1.0)
            trial[a] = theta[a] + move[a]
            longest = max(longest, abs(move[a]))
        new = _cost(family, size, trial, mean, precision, pairs, use, sigma, nu, table, span, work)
        if new <= cost:
            for a in range(size):
                theta[a] = trial[a]
            damp = max(damp * 0.2, 1e-9)
            fresh = True
            if longest < 1e-4 or cost - new < 1e-7 * (1.0 + abs(cost)):
                break
        else:
            damp *= 6.0
            fresh = False
            if longest < 1e-5 or damp > 1e8:
                break
    total, count = 0.0, 0.0
    for i in range(n):
        if use[i] and not (pairs[i, 4] > 0.5 and pairs[i, 2] <= value[i]):
            z = _residual(pairs[i, 2], value[i], pairs[i, 4] > 0.5) / raw[i]
            total += (nu + 1.0) / (nu + (z / phi) ** 2) * z * z
            count += 1.0
    return cost, total, count


@nb.njit(cache=True, nogil=True)
def _posterior(size, info, precision, cov):  # noqa: ANN001, ANN202
    matrix = np.zeros((N_PARAM, N_PARAM))
    for a in range(size):
        for b in range(size):
            matrix[a, b] = info[a, b] + precision[a, b]
        matrix[a, a] += 1e-9
    inverse(matrix, size, cov)
    own = 0.0
    for a in range(size):
        for b in range(size):
            own += cov[a, b] * info[b, a]
    return own


@nb.njit(cache=True, nogil=True)
def _with_scale(family, size, theta, mean, precision, pairs, use, nu, noise, table, span, info, cov):  # noqa: ANN001, ANN202
    """Fit with the noise scale renewed between rounds; ``noise`` holds (prior scale, prior count, fixed scale or 0)."""
    phi = noise[2] if noise[2] > 0 else noise[0]
    cost, own = 0.0, 0.0
    rounds = 1 if noise[2] > 0 else 4
    for _ in range(rounds):
        cost, total, count = fit_one(family, size, theta, mean, precision, pairs, use, phi, nu, table, span, info)
        own = _posterior(size, info, precision, cov)
        if noise[2] > 0:
            break
        old = phi
        phi = np.sqrt((total + noise[1] * noise[0] ** 2) / (max(count - own, 0.25 * count) + noise[1]))
        phi = min(max(phi, 0.2), 8.0)
        if abs(phi / old - 1.0) < 0.01:
            break
    return cost, phi, own


@nb.njit(cache=True, nogil=True)
def fit_units(family, size, starts, mean, precision, pairs, first, nu, noise, tables, spans, which):  # noqa: ANN001, ANN201
    """Fit one family to every unit.

    Parameters
    ----------
    family, size : int
        Family code and its number of parameters.
    starts : ndarray, shape (unit, start, N_PARAM)
        Starting points; the fit of lowest cost is kept.
    mean : ndarray, shape (unit, N_PARAM); precision : ndarray, shape (unit, N_PARAM, N_PARAM)
        Gaussian prior.
    pairs : ndarray, shape (pair, 5)
        Stage, stage sd, share, share sd, censored.
    first : ndarray of int, shape (unit + 1,)
    nu : float
        Degrees of freedom of the Student-t.
    noise : ndarray, shape (3,)
        Prior noise scale, its weight in pairs, and a fixed scale (0 to estimate it).
    tables, spans : ndarray
        Hypsometry tables (table, level, column) and spans (table, 2).
    which : ndarray of int, shape (unit,)
        Table of each unit; -1 for none.

    Returns
    -------
    theta (unit, N_PARAM), info (unit, N_PARAM, N_PARAM), cov (same), phi (unit,), own (unit,)
        ``own`` is the effective number of parameters that the data decide.
    """
    units = first.size - 1
    theta = np.zeros((units, N_PARAM))
    info = np.zeros((units, N_PARAM, N_PARAM))
    cov = np.zeros((units, N_PARAM, N_PARAM))
    phi = np.ones(units)
    own = np.zeros(units)
    one_info = np.zeros((N_PARAM, N_PARAM))
    one_cov = np.zeros((N_PARAM, N_PARAM))
    for u in range(units):
        mine = pairs[first[u] : first[u + 1]]
        use = np.ones(mine.shape[0], np.bool_)
        table, span = tables[max(which[u], 0)], spans[max(which[u], 0)]
        best = np.inf
        for s in range(starts.shape[1]):
            guess = starts[u, s].copy()
            one_cov[:, :] = 0.0
            got = _with_scale(
                family, size, guess, mean[u], precision[u], mine, use, nu, noise, table, span, one_info, one_cov
            )
            rank = got[0] + mine.shape[0] * np.log(got[1])
            if rank < best - 1e-9:
                best = rank
                theta[u] = guess
                info[u] = one_info
                cov[u] = one_cov
                phi[u] = got[1]
                own[u] = got[2]
    return theta, info, cov, phi, own


@nb.njit(cache=True, nogil=True)
def hold_out(family, size, theta, mean, precision, pairs, first, blocks, nu, phi, tables, spans, which):  # noqa: ANN001, ANN201
    """Refit without each block in turn and predict the block.

    ``blocks`` (pair,) numbers the blocks of each unit from 0; -1 is never held out. Returns an array (pair, 4): predicted
    share, its model sd, the noise sd there, and 1 where the stage lies outside the stages fitted to; NaN where nothing was
    held out.
    """
    out = np.full((pairs.shape[0], 4), np.nan)
    info = np.zeros((N_PARAM, N_PARAM))
    cov = np.zeros((N_PARAM, N_PARAM))
    work = np.zeros(N_WORK)
    slope = np.zeros(N_PARAM)
    for u in range(first.size - 1):
        lo, hi = first[u], first[u + 1]
        if hi - lo < 2:
            continue
        table, span = tables[max(which[u], 0)], spans[max(which[u], 0)]
        for k in range(blocks[lo:hi].max() + 1):
            use = blocks[lo:hi] != k
            left = use.sum()
            if left == 0 or left == hi - lo:
                continue
            guess = theta[u].copy()
            fit_one(family, size, guess, mean[u], precision[u], pairs[lo:hi], use, phi[u], nu, table, span, info)
            cov[:, :] = 0.0
            _posterior(size, info, precision[u], cov)
            low, high = np.inf, -np.inf
            for i in range(lo, hi):
                if use[i - lo]:
                    low, high = min(low, pairs[i, 0]), max(high, pairs[i, 0])
            for i in range(lo, hi):
                if use[i - lo]:
                    continue
                h = pairs[i, 0]
                gradient(family, size, guess, table, span, h, work, slope)
                spread = 0.0
                for a in range(size):
                    for b in range(size):
                        spread += slope[a] * cov[a, b] * slope[b]
                prepare(family, guess, work)
                out[i, 0] = share_at(family, work, table, span, h)
                out[i, 1] = np.sqrt(max(spread, 0.0))
                out[i, 2] = phi[u] * raw_sigma(family, work, table, span, h, pairs[i, 1], pairs[i, 3])
                out[i, 3] = 1.0 if h < low or h > high else 0.0
    return out


@nb.njit(cache=True, nogil=True)
def bands(families, draws, shift, tables, spans, which, grid, centre, tail):  # noqa: ANN001, ANN201
    """Quantiles of area and volume over draws of curves.

    Parameters
    ----------
    families : ndarray of int, shape (unit, draw); draws : ndarray, shape (unit, draw, N_PARAM)
    shift : ndarray, shape (unit, draw)
        Stage datum error of each draw, m.
    grid : ndarray, shape (unit, step)
        Stages from 0 up, m.
    centre : ndarray, shape (unit, step)
        The chosen curve.
    tail : float
        Share of draws left out on each side.

    Returns
    -------
    ndarray, shape (unit, 6, step): area low, high, sd about the chosen curve, volume (share x m) of it, low, high.
    """
    units, n = families.shape
    steps = grid.shape[1]
    out = np.zeros((units, 6, steps))
    works = np.zeros((n, N_WORK))
    column = np.zeros(n)
    last = np.zeros(n)
    volume = np.zeros(n)
    place_lo, place_hi = tail * (n - 1), (1.0 - tail) * (n - 1)
    for u in range(units):
        table, span = tables[max(which[u], 0)], spans[max(which[u], 0)]
        for d in range(n):
            prepare(families[u, d], draws[u, d], works[d])
            last[d] = 0.0
            volume[d] = 0.0
        for g in range(steps):
            h = grid[u, g]
            width = h - grid[u, g - 1] if g > 0 else 0.0
            square = 0.0
            for d in range(n):
                value = 0.0
                if h > 0.0:
                    value = share_at(families[u, d], works[d], table, span, h + shift[u, d])
                volume[d] += 0.5 * width * (value + last[d])
                last[d] = value
                column[d] = value
                square += (value - centre[u, g]) ** 2
            out[u, 2, g] = np.sqrt(square / n)
            column.sort()
            out[u, 0, g] = _quantile(column, place_lo)
            out[u, 1, g] = _quantile(column, place_hi)
            column[:] = volume
            column.sort()
            out[u, 4, g] = _quantile(column, place_lo)
            out[u, 5, g] = _quantile(column, place_hi)
            if g > 0:
                out[u, 3, g] = out[u, 3, g - 1] + 0.5 * width * (centre[u, g] + centre[u, g - 1])
    return out


@nb.njit(cache=True, nogil=True)
def _quantile(rising: np.ndarray, place: float) -> float:
    i = min(int(place), rising.size - 2)
    return rising[i] + (place - i) * (rising[i + 1] - rising[i])


@nb.njit(cache=True, nogil=True)
def share_of_units(family, theta, unit, tables, spans, which, stage):  # noqa: ANN001, ANN201
    """Return the share at each row's stage on the curve of the row's unit; ``family`` (unit,), ``unit`` (row,)."""
    out = np.empty(stage.size)
    work = np.zeros(N_WORK)
    last = -1
    for i in range(stage.size):
        u = unit[i]
        if u != last:
            prepare(family[u], theta[u], work)
            last = u
        out[i] = np.nan
        if not np.isnan(stage[i]):
            out[i] = share_at(family[u], work, tables[max(which[u], 0)], spans[max(which[u], 0)], stage[i])
    return out


@nb.njit(cache=True, nogil=True)
def band_at(grid, values, unit, stage):  # noqa: ANN001, ANN201
    """Interpolate band values (unit, kind, step) on rising stages ``grid`` (unit, step) at each row; returns (row, kind)."""
    kinds, steps = values.shape[1], values.shape[2]
    out = np.empty((stage.size, kinds))
    for i in range(stage.size):
        u = unit[i]
        h = stage[i]
        if np.isnan(h):
            out[i] = np.nan
            continue
        if h <= 0.0:
            out[i] = 0.0
            continue
        j = np.searchsorted(grid[u], h) - 1
        j = min(max(j, 0), steps - 2)
        part = min((h - grid[u, j]) / (grid[u, j + 1] - grid[u, j]), 1.0)
        for k in range(kinds):
            out[i, k] = values[u, k, j] + part * (values[u, k, j + 1] - values[u, k, j])
    return out


@nb.njit(cache=True, nogil=True)
def volume_of_rows(family, theta, unit, tables, spans, which, stage):  # noqa: ANN001, ANN201
    """Return the integral of share over stage (m) from 0 to each row's stage.

    Rows of a unit must follow each other with rising stage, the first at or below 0; each step is integrated by the
    three-point Gauss-Legendre rule on four parts.
    """
    out = np.zeros(stage.size)
    work = np.zeros(N_WORK)
    node = np.sqrt(0.6)
    for i in range(stage.size):
        u = unit[i]
        table, span = tables[max(which[u], 0)], spans[max(which[u], 0)]
        if i == 0 or unit[i - 1] != u:
            prepare(family[u], theta[u], work)
            out[i] = 0.0
            continue
        total = 0.0
        half = (stage[i] - stage[i - 1]) / 8.0
        for part in range(4):
            middle = stage[i - 1] + (2 * part + 1) * half
            total += 5.0 * share_at(family[u], work, table, span, middle - node * half)
            total += 8.0 * share_at(family[u], work, table, span, middle)
            total += 5.0 * share_at(family[u], work, table, span, middle + node * half)
        out[i] = out[i - 1] + total * half / 9.0
    return out
