"""What views are worth: scenes that err as a whole, and what canopies hide or feign, measured at the wetlands with loggers."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from inundate.series.inputs import DIM, Events

# Bounds between classes of views under leaves by the share of ground that the canopy lets through (common practice).
_OPENNESS = (0.4, 0.6)
# Without loggers a view under leaves counts with this factor on its sd; and the pooled weight, in wetland-years, of a
# coarser group beside a finer one. Common practice, no source.
_UNPROVEN, _SHRINK = 3.0, 4.0
# Standard deviation, from wetland to wetland, of the error of views of ground that a canopy covers; common practice, no source.
_LASTING = 0.2
_STRAY = 0.02
# A view counts as worthless from this factor on its sd; canopies whose views follow the truth with a lesser slope tell nothing.
_USELESS, _LEAST_SLOPE = 30.0, 0.1
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


@dataclass(frozen=True, slots=True)
class Reading:
    """How views of one leaf state and openness read: ``view = offset + slope * truth``, with an error of ``sd``."""

    offset: float
    slope: float
    sd: float


def correct_leafy(views: Events, stage: Events, truth: tuple[np.ndarray, np.ndarray]) -> Events:
    """Return views with those under leaves read, and weighed, as they prove at the wetlands with loggers.

    In a group of views (leaf state, openness of the canopy) a line of view on truth, a wetland's year counting once, tells what canopies
    hide or feign; views are read back through it. Lines and errors are shrunk from openness groups to leaf states to what an unproven
    view would be. Errors under leaves persist: crowded views of a season count less, and what wetlands differ by lasts.

    Parameters
    ----------
    views : Events
    stage : Events
        Days with certain stage; none without loggers.
    truth : (share, sd)
        Share of the largest extent at each stage event, and its standard deviation.

    Returns
    -------
    Events
        Leaf-off views as they were; views that prove worth nothing are gone.
    """
    leafy = views.kind != 0
    if not leafy.any():
        return views
    dim = leafy & (views.open < DIM)
    bins = np.digitize(views.open, _OPENNESS)
    at, on = pair_events(views, stage)
    keep = leafy[at] & ~dim[at]
    at, on = at[keep], on[keep]
    table, gap = _readings(views, bins, at, (truth[0][on], truth[1][on]))
    lasting = _lasting(gap, views, at)
    crowd, count = _crowding_by_wetland(views, leafy)
    value, var = views.value.copy(), views.sd**2
    good = np.ones(views.day.size, bool)
    for (leaf, size), line in table.items():
        cell = leafy & ~dim & (views.kind == leaf) & (bins == size)
        if not cell.any():
            continue
        scale = max(line.sd / _usual_sd(views.sd[cell]), 1.0) if at.size else _UNPROVEN
        value[cell] = np.clip((views.value[cell] - line.offset) / line.slope, 0.0, 1.0)
        var[cell] = ((scale * views.sd[cell]) ** 2 * crowd[cell] + lasting[cell] * count[cell]) / line.slope**2
        good[cell] = np.sqrt(var[cell]) < _USELESS * views.sd[cell]
    var[dim] = (_UNPROVEN * views.sd[dim]) ** 2 * crowd[dim] + _LASTING**2 * count[dim]
    return replace(views, value=value, sd=np.sqrt(var)).keep(good)


def _readings(
    views: Events, bins: np.ndarray, at: np.ndarray, truth: tuple[np.ndarray, np.ndarray]
) -> tuple[dict[tuple[int, int], Reading], np.ndarray]:
    """Return the reading of each leaf state and openness group, and what is left of each paired view."""
    kind, group, value = views.kind[at], bins[at], views.value[at]
    share, share_sd = truth
    weight = count_once(views.owner[at] * 1000 + views.day[at] // 365)
    moments = _moments(share, weight)
    table: dict[tuple[int, int], Reading] = {}
    gap = np.zeros(at.size)
    for leaf in (1, 2, 3):
        wide = _UNPROVEN * _usual_sd(views.sd[(views.kind == leaf) & (views.open >= DIM)])
        rows = kind == leaf
        whole = _line(value[rows], share[rows], share_sd[rows], weight[rows], (Reading(0.0, 1.0, wide), moments))
        for size in range(len(_OPENNESS) + 1):
            rows = (kind == leaf) & (group == size)
            table[leaf, size] = line = _line(value[rows], share[rows], share_sd[rows], weight[rows], (whole, moments))
            gap[rows] = value[rows] - line.offset - line.slope * share[rows]
    return table, gap


def _moments(share: np.ndarray, weight: np.ndarray) -> np.ndarray:
    """Mean of (1, share) times itself, (2, 2); that of an even spread where there is nothing."""
    if not share.size:
        return np.array([[1.0, 0.5], [0.5, 1.0 / 3.0]])
    x = np.column_stack([np.ones(share.size), share])
    return (x.T * weight) @ x / weight.sum() + np.diag([0.0, 0.02])


def _line(
    value: np.ndarray, share: np.ndarray, share_sd: np.ndarray, weight: np.ndarray, parent: tuple[Reading, np.ndarray]
) -> Reading:
    """Fit a line of view on truth, held by its parent's as by ``_SHRINK`` wetland-years."""
    above, moments = parent
    if not value.size:
        return above
    x = np.column_stack([np.ones(value.size), share])
    hold = _SHRINK * moments
    held = np.array([above.offset, above.slope])
    offset, slope = np.linalg.solve((x.T * weight) @ x + hold, x.T @ (weight * value) + hold @ held)
    slope = float(np.clip(slope, _LEAST_SLOPE, 1.5))
    rest = np.maximum((value - offset - slope * share) ** 2 - (slope * share_sd) ** 2, 0.0)
    var = ((weight * rest).sum() + _SHRINK * above.sd**2) / (weight.sum() + _SHRINK)
    return Reading(float(offset), slope, float(np.sqrt(var)))


def _lasting(gap: np.ndarray, views: Events, at: np.ndarray) -> np.ndarray:
    """Variance (view,) of errors that last in a wetland: what canopies hide differs from one to the next.

    Believed to be ``_LASTING`` of what the canopy covers; the mean errors of wetlands with loggers, beyond what errors that come and go
    would leave, scale that, by as many wetlands as there are.
    """
    hidden = (_LASTING * (1.0 - np.clip(views.open, 0.0, 1.0))) ** 2 + 1e-4
    owner, day = views.owner[at], views.day[at]
    ratio = []
    for i in np.unique(owner):
        mine = np.flatnonzero(owner == i)
        away = np.abs(day[mine][:, None] - day[mine][None, :])
        free = (1.0 / np.exp(-away / _LEAFY_MEMORY_DAYS).sum(axis=1)).sum()
        left = gap[mine].var() / max(free - 1.0, 1.0)
        ratio.append((gap[mine].mean() ** 2 - left) / hidden[at][mine].mean())
    return hidden * max((np.sum(ratio) + _SHRINK) / (len(ratio) + _SHRINK), 0.1)


def count_once(key: np.ndarray) -> np.ndarray:
    """Return weights by which the rows of each key add up to 1."""
    _, inverse, counts = np.unique(key, return_inverse=True, return_counts=True)
    return 1 / counts[inverse]


def _usual_sd(sd: np.ndarray) -> float:
    """Root mean square of claimed sds; that of a middling view where there is none."""
    return float(np.sqrt(np.mean(sd**2))) if sd.size else 0.15


def _crowding_by_wetland(views: Events, leafy: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return 1 plus the summed correlation with the wetland's other views under leaves, and how many of these there are."""
    out, count = np.ones(views.day.size), np.ones(views.day.size)
    for i in np.unique(views.owner[leafy]):
        rows = np.flatnonzero(leafy[views.start[i] : views.start[i + 1]]) + views.start[i]
        gap = np.abs(views.day[rows][:, None] - views.day[rows][None, :])
        out[rows] = np.exp(-gap / _LEAFY_MEMORY_DAYS).sum(axis=1)
        count[rows] = rows.size
    return out, count
