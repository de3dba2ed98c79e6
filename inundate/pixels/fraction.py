"""Water fraction of mixed pixels: a boosted regression on mixed examples. A calibrated probability is not a fraction."""

from __future__ import annotations

from pathlib import Path
from typing import Any, cast

import numpy as np
import pandas as pd
from scipy.special import expit
from sklearn.base import BaseEstimator, RegressorMixin
from sklearn.utils.validation import _check_sample_weight, check_is_fitted, validate_data

from inundate.common.errors import InputError
from inundate.common.writing import plain
from inundate.pixels.boosting import BoostOptions, out_of_fold, train
from inundate.pixels.card import read_model, versions, write_model
from inundate.pixels.features import FEATURES
from inundate.pixels.folds import FoldOptions, make_folds, row_keys
from inundate.pixels.forest import FastForest

_BINS = np.linspace(0.0, 1.0, 11)


class FractionModel(RegressorMixin, BaseEstimator):
    """Sub-pixel water fraction.

    Parameters
    ----------
    n_trees, n_leaves, learning_rate, min_weight, l2, feature_share
        Shape of the forest, see :class:`~inundate.pixels.boosting.BoostOptions`.
    wetland_folds, date_folds, block_days : int
        Folds, as in :class:`~inundate.pixels.classifier.WaterClassifier`.
    seed, num_threads : int

    Attributes
    ----------
    booster_ : lightgbm.Booster
    residual_sd_ : ndarray, shape (10,)
        Standard deviation of out-of-fold residuals by tenth of predicted fraction.
    rmse_, bias_ : float
        Out of fold, weighted.
    oof_fraction_ : ndarray, shape (row,)
    card_ : dict

    Notes
    -----
    Boosted trees with the cross-entropy of a fraction (a Bernoulli likelihood with fractional outcome: Papke & Wooldridge
    1996, doi:10.1002/(SICI)1099-1255(199611)11:6<619::AID-JAE418>3.0.CO;2-1), so that predictions stay within 0..1.
    """

    def __init__(
        self,
        *,
        n_trees: int = 200,
        n_leaves: int = 16,
        learning_rate: float = 0.06,
        min_weight: float = 2.0,
        l2: float = 1.0,
        feature_share: float = 0.4,
        wetland_folds: int = 4,
        date_folds: int = 3,
        block_days: int = 30,
        seed: int = 0,
        num_threads: int = 2,
    ) -> None:
        self.n_trees = n_trees
        self.n_leaves = n_leaves
        self.learning_rate = learning_rate
        self.min_weight = min_weight
        self.l2 = l2
        self.feature_share = feature_share
        self.wetland_folds = wetland_folds
        self.date_folds = date_folds
        self.block_days = block_days
        self.seed = seed
        self.num_threads = num_threads

    def __sklearn_tags__(self) -> Any:
        """Missing values allowed; a fraction model is no general regressor."""
        tags = super().__sklearn_tags__()
        tags.input_tags.allow_nan = True
        tags.regressor_tags.poor_score = True
        return tags

    def fit(
        self, X: Any, y: Any, sample_weight: Any = None, *, wetland: Any = None, date: Any = None, scored: Any = None
    ) -> FractionModel:
        """Fit on examples of known fraction.

        Parameters
        ----------
        X : array-like, shape (row, feature)
        y : array-like, shape (row,)
            Water fraction.
        sample_weight : array-like, shape (row,), optional
        wetland : array-like of text, shape (row,), optional
        date : array-like of datetime64, shape (row,), optional
        scored : array-like of bool, shape (row,), optional
            False for rows that only train (starter examples).

        Returns
        -------
        FractionModel

        Raises
        ------
        InputError
            A fraction outside 0..1, or no example of weight above 0.
        """
        X, y = validate_data(self, X, y, dtype=np.float64, ensure_all_finite="allow-nan", y_numeric=True)
        y = np.asarray(y, np.float64)
        if ((y < 0) | (y > 1)).any():
            message = f"y: {y[(y < 0) | (y > 1)][0]:g} is no water fraction; give values from 0 to 1"
            raise InputError(message)
        weight = _check_sample_weight(sample_weight, X, dtype=np.float64, ensure_non_negative=True)
        key = row_keys(X, y)
        group = key if wetland is None else np.asarray(wetland).astype(str)
        days = None if date is None else pd.to_datetime(pd.Series(np.asarray(date))).to_numpy("datetime64[D]")
        own = np.ones(y.size, bool) if scored is None else np.asarray(scored, bool)
        keep = np.flatnonzero(weight > 0)
        if keep.size == 0:
            message = "sample_weight: every example has weight 0; give at least one a weight above 0"
            raise InputError(message)
        order = keep[np.lexsort((weight[keep], group[keep], key[keep]))]
        self.feature_names_ = FEATURES if X.shape[1] == len(FEATURES) else tuple(f"x{i}" for i in range(X.shape[1]))
        self._fit_sorted(
            X[order], y[order], weight[order], group[order], None if days is None else days[order], own[order]
        )
        oof: np.ndarray = np.full(y.size, np.nan)
        oof[order] = self._oof
        self.oof_fraction_ = oof
        del self._oof
        return self

    def _fit_sorted(
        self,
        X: np.ndarray,
        y: np.ndarray,
        weight: np.ndarray,
        group: np.ndarray,
        days: np.ndarray | None,
        own: np.ndarray,
    ) -> None:
        options = BoostOptions(
            "cross_entropy",
            self.n_trees,
            self.n_leaves,
            self.learning_rate,
            self.min_weight,
            self.l2,
            self.feature_share,
            self.seed,
            self.num_threads,
        )
        if not own.any():
            own = np.ones(y.size, bool)
        level = np.clip((y > 1e-3).astype(int) + (y > 0.999), 0, 2)
        level = np.unique(level, return_inverse=True)[1]
        folds = make_folds(
            group, days, level, own, FoldOptions(self.wetland_folds, self.date_folds, self.block_days, self.seed)
        )
        splits = folds.splits() if np.unique(group).size > 1 else []
        raw, best, losses = out_of_fold(X, y, weight, [s for s in splits if s[0].size], options)
        self.n_trees_ = best or min(self.n_trees, 60)
        self.booster_ = train(X, y, weight, options, self.n_trees_)
        self._fast = FastForest.from_booster(self.booster_)
        predicted = expit(raw)
        self._set_residuals(predicted, y, weight)
        self._oof: np.ndarray = predicted
        self.card_ = self._card(y.size, losses)

    def _set_residuals(self, predicted: np.ndarray, y: np.ndarray, weight: np.ndarray) -> None:
        known = np.isfinite(predicted)
        if not known.any():
            self.rmse_, self.bias_, self.residual_sd_ = np.nan, np.nan, np.full(10, np.nan)
            return
        gap, w = (predicted - y)[known], weight[known]
        self.rmse_ = float(np.sqrt(np.average(gap**2, weights=w)))
        self.bias_ = float(np.average(gap, weights=w))
        place = np.clip(np.searchsorted(_BINS, predicted[known], side="right") - 1, 0, 9)
        count = np.bincount(place, weights=w, minlength=10)
        square = np.bincount(place, weights=w * gap**2, minlength=10)
        self.residual_sd_ = np.sqrt((square + 5 * self.rmse_**2) / (count + 5))  # five pooled examples a bin

    def _card(self, n: int, losses: list[float]) -> dict[str, Any]:
        values = {
            "kind": "water fraction",
            "settings": self.get_params(),
            "features": self.feature_names_,
            "n_trees": self.n_trees_,
            "n": n,
            "rmse": self.rmse_,
            "bias": self.bias_,
            "residual_sd": self.residual_sd_,
            "loss_by_trees": [round(v, 6) for v in losses],
            "versions": versions(),
        }
        return cast("dict[str, Any]", plain(values))

    def predict(self, X: Any) -> np.ndarray:
        """Return water fractions, float64, shape (row,), within 0..1."""
        check_is_fitted(self, "booster_")
        kinds = [np.float32, np.float64]
        X = np.asarray(validate_data(self, X, dtype=kinds, ensure_all_finite="allow-nan", reset=False))
        return np.clip(self._fast.predict(X, threads=self.num_threads), 0.0, 1.0)

    def sd(self, fraction: np.ndarray) -> np.ndarray:
        """Return the standard deviation of predicted fractions, by their tenth; shape as given."""
        check_is_fitted(self, "booster_")
        fraction = np.asarray(fraction, float)
        place = np.clip(np.searchsorted(_BINS, fraction, side="right") - 1, 0, 9)
        return np.where(np.isfinite(fraction), self.residual_sd_[place], np.nan)

    def save(self, folder: str | Path) -> None:
        """Write ``fraction.txt`` and ``fraction.json`` into a folder."""
        check_is_fitted(self, "booster_")
        write_model(Path(folder), "fraction", self.booster_, self.card_)

    @classmethod
    def load(cls, folder: str | Path) -> FractionModel:
        """Read what :meth:`save` wrote.

        Raises
        ------
        InputError
            A file is missing or cannot be read.
        """
        booster, card = read_model(Path(folder), "fraction")
        model = cls(**card["settings"])
        model.booster_, model.n_trees_, model.card_ = booster, booster.num_trees(), card
        model._fast = FastForest.from_booster(booster)
        model.feature_names_ = tuple(card["features"])
        model.n_features_in_ = len(model.feature_names_)
        sd = [np.nan if v is None else v for v in card["residual_sd"]]
        model.residual_sd_ = np.asarray(sd, float)
        model.rmse_ = np.nan if card["rmse"] is None else card["rmse"]
        model.bias_ = np.nan if card["bias"] is None else card["bias"]
        return model
