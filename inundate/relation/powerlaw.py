"""The two-constant power law of a basin: area and volume from depth, and its constants from two points.

Source of every formula here: Hayashi, M. and van der Kamp, G. (2000), Simple equations to represent the
volume-area-depth relations of shallow wetlands in small topographic depressions, Journal of Hydrology 237, 74-85,
doi:10.1016/S0022-1694(00)00300-0. With a slope profile y/y0 = (r/r0)^p:

    A = s (h / h0)^(2/p),    V = s h0 / (1 + 2/p) (h / h0)^(1 + 2/p),    h0 = 1 m.
"""

from __future__ import annotations

import numpy as np

from inundate.common.errors import InputError


def _positive(name: str, value: float) -> float:
    if not np.isfinite(value) or value <= 0:
        message = f"{name}: got {value!r}; it must be a finite number above 0; give depths in m and areas in m2"
        raise InputError(message)
    return float(value)


def power_area(stage_m: np.ndarray, s_m2: float, p: float) -> np.ndarray:
    """Return area (m2, float64, shape of ``stage_m``) of the power law; 0 at and below stage 0, NaN for NaN.

    Parameters
    ----------
    stage_m : array_like
        Depth of water above the lowest ground, m.
    s_m2 : float
        Area at a depth of 1 m, m2.
    p : float
        Shape of the slope profile (1 cone, 2 paraboloid, large: flat floor and steep sides).

    Raises
    ------
    InputError
        When ``s_m2`` or ``p`` is not positive.
    """
    s_m2, p = _positive("s_m2", s_m2), _positive("p", p)
    depth = np.asarray(stage_m, float)
    return np.where(np.isnan(depth), np.nan, s_m2 * np.maximum(depth, 0.0) ** (2.0 / p) * (depth > 0))


def power_volume(stage_m: np.ndarray, s_m2: float, p: float) -> np.ndarray:
    """Return volume (m3, float64, shape of ``stage_m``) of the power law; 0 at and below stage 0, NaN for NaN.

    Parameters are those of :func:`power_area`; so are the errors.
    """
    s_m2, p = _positive("s_m2", s_m2), _positive("p", p)
    depth = np.asarray(stage_m, float)
    grown = np.maximum(depth, 0.0) ** (1.0 + 2.0 / p)
    return np.where(np.isnan(depth), np.nan, s_m2 / (1.0 + 2.0 / p) * grown)


def power_stage_of_volume(volume_m3: np.ndarray, s_m2: float, p: float) -> np.ndarray:
    """Return stage (m, float64) at which the power law holds ``volume_m3``; the inverse of :func:`power_volume`."""
    s_m2, p = _positive("s_m2", s_m2), _positive("p", p)
    volume = np.asarray(volume_m3, float)
    return (np.maximum(volume, 0.0) * (1.0 + 2.0 / p) / s_m2) ** (1.0 / (1.0 + 2.0 / p))


def power_from_two_points(low: tuple[float, float], high: tuple[float, float]) -> tuple[float, float]:
    """Return ``(s_m2, p)`` of the power law through two (stage_m, area_m2) points.

    Raises
    ------
    InputError
        When a number is not positive, or area does not grow with stage.
    """
    h1, a1 = _positive("low stage", low[0]), _positive("low area", low[1])
    h2, a2 = _positive("high stage", high[0]), _positive("high area", high[1])
    if h2 <= h1 or a2 <= a1:
        message = (
            f"two points ({h1} m, {a1} m2) and ({h2} m, {a2} m2): the second must have the larger stage and the "
            "larger area; order the points, or look for a datum error"
        )
        raise InputError(message)
    p = 2.0 * np.log(h2 / h1) / np.log(a2 / a1)
    return float(a2 / h2 ** (2.0 / p)), float(p)


def power_p_from_volume(stage_m: float, area_m2: float, volume_m3: float) -> float:
    """Return ``p`` from the stage, area and volume of one survey: p = 2 / (A h / V - 1).

    Raises
    ------
    InputError
        When a number is not positive, or the volume is not below area x stage.
    """
    prism = _positive("area_m2", area_m2) * _positive("stage_m", stage_m)
    volume = _positive("volume_m3", volume_m3)
    if volume >= prism:
        message = f"volume_m3: got {volume}; it must stay below area x stage = {prism}; check the units"
        raise InputError(message)
    return 2.0 / (prism / volume - 1.0)
