"""How much of the ground a canopy lets through: leaf area from greenness, gap fraction from leaf area."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from inundate.common.errors import InputError
from inundate.leaves.curves import RATE, RATE_BRIGHT, ground_brightness


@dataclass(frozen=True, slots=True)
class Canopy:
    """What is known of the landscape's canopies.

    Attributes
    ----------
    top_ndvi : float
        NDVI of endlessly deep canopy. Default from radiative transfer (PROSPECT-D with 4SAIL, four grounds from water to
        litter, sun at 30 degrees: 0.942 to 0.955).
    ground_ndvi : float
        NDVI of ground without leaves where a pixel's own leaf-off NDVI is not lower.
    extinction : float
        ``k = G Omega``: projection of leaves times clumping; 0.5 for spherical leaves without clumping.
    wood_area : float
        Area of stems and branches per ground area (m2/m2) under a canopy of full cover; it stays when leaves are off
        (common practice, no source).
    most_leaf_area : float
        Leaf area beyond which NDVI no longer tells (m2/m2).
    """

    top_ndvi: float = 0.95
    ground_ndvi: float = 0.15
    extinction: float = 0.5
    wood_area: float = 0.5
    most_leaf_area: float = 8.0


def gap_fraction(leaf_area: np.ndarray, zenith_deg: np.ndarray | float = 0.0, extinction: float = 0.5) -> np.ndarray:
    """Return the share of ground seen through a canopy, ``P = exp(-k LAI / cos theta)``.

    Parameters
    ----------
    leaf_area : ndarray
        Plant area per ground area, m2/m2; NaN gives NaN.
    zenith_deg : float or ndarray
        Angle from the vertical, degrees, 0 to below 90.
    extinction : float
        ``k``: projection of leaves times clumping.

    Returns
    -------
    ndarray of float64
        0..1.

    Raises
    ------
    InputError
        If an angle lies outside 0 to below 90 degrees.

    References
    ----------
    Monsi & Saeki (1953); Nilson (1971), Agricultural Meteorology 8:25; Campbell & Norman (1998).
    """
    return np.exp(-extinction * np.asarray(leaf_area, float) / _cosine(zenith_deg))


def leaf_area_from_gap(gap: np.ndarray, zenith_deg: np.ndarray | float = 0.0, extinction: float = 0.5) -> np.ndarray:
    """Inverse of :func:`gap_fraction`."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return -_cosine(zenith_deg) * np.log(np.asarray(gap, float)) / extinction


def ndvi_from_leaf_area(leaf_area: np.ndarray, top: float, ground: np.ndarray | float, rate: float) -> np.ndarray:
    """Return NDVI of a canopy, ``top + (ground - top) exp(-K LAI)``.

    References
    ----------
    Baret & Guyot (1991), Remote Sensing of Environment 35:161.
    """
    return top + (np.asarray(ground, float) - top) * np.exp(-rate * np.asarray(leaf_area, float))


def leaf_area_from_ndvi(
    ndvi: np.ndarray, top: float, ground: np.ndarray | float, rate: float, *, most: float = 8.0
) -> np.ndarray:
    """Inverse of :func:`ndvi_from_leaf_area`, held to 0..``most``; NaN gives NaN.

    Parameters
    ----------
    ndvi : ndarray
    top, ground, rate : float
        NDVI of endlessly deep canopy and of the ground, and the rate ``K``.
    most : float
        Leaf area returned where NDVI has reached ``top``.

    Returns
    -------
    ndarray of float64
        m2/m2.
    """
    ndvi = np.asarray(ndvi, float)
    ratio = (top - ndvi) / (top - np.asarray(ground, float))
    least = np.exp(-rate * most)
    return -np.log(np.clip(ratio, least, 1.0)) / rate


def leaf_area_over_ground(
    ndvi: np.ndarray, ground: np.ndarray | float, *, top: float = 0.95, most: float = 8.0
) -> np.ndarray:
    """Leaf area of a canopy over ground of known NDVI, dark or bright; NaN gives NaN.

    Inverse of the mixture of :func:`inundate.leaves.canopy_greenness` with green leaves. For ground as bright as the canopy
    it is the inverse of Baret & Guyot (1991); over dark, wet ground a few leaves already give a high NDVI.

    Parameters
    ----------
    ndvi, ground : ndarray
        NDVI of the view and of its ground.
    top : float
        NDVI of endlessly deep canopy.
    most : float
        Leaf area returned where NDVI has reached ``top``.

    Returns
    -------
    ndarray of float64
        m2/m2, 0..``most``.
    """
    view, under = np.asarray(ndvi, float), np.asarray(ground, float)
    bright = ground_brightness(under)
    rate = RATE + RATE_BRIGHT * bright
    short = np.maximum(top - view, 0.0)
    with np.errstate(divide="ignore", invalid="ignore"):
        gap = short / (short + bright * np.maximum(view - under, 0.0))
        gap = np.where(short + np.maximum(view - under, 0.0) > 0, gap, np.where(np.isnan(view), np.nan, 0.0))
    return -np.log(np.clip(gap, np.exp(-rate * most), 1.0)) / rate


def view_fraction(
    peak_ndvi: np.ndarray,
    bare_ndvi: np.ndarray,
    leaf_share: np.ndarray | float,
    *,
    view_zenith_deg: np.ndarray | float = 0.0,
    canopy: Canopy | None = None,
) -> np.ndarray:
    """Share of each pixel's ground that can be seen through the canopy on one day.

    Plant area in leaf-off and in full leaf comes from the pixel's own leaf-off and peak-season NDVI
    (:func:`leaf_area_over_ground`); leaves between them come and go with ``leaf_share``; wood, in proportion to how far
    the full canopy closes, stays. The gap fraction of that plant area (Nilson 1971) is what is seen.

    Parameters
    ----------
    peak_ndvi, bare_ndvi : ndarray, shape (pixel,)
        NDVI in full leaf and in leaf-off. NaN gives NaN; a ``bare_ndvi`` of NaN is taken as the ground's.
    leaf_share : ndarray, shape (pixel,), or float
        0 bare .. 1 full leaf.
    view_zenith_deg : float or ndarray
        Angle of view from the vertical, degrees.
    canopy : Canopy, optional
        Landscape values; the default is a radiative-transfer table.

    Returns
    -------
    ndarray of float64, shape (pixel,)
        0..1, never rising with ``leaf_share``.

    Raises
    ------
    InputError
        If the angle or the canopy's values cannot be.
    """
    canopy = Canopy() if canopy is None else canopy
    if not canopy.top_ndvi > canopy.ground_ndvi:
        message = (
            f"canopy: top_ndvi {canopy.top_ndvi} is not above ground_ndvi {canopy.ground_ndvi}; "
            "give the NDVI of the densest canopy and of bare ground"
        )
        raise InputError(message)
    share = np.clip(np.asarray(leaf_share, float), 0.0, 1.0)
    bare = np.asarray(bare_ndvi, float)
    bare = np.where(np.isnan(bare), canopy.ground_ndvi, bare)
    ground = np.minimum(bare, canopy.ground_ndvi)
    limits = {"top": canopy.top_ndvi, "most": canopy.most_leaf_area}
    full = leaf_area_over_ground(peak_ndvi, ground, **limits)
    least = np.minimum(leaf_area_over_ground(bare, ground, **limits), full)
    closure = 1.0 - gap_fraction(full, 0.0, canopy.extinction)
    plant = least + share * (full - least) + closure * canopy.wood_area
    return gap_fraction(plant, view_zenith_deg, canopy.extinction)


def _cosine(zenith_deg: np.ndarray | float) -> np.ndarray:
    angle = np.asarray(zenith_deg, float)
    if np.any((angle < 0) | (angle >= 90)):
        worst = float(angle[(angle < 0) | (angle >= 90)].flat[0])
        message = (
            f"zenith angle {worst} degrees lies outside 0 to below 90; give the angle from the vertical in degrees"
        )
        raise InputError(message)
    return np.cos(np.radians(angle))
