"""What views under leaves are worth: measured as the part of a hidden prediction's error that they remove."""

from __future__ import annotations

import numpy as np

from inundate.series.heldout import Evidence
from inundate.series.inputs import Events

# Bounds between classes of views under leaves by the share of ground that the canopy lets through (common practice).
_OPENNESS = (0.4, 0.6)
# Without loggers a view under leaves counts with this factor on its sd; and the pooled weight, in wetland-years, of a
# coarser group beside a finer one. Common practice, no source.
_UNPROVEN, _SHRINK = 3.0, 4.0
_STRAY = 0.02
_USELESS = 30.0
# Days over which errors of views under leaves hang together: a canopy hides the same ground all season.
_LEAFY_MEMORY_DAYS = 60.0


def pair_events(views: Events, stage: Events) -> tuple[np.ndarray, np.ndarray]:
    """Return positions of views and of stage events of the same wetland and day."""
    key_v = views.owner * 1_000_000 + views.day
    key_s = stage.owner * 1_000_000 + stage.day
    return np.intersect1d(key_v, key_s, return_indices=True)[1:]


def scene_factors(views: Events, scores: np.ndarray) -> tuple[np.ndarray, float]:
    """Return factors (>= 1) on the sd of views by day, and the share of stray views, from left-out scores.

    A day's factor is the root mean square of its scores (strays cut at four times the usual), shrunk towards that of all
    days: a scene with haze or a wrong gain errs in all wetlands at once.

    Parameters
    ----------
    views : Events
    scores : ndarray, shape (view,)
        See :func:`inundate.series.model.left_out_scores`; NaN does not count.

    Returns
    -------
    factor : ndarray, shape (view,)
    stray : float
        0.01 to 0.2.
    """
    known = np.isfinite(scores)
    if known.sum() < 20:
        return np.ones(views.day.size), _STRAY
    # 0.4549 is the median of a chi-squared variable with one degree of freedom.
    usual = max(float(np.median(scores[known] ** 2)) / 0.4549, 1.0)
    square = np.minimum(scores[known] ** 2, 16 * usual)
    days = int(views.day.max()) + 1
    total = np.bincount(views.day[known], square, days)
    count = np.bincount(views.day[known], minlength=days)
    by_day = np.maximum((total + _SHRINK * usual) / (count + _SHRINK), 1.0)
    factor = np.sqrt(by_day[views.day])
    stray = float(np.clip(np.mean(np.abs(scores[known]) / factor[known] > 4), 0.01, 0.2))
    return factor, stray


def _gain(error: np.ndarray, news: np.ndarray, cluster: np.ndarray) -> tuple[float, float]:
    """Return the regression of a prediction's error on what the view adds, and the number of independent clusters."""
    _, inverse, counts = np.unique(cluster, return_inverse=True, return_counts=True)
    weight = 1 / counts[inverse]
    spread = (weight * news**2).sum()
    return (float((weight * error * news).sum() / spread) if spread > 0 else 0.0), float(counts.size)


def worth_of_views(views: Events, evidence: Evidence | None) -> np.ndarray:
    """Return the factor on each view's standard deviation, from what it proved worth at loggers hidden for the purpose.

    In a group of views (leaf state, openness of the canopy) the gain ``g`` is the regression of the prediction's error on view minus
    prediction; with error variance ``V`` of the prediction the view's own is ``V (1 - g) / g``. Gains are shrunk from
    openness groups to leaf states to what an unproven view would have. Errors under leaves persist, so crowded views
    count less.

    Parameters
    ----------
    views : Events
    evidence : Evidence or None
        Loggers hidden and predicted without views under leaves; None without loggers.

    Returns
    -------
    ndarray, shape (view,)
        1 in leaf-off (see :func:`scene_factors`), infinite where views proved worth nothing.
    """
    out = np.ones(views.day.size)
    leafy = views.kind != 0
    out[leafy] = _UNPROVEN
    if evidence is not None:
        table = _gains(views, evidence)
        bins = np.digitize(views.open, _OPENNESS)
        out[leafy] = table[views.kind[leafy].astype(int), bins[leafy]]
    crowd = _crowding_by_wetland(views, leafy)
    out[leafy] *= np.sqrt(crowd[leafy])
    return np.where(out > _USELESS, np.inf, out)


def _gains(views: Events, evidence: Evidence) -> np.ndarray:
    """Return factors (leaf state, openness)."""
    key_v = views.owner * 1_000_000 + views.day
    key_e = evidence.wetland * 1_000_000 + evidence.day
    at_v, at_e = np.intersect1d(key_v, key_e, return_indices=True)[1:]
    error = evidence.truth[at_e] - evidence.share[0, at_e]
    news = views.value[at_v] - evidence.share[0, at_e]
    cluster = evidence.wetland[at_e] * 1000 + evidence.block[at_e]
    all_bins = np.digitize(views.open, _OPENNESS)
    kind, bins = views.kind[at_v], all_bins[at_v]
    factors = np.full((4, 3), _UNPROVEN)
    variance = max(float(np.mean(error**2)), 1e-4) if error.size else 0.01
    for leaf in (1, 2, 3):
        typical = np.array([_usual_sd(views.sd[(views.kind == leaf) & (all_bins == size)]) for size in range(3)])
        base = variance / (variance + (_UNPROVEN * typical) ** 2)
        in_leaf = kind == leaf
        whole, blocks = _gain(error[in_leaf], news[in_leaf], cluster[in_leaf]) if in_leaf.any() else (0.0, 0.0)
        for size in range(3):
            cell = in_leaf & (bins == size)
            g = (blocks * whole + _SHRINK * base[size]) / (blocks + _SHRINK)
            sd = typical[size]
            if cell.any():
                own, n = _gain(error[cell], news[cell], cluster[cell])
                g = (n * own + _SHRINK * g) / (n + _SHRINK)
                sd = float(np.sqrt(np.mean(views.sd[at_v][cell] ** 2)))
            g = float(np.clip(g, 1e-4, 0.999))
            factors[leaf, size] = max(np.sqrt(variance * (1 - g) / g) / sd, 1.0)
    return factors


def _usual_sd(sd: np.ndarray) -> float:
    """Root mean square of claimed sds; that of a middling view where there is none."""
    return float(np.sqrt(np.mean(sd**2))) if sd.size else 0.15


def _crowding_by_wetland(views: Events, leafy: np.ndarray) -> np.ndarray:
    """Return 1 plus the summed correlation with the wetland's other views under leaves."""
    out = np.ones(views.day.size)
    for i in np.unique(views.owner[leafy]):
        rows = np.flatnonzero(leafy[views.start[i] : views.start[i + 1]]) + views.start[i]
        gap = np.abs(views.day[rows][:, None] - views.day[rows][None, :])
        out[rows] = np.exp(-gap / _LEAFY_MEMORY_DAYS).sum(axis=1)
    return out
