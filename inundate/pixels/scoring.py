"""Scores of out-of-fold predictions: omission, commission, their standard deviation, by leaf state and other strata."""

from __future__ import annotations

import numpy as np
import pandas as pd

from inundate.common.codes import LEAF_STATES


def clustered_rate(hit: np.ndarray, base: np.ndarray, group: np.ndarray) -> tuple[float, float]:
    """Return the rate sum(hit)/sum(base) and its standard deviation, examples of a group being alike.

    Parameters
    ----------
    hit, base : ndarray, shape (row,)
        Numerator (0 or weight) and denominator of each row.
    group : ndarray, shape (row,)
        Cluster of each row (wetland).

    Returns
    -------
    rate, sd : float
        NaN where the denominator is 0. Ratio estimator over clusters (Cochran 1977, ch. 6), not below the binomial value
        of (rate n + 1) / (n + 2).
    """
    total = float(base.sum())
    if total <= 0:
        return np.nan, np.nan
    rate = float(hit.sum()) / total
    _, place = np.unique(np.asarray(group).astype(str), return_inverse=True)
    residual = np.bincount(place, weights=hit - rate * base)
    size = np.bincount(place, weights=base)
    k = int((size > 0).sum())
    clustered = np.sqrt(k / (k - 1) * float((residual[size > 0] ** 2).sum())) / total if k > 1 else 0.0
    n = int((base > 0).sum())
    smooth = (rate * n + 1.0) / (n + 2.0)
    return rate, float(max(clustered, np.sqrt(smooth * (1 - smooth) / (n + 2.0))))


def rates(y: np.ndarray, probability: np.ndarray, weight: np.ndarray, group: np.ndarray) -> dict[str, float]:
    """Return omission, commission (water is p >= 1/2), n, n_water, n_dry, omission_sd, commission_sd, brier, log_loss."""
    called = probability >= 0.5
    truth = y == 1
    omission, omission_sd = clustered_rate(weight * (truth & ~called), weight * truth, group)
    commission, commission_sd = clustered_rate(weight * (called & ~truth), weight * called, group)
    p = np.clip(probability, 1e-6, 1 - 1e-6)
    total = max(float(weight.sum()), 1e-12)
    return {
        "omission": omission,
        "commission": commission,
        "n": int(y.size),
        "n_water": int(truth.sum()),
        "n_dry": int((~truth).sum()),
        "omission_sd": omission_sd,
        "commission_sd": commission_sd,
        "brier": float((weight * (p - y) ** 2).sum() / total),
        "log_loss": float(-(weight * np.where(truth, np.log(p), np.log1p(-p))).sum() / total),
    }


def leaf_state_names(codes: np.ndarray) -> np.ndarray:
    """Return the name of each leaf state code; ``unknown`` for others."""
    names = np.array([*LEAF_STATES, "unknown"])
    codes = np.asarray(codes, int)
    return names[np.where((codes >= 0) & (codes < len(LEAF_STATES)), codes, len(LEAF_STATES))]


def error_table(
    y: np.ndarray, probability: np.ndarray, weight: np.ndarray, group: np.ndarray, strata: pd.DataFrame
) -> pd.DataFrame:
    """Return rates for all rows, for each leaf state, and for every value of every other stratum.

    Parameters
    ----------
    y, probability, weight, group : ndarray, shape (row,)
    strata : DataFrame, one row each
        Column ``leaf_state`` (names) and any others (text).

    Returns
    -------
    DataFrame
        leaf_state (``all`` or a name), stratum (``all`` or a column), value, then the columns of :func:`rates`.
    """
    rows: list[dict[str, object]] = []
    everywhere = np.ones(y.size, bool)
    states = [
        ("all", everywhere),
        *((str(s), (strata["leaf_state"] == s).to_numpy()) for s in sorted(set(strata["leaf_state"]))),
    ]
    others = [c for c in strata.columns if c != "leaf_state"]
    for state, mine in states:
        parts: list[tuple[str, str, np.ndarray]] = [("all", "all", everywhere)]
        parts += [
            (c, str(v), (strata[c].astype(str) == str(v)).to_numpy())
            for c in others
            for v in sorted(set(strata[c].astype(str)))
        ]
        for stratum, value, part in parts:
            pick = mine & part
            if pick.any():
                found = rates(y[pick], probability[pick], weight[pick], group[pick])
                rows.append({"leaf_state": state, "stratum": stratum, "value": value, **found})
    return pd.DataFrame(rows)
