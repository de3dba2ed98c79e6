"""Compiled kernels of fast forest scoring: ranks of feature values, and trees over blocks of rows."""

from __future__ import annotations

import numba as nb
import numpy as np

from inundate.pixels.lanes import LANES, choose

ROWS = 512
"""Rows whose value range prunes the trees together; a multiple of ``LANES``."""
MOST_LEAVES = 255
ZERO_REACH = float(np.float32(1e-35))
"""Values this near to zero are zero to LightGBM."""
MISSING_NONE, MISSING_ZERO, MISSING_NAN = 0, 1, 2


@nb.njit(nogil=True, cache=True, error_model="numpy")
def bucket_of(x, low, scale, most):  # type: ignore[no-untyped-def]
    """Bucket of a value: never falls as the value rises, so whole buckets compare as their values do."""
    place = (x - low) * scale
    place = place if place > 0.0 else 0.0  # also what inf times a scale of zero gives
    place = place if place < most else most
    return np.uint64(np.int64(place))


@nb.njit(nogil=True, cache=True, error_model="numpy")
def rank_column(x, n, out, at, thresholds, first, setting, steps, missing, code):  # type: ignore[no-untyped-def]
    """Write how many thresholds lie below each of ``n`` values; missing ones get ``code``."""
    low, scale, most = setting
    for r in range(n):
        v = np.float64(x[r])
        if np.isnan(v):
            if missing == MISSING_NAN:
                out[at + np.uint64(r)] = code
                continue
            v = 0.0
        if abs(v) <= ZERO_REACH:
            v = 0.0
            if missing == MISSING_ZERO:
                out[at + np.uint64(r)] = code
                continue
        k = np.uint64(first[bucket_of(v, low, scale, most)])
        for _ in range(steps):
            k += np.uint64(thresholds[k] < v)
        out[at + np.uint64(r)] = k


@nb.njit(nogil=True, cache=True, error_model="numpy")
def _prune(tree, nodes, low, high, work):  # type: ignore[no-untyped-def]
    """List the nodes of one tree that the block's value ranges leave undecided; returns their number and the last leaf.

    ``work`` holds stacks and the list: column and threshold by position, offsets of left and right source.
    """
    column, threshold, left, right = nodes
    list_column, list_threshold, list_source, stack_node, stack_place = work
    depth, count, leaf = 1, 0, np.uint64(0)
    stack_node[0], stack_place[0] = tree, 2 * MOST_LEAVES
    while depth > 0:
        depth -= 1
        node, place = stack_node[depth], np.uint64(stack_place[depth])
        while node >= 0:
            at = np.uint64(node)
            c, t = np.uint64(column[at]), threshold[at]
            if high[c] <= t:
                node = left[at]
            elif low[c] > t:
                node = right[at]
            else:
                break
        if node < 0:
            leaf = np.uint64(~node)
            list_source[place] = leaf * np.uint64(LANES)
            continue
        at = np.uint64(node)
        list_source[place] = np.uint64((MOST_LEAVES + 1 + count) * LANES)
        list_column[count] = np.uint64(column[at]) * np.uint64(ROWS)
        list_threshold[count] = threshold[at]
        stack_node[depth], stack_place[depth] = right[at], 2 * count + 1
        stack_node[depth + 1], stack_place[depth + 1] = left[at], 2 * count
        depth += 2
        count += 1
    return count, leaf


@nb.njit(nogil=True, cache=True, error_model="numpy")
def _run(count, blocks, codes, work, slots, base, leaves, total):  # type: ignore[no-untyped-def]
    """Find every row's leaf from the undecided nodes, children before parents, and add its value."""
    list_column, list_threshold, list_source = work[0], work[1], work[2]
    root = base + np.uint64((MOST_LEAVES + 1) * LANES)
    for block in range(blocks):
        shift = np.uint64(block * LANES)
        for step in range(count):
            j = np.uint64(count - 1 - step)
            choose(
                codes,
                list_column[j] + shift,
                list_threshold[j],
                slots,
                base + list_source[np.uint64(2) * j],
                base + list_source[np.uint64(2) * j + np.uint64(1)],
                root + j * np.uint64(LANES),
            )
        for r in range(LANES):
            lane = np.uint64(r)
            total[shift + lane] += leaves[slots[root + lane]]


@nb.njit(nogil=True, cache=True, error_model="numpy")
def _aligned(size, like):  # type: ignore[no-untyped-def]
    """Array of at least ``size`` bytes-wide items that starts on a 64-byte line."""
    room = np.zeros(size + 64 // like.itemsize, like.dtype)
    skip = (-room.ctypes.data % 64) // like.itemsize
    return room[skip : skip + size]


@nb.njit(nogil=True, cache=True, error_model="numpy")
def score_rows(x, columns, nodes, trees, out):  # type: ignore[no-untyped-def]
    """Fill ``out`` (output, row; int64 fixed point) with the sum of leaf values of each output's trees."""
    feature, missing, code, thresholds, thr_at, first, first_at, setting, steps = columns
    root, leaf_at, leaves, output_at = trees
    threshold = nodes[1]
    width, outputs = feature.size, output_at.size - 1
    codes = _aligned(width * ROWS, threshold)
    low, high = np.zeros(width, threshold.dtype), np.zeros(width, threshold.dtype)
    slots = _aligned((2 * MOST_LEAVES + 2) * LANES, np.zeros(1, np.uint8))
    base = np.uint64(0)
    for leaf in range(MOST_LEAVES + 1):
        slots[leaf * LANES : (leaf + 1) * LANES] = leaf
    work = (
        np.zeros(MOST_LEAVES, np.uint64),
        np.zeros(MOST_LEAVES, threshold.dtype),
        np.zeros(2 * MOST_LEAVES + 1, np.uint64),
        np.zeros(2 * MOST_LEAVES, np.int64),
        np.zeros(2 * MOST_LEAVES, np.int64),
    )
    total = _aligned(ROWS, np.zeros(1, np.int64))
    for start in range(0, x.shape[0], ROWS):
        n = min(ROWS, x.shape[0] - start)
        blocks = (n + LANES - 1) // LANES
        for c in range(width):
            rank_column(
                x[start : start + n, feature[c]],
                n,
                codes,
                np.uint64(c * ROWS),
                thresholds[thr_at[c] : thr_at[c + 1]],
                first[first_at[c] : first_at[c + 1]],
                (setting[c, 0], setting[c, 1], setting[c, 2]),
                steps[c],
                missing[c],
                code[c],
            )
            mine = codes[c * ROWS : c * ROWS + n]
            low[c], high[c] = mine.min(), mine.max()
        for o in range(outputs):
            total[:] = 0
            fixed = np.int64(0)
            for t in range(output_at[o], output_at[o + 1]):
                values = leaves[leaf_at[t] : leaf_at[t + 1]]
                count, leaf = _prune(root[t], nodes, low, high, work)
                if count == 0:
                    fixed += values[leaf]
                else:
                    _run(count, blocks, codes, work, slots, base, values, total)
            for r in range(n):
                out[o, start + r] = total[r] + fixed
