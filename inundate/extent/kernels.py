"""Compiled inner loops: likelihood of wetland area from visible pixels, monotone fits."""

from __future__ import annotations

import numpy as np
from numba import njit

SCALE = 40.0
"""Factor that keeps products of variances within float32; a constant of the evidence."""
OUTLIER = 9.0
"""Squared standardised residual at which a pixel's pull starts to fade (three standard deviations, common practice)."""


@njit(cache=True, nogil=True, error_model="numpy")
def _residuals(
    pixel: np.ndarray, e: np.ndarray, weight: np.ndarray, pull: np.ndarray, root: np.ndarray, product: np.ndarray
) -> None:
    """Residuals of one pixel at every step: robust weight, weighted residual, one over sd; multiplies variances up.

    ``pixel`` is (5,): fraction, offset, slope, pure variance, mixed variance.
    """
    one, tail, scale = np.float32(1.0), np.float32(1.0 / OUTLIER), np.float32(SCALE)
    seen, slope, pure, mixed = pixel[0] - pixel[1], pixel[2], pixel[3], pixel[4]
    for k in range(e.size):
        water = e[k]
        v = pure + mixed * water * (one - water)
        r = one / np.sqrt(v)
        u = (seen - slope * water) * r
        w = one / (one + u * u * tail)
        root[k], weight[k], pull[k] = r, w, w * u
        product[k] *= v * scale


@njit(cache=True, nogil=True, error_model="numpy")
def _add_level(weight: np.ndarray, pull: np.ndarray, sums: np.ndarray) -> None:
    """Add to ``sums`` (10, step) what the level alone needs: square, weight, weighted residual."""
    s0, s1, s2 = sums[0], sums[1], sums[2]
    for k in range(weight.size):
        s0[k] += pull[k] * pull[k] / weight[k]
        s1[k] += weight[k]
        s2[k] += pull[k]


@njit(cache=True, nogil=True, error_model="numpy")
def _add_slope(lean: np.ndarray, weight: np.ndarray, pull: np.ndarray, one: np.ndarray, two: np.ndarray) -> None:
    """Add products of a shift's lean with the residual (``one``) and with the weight (``two``)."""
    for k in range(lean.size):
        one[k] += lean[k] * pull[k]
        two[k] += lean[k] * weight[k]


@njit(cache=True, nogil=True, error_model="numpy")
def _scaled(slope: float, gradient: np.ndarray, root: np.ndarray, lean: np.ndarray) -> None:
    for k in range(lean.size):
        lean[k] = slope * gradient[k] * root[k]


@njit(cache=True, nogil=True, error_model="numpy")
def _add_square(one: np.ndarray, two: np.ndarray, weight: np.ndarray, out: np.ndarray) -> None:
    for k in range(out.size):
        out[k] += one[k] * two[k] * weight[k]


@njit(cache=True, nogil=True, error_model="numpy")
def _add_pixel(
    pixel: np.ndarray, e: np.ndarray, gx: np.ndarray, gy: np.ndarray, scratch: np.ndarray, sums: np.ndarray
) -> None:
    """Add one pixel's terms at every step to ``sums`` (11, step): square, pull, what shared errors need, product of v.

    Steps lie side by side and nothing is summed across them, so that the compiler needs no leave to reorder: every build
    gives the same bits. Short loops over few rows are what it makes vector code of.
    """
    weight, pull, root, x, y = scratch[0], scratch[1], scratch[2], scratch[3], scratch[4]
    _residuals(pixel, e, weight, pull, root, sums[10])
    _scaled(pixel[2], gx, root, x)
    _scaled(pixel[2], gy, root, y)
    _add_level(weight, pull, sums)
    _add_slope(x, weight, pull, sums[3], sums[5])
    _add_slope(y, weight, pull, sums[4], sums[6])
    _add_square(x, x, weight, sums[7])
    _add_square(x, y, weight, sums[8])
    _add_square(y, y, weight, sums[9])


@njit(cache=True, nogil=True, error_model="numpy")
def _settle_step(s: np.ndarray, logs: float, rho: float, per_shift: float) -> tuple[float, float, float]:
    """Log-likelihood of one step with its shared errors integrated out, and the most likely shift."""
    left = 1.0 - rho
    a, b, c = s[7] / left + per_shift, s[9] / left + per_shift, s[1] / left + 1.0 / max(rho, 1e-6)
    ab, ac, bc = s[8] / left, s[5] / left, s[6] / left
    ya, yb, yc = s[3] / left, s[4] / left, s[2] / left
    # Cholesky factor of the 3 x 3 precision of (shift x, shift y, common error)
    l11 = np.sqrt(a)
    l21, l31 = ab / l11, ac / l11
    l22 = np.sqrt(max(b - l21 * l21, 1e-12))
    l32 = (bc - l31 * l21) / l22
    l33 = np.sqrt(max(c - l31 * l31 - l32 * l32, 1e-12))
    q1 = ya / l11
    q2 = (yb - l21 * q1) / l22
    q3 = (yc - l31 * q1 - l32 * q2) / l33
    gain = q1 * q1 + q2 * q2 + q3 * q3
    x3 = q3 / l33
    x2 = (q2 - l32 * x3) / l22
    x1 = (q1 - l21 * x2 - l31 * x3) / l11
    spread = 2.0 * np.log(l11 * l22 * l33) - 2.0 * np.log(per_shift) + np.log(max(rho, 1e-6))
    return -0.5 * (s[0] / left - gain + logs + s[1] * np.log(left) + spread), x1, x2


@njit(cache=True, nogil=True, error_model="numpy")
def posteriors(
    fraction: np.ndarray,
    kind: np.ndarray,
    widen: np.ndarray,
    expected: np.ndarray,
    noise: np.ndarray,
    shared: np.ndarray,
    log_prior: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    """Posterior over the steps of wetland area, scene by scene.

    Residuals have a standard deviation that depends on kind and on how mixed a pixel is; they share a common error and a
    shift of the scene, both integrated out (Gaussian), and lose their pull when far out (rho(z) = z / (1 + z / 9), Geman
    and McClure 1985).

    Parameters
    ----------
    fraction : ndarray of float32, shape (scene, pixel)
    kind : ndarray of int16, shape (scene, pixel)
        Row of ``noise``; -1 where not seen.
    widen : ndarray of float32, shape (scene, pixel)
        Factor on the variance.
    expected : ndarray of float32, shape (3, pixel, step)
        Water fraction of the whole pixel at each step of wetland area, and its change for a shift of one pixel along
        columns and rows.
    noise : ndarray of float64, shape (kind, 4)
        Offset, slope, variance of pure pixels, added variance of a half-water pixel.
    shared : ndarray of float64, shape (3,)
        Correlation of errors within a scene; divisor of the log-likelihood for correlated neighbours; sd of shift, pixels.
    log_prior : ndarray of float64, shape (step,)

    Returns
    -------
    post : ndarray of float64, shape (scene, step)
        Sums to 1; the prior where nothing is seen.
    rest : ndarray of float64, shape (scene, 4)
        At the most likely step: mean robust squared standardised residual, log evidence (likelihood averaged over the
        prior, up to a constant), shift along columns and along rows, pixels. 0 where nothing is seen.
    """
    scenes, pixels = fraction.shape
    steps = expected.shape[2]
    per_shift = 1.0 / shared[2] ** 2
    post, rest = np.empty((scenes, steps)), np.zeros((scenes, 4))
    pixel, scratch, sums = np.empty(5, np.float32), np.empty((5, steps), np.float32), np.empty((11, steps), np.float32)
    square, logs, ll, shift = np.zeros(steps), np.empty(steps), np.empty(steps), np.empty((2, steps))
    for t in range(scenes):
        n = 0
        sums[:10], sums[10], logs[:] = 0.0, 1.0, 0.0
        for p in range(pixels):
            k = kind[t, p]
            if k < 0:
                continue
            n += 1
            pixel[0], pixel[1], pixel[2] = fraction[t, p], noise[k, 0], noise[k, 1]
            pixel[3], pixel[4] = noise[k, 2] * widen[t, p], 4.0 * noise[k, 3] * widen[t, p]
            _add_pixel(pixel, expected[0, p], expected[1, p], expected[2, p], scratch, sums)
            if n % 8 == 0:
                logs += np.log(sums[10])
                sums[10] = 1.0
        if n == 0:
            ll[:] = log_prior
        else:
            logs += np.log(sums[10])
            for k in range(steps):
                value, shift[0, k], shift[1, k] = _settle_step(sums[:, k], logs[k], shared[0], per_shift)
                square[k] = sums[0, k]
                ll[k] = value / shared[1] + log_prior[k]
        top = int(np.argmax(ll))
        post[t] = np.exp(ll - ll[top])
        whole = post[t].sum()
        post[t] /= whole
        if n > 0:
            rest[t, 0], rest[t, 1] = square[top] / n, ll[top] + np.log(whole)
            rest[t, 2], rest[t, 3] = shift[0, top], shift[1, top]
    return post, rest


@njit(cache=True, nogil=True)
def near_cloud(code: np.ndarray, near: np.ndarray) -> np.ndarray:
    """Whether a pixel has cloud or shadow (codes 1, 2) among its neighbours; bool (scene, pixel)."""
    scenes, pixels = code.shape
    out = np.zeros((scenes, pixels), np.bool_)
    for t in range(scenes):
        for p in range(pixels):
            for k in range(near.shape[1]):
                q = near[p, k]
                if q >= 0 and (code[t, q] == 1 or code[t, q] == 2):
                    out[t, p] = True
                    break
    return out


@njit(cache=True, nogil=True)
def isotonic_rows(values: np.ndarray, weights: np.ndarray) -> None:
    """Make each row non-decreasing, in place, by weighted least squares (pool adjacent violators)."""
    rows, steps = values.shape
    level, mass, size = np.empty(steps), np.empty(steps), np.empty(steps, np.int64)
    for p in range(rows):
        n = 0
        for k in range(steps):
            level[n], mass[n], size[n] = values[p, k], weights[p, k], 1
            n += 1
            while n > 1 and level[n - 2] > level[n - 1]:
                m = mass[n - 2] + mass[n - 1]
                level[n - 2] = (level[n - 2] * mass[n - 2] + level[n - 1] * mass[n - 1]) / m
                mass[n - 2] = m
                size[n - 2] += size[n - 1]
                n -= 1
        k = 0
        for j in range(n):
            for _ in range(size[j]):
                values[p, k] = level[j]
                k += 1


@njit(cache=True, nogil=True)
def balance(shape: np.ndarray, area_share: np.ndarray) -> None:
    """Shift each step's fractions, in place, so that the wetland's area is right at every step.

    ``shape`` is (pixel, step) in 0..1, ``area_share`` (pixel,) sums to 1; step k must sum to k / (steps - 1). The shift
    is larger where a pixel is mixed; bisection to 1e-6.
    """
    pixels, steps = shape.shape
    for k in range(steps):
        target = k / (steps - 1.0)
        low, high = -60.0, 60.0
        for _ in range(45):
            mid = 0.5 * (low + high)
            total = 0.0
            for p in range(pixels):
                m = shape[p, k]
                v = m + mid * (m * (1.0 - m) + 0.02)
                total += area_share[p] * min(max(v, 0.0), 1.0)
            if total < target:
                low = mid
            else:
                high = mid
        mid = 0.5 * (low + high)
        for p in range(pixels):
            m = shape[p, k]
            shape[p, k] = min(max(m + mid * (m * (1.0 - m) + 0.02), 0.0), 1.0)


@njit(cache=True, nogil=True)
def fill_order(pixel: np.ndarray, elevation: np.ndarray, area: np.ndarray, pixels: int, steps: int) -> np.ndarray:
    """Water fraction of each pixel at each step of area when cells fill from the lowest; cells sorted by elevation.

    Cells of equal elevation (a flat lidar water surface) fill together.
    """
    out = np.zeros((pixels, steps))
    held = np.zeros(pixels)
    total = 0.0
    for i in range(area.size):
        total += area[i]
        held[pixel[i]] += area[i]
    start, i = 0.0, 0
    while i < area.size:
        j, tied = i, 0.0
        while j < area.size and elevation[j] == elevation[i]:
            tied += area[j]
            j += 1
        for k in range(steps):
            level = total * k / (steps - 1.0)
            fill = min(max((level - start) / tied, 0.0), 1.0) if tied > 0 else 0.0
            if fill > 0.0:
                for c in range(i, j):
                    out[pixel[c], k] += fill * area[c]
        start += tied
        i = j
    for p in range(pixels):
        for k in range(steps):
            out[p, k] = out[p, k] / held[p] if held[p] > 0 else np.nan
    return out
