"""Compiled kernels of fast forest scoring: ranks of feature values, and trees over blocks of like rows."""

from __future__ import annotations

import numba as nb
import numpy as np

from inundate.pixels.lanes import LANES, TABLE, WIDE, add_looked_up, choose

ROWS = 512
"""Rows whose value range prunes the trees together; a multiple of ``LANES``."""
CHUNK = 64 * ROWS
"""Rows that are put in order of likeness together."""
MOST_LEAVES = 255
ZERO_REACH = float(np.float32(1e-35))
"""Values this near to zero are zero to LightGBM."""
MISSING_NONE, MISSING_ZERO, MISSING_NAN = 0, 1, 2
LOW_BITS = 22
"""Leaf values are summed in two halves: ``LOW_BITS`` bits, and the rest."""
FLUSH_TREES = 256
"""Trees after which the 32-bit sums of halves are emptied into 64 bits."""
_SLOT = MOST_LEAVES + 1


@nb.njit(nogil=True, cache=True, error_model="numpy")
def bucket_of(x, low, scale, most):  # type: ignore[no-untyped-def]
    """Bucket of a value: never falls as the value rises, so whole buckets compare as their values do."""
    place = (x - low) * scale
    place = place if place > 0.0 else 0.0  # also what inf times a scale of zero gives
    place = place if place < most else most
    return np.uint64(np.int64(place))


@nb.njit(nogil=True, cache=True, error_model="numpy")
def rank_column(x, feature, rows, out, at, thresholds, first, setting, steps, missing, code):  # type: ignore[no-untyped-def]
    """Write how many thresholds lie below each row's value; missing ones get ``code``."""
    low, scale, most = setting
    f = np.uint64(feature)
    for r in range(rows.size):
        v = np.float64(x[np.uint64(rows[r]), f])
        v = v if abs(v) > ZERO_REACH else 0.0  # NaN too
        k = np.uint64(first[bucket_of(v, low, scale, most)])
        for _ in range(steps):
            k += np.uint64(thresholds[k] < v)
        out[at + np.uint64(r)] = k
    if missing == MISSING_NAN:
        for r in range(rows.size):
            if np.isnan(x[np.uint64(rows[r]), f]):
                out[at + np.uint64(r)] = code
    elif missing == MISSING_ZERO:
        for r in range(rows.size):
            if not abs(np.float64(x[np.uint64(rows[r]), f])) > ZERO_REACH:
                out[at + np.uint64(r)] = code


@nb.njit(nogil=True, cache=True, error_model="numpy")
def order_alike(x, start, n, likeness, order, keys, heads):  # type: ignore[no-untyped-def]
    """Fill ``order`` with the rows ``start .. start + n - 1``, like rows together (stable counting sort of a coarse key)."""
    feature, cuts = likeness
    heads[:] = 0
    for r in range(n):
        key = np.uint64(0)
        for j in range(feature.size):
            v = np.float64(x[np.uint64(start + r), np.uint64(feature[j])])
            part = np.uint64(v > cuts[j, 0]) + np.uint64(v > cuts[j, 1]) + np.uint64(v > cuts[j, 2])
            part ^= np.uint64(3) * (key & np.uint64(1))  # to and fro, so that neighbours in order are alike
            key = (key << np.uint64(2)) | part
        keys[r] = key
        heads[key + np.uint64(1)] += 1
    for k in range(1, heads.size):
        heads[k] += heads[k - 1]
    for r in range(n):
        key = np.uint64(keys[r])
        order[np.uint64(heads[key])] = start + r
        heads[key] += 1


@nb.njit(nogil=True, cache=True, error_model="numpy")
def _prune(tree, nodes, low, high, work):  # type: ignore[no-untyped-def]
    """List the nodes of one tree that the block's value ranges leave undecided; returns their number and the leaves'.

    ``work`` holds the list (codes' offset and threshold by position, offsets of left and right source), two stacks, and
    the leaves that can be reached.
    """
    column, threshold, left, right = nodes
    list_column, list_threshold, list_source, stack_node, stack_place, reached = work
    depth, count, leaves = 1, 0, 0
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
            list_source[place] = np.uint64(leaves * LANES)
            reached[leaves] = ~node
            leaves += 1
            continue
        at = np.uint64(node)
        list_source[place] = np.uint64((_SLOT + count) * LANES)
        list_column[count] = np.uint64(column[at]) * np.uint64(ROWS)
        list_threshold[count] = threshold[at]
        stack_node[depth], stack_place[depth] = right[at], 2 * count + 1
        stack_node[depth + 1], stack_place[depth + 1] = left[at], 2 * count
        depth += 2
        count += 1
    return count, leaves


@nb.njit(nogil=True, cache=True, error_model="numpy")
def _find_leaves(count, shift, codes, work, slots):  # type: ignore[no-untyped-def]
    """Find the leaf of 64 rows from the undecided nodes, children before parents; it ends up in the first node's slot."""
    list_column, list_threshold, list_source = work[0], work[1], work[2]
    root = np.uint64(_SLOT * LANES)
    for step in range(count):
        j = np.uint64(count - 1 - step)
        choose(
            codes,
            list_column[j] + shift,
            list_threshold[j],
            slots,
            list_source[np.uint64(2) * j],
            list_source[np.uint64(2) * j + np.uint64(1)],
            root + j * np.uint64(LANES),
        )


@nb.njit(nogil=True, cache=True, error_model="numpy")
def _add_values(slots, shift, table, leaves, halves):  # type: ignore[no-untyped-def]
    """Add the values of 64 rows' leaves, low and high half."""
    root = np.uint64(_SLOT * LANES)
    other = np.uint64(ROWS) + shift
    if WIDE and leaves <= TABLE:
        add_looked_up(slots, root, table, np.uint64(0), halves, shift)
        add_looked_up(slots, root, table, np.uint64(_SLOT), halves, other)
    else:
        for r in range(LANES):
            lane = np.uint64(r)
            leaf = np.uint64(slots[root + lane])
            halves[shift + lane] += table[leaf]
            halves[other + lane] += table[np.uint64(_SLOT) + leaf]


@nb.njit(nogil=True, cache=True, error_model="numpy")
def _flush(halves, total):  # type: ignore[no-untyped-def]
    for r in range(ROWS):
        total[r] += (np.int64(halves[ROWS + r]) << LOW_BITS) + np.int64(halves[r])
        halves[r] = 0
        halves[ROWS + r] = 0


@nb.njit(nogil=True, cache=True, error_model="numpy")
def _aligned(size, like):  # type: ignore[no-untyped-def]
    """Array of zeros that starts on a 64-byte line."""
    room = np.zeros(size + 64 // like.itemsize, like.dtype)
    skip = (-room.ctypes.data % 64) // like.itemsize
    return room[skip : skip + size]


@nb.njit(nogil=True, cache=True, error_model="numpy")
def _sum_trees(first, last, blocks, codes, nodes, trees, ranges, work, room, total):  # type: ignore[no-untyped-def]
    """Add the trees ``first .. last - 1`` to ``total``; returns what is the same for all rows."""
    root, leaf_at, leaves = trees
    slots, table, halves = room
    reached = work[5]
    fixed, since = np.int64(0), 0
    for t in range(first, last):
        count, found = _prune(root[t], nodes, ranges[0], ranges[1], work)
        if count == 0:
            fixed += leaves[leaf_at[t] + reached[0]]
            continue
        for k in range(found):
            value = leaves[leaf_at[t] + reached[k]]
            table[k] = value & ((1 << LOW_BITS) - 1)
            table[_SLOT + k] = value >> LOW_BITS
        for block in range(blocks):
            shift = np.uint64(block * LANES)
            _find_leaves(count, shift, codes, work, slots)
            _add_values(slots, shift, table, found, halves)
        since += 1
        if since == FLUSH_TREES:
            _flush(halves, total)
            since = 0
    _flush(halves, total)
    return fixed


@nb.njit(nogil=True, cache=True, error_model="numpy")
def _make_room(width, like):  # type: ignore[no-untyped-def]
    """Scratch space: value ranges, the list of undecided nodes with its stacks, and leaf numbers with their sums."""
    small = np.zeros(1, np.int32)
    slots = _aligned(2 * _SLOT * LANES, np.zeros(1, np.uint8))
    for leaf in range(_SLOT):
        slots[leaf * LANES : (leaf + 1) * LANES] = leaf
    work = (
        np.zeros(MOST_LEAVES, np.uint64),
        np.zeros(MOST_LEAVES, like.dtype),
        np.zeros(2 * MOST_LEAVES + 1, np.uint64),
        np.zeros(2 * MOST_LEAVES, np.int64),
        np.zeros(2 * MOST_LEAVES, np.int64),
        np.zeros(_SLOT, np.int64),
    )
    ranges = (np.zeros(width, like.dtype), np.zeros(width, like.dtype))
    return ranges, work, (slots, _aligned(2 * _SLOT, small), _aligned(2 * ROWS, small))


@nb.njit(nogil=True, cache=True, error_model="numpy")
def _rank_block(x, rows, columns, codes, ranges):  # type: ignore[no-untyped-def]
    """Rank all columns of one block and note their lowest and highest ranks."""
    feature, missing, code, thresholds, thr_at, first, first_at, setting, steps = columns
    for c in range(feature.size):
        rank_column(
            x,
            feature[c],
            rows,
            codes,
            np.uint64(c * ROWS),
            thresholds[thr_at[c] : thr_at[c + 1]],
            first[first_at[c] : first_at[c + 1]],
            (setting[c, 0], setting[c, 1], setting[c, 2]),
            steps[c],
            missing[c],
            code[c],
        )
        mine = codes[c * ROWS : c * ROWS + rows.size]
        ranges[0][c], ranges[1][c] = mine.min(), mine.max()


@nb.njit(nogil=True, cache=True, error_model="numpy")
def score_rows(x, columns, likeness, nodes, trees, output_at, out):  # type: ignore[no-untyped-def]
    """Fill ``out`` (output, row; int64 fixed point) with the sum of leaf values of each output's trees."""
    width, like = columns[0].size, nodes[1]
    codes = _aligned(width * ROWS, like)
    ranges, work, room = _make_room(width, like)
    total = np.zeros(ROWS, np.int64)
    order, keys = np.empty(CHUNK, np.int64), np.empty(CHUNK, np.uint16)
    heads = np.zeros((1 << (2 * likeness[0].size)) + 1, np.int64)
    for begin in range(0, x.shape[0], CHUNK):
        chunk = min(CHUNK, x.shape[0] - begin)
        order_alike(x, begin, chunk, likeness, order, keys, heads)
        for start in range(0, chunk, ROWS):
            n = min(ROWS, chunk - start)
            rows = order[start : start + n]
            _rank_block(x, rows, columns, codes, ranges)
            blocks = (n + LANES - 1) // LANES
            for o in range(output_at.size - 1):
                total[:] = 0
                fixed = _sum_trees(
                    output_at[o], output_at[o + 1], blocks, codes, nodes, trees, ranges, work, room, total
                )
                for r in range(n):
                    out[o, rows[r]] = total[r] + fixed
