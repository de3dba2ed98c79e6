"""Site pixels: the pixels of the area's grid that can matter, and the windows that hold them."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from inundate.common.grid import Grid, Window


def _none() -> np.ndarray:
    return np.zeros(0, np.int64)


@dataclass(frozen=True, slots=True)
class Site:
    """Pixels to be read, sorted row-major; everything between reading and extent is indexed by position here.

    Attributes
    ----------
    grid : Grid
    rows, cols : ndarray of int32, shape (pixel,)
    windows : tuple of Window
        Disjoint windows that together hold every site pixel (and some others).
    order : ndarray of int64, shape (pixel,)
        Positions sorted by window; see :meth:`place`.
    starts : ndarray of int64, shape (window + 1,)
        Where each window's positions begin in ``order``.
    """

    grid: Grid
    rows: np.ndarray
    cols: np.ndarray
    windows: tuple[Window, ...]
    order: np.ndarray = field(default_factory=_none)
    starts: np.ndarray = field(default_factory=_none)

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

    def place(self, number: int) -> np.ndarray:
        """Return positions (int64, ascending) of the site pixels of one window."""
        return self.order[self.starts[number] : self.starts[number + 1]]

    def pick(self, number: int, window: Window, values: np.ndarray) -> np.ndarray:
        """Take the site pixels of one window out of an array over it.

        Parameters
        ----------
        number : int
            Which of the site's windows.
        window : Window
            What ``values`` spans: the site's window, or a wider one around it.
        values : ndarray, shape (..., row, column)

        Returns
        -------
        ndarray, shape (..., pixel)
            In the order of :meth:`place`.
        """
        place = self.place(number)
        return values[..., self.rows[place] - window.row0, self.cols[place] - window.col0]


def make_site(grid: Grid, rows: np.ndarray, cols: np.ndarray, *, margin: int = 0, block: int = 256) -> Site:
    """Build a site from grid cells, in time and memory of the cells, not of the grid.

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
    r, c = np.asarray(rows, np.int64).ravel(), np.asarray(cols, np.int64).ravel()
    r, c = _distinct(grid, r, c)
    if margin > 0:
        steps = np.arange(-margin, margin + 1)
        r, c = _distinct(grid, (r[:, None] + steps).ravel(), np.repeat(c, steps.size))
        r, c = _distinct(grid, np.repeat(r, steps.size), (c[:, None] + steps).ravel())
    label = (r // block) * (grid.width // block + 1) + c // block
    order = np.argsort(label, kind="stable")
    first = np.flatnonzero(np.diff(label[order], prepend=-1))
    edges = (
        [f.reduceat(v[order], first) for v in (r, c) for f in (np.minimum, np.maximum)] if order.size else [first] * 4
    )
    windows = tuple(Window(int(a), int(b) + 1, int(d), int(e) + 1) for a, b, d, e in zip(*edges, strict=True))
    return Site(grid, r.astype(np.int32), c.astype(np.int32), windows, order, np.append(first, order.size))


def _distinct(grid: Grid, rows: np.ndarray, cols: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the distinct cells on the grid, row-major."""
    keep = grid.inside(rows, cols)
    key = np.unique(rows[keep] * grid.width + cols[keep])
    return key // grid.width, key % grid.width
