"""Which parts of a file to read for a set of windows: few large reads, whole tiles counted, each window in one read."""

from __future__ import annotations

from functools import lru_cache

import numpy as np

Box = tuple[int, int, int, int]
"""Half-open (row0, row1, col0, col1) in a file's own pixels."""

READ_COST_PX = 6000.0
"""Cost of one read call in pixels decoded; measured by tests/bench/reading.py, only its order of size matters."""
MAX_READ_PX = 4_194_304
"""Largest read of several windows together; bounds the raw buffer."""


@lru_cache(maxsize=256)
def plan_reads(
    boxes: tuple[Box, ...], tile: tuple[int, int], size: tuple[int, int]
) -> tuple[tuple[Box, tuple[int, ...]], ...]:
    """Group boxes into reads of least cost.

    Parameters
    ----------
    boxes : tuple of Box
        Parts wanted, not empty, inside the file.
    tile : (int, int)
        Rows and columns of the file's internal tiles (strips are tiles as wide as the file).
    size : (int, int)
        Rows and columns of the file.

    Returns
    -------
    tuple of (Box, tuple of int)
        What to read, and which boxes (positions, ascending) it serves. Each box is served by exactly one read.
    """
    if not boxes:
        return ()
    table = np.array(boxes, np.int64)
    groups = _split(table, np.arange(len(boxes)), tile, size)[1]
    out = []
    for members in groups:
        box = _hull(table[members])
        out.append(((int(box[0]), int(box[1]), int(box[2]), int(box[3])), tuple(sorted(int(m) for m in members))))
    return tuple(sorted(out))


def _hull(table: np.ndarray) -> np.ndarray:
    return np.array([table[:, 0].min(), table[:, 1].max(), table[:, 2].min(), table[:, 3].max()])


def _cost(box: np.ndarray, tile: tuple[int, int], size: tuple[int, int]) -> float:
    rows = min(-(-box[1] // tile[0]) * tile[0], size[0]) - box[0] // tile[0] * tile[0]
    cols = min(-(-box[3] // tile[1]) * tile[1], size[1]) - box[2] // tile[1] * tile[1]
    return READ_COST_PX + float(rows) * float(cols)


def _split(
    table: np.ndarray, members: np.ndarray, tile: tuple[int, int], size: tuple[int, int]
) -> tuple[float, list[np.ndarray]]:
    """Return the least cost found for some boxes and their groups: read together, or cut in two at the widest gap."""
    box = _hull(table[members])
    whole = _cost(box, tile, size)
    if members.size == 1:
        return whole, [members]
    area = float((box[1] - box[0]) * (box[3] - box[2]))
    single = sum(_cost(table[m], tile, size) for m in members) if members.size <= 64 else np.inf
    if whole <= single / members.size + READ_COST_PX and area <= MAX_READ_PX:
        return whole, [members]
    axis = 0 if box[1] - box[0] >= box[3] - box[2] else 2
    centre = table[members, axis] + table[members, axis + 1]
    order = members[np.argsort(centre, kind="stable")]
    half = order.size // 2
    left = _split(table, order[:half], tile, size)
    right = _split(table, order[half:], tile, size)
    if area <= MAX_READ_PX and whole <= left[0] + right[0]:
        return whole, [members]
    return left[0] + right[0], left[1] + right[1]
