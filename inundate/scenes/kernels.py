"""Compiled inner loops: raw numbers to reflectance on the area's grid, mask values to view codes."""

from __future__ import annotations

import numpy as np
from numba import njit

_FILL_CODE = np.uint8(255)


@njit(cache=True, nogil=True, inline="always")
def _value(raw: float, fill: float, low: float, high: float) -> float:
    """Return the raw number, NaN where it is fill or out of range (fill is tested before any scaling)."""
    if raw == fill or not (low <= raw <= high):
        return np.nan
    return raw


@njit(cache=True, nogil=True)
def copy_band(raw, origin, numbers, out, code):  # type: ignore[no-untyped-def]
    """Scale a source on the same pixels.

    Parameters
    ----------
    raw : ndarray, shape (row, column)
        Part of the source.
    origin : (int, int)
        Row and column of ``out[0, 0]`` in ``raw``; may lie outside.
    numbers : (float, float, float, float, float)
        Scale, offset, fill (NaN where none), least and greatest valid raw number.
    out : ndarray of float32, shape (row, column)
        Filled with reflectance, NaN where there is none.
    code : ndarray of uint8, shape (row, column)
        Set to 255 where ``out`` is NaN.

    Returns
    -------
    int
        Number of finite pixels.
    """
    scale, offset, fill, low, high = numbers
    n = 0
    for i in range(out.shape[0]):
        r = i + origin[0]
        for j in range(out.shape[1]):
            c = j + origin[1]
            value = np.nan
            if 0 <= r < raw.shape[0] and 0 <= c < raw.shape[1]:
                value = _value(float(raw[r, c]), fill, low, high)
            if not np.isnan(value):
                out[i, j] = np.float32(value * scale + offset)
                n += 1
            else:
                out[i, j] = np.nan
                code[i, j] = _FILL_CODE
    return n


@njit(cache=True, nogil=True)
def _brackets(position, size):  # type: ignore[no-untyped-def]
    """Return lower and upper index and the upper's weight for positions (centre of pixel 0 = 0); index -1 for NaN."""
    lower = np.full(position.size, -1, np.int64)
    upper = np.full(position.size, -1, np.int64)
    weight = np.zeros(position.size, np.float32)
    for k in range(position.size):
        if not np.isnan(position[k]):
            base = np.floor(position[k])
            lower[k] = min(max(int(base), 0), size - 1)
            upper[k] = min(max(int(base) + 1, 0), size - 1)
            weight[k] = position[k] - base
    return lower, upper, weight


@njit(cache=True, nogil=True)
def _patched(a, b, c, d, fy, fx):  # type: ignore[no-untyped-def]
    """Interpolate between those of four corners (a b above c d) that hold data; NaN where the nearest holds none."""
    left, lower = fx < 0.5, fy >= 0.5
    near = (c if left else d) if lower else (a if left else b)
    if np.isnan(near):
        return np.float32(np.nan)
    total = 0.0
    weight = 0.0
    for k in range(4):
        value = a if k == 0 else b if k == 1 else c if k == 2 else d
        w = (fy if k > 1 else 1.0 - fy) * (fx if k % 2 else 1.0 - fx)
        if not np.isnan(value) and w > 0.0:
            total += w * value
            weight += w
    return np.float32(total / weight)


@njit(cache=True, nogil=True)
def interpolate_band(raw, rows, cols, numbers, out, code):  # type: ignore[no-untyped-def]
    """Scale a coarser or offset source by bilinear interpolation between the pixel centres that hold data.

    Parameters
    ----------
    raw : ndarray, shape (row, column)
    rows, cols : ndarray of float64
        Position of each output row and column in ``raw``: 0 is the centre of its first pixel. NaN where the output
        pixel's centre lies off the source.
    numbers, out, code
        As in :func:`copy_band`.

    Returns
    -------
    int
        Number of finite pixels. A pixel whose nearest source pixel holds no data is NaN; else the weights of source
        pixels without data go to the others.
    """
    scale, offset, fill, low, high = numbers
    ready = np.empty(raw.shape, np.float32)
    for i in range(raw.shape[0]):
        for j in range(raw.shape[1]):
            ready[i, j] = _value(float(raw[i, j]), fill, low, high) * scale + offset
    r0, r1, fy = _brackets(rows, raw.shape[0])
    c0, c1, fx = _brackets(cols, raw.shape[1])
    n = 0
    for i in range(out.shape[0]):
        for j in range(out.shape[1]):
            value = np.float32(np.nan)
            if r0[i] >= 0 and c0[j] >= 0:
                a, b = ready[r0[i], c0[j]], ready[r0[i], c1[j]]
                c, d = ready[r1[i], c0[j]], ready[r1[i], c1[j]]
                top = a + fx[j] * (b - a)
                value = top + fy[i] * (c + fx[j] * (d - c) - top)
                if np.isnan(value):
                    value = _patched(a, b, c, d, fy[i], fx[j])
            out[i, j] = value
            if np.isnan(value):
                code[i, j] = _FILL_CODE
            else:
                n += 1
    return n


@njit(cache=True, nogil=True)
def decode_mask(raw, rows, cols, table, code):  # type: ignore[no-untyped-def]
    """Look up view codes of the nearest mask pixels.

    Parameters
    ----------
    raw : ndarray of unsigned integer, shape (row, column)
    rows, cols : ndarray of int64
        Row and column in ``raw`` of each output row and column, -1 where off the source.
    table : ndarray of uint8, shape (65536,)
    code : ndarray of uint8, shape (row, column)
        Filled; 255 off the source.

    Returns
    -------
    (int, int)
        Number of pixels that are clear, and that are not fill.
    """
    clear = 0
    seen = 0
    for i in range(code.shape[0]):
        r = rows[i]
        for j in range(code.shape[1]):
            c = cols[j]
            value = _FILL_CODE
            if r >= 0 and c >= 0:
                value = table[raw[r, c]]
            code[i, j] = value
            clear += value == 0
            seen += value != 255
    return clear, seen


@njit(cache=True, nogil=True, inline="always")
def cubic_tap(f, k):  # type: ignore[no-untyped-def]
    """Return the weight of tap ``k`` (0..3, the pixels from -1 to 2) of cubic convolution at fraction ``f``.

    Keys 1981 (IEEE Trans. Acoust. Speech Signal Process. 29:1153), a = -0.5.
    """
    if k == 0:
        return ((-0.5 * f + 1.0) * f - 0.5) * f
    if k == 1:
        return (1.5 * f - 2.5) * f * f + 1.0
    if k == 2:
        return ((-1.5 * f + 2.0) * f + 0.5) * f
    return (0.5 * f - 0.5) * f * f


@njit(cache=True, nogil=True)
def shift_block(values, code, dy, dx, out, out_code, strict):  # type: ignore[no-untyped-def]  # noqa: PLR0912
    """Cubic convolution of all bands at (row + dy, column + dx); codes by the worst of the pixels that weigh most."""
    bands, height, width = values.shape
    iy, ix = int(np.floor(dy)), int(np.floor(dx))
    fy, fx = dy - iy, dx - ix
    ty = np.array([cubic_tap(fy, k) for k in range(4)])
    tx = np.array([cubic_tap(fx, k) for k in range(4)])
    least = 0.999 if strict else 0.5
    for i in range(height):
        for j in range(width):
            worst = np.uint8(0)
            inside = True
            for a in range(2):
                for b in range(2):
                    share = (fy if a else 1.0 - fy) * (fx if b else 1.0 - fx)
                    if share > 0.05:
                        r, c = i + iy + a, j + ix + b
                        if 0 <= r < height and 0 <= c < width:
                            worst = max(worst, code[r, c])
                        else:
                            inside = False
            out_code[i, j] = worst if inside else _FILL_CODE
            if not inside:
                out[:, i, j] = np.nan
                continue
            for band in range(bands):
                total = 0.0
                weight = 0.0
                for a in range(4):
                    if ty[a] != 0.0:
                        r = min(max(i + iy - 1 + a, 0), height - 1)
                        for b in range(4):
                            w = ty[a] * tx[b]
                            if w != 0.0:
                                value = values[band, r, min(max(j + ix - 1 + b, 0), width - 1)]
                                if not np.isnan(value):
                                    total += w * value
                                    weight += w
                out[band, i, j] = np.float32(total / weight) if weight > least else np.nan


@njit(cache=True, nogil=True)
def median_and_spread(stack, need):  # type: ignore[no-untyped-def]
    """Return median and 1.4826 x median absolute deviation over the first axis, without NaN.

    Parameters
    ----------
    stack : ndarray of float32, shape (view, place)
    need : int
        The median is NaN where fewer views have a number.

    Returns
    -------
    (ndarray, ndarray) of float32, shape (place,)
    """
    n, places = stack.shape
    middle = np.full(places, np.nan, np.float32)
    spread = np.full(places, np.nan, np.float32)
    values = np.empty(n, np.float32)
    for p in range(places):
        count = 0
        for k in range(n):
            if not np.isnan(stack[k, p]):
                values[count] = stack[k, p]
                count += 1
        if count == 0:
            continue
        m = np.median(values[:count])
        spread[p] = np.float32(1.4826) * np.median(np.abs(values[:count] - m))
        if count >= need:
            middle[p] = m
    return middle, spread
