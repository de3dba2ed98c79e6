"""Thin cloud, haze, snow and ice that a scene's mask missed, found against each pixel's own past."""

from __future__ import annotations

import warnings

import numpy as np

from inundate.common.codes import ViewCode

HAZE_SLOPE = 0.5
"""Blue on red over clear land, near one half for soil, litter and plants (common practice, no source)."""
_LIMIT = 5.0
_LEAST_VIEWS = 8


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
        values = np.where(seen, haze[:, at], np.nan)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", RuntimeWarning)
            above = values - np.nanmedian(values, axis=0)
            spread = 1.4826 * np.nanmedian(np.abs(above))
        high = seen & (above > _LIMIT * max(float(spread), 1e-4))
        count = seen.sum(axis=1)
        mostly = (high.sum(axis=1) >= 0.5 * count) & (count > 0)
        out[:, at] = high | (seen & mostly[:, None])
    return out
