"""Published curves of greenness through a year, and the thresholds read from them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from inundate.common.errors import InputError

LOGIT_10 = float(np.log(9.0))
"""Half-width of a logistic between its 10 % and 50 % points, in units of its time scale."""


def logistic(x: np.ndarray) -> np.ndarray:
    """Return ``1 / (1 + exp(-x))`` without overflow (float64)."""
    return 0.5 * (1.0 + np.tanh(0.5 * np.asarray(x, float)))


def beck(day: np.ndarray, base: float, top: float, rise: tuple[float, float], fall: tuple[float, float]) -> np.ndarray:
    """Double logistic of greenness through a year.

    Parameters
    ----------
    day : ndarray, shape (n,)
        Day of the year; NaN gives NaN.
    base, top : float
        Greenness in winter and in summer.
    rise, fall : (float, float)
        Day of the midpoint, and rate at the midpoint in 1/day (positive), of green-up and of leaf fall.

    Returns
    -------
    ndarray, shape (n,)

    Raises
    ------
    InputError
        If a rate is not positive.

    References
    ----------
    Beck et al. (2006), Remote Sensing of Environment 100:321, equation 3.
    """
    check_rate("rise", rise[1])
    check_rate("fall", fall[1])
    up = logistic(rise[1] * (np.asarray(day, float) - rise[0]))
    down = logistic(-fall[1] * (np.asarray(day, float) - fall[0]))
    return base + (top - base) * (up + down - 1.0)


def elmore(day: np.ndarray, m: tuple[float, float, float, float, float, float, float]) -> np.ndarray:
    """Double logistic with a straight decline through summer.

    Parameters
    ----------
    day : ndarray, shape (n,)
        Day of the year; NaN gives NaN.
    m : tuple of 7 floats
        ``m1`` base, ``m2`` amplitude, ``m3``/``m4`` day and time scale (days) of green-up, ``m5``/``m6`` the same of
        leaf fall, ``m7`` summer decline per day.

    Returns
    -------
    ndarray, shape (n,)

    References
    ----------
    Elmore et al. (2012), Global Change Biology 18:656, equation 4.
    """
    t = np.asarray(day, float)
    return m[0] + (m[1] - m[6] * t) * (logistic((t - m[2]) / m[3]) - logistic((t - m[4]) / m[5]))


def curvature_rate(day: np.ndarray, a: float, b: float, c: float) -> np.ndarray:
    """Rate of change of the curvature of ``c / (1 + exp(a + b day)) + d``.

    Parameters
    ----------
    day : ndarray, shape (n,)
    a, b, c : float
        Parameters of the logistic; ``d`` does not matter.

    Returns
    -------
    ndarray, shape (n,)

    References
    ----------
    Zhang et al. (2003), Remote Sensing of Environment 84:471.
    """
    z = np.exp(a + b * np.asarray(day, float))
    slope = (b * c * z) ** 2
    one = 1.0 + z
    first = 3.0 * z * (1.0 - z) * one**3 * (2.0 * one**3 + b * b * c * c * z) / (one**4 + slope) ** 2.5
    second = one**2 * (1.0 + 2.0 * z - 5.0 * z * z) / (one**4 + slope) ** 1.5
    return b**3 * c * z * (first - second)


def curvature_dates(a: float, b: float, c: float) -> tuple[float, float, float]:
    """Start, middle and end of one logistic limb by the extremes of its curvature's rate of change.

    Parameters
    ----------
    a, b, c : float
        Parameters of ``c / (1 + exp(a + b day)) + d``; ``b < 0`` with ``c > 0`` is green-up.

    Returns
    -------
    (float, float, float)
        Days. In the limit of small ``|b c|`` they lie at 9.2 %, 50 % and 90.8 % of the amplitude.

    References
    ----------
    Zhang et al. (2003), Remote Sensing of Environment 84:471.
    """
    middle = -a / b
    reach = np.log(5.0 + 2.0 * np.sqrt(6.0)) / abs(b)
    sign = -np.sign(b) * np.sign(c)
    found = [_extreme(a, b, c, (middle + side * reach, 0.6 * reach, sign)) for side in (-1.0, 1.0)]
    return found[0], float(middle), found[1]


def _extreme(a: float, b: float, c: float, where: tuple[float, float, float]) -> float:
    """Golden-section search of the maximum of ``sign * curvature_rate`` within ``centre`` +/- ``half`` days."""
    centre, half, sign = where
    low, high = centre - half, centre + half
    ratio = (np.sqrt(5.0) - 1.0) / 2.0
    for _ in range(80):
        one, two = high - ratio * (high - low), low + ratio * (high - low)
        ahead = sign * (curvature_rate(np.array([one]), a, b, c) - curvature_rate(np.array([two]), a, b, c))
        if ahead[0] > 0:
            high = two
        else:
            low = one
    return float(0.5 * (low + high))


@dataclass(frozen=True, slots=True)
class Optics:
    """How leaf area becomes greenness in this landscape.

    Attributes
    ----------
    top : float
        NDVI of endlessly deep green canopy.
    centre : float
        Day at which the ground passes from its spring to its autumn greenness, under full leaf.
    drop : float
        How much lower the NDVI of a deep canopy in autumn colour is.
    lead : float
        Days by which colouring runs ahead of leaf fall.
    plain : bool
        True for greenness that does not saturate and does not depend on the brightness of the ground (``top`` is then
        far off and the leaf parameter small): the double logistic of Beck et al. (2006).
    """

    top: float
    centre: float
    drop: float = 0.0
    lead: float = 0.0
    plain: bool = False

    @property
    def values(self) -> tuple[float, float, float, float, float]:
        """The five numbers, for the compiled fit."""
        return float(self.top), float(self.centre), float(self.drop), float(self.lead), float(self.plain)


def ground_brightness(ground: np.ndarray) -> np.ndarray:
    """Brightness (red plus near-infrared reflectance) of ground against that of deep canopy, from the ground's NDVI.

    A mixture of water (NDVI -0.2, brightness 0.05) and of dry litter (0.25, 0.40); a deep canopy has 0.46 (PROSPECT-D
    with 4SAIL, sun at 30 degrees). Wet ground is dark, so a few leaves over it already make the view green.

    Parameters
    ----------
    ground : ndarray
        NDVI of the ground; taken as 0.25 above that.

    Returns
    -------
    ndarray
    """
    return DARK / (TURN - np.minimum(np.asarray(ground, float), BRIGHTEST))


def canopy_greenness(day: np.ndarray, parameters: np.ndarray, optics: Optics) -> np.ndarray:
    """Greenness through a year of a canopy whose leaf area follows a double logistic.

    Leaf share ``L`` is the double logistic of Beck et al. (2006) with base 0 and top 1. The view is a mixture, by
    reflectance, of canopy and of ground seen through gaps ``exp(-a LAI L)`` (the exponential approach of Baret & Guyot
    1991): ``VI = ((1 - gap) Vc + b gap Vg) / (1 - gap + b gap)``, where ``b`` is the ground's brightness. ``a = 0.36 + 0.53 b``
    was fitted to PROSPECT-D with 4SAIL over four grounds from water to litter (root mean square 0.015 in NDVI). Leaves
    colour before they fall: ``Vc`` declines ``lead`` days ahead of ``L``.

    Parameters
    ----------
    day : ndarray, shape (n,)
    parameters : ndarray, shape (8,)
        Ground greenness in spring and in autumn, ln of peak leaf area, summer decline per 100 days (Elmore et al. 2012),
        green-up midpoint (day), ln of its time scale (days), leaf-fall midpoint (day), ln of its time scale (days).
    optics : Optics

    Returns
    -------
    ndarray, shape (n,)
    """
    t = np.asarray(day, float)
    p = np.asarray(parameters, float)
    share = logistic((t - p[4]) / np.exp(p[5])) - logistic((t - p[6]) / np.exp(p[7]))
    canopy = optics.top - optics.drop * logistic((t - p[6] + optics.lead) / np.exp(p[7]))
    ground = p[0] + (p[1] - p[0]) * logistic((t - optics.centre) / GROUND_PASSAGE_DAYS)
    bright = 1.0 if optics.plain else ground_brightness(ground)
    rate = 1.0 if optics.plain else RATE + RATE_BRIGHT * bright
    gap = np.exp(-rate * np.exp(p[2]) * share)
    mixed = ((1.0 - gap) * canopy + bright * gap * ground) / (1.0 - gap + bright * gap)
    return mixed - p[3] * (t - optics.centre) / 100.0 * share


DARK, TURN, BRIGHTEST = 0.0257 / 0.46, 0.314, 0.25
"""Brightness of a ground from its NDVI, see :func:`ground_brightness`."""
RATE, RATE_BRIGHT = 0.36, 0.53
"""Approach of greenness to that of deep canopy per unit of leaf area, and how it rises with the ground's brightness."""
GROUND_PASSAGE_DAYS = 20.0
"""Time scale of the passage from spring to autumn ground under full leaf (common practice, no source)."""


def check_rate(name: str, value: float) -> None:
    """Refuse a rate that is not positive.

    Raises
    ------
    InputError
    """
    if not value > 0:
        message = (
            f"{name}: rate {value!r} 1/day is not positive; give the steepness at the midpoint as a positive number"
        )
        raise InputError(message)
