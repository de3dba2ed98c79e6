"""Folds whose test examples share neither wetland nor date block with their training examples."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass

import numpy as np
import pandas as pd


@dataclass(frozen=True, slots=True)
class Folds:
    """Fold of every example along both groupings.

    Attributes
    ----------
    wetland, date : ndarray of int16, shape (row,)
        Fold by wetland and fold by date block; all 0 where a grouping is absent.
    scored : ndarray of bool, shape (row,)
        Examples that are predicted out of fold; the others (starter examples) only ever train.
    """

    wetland: np.ndarray
    date: np.ndarray
    scored: np.ndarray

    def splits(self) -> list[tuple[np.ndarray, np.ndarray]]:
        """Return (train rows, test rows) of every cell of wetland fold by date fold that holds a scored example."""
        by_wetland = int(self.wetland.max(initial=0)) > 0
        by_date = int(self.date.max(initial=0)) > 0
        out = []
        for one in np.unique(self.wetland[self.scored]):
            for two in np.unique(self.date[self.scored]):
                test = self.scored & (self.wetland == one) & (self.date == two)
                if not test.any():
                    continue
                apart = np.ones(test.size, bool)
                if by_wetland:
                    apart &= self.wetland != one
                if by_date:
                    apart &= self.date != two
                train = apart | ~self.scored
                out.append((np.flatnonzero(train & ~test), np.flatnonzero(test)))
        return out


def row_keys(X: np.ndarray, y: np.ndarray) -> np.ndarray:
    """Return a text key of each row's content, so that equal rows stay together; shape (row,)."""
    joined = np.ascontiguousarray(np.column_stack([X, y]).astype(np.float64))
    return np.array([hashlib.blake2b(one.tobytes(), digest_size=8).hexdigest() for one in joined])


def date_blocks(date: np.ndarray, block_days: int) -> np.ndarray:
    """Return the number of the block of ``block_days`` that each date falls in (int64); NaT gives -1."""
    stamps = np.asarray(date, dtype="datetime64[D]")
    days = stamps.astype(np.int64)
    return np.where(np.isnat(stamps), -1, days // max(block_days, 1))


def deal(groups: np.ndarray, classes: np.ndarray, n_folds: int, seed: int) -> np.ndarray:
    """Deal whole groups to folds so that each class is spread evenly.

    Parameters
    ----------
    groups : ndarray, shape (row,)
        Group of each row (any type with a text form).
    classes : ndarray of int, shape (row,)
        Class of each row, 0..c-1.
    n_folds : int
    seed : int
        Breaks ties between groups of equal size; rows may come in any order.

    Returns
    -------
    ndarray of int16, shape (row,)
        Fold 0..k-1, k at most the number of groups.
    """
    table = pd.crosstab(np.asarray(groups).astype(str), np.asarray(classes))
    names = table.index.to_numpy()
    counts = table.to_numpy(float)
    k = max(1, min(n_folds, names.size))
    tie = [hashlib.blake2b(f"{seed}\x1f{name}".encode(), digest_size=8).hexdigest() for name in names]
    order = sorted(range(names.size), key=lambda i: (-counts[i].sum(), tie[i]))
    share = counts / np.maximum(counts.sum(axis=0), 1.0)
    load = np.zeros((k, counts.shape[1]))
    fold = np.zeros(names.size, np.int16)
    for i in order:
        cost = ((load + share[i]) ** 2).sum(axis=1) - (load**2).sum(axis=1)
        fold[i] = int(np.argmin(cost))
        load[fold[i]] += share[i]
    return fold[np.searchsorted(names, np.asarray(groups).astype(str))]


def make_folds(
    wetland: np.ndarray, date: np.ndarray | None, classes: np.ndarray, scored: np.ndarray, options: FoldOptions
) -> Folds:
    """Assign every example to a wetland fold and a date fold.

    Parameters
    ----------
    wetland : ndarray of text, shape (row,)
    date : ndarray of datetime64, shape (row,), or None
    classes : ndarray of int, shape (row,)
    scored : ndarray of bool, shape (row,)
    options : FoldOptions

    Returns
    -------
    Folds
    """
    n = classes.size
    by_wetland, by_date = np.zeros(n, np.int16), np.zeros(n, np.int16)
    by_wetland[scored] = deal(wetland[scored], classes[scored], options.wetland_folds, options.seed)
    if date is not None and scored.any():
        blocks = date_blocks(date, options.block_days)
        by_date[scored] = deal(blocks[scored], classes[scored], options.date_folds, options.seed + 1)
    return Folds(by_wetland, by_date, scored)


@dataclass(frozen=True, slots=True)
class FoldOptions:
    """How folds are made: numbers of folds, days a date block, seed of ties."""

    wetland_folds: int = 5
    date_folds: int = 4
    block_days: int = 30
    seed: int = 0
