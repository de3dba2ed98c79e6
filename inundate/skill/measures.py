"""Measures of one group of pairs, each a plain dictionary."""

from __future__ import annotations

import warnings

import numpy as np
import scores.continuous
import xarray as xr
from scipy import stats
from sklearn import metrics

Row = dict[str, float | int | None]


def _array(values: np.ndarray) -> xr.DataArray:
    return xr.DataArray(np.asarray(values, float), dims="row")


def wet_dry_measures(known_wet: np.ndarray, seen_wet: np.ndarray) -> Row:
    """Score wet / dry agreement.

    Parameters
    ----------
    known_wet, seen_wet : ndarray of bool, shape (row,)

    Returns
    -------
    dict
        n, both_wet, both_dry, only_seen, only_known (counts), accuracy, omission (of wet), commission (of seen wet),
        f1, iou, quantity and allocation disagreement (Pontius & Millones 2011), kappa (Cohen), mcc (Matthews); None where a
        measure is not defined.
    """
    known, seen = np.asarray(known_wet, bool), np.asarray(seen_wet, bool)
    if not known.size:
        return {"n": 0}
    (tn, fp), (fn, tp) = metrics.confusion_matrix(known, seen, labels=[False, True])
    varied = 0 < known.mean() < 1 and 0 < seen.mean() < 1
    return {
        "n": int(known.size),
        "both_wet": int(tp),
        "both_dry": int(tn),
        "only_seen": int(fp),
        "only_known": int(fn),
        "accuracy": float(metrics.accuracy_score(known, seen)),
        "omission": float(fn / (tp + fn)) if tp + fn else None,
        "commission": float(fp / (tp + fp)) if tp + fp else None,
        "f1": float(metrics.f1_score(known, seen)) if tp + fp + fn else None,
        "iou": float(metrics.jaccard_score(known, seen)) if tp + fp + fn else None,
        "quantity": float(abs(fp - fn) / known.size),
        "allocation": float(2 * min(fp, fn) / known.size),
        "kappa": float(metrics.cohen_kappa_score(known, seen)) if varied else None,
        "mcc": float(metrics.matthews_corrcoef(known, seen)) if varied else None,
    }


def area_measures(predicted: np.ndarray, observed: np.ndarray, largest: np.ndarray) -> Row:
    """Score areas as shares of the largest extent.

    Parameters
    ----------
    predicted, observed, largest : ndarray, shape (row,)
        m2; largest extent of the row's wetland.

    Returns
    -------
    dict
        n, rmse, bias, mae (shares of the largest extent), r (Pearson), nse (Nash & Sutcliffe 1970), kge (Gupta et al.
        2009), pbias (Moriasi et al. 2007: positive where too little is predicted), the last four on m2.
    """
    p, o, largest = (np.asarray(v, float) for v in (predicted, observed, largest))
    if not p.size:
        return {"n": 0}
    ps, os_ = _array(p / largest), _array(o / largest)
    out: Row = {
        "n": int(p.size),
        "rmse": float(scores.continuous.rmse(ps, os_)),
        "bias": float(scores.continuous.additive_bias(ps, os_)),
        "mae": float(scores.continuous.mae(ps, os_)),
    }
    varied = p.size > 2 and np.ptp(o) > 0 and np.ptp(p) > 0
    out["r"] = float(scores.continuous.correlation.pearsonr(_array(p), _array(o))) if varied else None
    out["nse"] = float(scores.continuous.nse(_array(p), _array(o))) if varied else None
    out["kge"] = float(scores.continuous.kge(_array(p), _array(o))) if varied and o.mean() != 0 else None
    out["pbias"] = -float(scores.continuous.pbias(_array(p), _array(o))) if o.sum() != 0 else None
    return out


def interval_measures(
    low: np.ndarray, high: np.ndarray, value: np.ndarray, largest: np.ndarray, level: float = 0.9
) -> Row:
    """Score intervals.

    Parameters
    ----------
    low, high, value, largest : ndarray, shape (row,)
        m2.
    level : float
        Share that the intervals should cover.

    Returns
    -------
    dict
        n, coverage, width and interval_score (Gneiting & Raftery 2007, eq. 43; shares of the largest extent).
    """
    low, high, value, largest = (np.asarray(v, float) for v in (low, high, value, largest))
    if not value.size:
        return {"n": 0}
    inside = (value >= low - 1e-6) & (value <= high + 1e-6)
    score = scores.continuous.interval_score(
        _array(low / largest), _array(high / largest), _array(value / largest), interval_range=level
    )
    return {
        "n": int(value.size),
        "coverage": float(inside.mean()),
        "width": float(((high - low) / largest).mean()),
        "interval_score": float(score["total"]),
    }


def probability_measures(mean: np.ndarray, sd: np.ndarray, value: np.ndarray, largest: np.ndarray) -> Row:
    """Score normal predictive distributions.

    Parameters
    ----------
    mean, sd, value, largest : ndarray, shape (row,)
        m2.

    Returns
    -------
    dict
        n, crps (closed form of the normal, Gneiting & Raftery 2007; share of the largest extent), within_1sd, within_2sd.
    """
    mean, sd, value, largest = (np.asarray(v, float) for v in (mean, sd, value, largest))
    if not value.size:
        return {"n": 0}
    wide = np.maximum(sd, 1e-9)
    z = (value - mean) / wide
    crps = wide * (z * (2 * stats.norm.cdf(z) - 1) + 2 * stats.norm.pdf(z) - 1 / np.sqrt(np.pi))
    return {
        "n": int(value.size),
        "crps": float((crps / largest).mean()),
        "within_1sd": float((np.abs(z) <= 1).mean()),
        "within_2sd": float((np.abs(z) <= 2).mean()),
    }


def rank_correlation(area: np.ndarray, stage: np.ndarray) -> Row:
    """Return Spearman's rank correlation of area with stage, None under five pairs or where either does not vary."""
    area, stage = np.asarray(area, float), np.asarray(stage, float)
    if area.size < 5 or np.ptp(area) == 0 or np.ptp(stage) == 0:
        return {"n": int(area.size), "rho": None}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return {"n": int(area.size), "rho": float(stats.spearmanr(area, stage).statistic)}
