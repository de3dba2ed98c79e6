"""Clouds, their shadows, thin haze, and the scene classification that misses some of it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from inundate.common.codes import ViewCode
from inundate.reserve.fields import rough_field, smooth_field, spline_matrix
from inundate.reserve.spectra import CENTRES_NM

CLOUD_BRIGHT = np.array([0.62, 0.60, 0.60, 0.60, 0.60, 0.60, 0.60, 0.60, 0.42, 0.31])
HAZE_COLOUR = (CENTRES_NM / 560.0) ** -1.4
SHADOW_LEFT = np.clip(0.20 + 0.26 * (CENTRES_NM / 492.0) ** -1.6, 0.2, 0.5)


@dataclass(frozen=True, slots=True)
class Sky:
    """The air above one view; arrays of shape (row, column) on the 10 m grid.

    Attributes
    ----------
    cloud : ndarray of float32
        Opacity of cloud, 0..1.
    shadow : ndarray of float32
        Strength of cloud shadow, 0..1.
    haze : ndarray of float32
        Added path reflectance at 560 nm.
    fill : ndarray of bool
        Outside the swath.
    """

    cloud: np.ndarray
    shadow: np.ndarray
    haze: np.ndarray
    fill: np.ndarray


def draw_cloudiness(rng: np.random.Generator, winter: float) -> float:
    """Draw the share of the sky under cloud: about a third overcast, a third clear, the rest broken."""
    kind = rng.random()
    if kind < 0.30 + 0.08 * winter:
        return float(rng.uniform(0.86, 1.0))
    if kind < 0.66 + 0.03 * winter:
        return float(0.04 + 0.8 * rng.beta(0.9, 1.4))
    return float(rng.uniform(0.0, 0.01))


def _upsample(values: np.ndarray, n: int) -> np.ndarray:
    """Smooth a field on every second pixel up to n x n pixels."""
    weights = spline_matrix(n, 2.0).astype(np.float32)
    need = weights.shape[1]
    return np.asarray((weights @ (weights @ values[:need, :need]).T).T, dtype=np.float32)


def draw_sky(rng: np.random.Generator, n: int, cloudiness: float, sun: tuple[float, float], *, swath_edge: bool) -> Sky:
    """Draw clouds (on a wider field than the view, so that shadows fall in from outside), shadows and haze."""
    half = n // 2 + 4
    height_m = rng.uniform(500.0, 1900.0)
    throw = min(height_m / np.tan(np.radians(sun[0])), 3000.0) / 20.0
    away_r, away_c = throw * np.cos(np.radians(sun[1])), -throw * np.sin(np.radians(sun[1]))
    pad = int(np.ceil(max(abs(away_r), abs(away_c)))) + 2
    wide = half + 2 * pad
    haze = np.full((n, n), 0.0, np.float32)
    thin = rng.random() < 0.30
    if thin:
        veil = np.clip(0.5 + 0.6 * _upsample(smooth_field(rng, (half, half), 40.0), n), 0, 1.5)
        haze = (rng.uniform(0.004, 0.030) * veil).astype(np.float32)
    fill = np.zeros((n, n), bool)
    if swath_edge:
        rows, cols = np.mgrid[0:n, 0:n]
        line = cols + 0.22 * rows
        fill = line > rng.uniform(0.45, 0.95) * line.max()
    if cloudiness < 0.02:
        return Sky(np.zeros((n, n), np.float32), np.zeros((n, n), np.float32), haze, fill)
    scale = float(np.exp(rng.uniform(np.log(10), np.log(45))))
    field = rough_field(rng, (wide, wide), (scale, scale / 2.5, scale / 6.0, 2.0), 0.5)
    view = field[pad : pad + half, pad : pad + half]
    depth = np.clip((field - np.quantile(view, 1.0 - cloudiness)) * rng.uniform(2.0, 5.0), 0, 6)
    opacity = 1.0 - np.exp(-depth)
    r0, c0 = pad - round(away_r), pad - round(away_c)
    cloud = _upsample(np.ascontiguousarray(opacity[pad : pad + half, pad : pad + half]), n)
    shadow = _upsample(np.ascontiguousarray(opacity[r0 : r0 + half, c0 : c0 + half]), n)
    return Sky(np.clip(cloud, 0, 1), np.clip(shadow, 0, 1), haze, fill)


def through_air(bands: np.ndarray, positions: tuple[int, ...], sky: Sky) -> np.ndarray:
    """Return reflectance of ``bands`` (band, row, column) as seen through the sky; ``positions`` are the band numbers."""
    side = bands.shape[1]
    cloud, shadow, haze = sky.cloud, sky.shadow, sky.haze
    if side != cloud.shape[0]:
        cloud, shadow, haze = (_halve(v) for v in (cloud, shadow, haze))
    out = np.empty_like(bands)
    for i, b in enumerate(positions):
        lit = bands[i] * (1.0 - shadow * np.float32(1.0 - SHADOW_LEFT[b]))
        lit += haze * np.float32(HAZE_COLOUR[b]) * (1.0 - lit)
        out[i] = lit + cloud * (np.float32(CLOUD_BRIGHT[b]) - lit)
    return out


def _halve(values: np.ndarray) -> np.ndarray:
    n = values.shape[0] // 2
    return values.reshape(n, 2, n, 2).mean(axis=(1, 3), dtype=np.float32)


def true_codes(sky: Sky, white: np.ndarray) -> np.ndarray:
    """Return the true view code of each 10 m pixel (uint8): any real cloud, shadow or white cover counts."""
    code = np.full(sky.cloud.shape, ViewCode.CLEAR, np.uint8)
    code[white > 0.4] = ViewCode.SNOW_ICE
    code[sky.shadow > 0.15] = ViewCode.SHADOW
    code[sky.cloud > 0.10] = ViewCode.CLOUD
    code[sky.fill] = ViewCode.FILL
    return code


def classify_scene(rng: np.random.Generator, ten: np.ndarray, twenty: np.ndarray, sky: Sky) -> np.ndarray:
    """Return the classification layer at 20 m (uint8, classes 0..11 of the mission's product), with its faults.

    Thin cloud and cloud edges are mostly missed, whole shadows now and then, shadows lie a pixel off; thin ice is missed;
    bright ground is at times taken for cloud.
    """
    blue, green, red, nir = (_halve(b) for b in ten)
    swir16 = twenty[4]
    cloud, shadow = _halve(sky.cloud), _halve(sky.shadow)
    n = cloud.shape[0]
    tiny = np.float32(1e-4)
    ndvi = (nir - red) / np.maximum(nir + red, tiny)
    ndwi = (green - nir) / np.maximum(green + nir, tiny)
    ndsi = (green - swir16) / np.maximum(green + swir16, tiny)
    out = np.full((n, n), 5, np.uint8)
    out[ndvi > 0.42] = 4
    out[(ndwi > 0.05) & (nir < 0.09)] = 6
    out[(nir < 0.055) & (ndwi <= 0.05)] = 2
    out[(ndvi > 0.30) & (ndvi <= 0.42)] = np.where(rng.random(int(((ndvi > 0.30) & (ndvi <= 0.42)).sum())) < 0.2, 7, 5)
    out[(ndsi > 0.42) & (green > 0.17) & (blue > 0.13)] = 11
    dark = shadow > 0.30 + 0.06 * smooth_field(rng, (n, n), 6.0)
    patches, count = ndimage.label(dark)
    lost = np.concatenate([[False], rng.random(count) < 0.12])
    dark &= ~lost[patches]
    dark = np.roll(dark, tuple(rng.integers(-1, 2, 2)), axis=(0, 1))
    out[dark] = 3
    noise = 0.05 * smooth_field(rng, (n, n), 4.0)
    seen = cloud + noise
    veil = rng.random((n, n)) < 0.45
    out[(seen > 0.16) & (seen <= 0.30) & veil & (cloud > 0.05)] = 10
    out[(seen > 0.30)] = 8
    out[(seen > 0.65)] = 9
    false = (blue > 0.24) & (out == 5) & (rng.random((n, n)) < 0.15)
    out[false] = 8
    fill = sky.fill.reshape(n, 2, n, 2).any(axis=(1, 3))
    out[fill] = 0
    return out
