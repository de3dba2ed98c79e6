"""Raster grid and window values, immutable, in projected metres."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from affine import Affine


@dataclass(frozen=True, slots=True)
class Window:
    """Half-open block of a grid: rows ``row0..row1-1``, columns ``col0..col1-1``."""

    row0: int
    row1: int
    col0: int
    col1: int

    @property
    def shape(self) -> tuple[int, int]:
        """Rows and columns of the window."""
        return self.row1 - self.row0, self.col1 - self.col0

    @property
    def slices(self) -> tuple[slice, slice]:
        """Row slice and column slice into an array over the whole grid."""
        return slice(self.row0, self.row1), slice(self.col0, self.col1)

    def grow(self, margin: int, height: int, width: int) -> Window:
        """Return the window widened by ``margin`` pixels on each side, kept inside ``height`` x ``width``."""
        return Window(
            max(self.row0 - margin, 0),
            min(self.row1 + margin, height),
            max(self.col0 - margin, 0),
            min(self.col1 + margin, width),
        )


@dataclass(frozen=True, slots=True)
class Grid:
    """North-up raster grid.

    Attributes
    ----------
    crs : str
        Projected coordinate reference system, for example ``EPSG:32633``.
    west, north : float
        Outer corner of the pixel at row 0, column 0, in metres.
    step : float
        Pixel side in metres (square pixels).
    height, width : int
        Rows and columns.
    """

    crs: str
    west: float
    north: float
    step: float
    height: int
    width: int

    @property
    def transform(self) -> Affine:
        """Affine transform from (column, row) to (x, y)."""
        return Affine(self.step, 0.0, self.west, 0.0, -self.step, self.north)

    @property
    def bounds(self) -> tuple[float, float, float, float]:
        """West, south, east, north in metres."""
        return (
            self.west,
            self.north - self.height * self.step,
            self.west + self.width * self.step,
            self.north,
        )

    @property
    def pixel_area_m2(self) -> float:
        """Area of one pixel, m2."""
        return self.step * self.step

    def window_transform(self, window: Window) -> Affine:
        """Affine transform of a window of this grid."""
        return self.transform * Affine.translation(window.col0, window.row0)

    def centres(self, rows: np.ndarray, cols: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return x and y (m, float64) of pixel centres."""
        x = self.west + (np.asarray(cols, float) + 0.5) * self.step
        y = self.north - (np.asarray(rows, float) + 0.5) * self.step
        return x, y

    def locate(self, x: np.ndarray, y: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return row and column (int64) of the pixels that hold the points; may lie outside the grid."""
        cols = np.floor((np.asarray(x, float) - self.west) / self.step).astype(np.int64)
        rows = np.floor((self.north - np.asarray(y, float)) / self.step).astype(np.int64)
        return rows, cols

    def inside(self, rows: np.ndarray, cols: np.ndarray) -> np.ndarray:
        """Return a boolean array: which (row, column) lie on the grid."""
        return (rows >= 0) & (rows < self.height) & (cols >= 0) & (cols < self.width)
