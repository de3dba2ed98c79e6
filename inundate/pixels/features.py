"""Features of a pixel: reflectance, published indices, leaf share and sun elevation, in one pass."""

from __future__ import annotations

import numpy as np
from numba import njit

from inundate.common.codes import BAND_ROLES
from inundate.common.errors import InputError

INDEX_NAMES = ("ndvi", "ndwi", "mndwi", "ndmi", "awei_nsh", "awei_sh")
FEATURES: tuple[str, ...] = (*BAND_ROLES, *INDEX_NAMES, "leaf_share", "sun_elevation_deg")
"""Names of the columns of :func:`features`, in order."""

RATIO_FLOOR = 1e-4
"""Reflectance at or below this counts as this in the four ratios (over-corrected dark water is often negative)."""

_N_BANDS = len(BAND_ROLES)
_BLUE, _GREEN, _RED = (BAND_ROLES.index(role) for role in ("blue", "green", "red"))
_NIR, _NIR08, _SWIR16, _SWIR22 = (BAND_ROLES.index(role) for role in ("nir", "nir08", "swir16", "swir22"))
_FLOOR = np.float32(RATIO_FLOOR)
_NAN = np.float32(np.nan)


@njit(cache=True, nogil=True)
def _ratio(a: np.float32, b: np.float32) -> np.float32:
    top = _FLOOR if a < _FLOOR else a
    low = _FLOOR if b < _FLOOR else b
    return (top - low) / (top + low)


@njit(cache=True, nogil=True)
def _fill(values: np.ndarray, place: np.ndarray, leaf: np.ndarray, sun: np.ndarray, out: np.ndarray) -> None:
    blue_i, green_i, red_i = place[_BLUE], place[_GREEN], place[_RED]
    s1_i, s2_i = place[_SWIR16], place[_SWIR22]
    nan = _NAN
    for i in range(values.shape[1]):
        for j in range(_N_BANDS):
            out[i, j] = values[place[j], i] if place[j] >= 0 else nan
        if np.isnan(out[i, _NIR]):
            out[i, _NIR] = out[i, _NIR08]
        blue = values[blue_i, i] if blue_i >= 0 else nan
        green = values[green_i, i] if green_i >= 0 else nan
        red = values[red_i, i] if red_i >= 0 else nan
        nir = out[i, _NIR]
        s1 = values[s1_i, i] if s1_i >= 0 else nan
        s2 = values[s2_i, i] if s2_i >= 0 else nan
        k = _N_BANDS
        out[i, k] = _ratio(nir, red)
        out[i, k + 1] = _ratio(green, nir)
        out[i, k + 2] = _ratio(green, s1)
        out[i, k + 3] = _ratio(nir, s1)
        out[i, k + 4] = 4.0 * (green - s1) - (0.25 * nir + 2.75 * s2)
        out[i, k + 5] = blue + 2.5 * green - 1.5 * (nir + s1) - 0.25 * s2
        out[i, k + 6] = leaf[i]
        out[i, k + 7] = sun[i]


def features(
    reflectance: np.ndarray,
    bands: tuple[str, ...],
    leaf_share: np.ndarray | float,
    sun_elevation_deg: np.ndarray | float,
) -> np.ndarray:
    """Return the features of pixels.

    Parameters
    ----------
    reflectance : ndarray, shape (band, pixel)
        Surface reflectance, 0..1, NaN where missing.
    bands : tuple of str, length band
        Role of each band, from ``common.codes.BAND_ROLES``; order free, each at most once. Where ``nir`` is absent
        or NaN ``nir08`` stands in for it (sensors with one near-infrared band). Roles not given become NaN.
    leaf_share : float or ndarray, shape (pixel,)
        0 bare .. 1 full leaf; NaN where unknown.
    sun_elevation_deg : float or ndarray, shape (pixel,)
        Elevation of the sun above the horizon, degrees; NaN where unknown.

    Returns
    -------
    ndarray of float32, shape (pixel, len(FEATURES)), C order
        Columns as in :data:`FEATURES`; NaN where a band it needs is missing.

    Raises
    ------
    InputError
        Unknown or repeated band role, or shapes that do not agree.

    Notes
    -----
    Indices with G green, R red, N near infrared, S1 and S2 the two short-wave bands, B blue:
    NDVI (N-R)/(N+R), Rouse et al. 1974 (NASA SP-351, 309); NDWI (G-N)/(G+N), McFeeters 1996
    (doi:10.1080/01431169608948714); MNDWI (G-S1)/(G+S1), Xu 2006 (doi:10.1080/01431160600589179); NDMI
    (N-S1)/(N+S1), Wilson & Sader 2002 (doi:10.1016/S0034-4257(01)00318-2); AWEInsh 4(G-S1)-(0.25N+2.75S2) and AWEIsh
    B+2.5G-1.5(N+S1)-0.25S2, Feyisa et al. 2014 (doi:10.1016/j.rse.2013.08.029). Reflectance below
    :data:`RATIO_FLOOR` counts as that in the ratios.

    Examples
    --------
    >>> import numpy as np
    >>> x = features(np.array([[0.055], [0.03]], "f4"), ("green", "nir"), 0.0, 30.0)
    >>> round(float(x[0, FEATURES.index("ndwi")]), 4)
    0.2941
    """
    values = np.ascontiguousarray(reflectance, dtype=np.float32)
    if values.ndim != 2 or values.shape[0] != len(bands):
        message = (
            f"reflectance: shape {values.shape} does not agree with {len(bands)} bands; give (band, pixel) with one "
            "row for each band role"
        )
        raise InputError(message)
    place = band_places(tuple(bands))
    n = values.shape[1]
    leaf = _per_pixel(leaf_share, n, "leaf_share")
    sun = _per_pixel(sun_elevation_deg, n, "sun_elevation_deg")
    out = np.empty((n, len(FEATURES)), dtype=np.float32)
    _fill(values, place, leaf, sun, out)
    return out


def band_places(bands: tuple[str, ...]) -> np.ndarray:
    """Return, for each of ``BAND_ROLES``, its position in ``bands`` (int64), -1 where absent."""
    unknown = [band for band in bands if band not in BAND_ROLES]
    if unknown or len(set(bands)) != len(bands):
        message = (
            f"bands: {list(bands)} holds an unknown or repeated role; use each of {', '.join(BAND_ROLES)} at most once"
        )
        raise InputError(message)
    place = np.array([bands.index(role) if role in bands else -1 for role in BAND_ROLES], dtype=np.int64)
    return place


def _per_pixel(value: np.ndarray | float, n: int, name: str) -> np.ndarray:
    array = np.asarray(value, dtype=np.float32)
    if array.ndim == 0:
        return np.full(n, array, dtype=np.float32)
    if array.shape != (n,):
        message = f"{name}: shape {array.shape} for {n} pixels; give one number, or one for each pixel"
        raise InputError(message)
    return np.ascontiguousarray(array)
