"""What was read of one scene: blocks of reflectance and view code."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from inundate.common.codes import ViewCode
from inundate.common.grid import Window
from inundate.common.site import Site


@dataclass(frozen=True, slots=True)
class Block:
    """One window of a view.

    Attributes
    ----------
    window : Window
    reflectance : ndarray of float32, shape (band, row, column)
        NaN where there is none.
    code : ndarray of uint8, shape (row, column)
        ``ViewCode``; where it is CLEAR, every band that the scene has is finite.
    """

    window: Window
    reflectance: np.ndarray
    code: np.ndarray


@dataclass(frozen=True, slots=True)
class View:
    """One scene on the area's grid.

    Attributes
    ----------
    scene_id : str
    bands : tuple of str
        Band roles, the order of the blocks' first axis.
    blocks : tuple of Block
        One for each window asked for, in their order.
    """

    scene_id: str
    bands: tuple[str, ...]
    blocks: tuple[Block, ...]

    def block(self, window: Window) -> Block:
        """Return the block of a window that was asked for; raises KeyError for another."""
        for one in self.blocks:
            if one.window == window:
                return one
        raise KeyError(window)

    def clear_fraction(self) -> float:
        """Share of clear pixels in all blocks, 0..1; NaN without pixels."""
        total = sum(one.code.size for one in self.blocks)
        clear = sum(int(np.count_nonzero(one.code == ViewCode.CLEAR)) for one in self.blocks)
        return clear / total if total else float("nan")


class SiteGather:
    """Takes site pixels out of views; the places are worked out once for many scenes.

    Parameters
    ----------
    site : Site
    windows : sequence of Window
        The windows that views are read with; site pixels in none of them stay without data.
    """

    def __init__(self, site: Site, windows: Sequence[Window]) -> None:
        self.site = site
        self.windows = tuple(windows)
        self._places = []
        key = site.rows.astype(np.int64)
        for window in self.windows:
            low, high = np.searchsorted(key, [window.row0, window.row1])
            cols = site.cols[low:high]
            place = low + np.flatnonzero((cols >= window.col0) & (cols < window.col1))
            width = window.col1 - window.col0
            flat = (key[place] - window.row0) * width + (site.cols[place] - window.col0)
            self._places.append((place, flat))

    def take(self, view: View) -> tuple[np.ndarray, np.ndarray]:
        """Collect site pixels of a view read with the same windows (further windows after them are ignored).

        Returns
        -------
        reflectance : ndarray of float32, shape (band, pixel)
        code : ndarray of uint8, shape (pixel,)
        """
        reflectance = np.full((len(view.bands), self.site.size), np.nan, np.float32)
        code = np.full(self.site.size, ViewCode.FILL, np.uint8)
        if tuple(block.window for block in view.blocks[: len(self.windows)]) != self.windows:
            message = (
                f"view of scene {view.scene_id}: read with other windows than those of the gather; read it with them"
            )
            raise ValueError(message)
        for block, (place, flat) in zip(view.blocks, self._places, strict=False):
            code[place] = block.code.reshape(-1)[flat]
            planes = block.reflectance.reshape(len(view.bands), -1)
            for band in range(len(view.bands)):
                reflectance[band, place] = planes[band, flat]
        return reflectance, code
