"""Sub-pixel shift between a reference and one view, by robust least squares on the gradients of many small cells.

The search at whole pixels takes the shift with the greatest explained variance; the refinement solves for the shift that
best maps the view on the reference (inverse compositional image alignment: Lucas and Kanade 1981; Baker and Matthews
2004, Int. J. Comput. Vis. 56:221, doi:10.1023/B:VISI.0000011205.11775.fd) with a gain and an offset of its own for each
cell and channel, so that leaves, haze and light do not count, and with bisquare weights, so that clouds missed by the
mask and water that came or went do not either. The standard deviation is a jackknife over cells, since neighbouring
pixels do not err independently.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numba import njit

from inundate.scenes.kernels import cubic_tap

_BISQUARE = 4.685  # 95 % efficiency under normal errors (Holland and Welsch 1977)
_MAD_TO_SD = 1.4826
_ITERATIONS = 8
FLOOR_SD_PX = 0.04
"""What no number of cells averages out: the bias of interpolating images sampled near the limit of their blur, which the
literature on sub-pixel matching puts at some hundredths of a pixel (order of size from memory)."""
_CONVERGED_PX = 3e-3
_MIN_POINTS = 8
_MIN_COARSE = 4
PARTS = 3
"""The search is done in so many parts of the ground on their own as well; chance matches do not agree."""


@dataclass(frozen=True)
class Points:
    """Pixels of a reference that serve for alignment, sorted by group; one group is one cell of one channel.

    Attributes
    ----------
    window, channel, row, col : ndarray of int32, shape (point,)
        Place in the stack (window, channel, row, column).
    value, along_col, along_row, weight : ndarray of float64, shape (point,)
        Reference value, its gradient (per pixel), and weight from its steadiness in time.
    start : ndarray of int64, shape (group + 1,)
        First point of each group.
    cell : ndarray of int64, shape (group,)
        Cell of each group: channels share cells.
    """

    window: np.ndarray
    channel: np.ndarray
    row: np.ndarray
    col: np.ndarray
    value: np.ndarray
    along_col: np.ndarray
    along_row: np.ndarray
    weight: np.ndarray
    start: np.ndarray
    cell: np.ndarray

    @cached_property
    def coarse(self) -> Points:
        """Every third point of each group."""
        every = 3
        group = np.repeat(np.arange(self.start.size - 1), np.diff(self.start))
        keep = (np.arange(group.size) - self.start[group]) % every == 0
        start = np.concatenate([[0], np.cumsum(np.bincount(group[keep], minlength=self.start.size - 1))])
        return Points(
            self.window[keep],
            self.channel[keep],
            self.row[keep],
            self.col[keep],
            self.value[keep],
            self.along_col[keep],
            self.along_row[keep],
            self.weight[keep],
            start.astype(np.int64),
            self.cell,
        )


@dataclass(frozen=True, slots=True)
class Alignment:
    """Result of :func:`align`: shift along columns and rows, its standard deviation, cells used, share explained.

    ``agree`` as in :class:`Start`.
    """

    dx_px: float
    dy_px: float
    sd_px: float
    n_cells: int
    explained: float
    at_border: bool
    agree: bool


@njit(cache=True, nogil=True)
def _cubic(stack, w, c, y, x):  # type: ignore[no-untyped-def]
    """Cubic convolution (Keys 1981, a = -0.5) of one plane at (y, x); NaN if a tap is NaN or off the plane."""
    r0, c0 = int(np.floor(y)), int(np.floor(x))
    if r0 < 1 or c0 < 1 or r0 + 2 >= stack.shape[2] or c0 + 2 >= stack.shape[3]:
        return np.nan
    fy, fx = y - r0, x - c0
    total = 0.0
    for i in range(4):
        wy = cubic_tap(fy, i)
        if wy == 0.0:
            continue
        line = 0.0
        for j in range(4):
            wx = cubic_tap(fx, j)
            if wx != 0.0:
                line += wx * stack[w, c, r0 - 1 + i, c0 - 1 + j]
        total += wy * line
    return total


@njit(cache=True, nogil=True)
def sample(stack, window, channel, row, col, dy, dx):  # type: ignore[no-untyped-def]
    """Return the stack's values at points moved by (dy, dx) pixels; NaN where not seen."""
    out = np.empty(row.size, np.float64)
    whole = dy == np.floor(dy) and dx == np.floor(dx)
    iy, ix = int(dy), int(dx)
    for p in range(row.size):
        if whole:
            r, c = row[p] + iy, col[p] + ix
            if 0 <= r < stack.shape[2] and 0 <= c < stack.shape[3]:
                out[p] = stack[window[p], channel[p], r, c]
            else:
                out[p] = np.nan
        else:
            out[p] = _cubic(stack, window[p], channel[p], row[p] + dy, col[p] + dx)
    return out


@njit(cache=True, nogil=True)
def _explained(seen, value, weight, start, cell, least):  # type: ignore[no-untyped-def]
    """Return the share of the view's variance within groups that the reference explains: in all, and in thirds of the cells."""
    hit = np.zeros(PARTS + 1)
    total = np.zeros(PARTS + 1)
    for g in range(start.size - 1):
        n = 0
        sw = sv = sr = svv = srr = svr = 0.0
        for p in range(start[g], start[g + 1]):
            if not np.isnan(seen[p]):
                w = weight[p]
                n += 1
                sw += w
                sv += w * seen[p]
                sr += w * value[p]
                svv += w * seen[p] * seen[p]
                srr += w * value[p] * value[p]
                svr += w * seen[p] * value[p]
        if n >= least:
            vv = svv / sw - (sv / sw) ** 2
            rr = srr / sw - (sr / sw) ** 2
            vr = svr / sw - (sv / sw) * (sr / sw)
            if vv > 0.0 and rr > 0.0:
                part = 1 + cell[g] % PARTS
                hit[0] += n * vr * vr / (vv * rr)
                hit[part] += n * vr * vr / (vv * rr)
                total[0] += n
                total[part] += n
    return hit / np.maximum(total, 1.0)


@njit(cache=True, nogil=True)
def _solve_groups(seen, value, gx, gy, weight, robust, start):  # type: ignore[no-untyped-def]
    """Fit gain and offset of each group and gather the normal equations of the shift.

    Returns
    -------
    gain, offset : ndarray, shape (group,)
    equations : ndarray, shape (group, 5)
        xx, xy, yy, xe, ye: sums over points of the projected gradient's products with itself and the residual.
    """
    n_groups = start.size - 1
    gain = np.zeros(n_groups)
    offset = np.zeros(n_groups)
    equations = np.zeros((n_groups, 5))
    for g in range(n_groups):
        n = 0
        sw = sv = sr = srr = svr = sx = sy = srx = sry = 0.0
        for p in range(start[g], start[g + 1]):
            w = weight[p] * robust[p]
            if w > 0.0 and not np.isnan(seen[p]):
                n += 1
                r = value[p]
                sw += w
                sv += w * seen[p]
                sr += w * r
                srr += w * r * r
                svr += w * seen[p] * r
                sx += w * gx[p]
                sy += w * gy[p]
                srx += w * r * gx[p]
                sry += w * r * gy[p]
        gain[g] = np.nan
        if n < _MIN_POINTS:
            continue
        spread = srr - sr * sr / sw
        if spread <= 0.0:
            continue
        a = (svr - sv * sr / sw) / spread
        b = (sv - a * sr) / sw
        gain[g] = a
        offset[g] = b
        ax = (srx - sx * sr / sw) / spread
        bx = (sx - ax * sr) / sw
        ay = (sry - sy * sr / sw) / spread
        by = (sy - ay * sr) / sw
        for p in range(start[g], start[g + 1]):
            w = weight[p] * robust[p]
            if w > 0.0 and not np.isnan(seen[p]):
                e = seen[p] - a * value[p] - b
                px = a * (gx[p] - ax * value[p] - bx)
                py = a * (gy[p] - ay * value[p] - by)
                equations[g, 0] += w * px * px
                equations[g, 1] += w * px * py
                equations[g, 2] += w * py * py
                equations[g, 3] += w * px * e
                equations[g, 4] += w * py * e
    return gain, offset, equations


@njit(cache=True, nogil=True)
def _reweight(seen, value, gain, offset, start, robust):  # type: ignore[no-untyped-def]
    """Set bisquare weights from each group's residuals; return the residual variance of each group (NaN unused)."""
    scale = np.full(start.size - 1, np.nan)
    for g in range(start.size - 1):
        a, b = start[g], start[g + 1]
        if np.isnan(gain[g]):
            robust[a:b] = 0.0
            continue
        rest = seen[a:b] - gain[g] * value[a:b] - offset[g]
        size = np.abs(rest[~np.isnan(rest)])
        s = _MAD_TO_SD * np.median(size) if size.size else 0.0
        if s <= 0.0:
            robust[a:b] = 1.0
            scale[g] = 1e-12
            continue
        for p in range(a, b):
            u = rest[p - a] / (_BISQUARE * s)
            robust[p] = (1.0 - u * u) ** 2 if abs(u) < 1.0 else 0.0  # NaN gives 0
        scale[g] = s * s
    return scale


@dataclass(frozen=True, slots=True)
class Start:
    """Best whole-pixel shift, the share of variance that it explains, and whether it lies at the end of the search.

    ``agree`` tells whether all thirds of the ground, searched on their own, have their best shift within a pixel of it.
    """

    dx: int
    dy: int
    explained: float
    at_border: bool
    agree: bool


def search(points: Points, stack: np.ndarray, *, reach: int) -> Start:
    """Search the whole-pixel shift that explains most; a third of the points serves.

    Parameters
    ----------
    points : Points
    stack : ndarray of float32, shape (window, channel, row, column)
        The view's structure image, NaN where not clear.
    reach : int
        Pixels to search on each side.
    """
    few = points.coarse
    moves = [(dy, dx) for dy in range(-reach, reach + 1) for dx in range(-reach, reach + 1)]
    shares = np.array(
        [
            _explained(_at(few, stack, float(dy), float(dx)), few.value, few.weight, few.start, few.cell, _MIN_COARSE)
            for dy, dx in moves
        ]
    )
    peaks = [moves[k] for k in shares.argmax(axis=0)]
    dy, dx = peaks[0]
    agree = all(max(abs(p[0] - dy), abs(p[1] - dx)) <= 1 for p in peaks[1:])
    return Start(dx, dy, float(shares[:, 0].max()), max(abs(dy), abs(dx)) == reach, agree)


def align(points: Points, stack: np.ndarray, *, reach: int) -> Alignment | None:
    """Find the shift of a view against a reference: :func:`search`, then :func:`refine`."""
    return refine(points, stack, search(points, stack, reach=reach))


def _at(points: Points, stack: np.ndarray, dy: float, dx: float) -> np.ndarray:
    seen: np.ndarray = sample(stack, points.window, points.channel, points.row, points.col, dy, dx)
    return seen


def refine(points: Points, stack: np.ndarray, begin: Start) -> Alignment | None:
    """Refine a whole-pixel shift to a small part of a pixel.

    Returns
    -------
    Alignment or None
        The view shows at ``(row + dy, col + dx)`` what the reference shows at ``(row, col)``. None where too little is seen.
    """
    if begin.explained <= 0.0:
        return None
    dy, dx = float(begin.dy), float(begin.dx)
    robust = np.ones(points.value.size)
    cells = np.zeros((int(points.cell.max()) + 1, 5))
    gain = np.full(points.start.size - 1, np.nan)
    offset = np.zeros(points.start.size - 1)
    for round_ in range(_ITERATIONS):
        seen = _at(points, stack, dy, dx)
        if round_ == 0:
            gain, offset, _ = _solve_groups(*_inputs(points, seen, robust))
        variance = _reweight(seen, points.value, gain, offset, points.start, robust)
        gain, offset, equations = _solve_groups(*_inputs(points, seen, robust))
        used = np.isfinite(gain) & np.isfinite(variance)
        if not used.any():
            return None
        floor = 0.05 * float(np.median(variance[used]))
        cells[:] = 0.0
        np.add.at(cells, points.cell[used], equations[used] / np.maximum(variance[used], floor)[:, None])
        step = _step(cells.sum(axis=0))
        if step is None:
            return None
        size = float(np.hypot(*step))
        if size > 0.7:
            step = step * (0.7 / size)
        dx, dy = dx + float(step[0]), dy + float(step[1])
        if size < _CONVERGED_PX:
            break
    seen = _at(points, stack, dy, dx)
    explained = _explained(seen, points.value, points.weight, points.start, points.cell, _MIN_POINTS)[0]
    live = cells[:, 0] + cells[:, 2] > 0.0
    strayed = max(abs(dy - begin.dy), abs(dx - begin.dx)) > 1.5
    sd = float(np.hypot(_jackknife(cells[live]), FLOOR_SD_PX))
    return Alignment(dx, dy, sd, int(live.sum()), float(explained), begin.at_border or strayed, begin.agree)


def _inputs(points: Points, seen: np.ndarray, robust: np.ndarray) -> tuple[np.ndarray, ...]:
    return seen, points.value, points.along_col, points.along_row, points.weight, robust, points.start


def _step(total: np.ndarray) -> np.ndarray | None:
    """Solve for the change of the sampling point: the residual e = V(x+d) - aR - b falls by a * gradient * step."""
    matrix = np.array([[total[0], total[1]], [total[1], total[2]]])
    size = matrix[0, 0] * matrix[1, 1]
    if size <= 0.0 or np.linalg.det(matrix) < 1e-6 * size:
        return None
    return -np.linalg.solve(matrix, total[3:5])


def _jackknife(cells: np.ndarray) -> float:
    """Return the standard deviation of the shift (root mean square of both axes), leaving out one cell at a time."""
    n = len(cells)
    if n < 3:
        return float("inf")
    total = cells.sum(axis=0)
    steps = [_step(total - cells[k]) for k in range(n)]
    if any(one is None for one in steps):
        return float("inf")
    table = np.array(steps)
    variance = (n - 1) / n * ((table - table.mean(axis=0)) ** 2).sum(axis=0)
    return float(np.sqrt(variance.mean()))
