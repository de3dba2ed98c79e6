"""Smooth random fields on a grid, from cubic B-splines on a coarse lattice of normal deviates."""

from __future__ import annotations

import numpy as np
from scipy import sparse


def spline_matrix(n: int, scale: float) -> sparse.csr_matrix:
    """Return the matrix (n, knots) of cubic B-spline weights of ``n`` cells for knots ``scale`` cells apart."""
    place = (np.arange(n) + 0.5) / scale
    left = np.floor(place).astype(np.int64)
    t = place - left
    weights = np.stack([(1 - t) ** 3, 3 * t**3 - 6 * t**2 + 4, -3 * t**3 + 3 * t**2 + 3 * t + 1, t**3], axis=1) / 6.0
    cols = left[:, None] + np.arange(4)[None, :]
    rows = np.repeat(np.arange(n), 4)
    shape = (n, int(left.max()) + 4)
    return sparse.csr_matrix((weights.ravel(), (rows, cols.ravel())), shape=shape)


def smooth_field(rng: np.random.Generator, shape: tuple[int, int], scale: float) -> np.ndarray:
    """Return a smooth field with mean 0 and standard deviation 1.

    Parameters
    ----------
    rng : numpy.random.Generator
    shape : tuple of int
        Rows and columns.
    scale : float
        Distance between knots, in cells.

    Returns
    -------
    ndarray of float32, shape (row, column)
    """
    down, across = spline_matrix(shape[0], scale), spline_matrix(shape[1], scale)
    knots = rng.standard_normal((down.shape[1], across.shape[1])).astype(np.float32)
    values = (across.astype(np.float32) @ (down.astype(np.float32) @ knots).T).T
    values = np.ascontiguousarray(values)
    spread = float(values.std())
    return ((values - float(values.mean())) / (spread if spread > 0 else 1.0)).astype(np.float32)


def rough_field(
    rng: np.random.Generator, shape: tuple[int, int], scales: tuple[float, ...], fall: float = 0.6
) -> np.ndarray:
    """Return a sum of smooth fields, each ``fall`` times as strong as the one before; standard deviation 1."""
    total = np.zeros(shape, np.float32)
    weight = 1.0
    for scale in scales:
        total += np.float32(weight) * smooth_field(rng, shape, scale)
        weight *= fall
    return (total / np.float32(total.std())).astype(np.float32)
