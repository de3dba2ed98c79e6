"""Exact, fast scoring of trained LightGBM forests over many pixels.

Feature values become ranks among the forest's own thresholds (small integers), so that every test of a tree is a compare
of bytes. Like pixels are put side by side (a counting sort by a coarse key of the features most used), in blocks: a
block's lowest and highest rank settle most tests of a tree at once, and a tree settled whole costs nothing a pixel. What
stays undecided is evaluated for 64 pixels at a time, children before parents, each test one compare and one choice of
leaf numbers. Leaf values are summed as fixed point, so results do not depend on how pixels are ordered or cut into
chunks.

The idea of ranked thresholds and row-parallel tests is that of bit-vector traversal (Lucchese et al. 2015, SIGIR, and its
vectorised form, 2016).
"""

from __future__ import annotations

import math
import warnings
from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import Any

import lightgbm as lgb
import numpy as np

from inundate.common.errors import InputError
from inundate.pixels.forest_kernels import CHUNK, MISSING_NONE, bucket_of, score_rows
from inundate.pixels.forest_text import EXPONENTIAL, SIGMOID, ForestText, Tree, read_forest


class ForestFallbackWarning(UserWarning):
    """A forest cannot be scored by the fast way; LightGBM's own ``predict`` is used."""


_VALUE_BITS = 51
"""Bits of the sum of all trees' largest leaf values; with rounding, sums of high halves stay within 31 bits."""
_LIKE_FEATURES = 6
"""Features by which rows are put in order of likeness."""


class _Columns:
    """Columns of ranks: one for each feature and way with missing values that occurs in the trees."""

    def __init__(self, trees: Sequence[Tree]) -> None:
        keys: dict[tuple[int, int, int], set[float]] = {}
        for tree in trees:
            for key, threshold in zip(self.keys(tree), tree.threshold.tolist(), strict=True):
                keys.setdefault(key, set()).add(threshold + 0.0)
        self.order = sorted(keys)
        self.place = {key: i for i, key in enumerate(self.order)}
        self.thresholds = [np.array(sorted(keys[key])) for key in self.order]
        self.most = max((t.size for t in self.thresholds), default=0)
        self.dtype = np.uint8 if self.most <= np.iinfo(np.uint8).max else np.uint16

    @staticmethod
    def keys(tree: Tree) -> list[tuple[int, int, int]]:
        """Return (feature, missing kind, default left) of each node; the default does not matter without missing kind."""
        missing = (tree.decision >> 2) & 3
        left = np.where(missing == MISSING_NONE, 0, (tree.decision >> 1) & 1)
        return list(zip(tree.feature.tolist(), missing.tolist(), left.tolist(), strict=True))

    def likeness(self, trees: Sequence[Tree]) -> tuple[np.ndarray, np.ndarray]:
        """Return the features most used by the trees, and the quartiles of their thresholds."""
        feature = np.concatenate([t.feature for t in trees] or [np.zeros(0, np.int64)])
        threshold = np.concatenate([t.threshold for t in trees] or [np.zeros(0)])
        count = np.bincount(feature, minlength=1)
        most = np.argsort(-count, kind="stable")[:_LIKE_FEATURES]
        most = most[count[most] > 0]
        cuts = [np.quantile(threshold[feature == f], [0.25, 0.5, 0.75], method="nearest") for f in most]
        return most.astype(np.int64), np.array(cuts, np.float64).reshape(-1, 3)

    def tables(self) -> tuple[np.ndarray, ...]:
        """Return the arrays that ``score_rows`` takes."""
        first, setting, steps = [], [], []
        for t in self.thresholds:
            table, values, most = _buckets(t)
            first.append(table)
            setting.append(values)
            steps.append(most)
        padded = [np.concatenate([t, np.full(2, np.inf)]) for t in self.thresholds]
        code = [0 if left else t.size for (_, _, left), t in zip(self.order, self.thresholds, strict=True)]
        return (
            np.array([k[0] for k in self.order], np.int64),
            np.array([k[1] for k in self.order], np.int64),
            np.array(code, self.dtype),
            np.concatenate(padded) if padded else np.zeros(0),
            np.concatenate([[0], np.cumsum([p.size for p in padded])]).astype(np.int64),
            np.concatenate(first).astype(self.dtype) if first else np.zeros(0, self.dtype),
            np.concatenate([[0], np.cumsum([f.size for f in first])]).astype(np.int64),
            np.array(setting, np.float64).reshape(-1, 3),
            np.array(steps, np.int64),
        )


def _buckets(thresholds: np.ndarray) -> tuple[np.ndarray, tuple[float, float, float], int]:
    """Even buckets over the bulk of the thresholds: where ranks start in each, and the most steps to walk from there."""
    size = 1 << max(6, math.ceil(math.log2(16 * max(thresholds.size, 1))))
    trim = thresholds.size // 50
    low, high = float(thresholds[trim]), float(thresholds[thresholds.size - 1 - trim])
    with np.errstate(all="ignore"):
        scale = float(np.float64(size - 2) / np.float64(high - low))
    if not (math.isfinite(scale) and 1e-200 < scale < 1e200):
        scale = 0.0
    low = low - (1.0 / scale if scale > 0 else 0.0)
    most = float(size - 1)
    bucket = np.array([int(bucket_of(t, low, scale, most)) for t in thresholds], np.int64)
    count = np.bincount(bucket, minlength=size)
    first = np.concatenate([[0], np.cumsum(count)[:-1]])
    return first, (low, scale, most), int(max(count.max(), 1))


@dataclass(frozen=True, slots=True)
class _Packed:
    """Arrays for the kernel, for one or more forests."""

    columns: tuple[np.ndarray, ...]
    likeness: tuple[np.ndarray, np.ndarray]
    nodes: tuple[np.ndarray, ...]
    trees: tuple[np.ndarray, ...]
    output_at: np.ndarray
    unit: float


def _pack(forests: Sequence[ForestText]) -> _Packed:
    trees = [tree for forest in forests for tree in forest.trees]
    columns = _Columns(trees)
    column, rank, left, right, root, leaves = [], [], [], [], [], []
    at = 0
    for tree in trees:
        n = tree.feature.size
        place = np.array([columns.place[key] for key in columns.keys(tree)], np.int64)
        column.append(place)
        rank.append(
            [int(np.searchsorted(columns.thresholds[p], t)) for p, t in zip(place, tree.threshold, strict=True)]
        )
        left.append(np.where(tree.left >= 0, tree.left + at, tree.left))
        right.append(np.where(tree.right >= 0, tree.right + at, tree.right))
        root.append(at if n else -1)
        leaves.append(tree.leaf)
        at += n
    reach = max(sum(float(np.abs(leaf).max()) for leaf in leaves), 1e-300) if leaves else 1.0
    unit = 2.0 ** (math.ceil(math.log2(reach)) - _VALUE_BITS)
    whole = [np.rint(leaf / unit).astype(np.int64) for leaf in leaves]
    outputs = np.concatenate([[0], np.cumsum([len(f.trees) for f in forests])]).astype(np.int64)
    empty: list[np.ndarray] = [np.zeros(0, np.int64)]
    nodes = (
        np.concatenate([*empty, *column]).astype(np.int64),
        np.concatenate([*empty, *rank]).astype(columns.dtype),
        np.concatenate([*empty, *left]).astype(np.int64),
        np.concatenate([*empty, *right]).astype(np.int64),
    )
    leaf_at = np.concatenate([[0], np.cumsum([w.size for w in whole])]).astype(np.int64)
    packed_trees = (np.array(root, np.int64), leaf_at, np.concatenate([*empty, *whole]).astype(np.int64))
    return _Packed(columns.tables(), columns.likeness(trees), nodes, packed_trees, outputs, unit)


def _rows(x: object, features: int) -> np.ndarray:
    values = np.asarray(x)
    if values.ndim != 2 or values.shape[1] != features:
        message = (
            f"X has shape {values.shape}; the forest needs (rows, {features}): give its features in training order"
        )
        raise InputError(message)
    if values.dtype not in (np.float32, np.float64):
        values = values.astype(np.float64)
    return values if values.flags.c_contiguous else np.ascontiguousarray(values)


def _score(packed: _Packed, x: np.ndarray, threads: int) -> np.ndarray:
    """Raw scores (output, row), float64."""
    if threads < 1:
        message = f"threads: {threads} is below 1; give the number of threads to use"
        raise InputError(message)
    out = np.empty((packed.output_at.size - 1, x.shape[0]), np.int64)
    share = -(-x.shape[0] // (threads * CHUNK)) * CHUNK
    spans = [slice(i, min(i + share, x.shape[0])) for i in range(0, x.shape[0], share)] if share else []

    def work(span: slice) -> None:
        score_rows(x[span], packed.columns, packed.likeness, packed.nodes, packed.trees, packed.output_at, out[:, span])

    if len(spans) > 1:
        with ThreadPoolExecutor(threads) as pool:
            list(pool.map(work, spans))
    else:
        for span in spans:
            work(span)
    return out * packed.unit


def _convert(raw: np.ndarray, header: dict[str, str]) -> np.ndarray:
    words = header.get("objective", "").split()
    if not words:
        return raw
    if words[0] in EXPONENTIAL:
        return np.exp(raw)
    if words[0] in SIGMOID:
        slope = next((float(w.split(":")[1]) for w in words if w.startswith("sigmoid:")), 1.0)
        return 1.0 / (1.0 + np.exp(-slope * raw))
    if "sqrt" in words:
        return np.sign(raw) * raw * raw
    return raw


class FastForest:
    """A trained LightGBM forest, scored exactly and fast.

    Made by :meth:`from_booster`. A model of a kind that is not supported (see :meth:`supported`) is scored by LightGBM
    itself, after a :class:`ForestFallbackWarning`.

    Attributes
    ----------
    reason : str
        Why LightGBM scores; empty when the fast way is used.
    n_features : int
    """

    def __init__(self, text: ForestText, booster: lgb.Booster | None = None) -> None:
        self._text = text
        self._booster = booster
        self.reason = text.reason
        self._packed = None if text.reason else _pack([text])
        self.n_features = int(text.header.get("max_feature_idx", "-1")) + 1

    @classmethod
    def from_booster(cls, booster: lgb.Booster) -> FastForest:
        """Take over a trained booster (its best iteration, where early stopping set one).

        Parameters
        ----------
        booster : lightgbm.Booster

        Returns
        -------
        FastForest

        Warns
        -----
        ForestFallbackWarning
            If the model is not supported.
        """
        text = read_forest(booster.model_to_string())
        if text.reason:
            message = f"fast scoring does not know this model ({text.reason}); LightGBM scores it, slower"
            warnings.warn(message, ForestFallbackWarning, stacklevel=2)
        return cls(text, booster if text.reason else None)

    @staticmethod
    def supported(booster: lgb.Booster) -> bool:
        """Return whether the booster can be scored the fast way.

        Not supported: several classes, averaged trees, categorical splits, linear leaves, more than 255 leaves a tree,
        objectives with an output transform that is not known here.
        """
        return not read_forest(booster.model_to_string()).reason

    def predict_raw(self, x: np.ndarray, *, threads: int = 1) -> np.ndarray:
        """Sum of leaf values, as ``booster.predict(x, raw_score=True)`` to 1e-6 (in fact to rounding).

        Parameters
        ----------
        x : ndarray of float32 or float64, shape (row, feature)
            Features in training order; NaN is missing. Neighbouring rows alike score fastest.
        threads : int
            Threads to use.

        Returns
        -------
        ndarray of float64, shape (row,)

        Raises
        ------
        InputError
            If the shape does not fit.
        """
        if self._packed is None:
            return self._by_lightgbm(x, threads, raw=True)
        return _score(self._packed, _rows(x, self.n_features), threads)[0]

    def predict(self, x: np.ndarray, *, threads: int = 1) -> np.ndarray:
        """Prediction as ``booster.predict(x)``: probability for a binary objective, the value for regression.

        Parameters and errors as :meth:`predict_raw`.
        """
        if self._packed is None:
            return self._by_lightgbm(x, threads, raw=False)
        return _convert(self.predict_raw(x, threads=threads), self._text.header)

    def _by_lightgbm(self, x: np.ndarray, threads: int, *, raw: bool) -> np.ndarray:
        booster: Any = self._booster
        return np.asarray(booster.predict(_rows(x, self.n_features), raw_score=raw, num_threads=threads))


class JointForest:
    """Several forests over the same features, scored in one pass with one ranking of the feature values.

    Parameters
    ----------
    forests : sequence of FastForest
        All over the same features, in the same order.

    Raises
    ------
    InputError
        If there is none, or they differ in their number of features.
    """

    def __init__(self, forests: Sequence[FastForest]) -> None:
        if not forests or len({f.n_features for f in forests}) != 1:
            counts = [f.n_features for f in forests]
            message = f"joint scoring: forests with {counts} features; give at least one, all over the same features"
            raise InputError(message)
        self._forests = tuple(forests)
        quick = [f._text for f in forests if not f.reason]
        self._packed = _pack(quick) if quick else None

    def predict(self, x: np.ndarray, *, threads: int = 1) -> tuple[np.ndarray, ...]:
        """Return each forest's :meth:`FastForest.predict`, in order."""
        values = _rows(x, self._forests[0].n_features)
        raw = iter(_score(self._packed, values, threads)) if self._packed is not None else iter(())
        return tuple(
            f.predict(values, threads=threads) if f.reason else _convert(next(raw), f._text.header)
            for f in self._forests
        )


__all__ = ["FastForest", "ForestFallbackWarning", "JointForest", "read_forest"]
