"""Labels that the rest of the examples contradict."""

from __future__ import annotations

import numpy as np


def self_confidence(probability: np.ndarray, y: np.ndarray, weight: np.ndarray) -> tuple[float, float]:
    """Return the mean out-of-fold probability of its own class among dry and among water labels."""
    dry, wet = y == 0, y == 1
    low = float(np.average(1 - probability[dry], weights=weight[dry])) if dry.any() else 1.0
    high = float(np.average(probability[wet], weights=weight[wet])) if wet.any() else 1.0
    return low, high


def doubtful(probability: np.ndarray, y: np.ndarray, weight: np.ndarray) -> np.ndarray:
    """Find labels that are confidently contradicted.

    Parameters
    ----------
    probability : ndarray, shape (row,)
        Calibrated out-of-fold probability of water.
    y : ndarray of 0 (dry) and 1 (water), shape (row,)
    weight : ndarray, shape (row,)

    Returns
    -------
    ndarray of bool, shape (row,)
        True where the other class is at least as probable as that class usually is among its own labels, and at least
        nine in ten.

    Notes
    -----
    Confident learning: Northcutt, Jiang & Chuang 2021 (doi:10.1613/jair.1.12125), thresholds from the data. The nine in
    ten floor is common practice, no source.
    """
    if y.size == 0:
        return np.zeros(0, bool)
    low, high = self_confidence(probability, y, weight)
    as_wet = (y == 0) & (probability >= max(high, 0.9))
    as_dry = (y == 1) & (1 - probability >= max(low, 0.9))
    return as_wet | as_dry
