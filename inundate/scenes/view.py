"""What was read of one scene: blocks of reflectance and view code."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from inundate.common.codes import ViewCode
from inundate.common.grid import Window


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
