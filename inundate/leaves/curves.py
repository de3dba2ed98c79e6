"""Published curves of greenness through a year, and the thresholds read from them."""

from __future__ import annotations

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


def saturating(day: np.ndarray, parameters: np.ndarray, top: float, centre: float) -> np.ndarray:
    """Greenness of a canopy whose leaf area follows a double logistic.

    Leaf share ``L`` is the double logistic of Beck et al. (2006) with base 0 and top 1; greenness follows leaf area by
    Baret & Guyot (1991): ``VI = top + (ground - top) exp(-kappa L)``, less Elmore's summer decline. With a far ``top``
    and a small ``kappa`` it becomes the plain double logistic.

    Parameters
    ----------
    day : ndarray, shape (n,)
    parameters : ndarray, shape (8,)
        Ground greenness in spring and in autumn, ln kappa, summer decline per 100 days, green-up midpoint (day), ln of
        its time scale (days), leaf-fall midpoint (day), ln of its time scale (days).
    top : float
        Greenness of endlessly deep canopy.
    centre : float
        Day at which ground greenness passes from spring to autumn, under full leaf.

    Returns
    -------
    ndarray, shape (n,)
    """
    t = np.asarray(day, float)
    p = np.asarray(parameters, float)
    share = logistic((t - p[4]) / np.exp(p[5])) - logistic((t - p[6]) / np.exp(p[7]))
    ground = p[0] + (p[1] - p[0]) * logistic((t - centre) / GROUND_PASSAGE_DAYS)
    return top - (top - ground) * np.exp(-np.exp(p[2]) * share) - p[3] * (t - centre) / 100.0 * share


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
