"""Water density, gravity, air pressure with height, exact units, and depth from pressure."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

#: Pascal in one unit of pressure. psi, mmHg and cmH2O are the conventional values (NIST SP 811, Appendix B): exact by
#: definition (pound and inch; 13.5951 g/cm3 and standard gravity; 1 g/cm3 and standard gravity).
PASCAL = {
    "kPa": 1000.0,
    "hPa": 100.0,
    "mbar": 100.0,
    "psi": 6894.757293168361,
    "mmHg": 133.322387415,
    "cmH2O": 98.0665,
    "mH2O": 9806.65,
}
#: Metres in one unit of length (the foot is exactly 0.3048 m).
METRE = {"m": 1.0, "cm": 0.01, "ft": 0.3048}
UNITS = (*PASCAL, *METRE)

STANDARD_GRAVITY = 9.80665
_RADIUS_M = 6356766.0
_LAPSE = 0.0065
_T0 = 288.15
_EXPONENT = STANDARD_GRAVITY / (_LAPSE * 287.05287)


def water_density(temperature_c: ArrayLike) -> np.ndarray:
    """Return the density of air-free water at one atmosphere.

    Parameters
    ----------
    temperature_c : array_like
        Water temperature, degrees Celsius; the formula holds for 0..40, values outside are held at the limits. NaN
        stays NaN.

    Returns
    -------
    ndarray of float64
        Density, kg/m3.

    References
    ----------
    Tanaka, M., Girard, G., Davis, R., Peuto, A., Bignell, N. (2001). Recommended table for the density of water
    between 0 C and 40 C based on recent experimental reports. Metrologia 38, 301-309. doi:10.1088/0026-1394/38/4/3
    """
    t = np.clip(np.asarray(temperature_c, np.float64), 0.0, 40.0)
    a1, a2, a3, a4, a5 = -3.983035, 301.797, 522528.9, 69.34881, 999.974950
    return np.asarray(a5 * (1.0 - (t + a1) ** 2 * (t + a2) / (a3 * (t + a4))))


def gravity(latitude_deg: ArrayLike, height_m: ArrayLike = 0.0) -> np.ndarray:
    """Return normal gravity of the WGS 84 ellipsoid.

    Parameters
    ----------
    latitude_deg : array_like
        Geodetic latitude, degrees.
    height_m : array_like
        Height above the ellipsoid, metres (second-order expansion).

    Returns
    -------
    ndarray of float64
        Gravity, m/s2.

    References
    ----------
    NGA.STND.0036 (2014), World Geodetic System 1984, closed formula of Somigliana and its expansion in height.
    """
    s2 = np.sin(np.radians(np.asarray(latitude_deg, np.float64))) ** 2
    g0 = 9.7803253359 * (1.0 + 0.00193185265241 * s2) / np.sqrt(1.0 - 0.00669437999013 * s2)
    a, f, m = 6378137.0, 1.0 / 298.257223563, 0.00344978650684
    h = np.asarray(height_m, np.float64)
    return np.asarray(g0 * (1.0 - 2.0 * h / a * (1.0 + f + m - 2.0 * f * s2) + 3.0 * h**2 / a**2))


def geopotential_height(height_m: ArrayLike) -> np.ndarray:
    """Return geopotential height (m) of a geometric height (m), by the radius of the 1976 standard atmosphere."""
    z = np.asarray(height_m, np.float64)
    return np.asarray(_RADIUS_M * z / (_RADIUS_M + z))


def standard_pressure(height_m: ArrayLike, *, geopotential: bool = False) -> np.ndarray:
    """Return the air pressure of the standard atmosphere below 11 km.

    Parameters
    ----------
    height_m : array_like
        Height above sea level, metres: geometric, or geopotential where ``geopotential`` is true.
    geopotential : bool
        Whether ``height_m`` is geopotential already.

    Returns
    -------
    ndarray of float64
        Pressure, Pa.

    References
    ----------
    U.S. Standard Atmosphere 1976; ISO 2533:1975; ICAO Doc 7488 (the same below 32 km).
    """
    h = np.asarray(height_m, np.float64) if geopotential else geopotential_height(height_m)
    return np.asarray(101325.0 * (1.0 - _LAPSE * h / _T0) ** _EXPONENT)


def carry_pressure(pressure_pa: ArrayLike, from_m: float, to_m: float) -> np.ndarray:
    """Carry measured air pressure from one elevation to another by the ratio of the standard atmosphere.

    Parameters
    ----------
    pressure_pa : array_like
        Pressure measured at ``from_m``, Pa; NaN stays NaN.
    from_m, to_m : float
        Elevations above sea level, metres.

    Returns
    -------
    ndarray of float64
        Pressure at ``to_m``, Pa.
    """
    ratio = standard_pressure(to_m) / standard_pressure(from_m)
    return np.asarray(np.asarray(pressure_pa, np.float64) * ratio)


def depth_of_pressure(pressure_pa: ArrayLike, temperature_c: ArrayLike, gravity_ms2: ArrayLike) -> np.ndarray:
    """Return the depth of water (m) above a sensor from its gauge pressure (Pa): ``p / (rho(T) g)``.

    Parameters
    ----------
    pressure_pa : array_like
        Pressure above that of the air, Pa. NaN stays NaN.
    temperature_c : array_like
        Water temperature, degrees Celsius.
    gravity_ms2 : array_like
        Local gravity, m/s2.
    """
    return np.asarray(np.asarray(pressure_pa, np.float64) / (water_density(temperature_c) * gravity_ms2))
