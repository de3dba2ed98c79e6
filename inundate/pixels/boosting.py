"""Deterministic LightGBM training, and out-of-fold scores with one number of trees for all folds."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import lightgbm as lgb
import numpy as np

Splits = Sequence[tuple[np.ndarray, np.ndarray]]


@dataclass(frozen=True, slots=True)
class BoostOptions:
    """Settings of a boosted forest, in LightGBM's terms; ``min_weight`` is its ``min_sum_hessian_in_leaf``."""

    objective: str = "binary"
    n_trees: int = 200
    n_leaves: int = 31
    learning_rate: float = 0.06
    min_weight: float = 2.0
    l2: float = 1.0
    feature_share: float = 0.6
    seed: int = 0
    num_threads: int = 2
    monotone: tuple[int, ...] | None = None

    def parameters(self) -> dict[str, object]:
        """Return the LightGBM parameter dictionary."""
        out: dict[str, object] = {
            "objective": self.objective,
            "num_leaves": self.n_leaves,
            "learning_rate": self.learning_rate,
            "min_data_in_leaf": 1,
            "min_data_in_bin": 1,
            "min_sum_hessian_in_leaf": self.min_weight,
            "lambda_l2": self.l2,
            "feature_fraction_bynode": self.feature_share,
            "feature_pre_filter": False,
            "seed": self.seed,
            "deterministic": True,
            "force_row_wise": True,
            "num_threads": self.num_threads,
            "verbosity": -1,
        }
        if self.monotone is not None and any(self.monotone):
            out["monotone_constraints"] = list(self.monotone)
        return out


def train(X: np.ndarray, y: np.ndarray, weight: np.ndarray, options: BoostOptions, n_trees: int) -> lgb.Booster:
    """Train ``n_trees`` trees on all rows."""
    parameters = options.parameters()
    data = lgb.Dataset(X, y, weight=weight, params=parameters, free_raw_data=True)
    return lgb.train(parameters, data, num_boost_round=n_trees)


def out_of_fold(
    X: np.ndarray, y: np.ndarray, weight: np.ndarray, splits: Splits, options: BoostOptions
) -> tuple[np.ndarray, int, list[float]]:
    """Return raw out-of-fold scores, the number of trees that all folds together like best, and the loss by trees.

    Parameters
    ----------
    X : ndarray, shape (row, feature)
    y, weight : ndarray, shape (row,)
    splits : sequence of (train rows, test rows)
        Cells whose training rows hold one class only are passed over.
    options : BoostOptions

    Returns
    -------
    raw : ndarray of float64, shape (row,)
        Raw score with that number of trees; NaN for rows in no test set.
    n_trees : int
        At least 1; 0 where no cell could be trained.
    losses : list of float
        Mean loss after each tree over all test rows.
    """
    raw = np.full(y.size, np.nan)
    boosters: list[tuple[lgb.Booster, np.ndarray]] = []
    total, mass = np.zeros(options.n_trees), 0.0
    parameters = options.parameters()
    for rows, test in splits:
        if options.objective == "binary" and np.unique(y[rows][weight[rows] > 0]).size < 2:
            continue
        data = lgb.Dataset(X[rows], y[rows], weight=weight[rows], params=parameters)
        held = lgb.Dataset(X[test], y[test], weight=weight[test], reference=data, params=parameters)
        history: dict[str, dict[str, list[float]]] = {}
        booster = lgb.train(
            parameters,
            data,
            num_boost_round=options.n_trees,
            valid_sets=[held],
            valid_names=["held"],
            callbacks=[lgb.record_evaluation(history)],
        )
        losses = np.asarray(next(iter(history["held"].values())), float)
        losses = np.pad(losses, (0, options.n_trees - losses.size), mode="edge")
        total += losses * weight[test].sum()
        mass += float(weight[test].sum())
        boosters.append((booster, test))
    if not boosters or mass <= 0:
        return raw, 0, []
    mean = total / mass
    best = int(np.argmin(mean)) + 1
    for booster, test in boosters:
        raw[test] = booster.predict(X[test], raw_score=True, num_iteration=best, num_threads=options.num_threads)
    return raw, best, [float(v) for v in mean]
