"""Error-adjusted area from a stratified sample, and omission and commission of water fractions by leaf state."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from inundate.common.codes import LEAF_STATES
from inundate.common.errors import InputError


@dataclass(frozen=True, slots=True)
class AdjustedArea:
    """Stratified estimates of area and accuracy, with standard errors.

    Attributes
    ----------
    proportions : ndarray of float64, shape (map class, reference class)
        Estimated share of the total area in each cell of the error matrix.
    area, area_se : ndarray of float64, shape (class,)
        Area of each reference class, in the unit of the mapped areas.
    user, user_se, producer, producer_se : ndarray of float64, shape (class,)
        User's and producer's accuracy.
    overall, overall_se : float
        Overall accuracy.
    """

    proportions: np.ndarray
    area: np.ndarray
    area_se: np.ndarray
    user: np.ndarray
    user_se: np.ndarray
    producer: np.ndarray
    producer_se: np.ndarray
    overall: float
    overall_se: float


def error_adjusted_area(counts: np.ndarray, mapped_area: np.ndarray) -> AdjustedArea:
    """Area of each class, corrected by the errors that a sample stratified by map class shows.

    Parameters
    ----------
    counts : array-like of number, shape (map class, reference class)
        Sample counts; rows are the classes of the map, which are the strata.
    mapped_area : array-like of float, shape (class,)
        Mapped area (any unit) or pixel count of each class.

    Returns
    -------
    AdjustedArea
        Standard errors; multiply by 1.96 for a 95 % interval.

    Raises
    ------
    InputError
        Shapes that do not fit, negative values, or a map class with fewer than two sample units.

    References
    ----------
    Olofsson P., Foody G. M., Stehman S. V., Woodcock C. E. 2013. Remote Sensing of Environment 129:122-131.
    Olofsson P. et al. 2014. Good practices for estimating area and assessing accuracy of land change. Remote Sensing
    of Environment 148:42-57 (stratified estimators and their variances).
    """
    n = np.asarray(counts, float)
    total = np.asarray(mapped_area, float)
    if n.ndim != 2 or n.shape[0] != n.shape[1] or total.shape != (n.shape[0],):
        text = (
            f"counts: shape {n.shape} with mapped_area {total.shape}; a square matrix and one area a class are needed"
        )
        raise InputError(text)
    if not (np.isfinite(n).all() and np.isfinite(total).all()) or (n < 0).any() or (total < 0).any():
        text = "counts, mapped_area: a value is negative or missing; give counts and areas of 0 or more"
        raise InputError(text)
    rows = n.sum(axis=1)
    if (rows < 2).any() or total.sum() <= 0:
        text = f"counts: row totals are {rows.tolist()}; each map class needs two sample units or more; sample again"
        raise InputError(text)
    weight = total / total.sum()
    share = n / rows[:, None]
    p = weight[:, None] * share
    user = np.diag(share).copy()
    reference = p.sum(axis=0)
    spread = weight[:, None] ** 2 * share * (1 - share) / (rows[:, None] - 1)
    with np.errstate(invalid="ignore", divide="ignore"):
        producer = np.diag(p) / reference
        off = (total**2)[:, None] * share * (1 - share) / (rows[:, None] - 1)
        estimated = reference * total.sum()
        own = total**2 * (1 - producer) ** 2 * user * (1 - user) / (rows - 1)
        others = producer**2 * (off.sum(axis=0) - np.diag(off))
        producer_se = np.sqrt(own + others) / estimated
    return AdjustedArea(
        proportions=p,
        area=estimated,
        area_se=np.sqrt(spread.sum(axis=0)) * total.sum(),
        user=user,
        user_se=np.sqrt(user * (1 - user) / (rows - 1)),
        producer=producer,
        producer_se=producer_se,
        overall=float(np.trace(p)),
        overall_se=float(np.sqrt(np.sum(weight**2 * user * (1 - user) / (rows - 1)))),
    )


def fraction_errors(fraction: np.ndarray, water: np.ndarray, leaf_state: np.ndarray) -> pd.DataFrame:
    """Omission and commission of water fractions over pure examples, by leaf state.

    Give out-of-fold fractions (of examples that the model did not see).

    Parameters
    ----------
    fraction : ndarray of float, shape (example,)
        Water fraction 0..1; NaN is left out.
    water : ndarray of bool, shape (example,)
        True for pixels that are wholly water, False for wholly dry ones.
    leaf_state : ndarray of int, shape (example,)
        Codes of ``common.codes.LeafCode``.

    Returns
    -------
    DataFrame
        ``leaf_state`` (name), ``omission`` (1 less the mean fraction of water examples), ``commission`` (mean fraction
        of dry examples), ``omission_sd``, ``commission_sd`` (standard errors), ``n_water``, ``n_dry``. Leaf states
        with fewer than two examples of either kind are left out.
    """
    fraction, water, leaf = np.asarray(fraction, float), np.asarray(water, bool), np.asarray(leaf_state)
    rows = []
    for code, name in enumerate(LEAF_STATES):
        mine = (leaf == code) & np.isfinite(fraction)
        wet, dry = fraction[mine & water], fraction[mine & ~water]
        if wet.size < 2 or dry.size < 2:
            continue
        rows.append(
            {
                "leaf_state": name,
                "omission": 1.0 - float(wet.mean()),
                "commission": float(dry.mean()),
                "omission_sd": float(wet.std(ddof=1) / np.sqrt(wet.size)),
                "commission_sd": float(dry.std(ddof=1) / np.sqrt(dry.size)),
                "n_water": int(wet.size),
                "n_dry": int(dry.size),
            }
        )
    columns = ["leaf_state", "omission", "commission", "omission_sd", "commission_sd", "n_water", "n_dry"]
    return pd.DataFrame(rows, columns=columns)
