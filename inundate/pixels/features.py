"""Features of a pixel: reflectance, published indices, leaf share and sun elevation, in one pass."""

from __future__ import annotations

import numpy as np
from numba import njit

from inundate.common.codes import BAND_ROLES, ViewCode
from inundate.common.errors import InputError

INDEX_NAMES = ("ndvi", "ndwi", "mndwi", "ndmi", "awei_nsh", "awei_sh")
CONTEXT_ROLES = ("blue", "green", "red", "nir", "swir16", "swir22")
FEATURES: tuple[str, ...] = (
    *BAND_ROLES,
    *INDEX_NAMES,
    "leaf_share",
    "sun_elevation_deg",
    *(f"{role}_to_ground" for role in CONTEXT_ROLES),
)
"""Names of the columns of :func:`features`, in order."""

RATIO_FLOOR = 1e-4
"""Reflectance at or below this counts as this in the four ratios (over-corrected dark water is often negative)."""

_N_BANDS = len(BAND_ROLES)
_BLUE, _GREEN, _RED = (BAND_ROLES.index(role) for role in ("blue", "green", "red"))
_NIR, _NIR08, _SWIR16, _SWIR22 = (BAND_ROLES.index(role) for role in ("nir", "nir08", "swir16", "swir22"))
_CONTEXT = np.array([BAND_ROLES.index(role) for role in CONTEXT_ROLES], dtype=np.int64)
_LOG_LIMIT = np.float32(4.0)
_FLOOR = np.float32(RATIO_FLOOR)
_NAN = np.float32(np.nan)


@njit(cache=True, nogil=True)
def _ratio(a: np.float32, b: np.float32) -> np.float32:
    top = _FLOOR if a < _FLOOR else a
    low = _FLOOR if b < _FLOOR else b
    return (top - low) / (top + low)


@njit(cache=True, nogil=True)
def _fill(
    values: np.ndarray, place: np.ndarray, leaf: np.ndarray, sun: np.ndarray, ground: np.ndarray, out: np.ndarray
) -> None:
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
        column = i if ground.shape[1] > 1 else 0
        for j in range(_CONTEXT.size):
            base = ground[_CONTEXT[j], column]
            here = out[i, _CONTEXT[j]]
            if np.isnan(base) or np.isnan(here):
                out[i, k + 8 + j] = nan
                continue
            top = _FLOOR if here < _FLOOR else here
            low = _FLOOR if base < _FLOOR else base
            out[i, k + 8 + j] = min(max(np.log(top / low), -_LOG_LIMIT), _LOG_LIMIT)


def features(
    reflectance: np.ndarray,
    bands: tuple[str, ...],
    leaf_share: np.ndarray | float,
    sun_elevation_deg: np.ndarray | float,
    context: np.ndarray | None = None,
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
    context : ndarray, shape (10,) or (10, pixel), optional
        Reflectance of the scene's dry ground in each of ``BAND_ROLES``, from :func:`scene_context`; unknown where not
        given. Low sun, wet weather, haze and gain change a scene as a whole: a pixel is compared with its own scene's
        ground (last columns, natural logarithm of the ratio).

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
    _fill(values, place, leaf, sun, _ground(context, n), out)
    return out


def scene_context(
    reflectance: np.ndarray, bands: tuple[str, ...], code: np.ndarray, ground: np.ndarray, *, least: int = 50
) -> np.ndarray:
    """Return the reflectance of a scene's dry ground, for :func:`features`.

    Parameters
    ----------
    reflectance : ndarray, shape (band, pixel)
        Site pixels of one scene.
    bands : tuple of str, length band
    code : ndarray of uint8, shape (pixel,)
        View codes.
    ground : ndarray of bool, shape (pixel,)
        Pixels that lie outside every wetland.
    least : int
        Fewer clear ground pixels than this tell nothing (common practice, no source).

    Returns
    -------
    ndarray of float32, shape (10,)
        Median of the clear ground pixels in each of ``BAND_ROLES``; NaN where unknown (``nir`` falls back on ``nir08``).
    """
    out = np.full(_N_BANDS, np.nan, dtype=np.float32)
    usable = np.flatnonzero(np.asarray(ground, bool) & (np.asarray(code) == ViewCode.CLEAR))
    if usable.size < least:
        return out
    for role, values in zip(bands, np.asarray(reflectance)[:, usable], strict=True):
        known = values[np.isfinite(values)]
        if known.size >= least:
            out[BAND_ROLES.index(role)] = np.median(known)
    if np.isnan(out[_NIR]):
        out[_NIR] = out[_NIR08]
    return out


def _ground(context: np.ndarray | None, n: int) -> np.ndarray:
    if context is None:
        return np.full((_N_BANDS, 1), np.nan, dtype=np.float32)
    given = np.asarray(context, dtype=np.float32)
    given = given[:, None] if given.ndim == 1 else given
    if given.ndim != 2 or given.shape[0] != _N_BANDS or given.shape[1] not in {1, n}:
        message = (
            f"context: shape {np.shape(context)} for {n} pixels; give (10,) or (10, pixel) in the order of BAND_ROLES"
        )
        raise InputError(message)
    return np.ascontiguousarray(given)


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
