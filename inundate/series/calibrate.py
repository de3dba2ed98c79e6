"""Weights of predictors, and widths of intervals, from held-out evidence; worth of views under leaves from loggers."""

from __future__ import annotations

import itertools

import numpy as np
from scipy import stats

from inundate.series.fitting import Setup
from inundate.series.heldout import Evidence, relation_share
from inundate.series.inputs import Events
from inundate.series.model import with_leaves
from inundate.series.worth import count_once, pair_events

WIDTH_90 = 1.6448536269514722
# Weight of the pooled value beside a wetland's or a cell's own, and most of that of hidden seasons beside loggers, in independent
# blocks; common practice, no source.
_SHRINK_BLOCKS = 8.0
_STEPS = 4


def size_third(area_max_m2: np.ndarray) -> np.ndarray:
    """Return 0, 1 or 2 by thirds of the largest extent (ties by position)."""
    rank = np.argsort(np.argsort(area_max_m2, kind="stable"), kind="stable")
    return (rank * 3) // max(area_max_m2.size, 1)


def _clusters(evidence: Evidence, chosen: np.ndarray | None = None) -> np.ndarray:
    """Weights by which each wetland and block counts once, whatever its number of (chosen) days; 0 for days not chosen."""
    key = evidence.wetland * 1000 + evidence.block
    chosen = np.ones(key.size, bool) if chosen is None else chosen
    out = np.zeros(key.size)
    out[chosen] = count_once(key[chosen])
    return out


def choose_weights(evidence: Evidence | None, wetlands: int, kinds: int) -> tuple[np.ndarray, np.ndarray]:
    """Return the weight of each predictor (2, wetland, kind), and its held-out RMSE (wetland, kind; NaN where not scored).

    Weights stand first for bare, then for leafy days. Hidden loggers speak for days of their own kind, and whole seasons of hidden
    views as much as some blocks at most: there the views are far, which in leaf-off they seldom are. A wetland's own held-out error counts
    beside that of all.
    """
    scores = np.full((wetlands, kinds), np.nan)
    if evidence is None or evidence.day.size == 0:
        return np.full((2, wetlands, kinds), 1 / kinds), scores
    weight = _clusters(evidence)
    mass = np.bincount(evidence.wetland, weight, wetlands)
    for k in range(kinds):
        total = np.bincount(evidence.wetland, weight * (evidence.share[k] - evidence.truth) ** 2, wetlands)
        scores[:, k] = np.where(mass > 0, np.sqrt(total / np.where(mass > 0, mass, 1)), np.nan)
    choices = _simplex(kinds)
    blended = (choices @ evidence.share - evidence.truth) ** 2
    out = np.empty((2, wetlands, kinds))
    for leafy in (0, 1):
        near = evidence.from_stage & ((evidence.leaf != 0) == bool(leafy))
        far = ~evidence.from_stage
        heft, away = _clusters(evidence, near), _clusters(evidence, far)
        if near.any():
            away *= min(_SHRINK_BLOCKS / max(away.sum(), 1e-9), 1.0)
        heft += away
        pooled = (blended * heft).sum(axis=1) / max(heft.sum(), 1e-9)
        own = np.array([np.bincount(evidence.wetland, b * heft, wetlands) for b in blended])
        mass = np.bincount(evidence.wetland, heft, wetlands)
        best = np.argmin((own + _SHRINK_BLOCKS * pooled[:, None]) / (mass + _SHRINK_BLOCKS), axis=0)
        out[leafy] = choices[best]
    return out, scores


def _simplex(kinds: int) -> np.ndarray:
    """Return all weights (choice, kind) in steps of 1 / ``_STEPS`` that sum to 1, even ones first."""
    grid = np.array(list(itertools.product(range(_STEPS + 1), repeat=kinds)), float) / _STEPS
    grid = grid[np.isclose(grid.sum(axis=1), 1)]
    return grid[np.argsort((grid**2).sum(axis=1), kind="stable")]


def solve_width(gap: np.ndarray, sd: np.ndarray, noise: np.ndarray, weight: np.ndarray) -> float:
    """Return the factor on ``sd`` at which nine in ten gaps lie inside; ``noise`` is the hidden value's own error."""
    low, high = 0.2, 6.0
    for _ in range(40):
        middle = np.sqrt(low * high)
        inside = np.abs(gap) <= WIDTH_90 * np.sqrt((middle * sd) ** 2 + noise**2)
        if (inside * weight).sum() >= 0.9 * weight.sum():
            high = middle
        else:
            low = middle
    return float(np.sqrt(low * high))


def blended_evidence(evidence: Evidence, weights: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the mean and sd (m) of the blended prediction of each row."""
    bare, leafy = weights[:, evidence.wetland]
    w = with_leaves(bare, leafy, evidence.leaf[:, None]).T
    mean = (w * evidence.mean).sum(axis=0)
    var = (w * (evidence.sd**2 + (evidence.mean - mean) ** 2)).sum(axis=0)
    return mean, np.sqrt(var)


def fit_widths(evidence: Evidence | None, weights: np.ndarray, third: np.ndarray) -> np.ndarray:
    """Return factors (leaf state, size third) so that intervals hold 90 % of what was hidden.

    Leaf-off days have views near, so only loggers hidden while views were kept speak for them. Under leaves views are
    far, as in a season of hidden views, so both kinds of hidden values speak. Factors of few blocks are shrunk: cells
    to leaf states, these to all, all to 1.
    """
    out = np.ones((4, 3))
    if evidence is None or evidence.day.size == 0:
        return out
    mean, sd = blended_evidence(evidence, weights)
    gap = np.where(mean < evidence.low, evidence.low - mean, np.maximum(mean - evidence.high, 0.0))
    # A row teaches as far as the hidden value is sharper than the prediction.
    weight = _clusters(evidence) * sd**2 / (sd**2 + evidence.level_sd**2)

    def shrunk(rows: np.ndarray, parent: float) -> float:
        blocks = float(weight[rows].sum())
        if blocks <= 0:
            return parent
        own = solve_width(gap[rows], sd[rows], evidence.level_sd[rows], weight[rows])
        own *= float(stats.t.ppf(0.95, max(blocks, 1.0))) / WIDTH_90  # a spread told by few blocks
        return float(np.exp((_SHRINK_BLOCKS * np.log(parent) + blocks * np.log(own)) / (_SHRINK_BLOCKS + blocks)))

    far = shrunk(~evidence.from_stage | (evidence.leaf != 0), 1.0)
    for leaf in range(4):
        in_leaf = evidence.from_stage & (evidence.leaf == leaf)
        state = shrunk(in_leaf, far if leaf else 1.0)
        for size in range(3):
            out[leaf, size] = shrunk(in_leaf & (third[evidence.wetland] == size), state)
    return out


def stage_width(setup: Setup, views: Events, stage: Events) -> float:
    """Return the factor on the relation's error at which leaf-off views on days with stage lie inside as often as due."""
    pairs = pair_events(views.keep(views.kind == 0), stage)
    if pairs[0].size < 20:
        return 1.0
    share, sd = relation_share(setup, stage)
    v = views.keep(views.kind == 0)
    gap = v.value[pairs[0]] - share[pairs[1]]
    return float(np.clip(solve_width(gap, sd[pairs[1]], v.sd[pairs[0]], np.ones(gap.size)), 0.7, 2.0))
