"""Thin cloud, haze, snow, ice and cloud shadow that a scene's mask missed, found against each pixel's own past."""

from __future__ import annotations

import warnings

import numpy as np
from scipy.spatial import cKDTree

from inundate.common.codes import ViewCode

HAZE_SLOPE = 0.5
"""Blue on red over clear land, near one half for soil, litter and plants (common practice, no source)."""
_LIMIT = 5.0
_LEAST_VIEWS = 8
_DARK = 0.5
"""Fall of the logarithm of brightness from which ground may be in shadow: 40 % darker (common practice, no source)."""
_DARK_LIMIT = 3.0
_LEAST_RING = 6
_FLOOR = 1e-3


def haze_index(blue: np.ndarray, red: np.ndarray) -> np.ndarray:
    """Return blue less half of red: near 0 over clear land and water, raised by haze, thin cloud, snow and ice.

    The haze optimized transform (Zhang, Guindon & Cihlar 2002, Remote Sensing of Environment 82:173) with a fixed slope.

    Parameters
    ----------
    blue, red : ndarray
        Reflectance, 0..1; NaN gives NaN.
    """
    return blue - HAZE_SLOPE * red


def veiled(haze: np.ndarray, code: np.ndarray, owner: np.ndarray) -> np.ndarray:
    """Tell which clear pixels lie under a veil that the mask missed.

    A pixel's index is held against its own median over all clear views, in units of the median absolute deviation of its
    wetland's pixels (scaled to a standard deviation): more than five of those above is a veil. Where half of a wetland's
    clear pixels are veiled, all are.

    Parameters
    ----------
    haze : ndarray of float32, shape (scene, pixel)
        :func:`haze_index`; NaN where unknown.
    code : ndarray of uint8, shape (scene, pixel)
        ``ViewCode``.
    owner : ndarray of int, shape (pixel,)
        Wetland of each pixel.

    Returns
    -------
    ndarray of bool, shape (scene, pixel)
        False for wetlands with fewer than eight clear views of a pixel.
    """
    clear = (code == ViewCode.CLEAR) & np.isfinite(haze)
    out = np.zeros(haze.shape, bool)
    for one in np.unique(owner):
        at = np.flatnonzero(owner == one)
        seen = clear[:, at]
        if not (seen.sum(axis=0) >= _LEAST_VIEWS).any():
            continue
        above, spread = _against_own_past(np.where(seen, haze[:, at], np.nan))
        high = seen & (above > _LIMIT * max(spread, 1e-4))
        count = seen.sum(axis=1)
        mostly = (high.sum(axis=1) >= 0.5 * count) & (count > 0)
        out[:, at] = high | (seen & mostly[:, None])
    return out


def darkness(near_infrared: np.ndarray, short_wave: np.ndarray, ground: tuple[float, float]) -> np.ndarray:
    """Return how dark pixels are against their scene's dry ground: mean logarithm of the ratio in the bands that are there.

    Parameters
    ----------
    near_infrared, short_wave : ndarray of float32, shape (pixel,)
        Reflectance, 0..1; NaN where missing. The sky lends shadows least light there.
    ground : (float, float)
        Reflectance of the scene's dry ground in both bands; NaN where unknown.

    Returns
    -------
    ndarray of float32, shape (pixel,)
        0 as bright as the ground, below 0 darker; NaN where neither band is known.
    """
    total, count = np.zeros(np.shape(near_infrared)), np.zeros(np.shape(near_infrared))
    for values, base in ((near_infrared, ground[0]), (short_wave, ground[1])):
        if np.isfinite(base) and base > _FLOOR:
            known = np.isfinite(values)
            total += np.where(known, np.log(np.maximum(np.where(known, values, base), _FLOOR) / base), 0.0)
            count += known
    with np.errstate(invalid="ignore"):
        return (total / count).astype(np.float32)


def shaded(
    dark: np.ndarray, code: np.ndarray, owner: np.ndarray, ring: np.ndarray, place: np.ndarray, leafy: np.ndarray
) -> np.ndarray:
    """Tell which clear pixels lie in a cloud shadow that the mask missed, from the dry ground around their wetland.

    Water is dark, and so is shadow; but shadow darkens the ground around a wetland as well. Each pixel of that ring is held
    against its own median over clear views of the same half of the leaf year; it is in shadow when it is darker by three
    of its ring's spreads and by 40 %. A wetland's pixels share the lot of the nearest ring pixel, or of the whole ring where
    half of it is in shadow; a ring of which less than a fifth is dark tells of no shadow.

    Parameters
    ----------
    dark : ndarray of float32, shape (scene, pixel)
        :func:`darkness`; NaN where unknown.
    code : ndarray of uint8, shape (scene, pixel)
        ``ViewCode``.
    owner : ndarray of int, shape (pixel,)
        Wetland of each pixel, also of those around it.
    ring : ndarray of bool, shape (pixel,)
        Pixels outside every wetland.
    place : ndarray of float, shape (pixel, 2)
        Row and column.
    leafy : ndarray of bool, shape (scene, pixel)
        Whether leaves are more than half out.

    Returns
    -------
    ndarray of bool, shape (scene, pixel)
        False for wetlands with fewer than six ring pixels, or fewer than eight clear views of a half of the leaf year.
    """
    out = np.zeros(dark.shape, bool)
    for one in np.unique(owner):
        at = np.flatnonzero(owner == one)
        mine = at[ring[at]]
        if mine.size < _LEAST_RING:
            continue
        seen = (code[:, mine] == ViewCode.CLEAR) & np.isfinite(dark[:, mine])
        fallen = np.zeros(seen.shape, bool)
        for half in (False, True):
            scenes = np.flatnonzero(leafy[:, mine[0]] == half)
            if scenes.size >= _LEAST_VIEWS:
                fallen[scenes] = _fallen(dark[np.ix_(scenes, mine)], seen[scenes])
        count = np.maximum(seen.sum(axis=1), 1)
        share = fallen.sum(axis=1) / count
        near = cKDTree(place[mine]).query(place[at])[1]
        lot = fallen[:, near] & (share >= 0.2)[:, None]
        out[:, at] = (lot | (share >= 0.5)[:, None]) & (code[:, at] == ViewCode.CLEAR)
    return out


def _fallen(dark: np.ndarray, seen: np.ndarray) -> np.ndarray:
    """Which pixels are far darker than their own median; bool (scene, pixel)."""
    above, spread = _against_own_past(np.where(seen & (seen.sum(axis=0) >= _LEAST_VIEWS), dark, np.nan))
    if not np.isfinite(spread):
        return np.zeros(dark.shape, bool)
    with np.errstate(invalid="ignore"):
        return above < -max(_DARK_LIMIT * spread, _DARK)


def _against_own_past(values: np.ndarray) -> tuple[np.ndarray, float]:
    """Return values (scene, pixel) less each pixel's median, and their median absolute deviation scaled to a normal's sd."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)
        above = values - np.nanmedian(values, axis=0)
        return above, float(1.4826 * np.nanmedian(np.abs(above)))
