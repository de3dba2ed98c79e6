"""One wetland's stage-area relation as a scikit-learn estimator, on the same compiled code as thousands."""

from __future__ import annotations

import numpy as np
import pandas as pd
from sklearn.base import BaseEstimator, RegressorMixin
from sklearn.utils.validation import check_is_fitted, validate_data

from inundate.common.errors import InputError
from inundate.relation.families import FAMILIES
from inundate.relation.fit import fit_relations
from inundate.relation.options import RelationOptions


class StageAreaRelation(RegressorMixin, BaseEstimator):
    """Extent from stage for one wetland.

    Parameters
    ----------
    area_max_m2 : float, optional
        Largest extent, m2; without it the largest area fitted to serves.
    families : tuple of str
        Families to choose among: ``power``, ``power_offset``, ``spline`` (and ``elevation`` with a hypsometry).
    hypsometry : DataFrame, optional
        stage_m, area_m2 of the bowl from elevation.
    level : float
        Share of the truth that bands should hold.
    random_state : int
        Seed of the drawn curves.

    Attributes
    ----------
    family_ : str
        Family chosen by held-out date (row) blocks.
    relation_ : RelationSet
        The fitted set of one wetland, with choices, shifts and table.
    area_max_m2_ : float
    n_features_in_ : int
        Always 1: stage, m.
    """

    def __init__(
        self,
        area_max_m2: float | None = None,
        families: tuple[str, ...] = FAMILIES,
        hypsometry: pd.DataFrame | None = None,
        level: float = 0.90,
        random_state: int = 0,
    ) -> None:
        self.area_max_m2 = area_max_m2
        self.families = families
        self.hypsometry = hypsometry
        self.level = level
        self.random_state = random_state

    def fit(
        self,
        X: np.ndarray,
        y: np.ndarray,
        *,
        stage_sd_m: np.ndarray | None = None,
        area_sd_m2: np.ndarray | None = None,
        dates: np.ndarray | None = None,
    ) -> StageAreaRelation:
        """Fit to pairs.

        Parameters
        ----------
        X : array_like, shape (pair, 1)
            Stage, m.
        y : array_like, shape (pair,)
            Observed extent, m2, not negative.
        stage_sd_m, area_sd_m2 : array_like, shape (pair,), optional
            Standard deviations.
        dates : array_like of datetime64, shape (pair,), optional
            Days of the pairs; without them rows count as consecutive days.

        Raises
        ------
        InputError
            When there is not one feature, or areas are negative.
        """
        X, y = validate_data(self, X, y, y_numeric=True, dtype=float)
        self._one_feature(X)
        if (y < 0).any():
            message = f"y: smallest area is {y.min()} m2; extents are not negative; drop or correct such pairs"
            raise InputError(message)
        size = float(self.area_max_m2) if self.area_max_m2 is not None else float(max(y.max(), 1e-9))
        if dates is None:
            dates = np.datetime64("2000-01-01", "ns") + np.arange(len(y)) * np.timedelta64(1, "D")
        pairs = pd.DataFrame({"wetland_id": "one", "date": dates, "stage_m": X[:, 0], "area_m2": y})
        if stage_sd_m is not None:
            pairs["stage_sd_m"] = np.asarray(stage_sd_m, float)
        if area_sd_m2 is not None:
            pairs["area_sd_m2"] = np.asarray(area_sd_m2, float)
        wetlands = pd.DataFrame({"wetland_id": ["one"], "area_max_m2": [size]})
        ground = None if self.hypsometry is None else self.hypsometry.assign(wetland_id="one")
        options = RelationOptions(families=tuple(self.families), level=self.level)
        found = fit_relations(pairs, wetlands, ground, seed=self.random_state, options=options)
        if not found.wetland_ids or (found.refused and int(found.relations["n_pairs"].iloc[0]) == 0):
            raise InputError(found.refused[0].reason)
        self.relation_ = found
        self.family_ = str(found.relations["family"].iloc[0])
        self.area_max_m2_ = size
        return self

    def _one_feature(self, X: np.ndarray) -> None:
        if X.shape[1] != 1:
            message = (
                f"X: got {X.shape[1]} columns; stage alone is the feature (reshape to (pairs, 1)); drop the others"
            )
            raise InputError(message)

    def predict(self, X: np.ndarray) -> np.ndarray:
        """Return extents, m2, float64 (row,), at stages ``X`` (row, 1) in m. Raises NotFittedError before ``fit``."""
        check_is_fitted(self)
        X = validate_data(self, X, dtype=float, reset=False)
        return self.relation_.predict("one", X[:, 0])["area_m2"].to_numpy()

    def predict_interval(self, X: np.ndarray) -> np.ndarray:
        """Return lower and upper bounds, m2, float64 (row, 2), at stages ``X`` (row, 1) in m."""
        check_is_fitted(self)
        X = validate_data(self, X, dtype=float, reset=False)
        return self.relation_.predict("one", X[:, 0])[["area_lo_m2", "area_hi_m2"]].to_numpy()
