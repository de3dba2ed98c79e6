"""Structure images: what a view shows of edges, freed of what varies slowly over the ground."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy import ndimage

from inundate.common.codes import ViewCode
from inundate.common.grid import Window
from inundate.scenes.alignment import Points
from inundate.scenes.view import View

SMOOTH_PX = 11
"""Side of the box whose mean is taken away, pixels: haze, light and season vary more slowly than that."""
MASK_MARGIN_PX = 2
"""Pixels around each unclear one that are left out: mask edges are often missed."""
CELL_PX = 32
"""Side of a cell with its own gain and offset, pixels; half of it where there would be fewer than ``FEW_CELLS``."""
FEW_CELLS = 36
MAX_POINTS = 20_000
"""About how many pixels (of all channels) serve; more cost time and tell little."""
_MIN_SHARE = 0.3


def structure_stack(view: View, windows: Sequence[Window], channels: Sequence[str]) -> np.ndarray:
    """Return a view's structure image.

    Parameters
    ----------
    view : View
        Must hold the windows (others are passed over); missing channels or windows become NaN.
    windows : sequence of Window
    channels : sequence of str
        Band roles.

    Returns
    -------
    ndarray of float32, shape (window, channel, row, column)
        Reflectance less its local mean, NaN where not clear or near an unclear pixel; padded with NaN to the greatest
        window.
    """
    height = max(one.shape[0] for one in windows)
    width = max(one.shape[1] for one in windows)
    out = np.full((len(windows), len(channels), height, width), np.nan, np.float32)
    held = {block.window: block for block in view.blocks}
    for number, window in enumerate(windows):
        block = held.get(window)
        if block is None:
            continue
        clear = block.code == ViewCode.CLEAR
        if MASK_MARGIN_PX and not clear.all():
            clear = ~ndimage.maximum_filter(~clear, 2 * MASK_MARGIN_PX + 1, mode="nearest")
        if not clear.any():
            continue
        share = ndimage.uniform_filter(clear.astype(np.float32), SMOOTH_PX, mode="constant")
        good = clear & (share > 1e-3)
        for place, role in enumerate(channels):
            if role in view.bands:
                plane = np.where(clear, block.reflectance[view.bands.index(role)], np.float32(0.0))
                mean = ndimage.uniform_filter(plane, SMOOTH_PX, mode="constant")
                with np.errstate(invalid="ignore", divide="ignore"):
                    rest = plane - mean / share
                out[number, place, : window.shape[0], : window.shape[1]] = np.where(good, rest, np.nan)
    return out


def pick_points(image: np.ndarray, spread: np.ndarray) -> Points:
    """Choose the pixels of a reference that tell of its position: strong gradient for their unsteadiness.

    Parameters
    ----------
    image : ndarray of float32, shape (window, channel, row, column)
        Reference structure, NaN where not known.
    spread : ndarray of float32, same shape
        Standard deviation in time, NaN where not known.

    Returns
    -------
    Points
        The better half of the pixels of each cell and channel (fewer where there are very many), all with a finite
        neighbourhood.
    """
    along_row = np.full(image.shape, np.nan)
    along_col = np.full(image.shape, np.nan)
    along_row[:, :, 1:-1] = (image[:, :, 2:].astype(float) - image[:, :, :-2]) / 2
    along_col[:, :, :, 1:-1] = (image[:, :, :, 2:].astype(float) - image[:, :, :, :-2]) / 2
    with np.errstate(invalid="ignore"):
        typical = np.nanmedian(spread, axis=(0, 2, 3), keepdims=True) if np.isfinite(spread).any() else np.nan
        weight = 1.0 / (np.square(spread.astype(float)) + np.square(np.nan_to_num(typical, nan=1.0)) + 1e-12)
        weight = weight / np.nanmax(weight, axis=(0, 2, 3), keepdims=True)
        power = weight * (along_row**2 + along_col**2)
    known_all = int(np.isfinite(power).sum())
    share = 1.0 - min(0.5, MAX_POINTS / max(known_all, 1))
    parts, start, cells = [], [0], []
    n_windows, n_channels, height, width = image.shape
    number = 0
    side = CELL_PX if n_windows * height * width >= FEW_CELLS * CELL_PX**2 else CELL_PX // 2
    for w in range(n_windows):
        for r0 in range(0, height, side):
            for c0 in range(0, width, side):
                added = False
                for c in range(n_channels):
                    part = power[w, c, r0 : r0 + side, c0 : c0 + side]
                    known = np.isfinite(part)
                    if known.sum() < _MIN_SHARE * side * side:
                        continue
                    rows, cols = np.nonzero(known & (part >= np.quantile(part[known], share)))
                    parts.append(np.stack([np.full(rows.size, w), np.full(rows.size, c), rows + r0, cols + c0]))
                    start.append(start[-1] + rows.size)
                    cells.append(number)
                    added = True
                number += added
    place = np.concatenate(parts, axis=1).astype(np.int32) if parts else np.empty((4, 0), np.int32)
    index = (place[0], place[1], place[2], place[3])
    return Points(
        *index,
        value=image[index].astype(float),
        along_col=along_col[index],
        along_row=along_row[index],
        weight=weight[index],
        start=np.array(start, np.int64),
        cell=np.array(cells, np.int64),
    )
