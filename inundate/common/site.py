"""Site pixels: the pixels of the area's grid that can matter, and the windows that hold them."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from inundate.common.grid import Grid, Window


@dataclass(frozen=True, slots=True)
class Site:
    """Pixels to be read, sorted row-major; everything between reading and extent is indexed by position here.

    Attributes
    ----------
    grid : Grid
    rows, cols : ndarray of int32, shape (pixel,)
    windows : tuple of Window
        Disjoint windows that together hold every site pixel (and some others).
    """

    grid: Grid
    rows: np.ndarray
    cols: np.ndarray
    windows: tuple[Window, ...]

    @property
    def size(self) -> int:
        """Number of site pixels."""
        return int(self.rows.size)

    def positions(self, rows: np.ndarray, cols: np.ndarray) -> np.ndarray:
        """Return positions (int64) of grid cells in the site, -1 where a cell is not a site pixel."""
        key = self.rows.astype(np.int64) * self.grid.width + self.cols
        rows, cols = np.asarray(rows, np.int64), np.asarray(cols, np.int64)
        wanted = rows * self.grid.width + cols
        place = np.searchsorted(key, wanted)
        place = np.minimum(place, max(key.size - 1, 0))
        hit = (key[place] == wanted) & self.grid.inside(rows, cols) if key.size else np.zeros(wanted.shape, bool)
        return np.where(hit, place, -1)

    def gather(self, blocks: Iterable[tuple[Window, np.ndarray]], fill: float, dtype: np.dtype) -> np.ndarray:
        """Collect site pixels from blocks.

        Parameters
        ----------
        blocks : iterable of (Window, ndarray)
            Arrays of shape (..., row, column) over windows; windows may lie outside the site's.
        fill : float
            Value of site pixels that no block holds.
        dtype : numpy dtype
            Type of the result.

        Returns
        -------
        ndarray, shape (..., pixel)
        """
        out: np.ndarray | None = None
        for window, values in blocks:
            if out is None:
                out = np.full((*values.shape[:-2], self.size), fill, dtype=dtype)
            inside = (
                (self.rows >= window.row0)
                & (self.rows < window.row1)
                & (self.cols >= window.col0)
                & (self.cols < window.col1)
            )
            place = np.flatnonzero(inside)
            out[..., place] = values[..., self.rows[place] - window.row0, self.cols[place] - window.col0]
        return np.full(self.size, fill, dtype=dtype) if out is None else out


def make_site(grid: Grid, rows: np.ndarray, cols: np.ndarray, *, margin: int = 0, block: int = 256) -> Site:
    """Build a site from grid cells.

    Parameters
    ----------
    grid : Grid
    rows, cols : ndarray of int
        Cells that matter; duplicates allowed, cells off the grid are dropped.
    margin : int
        Pixels to add around each cell (square neighbourhood).
    block : int
        Side of the blocks (aligned to the grid's origin) into which the site is cut before windows are drawn; each
        window is the tight box of the site pixels of one block.

    Returns
    -------
    Site
    """
    rows, cols = np.asarray(rows, np.int64), np.asarray(cols, np.int64)
    keep = grid.inside(rows, cols)
    wanted = np.zeros((grid.height, grid.width), bool)
    wanted[rows[keep], cols[keep]] = True
    if margin > 0:
        wanted = ndimage.binary_dilation(wanted, np.ones((2 * margin + 1, 2 * margin + 1), bool))
    r, c = np.nonzero(wanted)
    windows = []
    label = (r // block) * (grid.width // block + 1) + c // block
    for one in np.unique(label):
        mine = label == one
        windows.append(Window(int(r[mine].min()), int(r[mine].max()) + 1, int(c[mine].min()), int(c[mine].max()) + 1))
    return Site(grid, r.astype(np.int32), c.astype(np.int32), tuple(windows))
