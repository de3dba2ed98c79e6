"""Relative normalisation: a gain and an offset for each band, from ground that stays as it is.

A robust straight line of the view on the reference's median over its steady pixels, band by band; pixels count by their
steadiness in time within the same season (pseudo-invariant ones lead), so that water, clouds missed by the mask and
cutting do not tell. The reference's own error is taken out of its variance, since it would flatten the line (method of
moments for errors in variables: Fuller 1987, Measurement Error Models). Standard deviations are a jackknife over cells of ground.

What it can and cannot tell: the line holds whatever made the whole scene brighter, the sun's height and wet ground as well
as the sensor and the air. On the invented reserve ground varies by 15 to 20 % between views of one season, the sensor's gain by
3 %, and extents from normalised views were not steadily better than from plain ones. So it is for reporting, and for archives
whose sensors differ by more than their ground does; it is not applied unless asked for.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from scipy import ndimage

from inundate.common.codes import ViewCode
from inundate.common.grid import Window
from inundate.scenes.view import Block, View

STRIDE_PX = 4
"""Every fourth pixel of every fourth row serves: neighbours tell the same."""
_CELL_PX = 32
_BISQUARE = 4.685
_MARGIN_PX = 2
_ROUNDS = 10
_MEDIAN_ERROR = 1.2533  # standard error of a median over that of a mean, normal errors


@dataclass(frozen=True, slots=True)
class Levels:
    """Reflectance of steady ground in one look.

    Attributes
    ----------
    bands : tuple of str
    value, spread : ndarray of float32, shape (band, point)
        Median in time and its robust standard deviation.
    window, row, col : ndarray of int32, shape (point,)
        Place in the reference's windows.
    n_views : int
        Views that the median is taken over.
    """

    bands: tuple[str, ...]
    value: np.ndarray
    spread: np.ndarray
    window: np.ndarray
    row: np.ndarray
    col: np.ndarray
    n_views: int


@dataclass(frozen=True, slots=True)
class Gain:
    """How a view's reflectance lies against the reference: ``view = gain * reference + offset``.

    Attributes
    ----------
    bands : tuple of str
    gain, offset : tuple of float
        One a band; 1 and 0 where not known.
    gain_sd, offset_sd : tuple of float
        Standard deviation of the gain, and of the offset at reflectance 0.
    confident : bool
        To be applied.
    n : int
        Cells of ground that took part.
    look : str
        Look of the reference that it was held against.
    """

    bands: tuple[str, ...]
    gain: tuple[float, ...]
    offset: tuple[float, ...]
    gain_sd: tuple[float, ...]
    offset_sd: tuple[float, ...]
    confident: bool
    n: int
    look: str = field(default="")

    def as_dict(self) -> dict[str, object]:
        """Return plain values for JSON."""
        return {
            "bands": list(self.bands),
            "gain": [round(one, 5) for one in self.gain],
            "offset": [round(one, 6) for one in self.offset],
            "gain_sd": [round(one, 5) if np.isfinite(one) else None for one in self.gain_sd],
            "offset_sd": [round(one, 6) if np.isfinite(one) else None for one in self.offset_sd],
            "confident": self.confident,
            "n": self.n,
            "look": self.look,
        }


def level_places(windows: Sequence[Window]) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return window, row and column (int32) of the pixels that serve."""
    parts = []
    for number, window in enumerate(windows):
        rows, cols = np.mgrid[0 : window.shape[0] : STRIDE_PX, 0 : window.shape[1] : STRIDE_PX]
        parts.append(np.stack([np.full(rows.size, number), rows.ravel(), cols.ravel()]))
    place = np.concatenate(parts, axis=1).astype(np.int32)
    return place[0], place[1], place[2]


def take_levels(
    view: View, windows: Sequence[Window], bands: Sequence[str], place: tuple[np.ndarray, np.ndarray, np.ndarray]
) -> np.ndarray:
    """Return reflectance (float32, shape (band, point)) at places, NaN where not clear or close to unclear pixels."""
    out = np.full((len(bands), place[0].size), np.nan, np.float32)
    held = {block.window: block for block in view.blocks}
    for number, window in enumerate(windows):
        block = held.get(window)
        if block is None:
            continue
        here = np.flatnonzero(place[0] == number)
        rows, cols = place[1][here], place[2][here]
        dull = block.code != ViewCode.CLEAR
        if dull.any():
            dull = ndimage.maximum_filter(dull, 2 * _MARGIN_PX + 1, mode="nearest")
        good = ~dull[rows, cols]
        for band, role in enumerate(bands):
            if role in view.bands:
                values = block.reflectance[view.bands.index(role)][rows, cols]
                out[band, here] = np.where(good, values, np.nan)
    return out


def estimate_gain(view: View, windows: Sequence[Window], levels: Levels, *, look: str = "") -> Gain:
    """Estimate gain and offset of each band of a view.

    Parameters
    ----------
    view : View
    windows : sequence of Window
        The reference's.
    levels : Levels
    look : str
        Name for the result.

    Returns
    -------
    Gain
        Confident where in every band the corrected value of middling ground is known to 2 % and at least 6 cells took
        part.
    """
    roles = tuple(role for role in view.bands if role in levels.bands)
    index = [levels.bands.index(role) for role in roles]
    seen = take_levels(view, windows, roles, (levels.window, levels.row, levels.col))
    across = max((window.shape[1] for window in windows), default=1) // _CELL_PX + 1
    down = max((window.shape[0] for window in windows), default=1) // _CELL_PX + 1
    cell = (levels.window.astype(np.int64) * down + levels.row // _CELL_PX) * across + levels.col // _CELL_PX
    fits = [_line(seen[k], levels.value[i], levels.spread[i], levels.n_views, cell) for k, i in enumerate(index)]
    n = min((fit[5] for fit in fits), default=0)
    sure = bool(fits) and n >= 6 and all(fit[4] <= 0.02 * max(abs(fit[6]), 0.05) for fit in fits)
    return Gain(
        roles,
        tuple(fit[0] for fit in fits),
        tuple(fit[1] for fit in fits),
        tuple(fit[2] for fit in fits),
        tuple(fit[3] for fit in fits),
        sure,
        n,
        look,
    )


def _line(
    seen: np.ndarray, value: np.ndarray, spread: np.ndarray, n_views: int, cell: np.ndarray
) -> tuple[float, float, float, float, float, int, float]:
    """Return gain, offset, their sd, the sd of the line at its middle, cells, and the middle."""
    known = np.isfinite(seen) & np.isfinite(value) & np.isfinite(spread)
    blank = (1.0, 0.0, np.inf, np.inf, np.inf, 0, 0.0)
    if known.sum() < 50:
        return blank
    y, x = seen[known].astype(float), value[known].astype(float)
    calm = spread[known].astype(float)
    typical = max(float(np.median(calm)), 1e-4)
    base = 1.0 / (calm**2 + (0.5 * typical) ** 2)
    base /= base.max()
    own = np.square(_MEDIAN_ERROR * calm) / n_views
    robust = np.ones(y.size)
    gain, offset = 1.0, 0.0
    for _ in range(_ROUNDS):
        w = base * robust
        mx, my = np.average(x, weights=w), np.average(y, weights=w)
        vx = np.average((x - mx) ** 2, weights=w) - np.average(own, weights=w)
        if vx <= 0.0:
            return blank
        before = gain
        gain = float(np.average((x - mx) * (y - my), weights=w) / vx)
        offset = float(my - gain * mx)
        rest = (y - gain * x - offset) * np.sqrt(base)
        scale = 1.4826 * float(np.median(np.abs(rest)))
        if scale <= 0.0:
            break
        robust = np.square(np.clip(1.0 - np.square(rest / (_BISQUARE * scale)), 0.0, None))
        if abs(gain - before) < 1e-4:
            break
    return _with_errors(x, y, base * robust, own, cell[known], (gain, offset))


def _with_errors(
    x: np.ndarray, y: np.ndarray, w: np.ndarray, own: np.ndarray, cell: np.ndarray, line: tuple[float, float]
) -> tuple[float, float, float, float, float, int, float]:
    _, number = np.unique(cell, return_inverse=True)
    sums = np.stack([np.bincount(number, weights=w * one) for one in (np.ones(x.size), x, y, x * x - own, x * y)])
    n = sums.shape[1]
    rest = sums.sum(axis=1, keepdims=True) - sums
    middle = float(sums[1].sum() / sums[0].sum())
    if n < 3 or (rest[0] <= 0.0).any():
        return (*line, np.inf, np.inf, np.inf, n, middle)
    mx, my = rest[1] / rest[0], rest[2] / rest[0]
    spread = rest[3] / rest[0] - mx**2
    gains = (rest[4] / rest[0] - mx * my) / np.where(spread > 0, spread, np.nan)
    offsets = my - gains * mx
    factor = (n - 1) / n
    sds = [
        float(np.sqrt(factor * np.square(one - one.mean()).sum())) for one in (gains, offsets, offsets + gains * middle)
    ]
    return (*line, sds[0], sds[1], sds[2], n, middle)


def apply_gain(view: View, gain: Gain, *, force: bool = False) -> View:
    """Bring a view to the reference's level: ``(reflectance - offset) / gain`` where the gain is confident.

    Parameters
    ----------
    view : View
    gain : Gain
    force : bool
        Apply it even where not confident.

    Returns
    -------
    View
        The same view where nothing is applied; bands that the gain does not hold stay as they are.
    """
    if not (gain.confident or force):
        return view
    held: Mapping[str, tuple[float, float]] = {
        role: (g, o) for role, g, o in zip(gain.bands, gain.gain, gain.offset, strict=True)
    }
    scale = np.array([held.get(role, (1.0, 0.0)) for role in view.bands], np.float32)
    blocks = tuple(
        Block(one.window, (one.reflectance - scale[:, 1, None, None]) / scale[:, 0, None, None], one.code)
        for one in view.blocks
    )
    return View(view.scene_id, view.bands, blocks)
