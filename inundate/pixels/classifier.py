"""The water classifier: a boosted forest with grouped validation, calibration by leaf state and a measure of the unlike."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from scipy.special import logit
from sklearn.base import BaseEstimator, ClassifierMixin
from sklearn.utils.multiclass import check_classification_targets
from sklearn.utils.validation import _check_sample_weight, check_is_fitted, validate_data

from inundate.common.codes import BAND_ROLES
from inundate.common.errors import InputError
from inundate.pixels.boosting import BoostOptions, out_of_fold, train
from inundate.pixels.calibration import Calibration
from inundate.pixels.card import make_card, read_model, write_model
from inundate.pixels.features import FEATURES
from inundate.pixels.folds import FoldOptions, Folds, make_folds, row_keys
from inundate.pixels.forest import FastForest
from inundate.pixels.mislabelled import doubtful
from inundate.pixels.scoring import error_table, leaf_state_names
from inundate.pixels.unlike import Likeness

STARTER = "starter"
"""Value of ``source`` that marks starter examples: they train but are not scored when own examples of both classes exist."""

_FEW_TREES = 60  # forest size where there are too few groups to find it; common practice, no source


class WaterClassifier(ClassifierMixin, BaseEstimator):
    """Probability of water for pixels.

    Parameters
    ----------
    n_trees : int
        Most trees; the number used is the one at which the out-of-fold loss is least.
    n_leaves, learning_rate, min_weight, l2, feature_share
        Shape of the forest, see :class:`~inundate.pixels.boosting.BoostOptions`.
    wetland_folds, date_folds, block_days : int
        Folds by wetland, folds by date block, days a date block. A test example's wetland and date block are both
        absent from what its forest was trained on.
    doubt_weight : float
        Weight factor of labels that the other examples contradict (1 keeps them as they are). They are listed in
        ``doubtful_`` whatever the factor.
    shrink : float
        Pull of each leaf state's calibration towards the pooled one.
    monotone : dict of str to int, optional
        Constraint (+1 or -1) by feature name; none by default.
    seed, num_threads : int

    Attributes
    ----------
    classes_ : ndarray, shape (2,)
        Sorted labels; the second is water.
    booster_ : lightgbm.Booster
    feature_names_ : tuple of str
    calibration_ : Calibration
    likeness_ : Likeness
    oof_raw_, oof_probability_ : ndarray, shape (row,)
        Out-of-fold score (log-odds) and cross-fitted calibrated probability of the examples, in the order given; NaN
        for examples that are not scored.
    doubtful_ : DataFrame
        row, label, probability: labels confidently contradicted out of fold.
    error_rates_ : DataFrame
        leaf_state, stratum, value, omission, commission, n, n_water, n_dry, omission_sd, commission_sd, brier,
        log_loss; rows with stratum ``all`` are by leaf state.
    card_ : dict
        All that is written to the JSON card.

    Notes
    -----
    Gradient-boosted trees: Ke et al. 2017 (NeurIPS 30, LightGBM). Missing features are allowed (NaN). The result does not
    depend on row order or threads.

    Examples
    --------
    >>> import numpy as np
    >>> rng = np.random.default_rng(0)
    >>> X = rng.random((200, 3))
    >>> model = WaterClassifier(num_threads=1).fit(X, (X[:, 0] > 0.5).astype(int))
    >>> model.predict([[0.9, 0.5, 0.5], [0.1, 0.5, 0.5]])
    array([1, 0])
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
        doubt_weight: float = 0.25,
        shrink: float = 20.0,
        monotone: dict[str, int] | None = None,
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
        self.doubt_weight = doubt_weight
        self.shrink = shrink
        self.monotone = monotone
        self.seed = seed
        self.num_threads = num_threads

    def __sklearn_tags__(self) -> Any:
        """Binary only; missing values allowed."""
        tags = super().__sklearn_tags__()
        tags.classifier_tags.multi_class = False
        tags.input_tags.allow_nan = True
        return tags

    def fit(
        self,
        X: Any,
        y: Any,
        sample_weight: Any = None,
        *,
        wetland: Any = None,
        date: Any = None,
        leaf_state: Any = None,
        source: Any = None,
        strata: pd.DataFrame | None = None,
    ) -> WaterClassifier:
        """Fit, validate out of fold, calibrate.

        Parameters
        ----------
        X : array-like, shape (row, feature)
            As from :func:`~inundate.pixels.features.features`; NaN where missing.
        y : array-like, shape (row,)
            Two classes; the second in sorted order is water (0/1, or "dry"/"water").
        sample_weight : array-like, shape (row,), optional
            Rows of weight 0 are left out.
        wetland : array-like of text, shape (row,), optional
            Group of each row; without it each distinct row is its own group.
        date : array-like of datetime64, shape (row,), optional
        leaf_state : array-like of int, shape (row,), optional
            Leaf state codes 0..3, -1 unknown.
        source : array-like of text, shape (row,), optional
            ``starter`` marks starter examples.
        strata : DataFrame, one row an example, optional
            More columns (text) by which scores are told apart, such as size class or purity.

        Returns
        -------
        WaterClassifier

        Raises
        ------
        InputError
            One class only, or more than two.
        """
        X, y = validate_data(self, X, y, dtype=np.float64, ensure_all_finite="allow-nan")
        check_classification_targets(y)
        self.classes_, code = np.unique(y, return_inverse=True)
        _check_classes(self.classes_)
        weight = _check_sample_weight(sample_weight, X, dtype=np.float64, ensure_non_negative=True)
        table = _example_info(X, code, wetland, date, leaf_state, source)
        strata = pd.DataFrame(index=range(code.size)) if strata is None else strata.reset_index(drop=True)
        keep = np.flatnonzero(weight > 0)
        if np.unique(code[keep]).size < 2:
            _check_classes(self.classes_[np.unique(code[keep])])
        order = keep[np.lexsort((weight[keep], table["wetland"].to_numpy()[keep], table["key"].to_numpy()[keep]))]
        self._set_names(X.shape[1])
        table = table.iloc[order].reset_index(drop=True)
        self._fit_sorted(X[order], code[order], weight[order], table, strata.iloc[order].reset_index(drop=True))
        self._restore_order(order, code)
        return self

    def _set_names(self, n: int) -> None:
        given = getattr(self, "feature_names_in_", None)
        if given is not None:
            self.feature_names_ = tuple(str(name) for name in given)
        else:
            self.feature_names_ = FEATURES if n == len(FEATURES) else tuple(f"x{i}" for i in range(n))

    def _options(self) -> BoostOptions:
        wanted = self.monotone or {}
        unknown = [name for name in wanted if name not in self.feature_names_]
        if unknown:
            message = f"monotone: {unknown[0]!r} is not a feature; use names among {', '.join(self.feature_names_)}"
            raise InputError(message)
        sign = tuple(int(wanted.get(name, 0)) for name in self.feature_names_) if wanted else None
        return BoostOptions(
            "binary",
            self.n_trees,
            self.n_leaves,
            self.learning_rate,
            self.min_weight,
            self.l2,
            self.feature_share,
            self.seed,
            self.num_threads,
            sign,
        )

    def _fit_sorted(
        self, X: np.ndarray, y: np.ndarray, weight: np.ndarray, info: pd.DataFrame, strata: pd.DataFrame
    ) -> None:
        options = self._options()
        state = info["leaf_state"].to_numpy()
        folds = self._folds(y, info)
        splits = folds.splits()
        raw, best, losses = out_of_fold(X, y, weight, splits, options)
        flagged = np.zeros(y.size, bool)
        probability = self._cross_calibrate(raw, y, weight, state, folds)
        known = np.isfinite(probability)
        flagged[known] = doubtful(probability[known], y[known], weight[known])
        first = probability.copy()
        used = np.where(flagged, weight * self.doubt_weight, weight)
        if flagged.any() and self.doubt_weight < 1 and np.unique(y[used > 0]).size == 2:
            raw, best, losses = out_of_fold(X, y, used, splits, options)
            probability = self._cross_calibrate(raw, y, used, state, folds)
            known = np.isfinite(probability)
        else:
            used = weight
        self.n_trees_ = best or min(self.n_trees, _FEW_TREES)
        self.booster_ = train(X, y, used, options, self.n_trees_)
        self._fast = FastForest.from_booster(self.booster_)
        self.calibration_ = Calibration.fit(raw[known], y[known], used[known], state[known], self.shrink)
        columns = [i for i, name in enumerate(self.feature_names_) if name in BAND_ROLES] or list(range(X.shape[1]))
        self.likeness_ = Likeness.fit(X, tuple(columns), n_centres=64, seed=self.seed)
        self.oof_raw_, self.oof_probability_, self.losses_ = raw, probability, losses
        self._flagged, self._first = flagged, first
        names = pd.DataFrame({"leaf_state": leaf_state_names(state[known])})
        strata = pd.concat([names, strata[known].reset_index(drop=True)], axis=1)
        group = info["wetland"].to_numpy()[known]
        self.error_rates_ = error_table(y[known], probability[known], weight[known], group, strata)
        self.card_ = make_card(self, y, weight, info, folds)

    def _folds(self, y: np.ndarray, info: pd.DataFrame) -> Folds:
        own = info["source"].to_numpy() != STARTER
        if np.unique(y[own]).size < 2:
            own = np.ones(y.size, bool)
        dated = info["date"].notna().to_numpy() & own
        options = FoldOptions(self.wetland_folds, self.date_folds, self.block_days, self.seed)
        date = info["date"].to_numpy("datetime64[D]") if dated.any() else None
        return make_folds(info["wetland"].to_numpy(), date, y, own, options)

    def _cross_calibrate(
        self, raw: np.ndarray, y: np.ndarray, weight: np.ndarray, state: np.ndarray, folds: Folds
    ) -> np.ndarray:
        """Calibrate each wetland fold by the others, so that the probabilities of the card are out of fold as well."""
        out = np.full(y.size, np.nan)
        known = np.isfinite(raw)
        for one in np.unique(folds.wetland[known]):
            mine, rest = known & (folds.wetland == one), known & (folds.wetland != one)
            if not rest.any():
                rest = mine
            found = Calibration.fit(raw[rest], y[rest], weight[rest], state[rest], self.shrink)
            out[mine] = found.apply(raw[mine], state[mine])
        return out

    def _restore_order(self, order: np.ndarray, code: np.ndarray) -> None:
        """Bring per-example results back to the order of the rows given."""

        def back(values: np.ndarray) -> np.ndarray:
            out = np.full(code.size, np.nan)
            out[order] = values
            return out

        self.oof_raw_, self.oof_probability_ = back(self.oof_raw_), back(self.oof_probability_)
        flagged, first = back(self._flagged) == 1, back(self._first)
        rows = np.flatnonzero(flagged)
        self.doubtful_ = pd.DataFrame({"row": rows, "label": self.classes_[code[rows]], "probability": first[rows]})
        del self._flagged, self._first

    def raw_score(self, X: Any) -> np.ndarray:
        """Return the forest's raw score (log-odds before calibration), float64, shape (row,)."""
        X = self._checked(X)
        return self._fast.predict_raw(X, threads=self.num_threads)

    def _checked(self, X: Any) -> np.ndarray:
        check_is_fitted(self, "booster_")
        kinds = [np.float32, np.float64]
        return np.asarray(validate_data(self, X, dtype=kinds, ensure_all_finite="allow-nan", reset=False))

    def probability_of_raw(self, raw: np.ndarray, leaf_state: Any = None) -> np.ndarray:
        """Return calibrated probabilities of raw scores, for those who score by other means; shape (row,)."""
        check_is_fitted(self, "booster_")
        return self.calibration_.apply(raw, leaf_state)

    def predict_proba(self, X: Any, leaf_state: Any = None) -> np.ndarray:
        """Return probabilities of dry and water, float64, shape (row, 2).

        ``leaf_state`` (code, or code a row) picks the calibration; without it the pooled one serves.
        """
        p = self.probability_of_raw(self.raw_score(X), leaf_state)
        return np.column_stack([1 - p, p])

    def decision_function(self, X: Any) -> np.ndarray:
        """Return the calibrated log-odds of water (pooled calibration), shape (row,)."""
        p = self.predict_proba(X)[:, 1]
        return np.asarray(logit(np.clip(p, 1e-15, 1 - 1e-15)))

    def predict(self, X: Any, leaf_state: Any = None) -> np.ndarray:
        """Return the more probable class, shape (row,)."""
        p = self.predict_proba(X, leaf_state)[:, 1]
        return np.asarray(self.classes_[(p > 0.5).astype(int)])

    def unlike(self, X: Any) -> np.ndarray:
        """Return how far pixels lie from all examples, float32, shape (row,).

        In radii of the nearest group of examples: about 99 in 100 examples lie below 1; NaN where every band is missing.
        """
        return self.likeness_.distance(self._checked(X))

    def save(self, folder: str | Path) -> None:
        """Write ``water.txt`` (LightGBM text model) and ``water.json`` (card) into a folder."""
        check_is_fitted(self, "booster_")
        write_model(Path(folder), "water", self.booster_, self.card_)

    @classmethod
    def load(cls, folder: str | Path) -> WaterClassifier:
        """Read what :meth:`save` wrote.

        Raises
        ------
        InputError
            A file is missing or is not of this kind.
        """
        booster, card = read_model(Path(folder), "water")
        model = cls(**card["settings"])
        model.classes_ = np.asarray(card["classes"])
        model.feature_names_ = tuple(card["features"])
        model.n_features_in_ = len(model.feature_names_)
        model.booster_, model.n_trees_ = booster, booster.num_trees()
        model._fast = FastForest.from_booster(booster)
        model.calibration_ = Calibration.from_json(card["calibration"])
        model.likeness_ = Likeness.from_json(card["likeness"])
        model.error_rates_ = pd.DataFrame(card["error_rates"])
        model.card_ = card
        return model


def _check_classes(classes: np.ndarray) -> None:
    if classes.size < 2:
        message = (
            f"labels: one class only ({', '.join(map(str, classes))}); a classifier needs examples of both water and "
            "dry, add some of the other or let the starter examples join"
        )
        raise InputError(message)
    if classes.size > 2:
        message = f"labels: Only binary classification is supported, got {classes.size} classes; use water and dry"
        raise InputError(message)


def _example_info(
    X: np.ndarray, code: np.ndarray, wetland: Any, date: Any, leaf_state: Any, source: Any
) -> pd.DataFrame:
    """Gather what is known of each row: key (content), wetland (group), date, leaf_state, source."""
    n = code.size
    key = row_keys(X, code)
    for name, value in (("wetland", wetland), ("date", date), ("leaf_state", leaf_state), ("source", source)):
        if value is not None and np.shape(value) != (n,):
            message = f"{name}: shape {np.shape(value)} for {n} examples; give one value for each"
            raise InputError(message)
    none = pd.Series(np.full(n, np.datetime64("NaT", "ns")))
    return pd.DataFrame(
        {
            "key": key,
            "wetland": key if wetland is None else np.asarray(wetland).astype(str),
            "date": none if date is None else pd.to_datetime(pd.Series(np.asarray(date))),
            "leaf_state": np.full(n, -1) if leaf_state is None else np.asarray(leaf_state, int),
            "source": np.full(n, "own") if source is None else np.asarray(source).astype(str),
        }
    )
