"""Compiled inner loops: likelihood of wetland area from visible pixels, monotone fits."""

from __future__ import annotations

import numpy as np
from numba import njit

OUTLIER = 9.0
"""Squared standardised residual at which a pixel's pull starts to fade (three standard deviations, common practice)."""


@njit(cache=True, nogil=True, fastmath=True)
def posteriors(  # noqa: PLR0912
    fraction: np.ndarray,
    kind: np.ndarray,
    widen: np.ndarray,
    expected: np.ndarray,
    noise: np.ndarray,
    shared: np.ndarray,
    log_prior: np.ndarray,
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Posterior over the steps of wetland area, scene by scene.

    Residuals have a standard deviation that depends on kind and on how mixed a pixel is, share a random effect within
    the scene, and lose their pull when far out (rho(z) = z / (1 + z / 9), Geman and McClure 1985).

    Parameters
    ----------
    fraction : ndarray of float32, shape (scene, pixel)
    kind : ndarray of int16, shape (scene, pixel)
        Row of ``noise``; -1 where not seen.
    widen : ndarray of float32, shape (scene, pixel)
        Factor on the variance.
    expected : ndarray of float32, shape (pixel, step)
        Water fraction of the whole pixel at each step of wetland area.
    noise : ndarray of float64, shape (kind, 4)
        Offset, slope, variance of pure pixels, added variance of a half-water pixel.
    shared : ndarray of float64, shape (2,)
        Correlation of errors within a scene; divisor of the log-likelihood for correlated neighbours.
    log_prior : ndarray of float64, shape (step,)

    Returns
    -------
    post : ndarray of float64, shape (scene, step)
        Sums to 1; the prior where nothing is seen.
    misfit : ndarray of float64, shape (scene,)
        Mean robust squared standardised residual at the most likely step; 0 where nothing is seen.
    evidence : ndarray of float64, shape (scene,)
        Log of the likelihood averaged over the prior, up to a constant; 0 where nothing is seen.
    """
    scenes, pixels = fraction.shape
    steps = expected.shape[1]
    rho, temper = shared[0], shared[1]
    post = np.empty((scenes, steps))
    misfit, evidence = np.zeros(scenes), np.zeros(scenes)
    square, linear, pull = np.empty(steps), np.empty(steps), np.empty(steps)
    product, logs, ll = np.empty(steps), np.empty(steps), np.empty(steps)
    for t in range(scenes):
        square[:] = 0.0
        linear[:] = 0.0
        pull[:] = 0.0
        logs[:] = 0.0
        product[:] = 1.0
        n = 0
        for p in range(pixels):
            b = kind[t, p]
            if b < 0:
                continue
            n += 1
            f, wide = np.float64(fraction[t, p]), np.float64(widen[t, p])
            offset, slope, pure, mixed = noise[b, 0], noise[b, 1], noise[b, 2] * wide, noise[b, 3] * wide
            for k in range(steps):
                e = np.float64(expected[p, k])
                v = pure + mixed * 4.0 * e * (1.0 - e)
                r = f - offset - slope * e
                z = r * r / v
                w = 1.0 / (1.0 + z * (1.0 / OUTLIER))
                square[k] += z * w
                linear[k] += w * r / np.sqrt(v)
                pull[k] += w
                product[k] *= v
            if n % 32 == 0:
                for k in range(steps):
                    logs[k] += np.log(product[k])
                    product[k] = 1.0
        if n == 0:
            ll[:] = log_prior
        else:
            for k in range(steps):
                common = 1.0 - rho + rho * pull[k]
                quad = (square[k] - rho / common * linear[k] * linear[k]) / (1.0 - rho)
                ll[k] = -0.5 * (quad + logs[k] + np.log(product[k]) + np.log(common)) / temper + log_prior[k]
        top = 0
        for k in range(1, steps):
            if ll[k] > ll[top]:
                top = k
        total = 0.0
        for k in range(steps):
            post[t, k] = np.exp(ll[k] - ll[top])
            total += post[t, k]
        for k in range(steps):
            post[t, k] /= total
        if n > 0:
            misfit[t] = square[top] / n
            evidence[t] = ll[top] + np.log(total)
    return post, misfit, evidence


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
