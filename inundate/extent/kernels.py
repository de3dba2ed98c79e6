"""Compiled inner loops: likelihood of wetland area from visible pixels, monotone fits."""

from __future__ import annotations

import numpy as np
from numba import njit

SCALE = 40.0
"""Factor that keeps products of variances within float32; a constant of the evidence."""
OUTLIER = 9.0
"""Squared standardised residual at which a pixel's pull starts to fade (three standard deviations, common practice)."""


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def _step_sums(
    pixel: np.ndarray, e: np.ndarray, gx: np.ndarray, gy: np.ndarray, scratch: np.ndarray, out: np.ndarray
) -> float:
    """Sums over pixels at one step, into ``out`` (10,): square, pull, and what shared errors need; returns sum of log v.

    ``pixel`` is (6, pixel): fraction, offset, slope, pure variance, mixed variance, 1 where seen (else 0).
    """
    one, tail, scale = np.float32(1.0), np.float32(1.0 / OUTLIER), np.float32(SCALE)
    s0 = s1 = s2 = s3 = s4 = s5 = s6 = s7 = s8 = s9 = np.float32(0.0)
    for p in range(e.size):
        water, slope, seen = e[p], pixel[2, p], pixel[5, p]
        v = pixel[3, p] + pixel[4, p] * water * (one - water)
        scratch[p] = one + seen * (v * scale - one)
        root = one / np.sqrt(v)
        u = (pixel[0, p] - pixel[1, p] - slope * water) * root
        z = u * u
        w = seen / (one + z * tail)
        x, y = slope * gx[p] * root, slope * gy[p] * root
        wx, wy, wu = w * x, w * y, w * u
        s0 += z * w
        s1 += w
        s2 += wu
        s3 += wu * x
        s4 += wu * y
        s5 += wx
        s6 += wy
        s7 += wx * x
        s8 += wx * y
        s9 += wy * y
    logs, product = 0.0, 1.0
    for p in range(e.size):
        product *= np.float64(scratch[p])
        if p & 63 == 63:
            logs += np.log(product)
            product = 1.0
    logs += np.log(product)
    out[0], out[1], out[2], out[3], out[4] = s0, s1, s2, s3, s4
    out[5], out[6], out[7], out[8], out[9] = s5, s6, s7, s8, s9
    return logs


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
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


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
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
    expected : ndarray of float32, shape (3, step, pixel)
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
    steps = expected.shape[1]
    per_shift = 1.0 / shared[2] ** 2
    post, rest = np.empty((scenes, steps)), np.zeros((scenes, 4))
    pixel, sums = np.zeros((6, pixels), np.float32), np.empty(10)
    scratch = np.empty(pixels, np.float32)
    square, ll, shift = np.zeros(steps), np.empty(steps), np.empty((2, steps))
    for t in range(scenes):
        n = 0
        for p in range(pixels):
            k = kind[t, p]
            pixel[3, p], pixel[5, p] = 1.0, 0.0
            if k >= 0:
                n += 1
                pixel[0, p], pixel[1, p], pixel[2, p] = fraction[t, p], noise[k, 0], noise[k, 1]
                pixel[3, p], pixel[4, p] = noise[k, 2] * widen[t, p], 4.0 * noise[k, 3] * widen[t, p]
                pixel[5, p] = 1.0
        if n == 0:
            ll[:] = log_prior
        else:
            for k in range(steps):
                logs = _step_sums(pixel, expected[0, k], expected[1, k], expected[2, k], scratch, sums)
                value, shift[0, k], shift[1, k] = _settle_step(sums, logs, shared[0], per_shift)
                square[k] = sums[0]
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
