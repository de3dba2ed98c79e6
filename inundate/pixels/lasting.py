"""Errors of water probability that last in a wetland: how much wetlands differ beyond what chance gives."""

from __future__ import annotations

import numpy as np
import pandas as pd

UNKNOWN = (0.15, 0.1)
"""Missed and added where own labels cannot tell: a belief, common practice, no source."""


def between_sd(value: np.ndarray, group: np.ndarray) -> float | None:
    """Return the standard deviation of group means beyond that which their own scatter gives.

    The method-of-moments estimate of DerSimonian & Laird (1986, Controlled Clinical Trials 7:177), with each group's
    variance taken from the pooled scatter within groups.

    Parameters
    ----------
    value : ndarray of float, shape (row,)
    group : ndarray, shape (row,)

    Returns
    -------
    float or None
        None with fewer than three groups of two rows or more.
    """
    table = pd.DataFrame({"value": np.asarray(value, float), "group": np.asarray(group).astype(str)})
    sums = table.groupby("group")["value"].agg(["mean", "size"])
    sums = sums[sums["size"] >= 2]
    if len(sums) < 3:
        return None
    rows = table[table["group"].isin(sums.index)]
    left = rows["value"] - rows["group"].map(sums["mean"])
    within = float((left**2).sum()) / max(len(rows) - len(sums), 1)
    n = sums["size"].to_numpy(float)
    w = n / max(within, 1e-12)
    middle = float((w * sums["mean"]).sum() / w.sum())
    q = float((w * (sums["mean"] - middle) ** 2).sum())
    spread = (q - (len(sums) - 1)) / (w.sum() - (w**2).sum() / w.sum())
    return float(np.sqrt(max(spread, 0.0)))


def lasting_errors(
    probability: np.ndarray, water: np.ndarray, wetland: np.ndarray, chosen: np.ndarray
) -> tuple[float, float]:
    """Return how far wetlands differ in the water that is missed and in the dry ground that is called water.

    Parameters
    ----------
    probability : ndarray of float, shape (row,)
        Out-of-fold water probability of examples (their wetland was not trained on).
    water : ndarray of bool, shape (row,)
        The label.
    wetland : ndarray of text, shape (row,)
    chosen : ndarray of bool, shape (row,)
        Rows that count, such as own labels with leaves off.

    Returns
    -------
    (float, float)
        Standard deviation between wetlands of mean missed probability over water labels, and of mean probability over
        dry labels; ``UNKNOWN`` where labels of fewer than three wetlands cannot tell.
    """
    p, is_water, who = np.asarray(probability, float), np.asarray(water, bool), np.asarray(wetland).astype(str)
    good = np.asarray(chosen, bool) & np.isfinite(p)
    wet, dry = good & is_water, good & ~is_water
    missed, added = between_sd(1.0 - p[wet], who[wet]), between_sd(p[dry], who[dry])
    return UNKNOWN[0] if missed is None else missed, UNKNOWN[1] if added is None else added
