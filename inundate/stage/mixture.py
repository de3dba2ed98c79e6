"""The standard deviation to state where several models speak at once."""

from __future__ import annotations

import math

import numba
import numpy as np

_ONE, _TWO = math.erf(1.0 / math.sqrt(2.0)), math.erf(math.sqrt(2.0))


@numba.njit(cache=True, nogil=True)
def _half_width(weight: np.ndarray, off: np.ndarray, sd: np.ndarray, share: float, most: float) -> float:
    """Half width of the interval about 0 that holds a share of a Gaussian mixture, by bisection up to ``most``."""
    low, high = 0.0, most
    while high - low > 4e-3 * high:
        h = 0.5 * (low + high)
        held = 0.0
        for k in range(weight.size):
            root = sd[k] * math.sqrt(2.0)
            held += 0.5 * weight[k] * (math.erf((h - off[k]) / root) + math.erf((h + off[k]) / root))
        if held < share:
            low = h
        else:
            high = h
    return 0.5 * (low + high)


@numba.njit(cache=True, nogil=True)
def _stated(weight: np.ndarray, mean: np.ndarray, sd: np.ndarray, one: float, two: float) -> tuple:
    middle, out = np.zeros(mean.shape[1]), np.zeros(mean.shape[1])
    for i in range(mean.shape[1]):
        middle[i] = (weight * mean[:, i]).sum()
        off, own = mean[:, i] - middle[i], np.maximum(sd[:, i], 1e-9)
        most = (np.abs(off) + 3.0 * own).max()
        out[i] = max(_half_width(weight, off, own, one, most), 0.5 * _half_width(weight, off, own, two, most))
    return middle, out


def stated_sd(weight: np.ndarray, mean: np.ndarray, sd: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the mean of a mixture of Gaussians and the least sd that keeps both promises of a Gaussian one.

    The interval of one such sd about the mean holds at least 68.3 % and that of two at least 95.4 % of the mixture. For
    a single Gaussian it is the sd. The root of the mixture's variance would be far wider where an unlikely model is very
    wide (a gross error of the survey), and no measure of how often a value is wrong.

    Parameters
    ----------
    weight : ndarray of float64, shape (model,)
        Sums to one.
    mean, sd : ndarray of float64, shape (model, n)

    Returns
    -------
    mean, sd : ndarray of float64, shape (n,)
        sd to four parts in a thousand.
    """
    return _stated(weight, np.ascontiguousarray(mean), np.ascontiguousarray(sd), _ONE, _TWO)
