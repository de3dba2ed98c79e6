"""How unlike all examples a pixel is: distance to the nearest centre of the examples in a robust, whitened space."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def _nearest(
    X: np.ndarray, centre: np.ndarray, scale: np.ndarray, centres: np.ndarray, radius: np.ndarray
) -> np.ndarray:
    n, d = X.shape
    out = np.empty(n, np.float32)
    z = np.empty(d)
    for i in range(n):
        known = 0
        for j in range(d):
            z[j] = (X[i, j] - centre[j]) / scale[j]
            if not np.isnan(z[j]):
                known += 1
        if known == 0:
            out[i] = np.nan
            continue
        best = np.inf
        for k in range(centres.shape[0]):
            total = 0.0
            bound = best * radius[k] * radius[k] * known / d
            for j in range(d):
                if not np.isnan(z[j]):
                    step = z[j] - centres[k, j]
                    total += step * step
                    if total > bound:
                        break
            value = total * d / known / (radius[k] * radius[k])
            best = min(best, value)
        out[i] = np.sqrt(best)
    return out


@dataclass(frozen=True, slots=True)
class Likeness:
    """Where the examples lie.

    Attributes
    ----------
    columns : tuple of int
        Columns of X that are used.
    centre, scale : ndarray, shape (column,)
        Median, and half the width between the 16th and 84th percentile.
    centres : ndarray, shape (k, column)
        k-means centres of the examples in scaled units.
    radius : ndarray, shape (k,)
        99th percentile of the distance of a centre's own examples, never less than half the median radius.
    """

    columns: tuple[int, ...]
    centre: np.ndarray
    scale: np.ndarray
    centres: np.ndarray
    radius: np.ndarray

    @classmethod
    def fit(cls, X: np.ndarray, columns: tuple[int, ...], *, n_centres: int, seed: int) -> Likeness:
        """Fit on examples X (row, feature); missing values stand at the median."""
        Z = np.asarray(X[:, list(columns)], float)
        with np.errstate(all="ignore"):
            low, centre, high = (_nan_percentile(Z, q) for q in (16, 50, 84))
        scale = np.where((high - low) > 1e-12, (high - low) / 2, 1.0)
        centre = np.where(np.isfinite(centre), centre, 0.0)
        Z = np.clip((Z - centre) / scale, -1e6, 1e6)
        Z[~np.isfinite(Z)] = 0.0
        unique = np.unique(Z, axis=0)
        k = int(min(n_centres, max(1, unique.shape[0] // 10)))
        centres, owner = _k_means(unique, k, seed)
        distance = np.sqrt(((unique - centres[owner]) ** 2).sum(axis=1))
        radius = np.array([np.percentile(distance[owner == j], 99) if (owner == j).any() else 0.0 for j in range(k)])
        floor = max(0.5 * float(np.median(radius)), 1e-6)
        return cls(tuple(columns), centre, scale, centres, np.maximum(radius, floor))

    def distance(self, X: np.ndarray) -> np.ndarray:
        """Return the distance in radii of the nearest centre (float32, shape (row,)); above 1 is unlike, NaN where nothing is known."""
        Z = np.ascontiguousarray(np.asarray(X)[:, list(self.columns)], dtype=np.float64)
        return _nearest(Z, self.centre, self.scale, np.ascontiguousarray(self.centres), self.radius)

    def to_json(self) -> dict[str, object]:
        """Return a plain dictionary for the card."""
        return {
            "columns": list(self.columns),
            "centre": self.centre.tolist(),
            "scale": self.scale.tolist(),
            "centres": self.centres.tolist(),
            "radius": self.radius.tolist(),
        }

    @classmethod
    def from_json(cls, value: dict) -> Likeness:
        """Read what :meth:`to_json` wrote."""
        centre, scale, centres, radius = (np.asarray(value[k], float) for k in ("centre", "scale", "centres", "radius"))
        return cls(tuple(value["columns"]), centre, scale, centres, radius)


def _k_means(Z: np.ndarray, k: int, seed: int, rounds: int = 25) -> tuple[np.ndarray, np.ndarray]:
    """Plain Lloyd rounds from seeded rows; centres (k, column) and owner (row,). The same for any row order of sorted Z."""
    centres = Z[np.sort(np.random.default_rng(seed).choice(Z.shape[0], k, replace=False))].copy()
    owner = np.zeros(Z.shape[0], np.int64)
    for _ in range(rounds):
        square = (Z**2).sum(axis=1)[:, None] - 2.0 * Z @ centres.T + (centres**2).sum(axis=1)[None, :]
        new = square.argmin(axis=1)
        if (new == owner).all() and _ > 0:
            break
        owner = new
        for j in range(k):
            if (owner == j).any():
                centres[j] = Z[owner == j].mean(axis=0)
    return centres, owner


def _nan_percentile(Z: np.ndarray, q: float) -> np.ndarray:
    out = np.full(Z.shape[1], np.nan)
    for j in range(Z.shape[1]):
        known = Z[np.isfinite(Z[:, j]), j]
        if known.size:
            out[j] = np.percentile(known, q)
    return out
