"""What views under leaves are worth: measured as the part of a hidden prediction's error that they remove."""

from __future__ import annotations

import numpy as np

from inundate.series.fitting import Setup
from inundate.series.heldout import Evidence, relation_share
from inundate.series.inputs import Events

# Bounds between sharp, middling and blunt views (claimed sd, share of the largest extent).
_SHARP, _BLUNT = 0.1, 0.2
# Without loggers a view under leaves counts with this factor on its sd; and the pooled weight, in wetland-years, of a
# coarser group beside a finer one. Common practice, no source.
_UNPROVEN, _SHRINK = 3.0, 4.0
_USELESS = 30.0
# Days over which errors of views under leaves hang together: a canopy hides the same ground all season.
_LEAFY_MEMORY_DAYS = 60.0


def pair_events(views: Events, stage: Events) -> tuple[np.ndarray, np.ndarray]:
    """Return positions of views and of stage events of the same wetland and day."""
    key_v = views.owner * 1_000_000 + views.day
    key_s = stage.owner * 1_000_000 + stage.day
    return np.intersect1d(key_v, key_s, return_indices=True)[1:]


def leaf_off_factor(setup: Setup, views: Events, stage: Events) -> float:
    """Return the factor (>= 1) on the sd of leaf-off views at which they scatter about loggers as they claim.

    From the median of squared standardised differences, so strays do not count; 1 with fewer than 20 pairs.
    """
    bare = views.keep(views.kind == 0)
    share, sd = relation_share(setup, stage)
    at_v, at_s = pair_events(bare, stage)
    if at_v.size < 20:
        return 1.0
    square = (bare.value[at_v] - share[at_s]) ** 2
    own, other = bare.sd[at_v] ** 2, sd[at_s] ** 2
    for factor in np.arange(1.0, 4.0, 0.05):
        # 0.4549 is the median of a chi-squared variable with one degree of freedom.
        if np.median(square / (factor**2 * own + other)) <= 0.4549:
            return float(factor)
    return 4.0


def _gain(error: np.ndarray, news: np.ndarray, cluster: np.ndarray) -> tuple[float, float]:
    """Return the regression of a prediction's error on what the view adds, and the number of independent clusters."""
    _, inverse, counts = np.unique(cluster, return_inverse=True, return_counts=True)
    weight = 1 / counts[inverse]
    spread = (weight * news**2).sum()
    return (float((weight * error * news).sum() / spread) if spread > 0 else 0.0), float(counts.size)


def worth_of_views(views: Events, evidence: Evidence | None) -> np.ndarray:
    """Return the factor on each view's standard deviation, from what it proved worth at loggers hidden for the purpose.

    In a group of views (leaf state, claimed sharpness) the gain ``g`` is the regression of the prediction's error on view minus
    prediction; with error variance ``V`` of the prediction the view's own is ``V (1 - g) / g``. Gains are shrunk from
    sharpness groups to leaf states to what an unproven view would have. Errors under leaves persist, so crowded views
    count less.

    Parameters
    ----------
    views : Events
    evidence : Evidence or None
        Loggers hidden and predicted without views under leaves; None without loggers.

    Returns
    -------
    ndarray, shape (view,)
        1 in leaf-off (see :func:`leaf_off_factor`), infinite where views proved worth nothing.
    """
    out = np.ones(views.day.size)
    leafy = views.kind != 0
    out[leafy] = _UNPROVEN
    if evidence is not None:
        table = _gains(views, evidence)
        bins = np.digitize(views.sd, [_SHARP, _BLUNT])
        out[leafy] = table[views.kind[leafy].astype(int), bins[leafy]]
    crowd = _crowding_by_wetland(views, leafy)
    out[leafy] *= np.sqrt(crowd[leafy])
    return np.where(out > _USELESS, np.inf, out)


def _gains(views: Events, evidence: Evidence) -> np.ndarray:
    """Return factors (leaf state, sharpness)."""
    key_v = views.owner * 1_000_000 + views.day
    key_e = evidence.wetland * 1_000_000 + evidence.day
    at_v, at_e = np.intersect1d(key_v, key_e, return_indices=True)[1:]
    error = evidence.truth[at_e] - evidence.share[0, at_e]
    news = views.value[at_v] - evidence.share[0, at_e]
    cluster = evidence.wetland[at_e] * 1000 + evidence.block[at_e]
    kind, bins = views.kind[at_v], np.digitize(views.sd[at_v], [_SHARP, _BLUNT])
    factors = np.full((4, 3), _UNPROVEN)
    typical = np.array([0.07, 0.15, 0.3])
    variance = max(float(np.mean(error**2)), 1e-4) if error.size else 0.01
    for leaf in (1, 2, 3):
        base = variance / (variance + (_UNPROVEN * typical) ** 2)
        in_leaf = kind == leaf
        whole, blocks = (
            _gain(error[in_leaf], news[in_leaf], cluster[in_leaf]) if in_leaf.any() else (0.0, 0.0)
        )
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


def _crowding_by_wetland(views: Events, leafy: np.ndarray) -> np.ndarray:
    """Return 1 plus the summed correlation with the wetland's other views under leaves."""
    out = np.ones(views.day.size)
    for i in np.unique(views.owner[leafy]):
        rows = np.flatnonzero(leafy[views.start[i] : views.start[i + 1]]) + views.start[i]
        gap = np.abs(views.day[rows][:, None] - views.day[rows][None, :])
        out[rows] = np.exp(-gap / _LEAFY_MEMORY_DAYS).sum(axis=1)
    return out
