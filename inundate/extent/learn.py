"""Learning shapes and errors from the archive's own views; no truth enters."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd

from inundate.extent.estimate import (
    LEFT_OVER,
    Shape,
    Views,
    areas,
    band_of,
    expected_fraction,
    fitted_fraction,
    pick_views,
    pixel_terms,
    weigh,
)
from inundate.extent.noise import (
    KINDS,
    OPEN_CLASS,
    VIEW_CLASSES,
    NoiseModel,
    NoiseSums,
)
from inundate.extent.shapes import edge_distance, refine_shape, shape_from_cells, shape_from_order
from inundate.extent.stack import NEAR_STEPS, ExtentOptions, WetlandPixels

FEW_VIEWS = 4
"""Views below which a ranking by wetness is not tried; common practice, no source."""
EVIDENCE_VIEWS = 24
"""Most views of a wetland, evenly spaced in time, on which noise models are weighed against each other."""
GAIN_ROUNDS = 4
GAIN_SD = 0.1
"""Belief about the part of its water that a pixel hides, before views are looked at; common practice, no source."""
LONGEST_BRIDGE = 8.0
"""Longest bridge, d1 d2 / (d1 + d2) days, in checks of views against their neighbours."""
NEAR_DAYS = 30.0
"""Longest time over which two good views between them tell a wetland's level."""


def good_views(views: Views, options: ExtentOptions) -> np.ndarray:
    """Which scenes may teach: bool (scene,)."""
    clear = views.clear_fraction >= options.good_clear
    return clear & (views.view_fraction >= options.good_view) & (views.ice < 0.02)


def first_shape(
    cells: pd.DataFrame | None, wetland: WetlandPixels, views: Views, noise: NoiseModel, options: ExtentOptions
) -> Shape:
    """Shape before refinement: from elevation where there is a model, else from wetness when seen, else the outline."""
    steps = options.levels + 1
    good = good_views(views, options)
    if cells is not None:
        prior = shape_from_cells(cells, wetland, steps)
        if prior is not None:
            return Shape(prior, prior, "cells", noise.shape_var["cells"], int(good.sum()))
    inner = edge_distance(wetland)
    if good.sum() < FEW_VIEWS:
        prior = shape_from_order(np.round(inner, 3), wetland, steps)
        return Shape(prior, prior, "outline", noise.shape_var["outline"], int(good.sum()))
    score = wetness(views, wetland, noise, good) + 1e-3 * inner
    prior = shape_from_order(np.round(score, 4), wetland, steps)
    return Shape(prior, prior, "order", noise.shape_var["order"], int(good.sum()))


def wetness(views: Views, wetland: WetlandPixels, noise: NoiseModel, good: np.ndarray) -> np.ndarray:
    """How wet each pixel is when seen, less how wet the wetland then is, plus its usual wetness; float64 (pixel,)."""
    half = np.full(views.fraction.shape, 0.5)
    value, _, slope = pixel_terms(views, noise, half)
    seen = (slope > 0) & good[:, None]
    value = np.where(seen, np.clip(value / np.maximum(wetland.share, 0.1), -0.2, 1.2), 0.0)
    count = seen.sum(axis=0)
    whole = value.sum(axis=1) / np.maximum(seen.sum(axis=1), 1)
    usual = whole[good].mean() if good.any() else 0.5
    above = np.where(seen, value - whole[:, None], 0.0).sum(axis=0)
    return usual + above / (count + 1.0)


def renew_shape(views: Views, shape: Shape, wetland: WetlandPixels, noise: NoiseModel, options: ExtentOptions) -> Shape:
    """Refine a shape with the good views (and the nearly good ones, by their precision)."""
    teach = (views.clear_fraction >= 0.7) & (views.view_fraction >= 0.8 * options.good_view) & (views.ice < 0.02)
    prior_var = noise.shape_var[shape.source]
    if teach.sum() < 2:
        return replace(shape, filling=shape.prior, departure_var=prior_var, n_views=int(teach.sum()))
    some = pick_views(views, teach)
    post, rest = weigh(some, shape, wetland, noise)
    filled = post @ shape.filling.T.astype(float)
    _, e = fitted_fraction(some, (post, rest), shape, wetland, noise)
    value, error, _ = pixel_terms(some, noise, e)
    share = np.maximum(wetland.share, 1e-3)[None, :]
    error = error * np.clip(rest[:, 0], 1.0, 4.0)[:, None] + LEFT_OVER * prior_var * share**2
    shown = 1.0 if shape.gain is None else shape.gain[None, :]
    precision = np.where(some.kind >= 0, (share * shown) ** 2 / error, 0.0)
    filling = refine_shape(
        shape.prior, 1.0 / prior_var, wetland, post, filled + (value - e) / (share * shown), precision
    )
    taught = float(np.average(precision.sum(axis=0), weights=wetland.area_m2)) / 4.0
    departure = 1.0 / (1.0 / prior_var + taught) + LEFT_OVER * prior_var
    n_views = int(good_views(views, options).sum())
    return replace(shape, filling=filling, departure_var=min(departure, prior_var), n_views=n_views)


def learn_gain(views: Views, shape: Shape, wetland: WetlandPixels, noise: NoiseModel, options: ExtentOptions) -> Shape:
    """Learn how much of its water each pixel shows when wet, 0.4 to 1.

    Only where an elevation model tells the order in which pixels fill: there a pixel that shows half while higher ones
    show all has plants in its water. Levels and gains take turns; a pixel's gain is the slope of what it shows on what its
    level expects, over good views that expect it more than half wet, held towards 1.
    """
    good = good_views(views, options)
    if shape.source != "cells" or good.sum() < FEW_VIEWS:
        return shape
    some = pick_views(views, good)
    bare = np.maximum(expected_fraction(replace(shape, gain=None), wetland, noise).astype(float), 0.0)
    for _ in range(GAIN_ROUNDS):
        post, _ = weigh(some, shape, wetland, noise)
        e = post @ bare.T
        value, error, _ = pixel_terms(some, noise, e)
        w = np.where((some.kind >= 0) & (e > 0.5), 1.0 / error, 0.0)
        belief = 1.0 / GAIN_SD**2
        gain = ((w * value * e).sum(axis=0) + belief) / ((w * e**2).sum(axis=0) + belief)
        shape = replace(shape, gain=np.clip(gain, 0.4, 1.0).astype(np.float32))
    return shape


def reference_levels(
    days: np.ndarray, area: np.ndarray, sd: np.ndarray, good: np.ndarray, drift_var: float
) -> tuple[np.ndarray, np.ndarray]:
    """Area that neighbouring good views expect at each scene, without the scene itself, and its sd.

    A random walk between the last good view before and the first after (Brownian bridge); NaN where either is missing or
    further than 30 days, or at the scene's own date.

    Returns
    -------
    level, sd : ndarray of float64, shape (scene,)
    """
    level, out = np.full(days.size, np.nan), np.full(days.size, np.nan)
    at = np.flatnonzero(good)
    if at.size < 2:
        return level, out
    order = at[np.argsort(days[at], kind="stable")]
    for t in range(days.size):
        after = int(np.searchsorted(days[order], days[t] + 0.25))
        before = int(np.searchsorted(days[order], days[t] - 0.25)) - 1
        if before < 0 or after >= order.size:
            continue
        i, j = order[before], order[after]
        d1, d2 = days[t] - days[i], days[j] - days[t]
        if d1 > NEAR_DAYS or d2 > NEAR_DAYS:
            continue
        w = d1 / (d1 + d2)
        level[t] = (1 - w) * area[i] + w * area[j]
        out[t] = np.sqrt((1 - w) ** 2 * sd[i] ** 2 + w**2 * sd[j] ** 2 + drift_var * d1 * d2 / (d1 + d2))
    return level, out


def noise_sums(
    views: Views, shape: Shape, wetland: WetlandPixels, noise: NoiseModel, days: np.ndarray, options: ExtentOptions
) -> NoiseSums:
    """What one wetland tells about errors."""
    sums = NoiseSums(shape.filling.shape[1])
    post, rest = weigh(views, shape, wetland, noise)
    level = np.linspace(0, 1, post.shape[1])
    mean = post @ level
    sd = np.sqrt(np.maximum(post @ level**2 - mean**2, 0))
    expected = expected_fraction(shape, wetland, noise).astype(float)
    _, e = fitted_fraction(views, (post, rest), shape, wetland, noise)
    row = noise.table[np.maximum(views.kind, 0)]
    fit = row[..., 0] + row[..., 1] * e
    var = row[..., 2] + row[..., 3] * 4 * e * (1 - e)
    step = (np.maximum(views.kind, 0) // 2) % VIEW_CLASSES
    sure = (sd < 0.1) & (views.view_fraction >= 0.5 * options.good_view) & (views.ice < 0.02) & (rest[:, 0] < 4)
    own = (views.kind >= 0) & sure[:, None] & (step >= OPEN_CLASS)
    sums.add_own(views.kind[own], views.fraction[own].astype(float), e[own], var[own], fit[own])
    good = good_views(views, options) & (sd < 0.1)
    sums.area += post[good].sum(axis=0)
    _add_pairs(sums, (views.fraction - fit) / np.sqrt(var), (views.kind >= 0) & good[:, None], wetland)
    whole = (views.kind >= 0) & good[:, None] & (wetland.share > 0.3)[None, :]
    _add_shape(sums, shape, views.fraction - fit, e, var, whole)
    ref, ref_sd = reference_levels(days, mean, sd, good, noise.drift_var)
    with np.errstate(invalid="ignore"):
        held = (views.kind >= 0) & (step < OPEN_CLASS) & (ref_sd < 0.12)[:, None]
    if held.any():
        place = np.nan_to_num(ref) * (expected.shape[1] - 1)
        low = np.minimum(place.astype(int), expected.shape[1] - 2)
        part = (place - low)[:, None]
        there = (1 - part) * expected[:, low].T + part * expected[:, low + 1].T
        weight = np.ones(held.shape)
        sums.add_line(views.kind[held], views.fraction[held].astype(float), there[held], weight[held])
    return sums


def add_anchor(sums: NoiseSums, views: Views, wetland: WetlandPixels) -> None:
    """Add what needs no level: pixels outside the outline are dry; inmost ones of the wettest good views are water."""
    seen = (views.kind >= 0) & (views.ice < 0.02)[:, None]
    ring = seen & ((wetland.share == 0) & (wetland.other < 0.01))[None, :]
    sums.anchor[:, 0] += np.bincount(views.kind[ring], minlength=KINDS)
    sums.anchor[:, 1] += np.bincount(views.kind[ring], weights=views.fraction[ring], minlength=KINDS)
    inner = edge_distance(wetland)
    inner = (wetland.share > 0.99) & (inner >= np.quantile(inner, 0.7))
    clear = (views.clear_fraction > 0.9) & (views.ice < 0.02)
    if inner.sum() < 2 or clear.sum() < 10:
        return
    mean = views.fraction[:, inner].mean(axis=1)
    wettest = clear & (mean >= np.quantile(mean[clear], 0.9))
    top = seen & wettest[:, None] & inner[None, :]
    sums.anchor[:, 2] += np.bincount(views.kind[top], minlength=KINDS)
    sums.anchor[:, 3] += np.bincount(views.kind[top], weights=views.fraction[top], minlength=KINDS)


def evidence(
    views: Views, shape: Shape, wetland: WetlandPixels, trials: list[NoiseModel], options: ExtentOptions
) -> np.ndarray:
    """Log evidence of some good views, evenly spaced in time, under each noise model; float64 (trial,)."""
    good = np.flatnonzero(good_views(views, options))
    if good.size:
        good = good[np.unique(np.linspace(0, good.size - 1, EVIDENCE_VIEWS).astype(int))]
    some = pick_views(views, good)
    return np.array([weigh(some, shape, wetland, trial)[1][:, 1].sum() for trial in trials])


def _add_pairs(sums: NoiseSums, u: np.ndarray, seen: np.ndarray, wetland: WetlandPixels) -> None:
    """Products of standardised residuals of pixel pairs: all, side by side, corner to corner."""
    u = np.where(seen, np.clip(u, -3, 3), 0.0)
    n = seen.sum(axis=1).astype(float)
    keep = n >= 5
    total = (u.sum(axis=1) ** 2 - (u**2).sum(axis=1))[keep]
    sums.pairs[0] += (float((total / n[keep]).sum()), float((n[keep] - 1).sum()))
    for k, (i, j) in enumerate(NEAR_STEPS[:8]):
        near = wetland.near[:, k]
        other = np.where(near >= 0, near, 0)
        both = seen & seen[:, other] & (near >= 0)[None, :]
        which = 1 if abs(i) + abs(j) == 1 else 2
        sums.pairs[which] += (float((u * u[:, other])[both].sum()), float(both.sum()))


def _add_shape(sums: NoiseSums, shape: Shape, r: np.ndarray, e: np.ndarray, var: np.ndarray, seen: np.ndarray) -> None:
    """Add the lasting part of residuals of mixed pixels: variance of a pixel's filling about its shape."""
    middle = seen & (e > 0.15) & (e < 0.85)
    n = middle.sum(axis=0)
    keep = n >= 3
    if not keep.any():
        return
    mean = np.where(middle, r, 0.0).sum(axis=0)[keep] / n[keep]
    error = np.where(middle, var, 0.0).sum(axis=0)[keep] / n[keep] ** 2
    mixed = np.where(middle, 4 * e * (1 - e), 0.0).sum(axis=0)[keep] / n[keep]
    sums.shape[shape.source] += (float(((mean**2 - error) / mixed**2).sum()), float(keep.sum()))


def masked_checks(
    views: Views,
    shape: Shape,
    wetland: WetlandPixels,
    noise: NoiseModel,
    options: ExtentOptions,
    rng: np.random.Generator,
) -> list[tuple[int, float, float, float, float]]:
    """Good views seen again through other scenes' clouds: (band, partial less full area, both sds).

    The partial view sees a part of what the full one sees, so the variance of their difference is that of the partial
    less that of the full estimate.
    """
    good = np.flatnonzero(good_views(views, options))
    holes = np.flatnonzero((views.clear_fraction > 0.1) & (views.clear_fraction < 0.9) & (views.ice < 0.02))
    if good.size == 0 or wetland.pixel.size < 2:
        return []
    keep = rng.permutation(good)[:12]
    masks = []
    for _ in range(keep.size):
        if holes.size and rng.random() < 0.5:
            masks.append(views.kind[rng.choice(holes)] >= 0)
        else:
            masks.append(_half_plane(wetland, rng))
    mask = np.array(masks)
    part = wetland.area_m2 / wetland.area_max_m2
    kind = np.where(mask, views.kind[keep], -1).astype(np.int16)
    seen = kind >= 0
    some = Views(
        views.fraction[keep],
        kind,
        views.widen[keep],
        seen @ part,
        seen @ part,
        views.ice[keep],
        views.off[keep],
        views.leaf[keep],
    )
    full = pick_views(views, keep)
    a, sa = areas(full, shape, wetland, noise)
    b, sb = areas(some, shape, wetland, noise)
    bands = band_of(some.view_fraction)
    enough = some.view_fraction > 0.1
    return [
        (int(bands[i]), float(b[i] - a[i]), float(sb[i]), float(sa[i]), float(some.view_fraction[i]))
        for i in np.flatnonzero(enough)
    ]


def _half_plane(wetland: WetlandPixels, rng: np.random.Generator) -> np.ndarray:
    """Pixels on one side of a random line, as a cloud edge leaves them: bool (pixel,)."""
    angle, share = rng.uniform(0, 2 * np.pi), rng.uniform(0.1, 0.9)
    along = wetland.row * np.sin(angle) + wetland.col * np.cos(angle)
    order = np.argsort(along, kind="stable")
    reached = np.cumsum(wetland.area_m2[order]) / wetland.area_max_m2
    out = np.zeros(wetland.row.size, bool)
    out[order[reached <= share]] = True
    return out & (wetland.pixel >= 0)


def neighbour_checks(
    views: Views, area: np.ndarray, sd: np.ndarray, days: np.ndarray, options: ExtentOptions
) -> list[tuple[int, float, float, float, float, float]]:
    """Views against the good views around them: (band, difference, own sd, neighbours' sd, days of bridge,
    1 if the view itself is good).
    """
    good = good_views(views, options)
    level, out = reference_levels(days, area, sd, good, 0.0)
    bridge, _ = reference_levels(days, area, np.zeros_like(sd), good, 0.0)
    _, wander = reference_levels(days, area, np.zeros_like(sd), good, 1.0)
    usable = np.isfinite(bridge) & (views.view_fraction >= options.least_view) & (views.ice < 0.02)
    bands = band_of(views.view_fraction)
    return [
        (int(bands[t]), float(area[t] - level[t]), float(sd[t]), float(out[t]), float(wander[t] ** 2), float(good[t]))
        for t in np.flatnonzero(usable)
    ]


def fit_drift(checks: np.ndarray) -> tuple[float, float]:
    """Variance of a day's wander, and factor on the sd of good views, from good views against their neighbours.

    Squared differences are regressed on the stated variance and on the days bridged (non-negative least squares on
    medians of groups, scaled to a normal's variance), so that long bridges tell of wander and short ones of error.

    Parameters
    ----------
    checks : ndarray of float64, shape (check, 6)
        From :func:`neighbour_checks`.

    Returns
    -------
    drift_var, scale : float
    """
    good = checks[(checks[:, 5] > 0) & (checks[:, 4] <= LONGEST_BRIDGE)]
    if good.shape[0] < 60:
        return 0.02**2, 1.0
    d2, v, g = good[:, 1] ** 2, good[:, 2] ** 2 + good[:, 3] ** 2, good[:, 4]
    scale2, drift = 1.0, 0.02**2
    for _ in range(50):
        w = 1.0 / (scale2 * v + drift * g) ** 2
        z = d2 / (scale2 * v + drift * g)
        w = w / (1.0 + z / 9.0) ** 2
        a = np.array([[np.sum(w * v * v), np.sum(w * v * g)], [np.sum(w * v * g), np.sum(w * g * g)]])
        b = np.array([np.sum(w * v * d2), np.sum(w * g * d2)])
        try:
            new = np.linalg.solve(a, b)
        except np.linalg.LinAlgError:
            break
        scale2, drift = float(np.clip(new[0], 0.25, 9.0)), float(np.clip(new[1], 1e-6, 0.01))
    return drift, float(np.sqrt(scale2))
