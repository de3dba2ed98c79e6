"""The statistical frame: predictors fitted and pooled, departure smoothed, views weighed by what they proved worth."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from inundate.series.fitting import (
    KINDS,
    LINEAR,
    Departure,
    Posterior,
    Prior,
    Setup,
    first_prior,
    fit_many,
    in_threads,
    member_paths,
    member_sets,
    pool_items,
    pooled_prior,
    targets,
)
from inundate.series.inputs import Events
from inundate.series.kalman import smooth_one
from inundate.series.smooth import find_sites, smooth_members, spread_shares

# Candidate sizes (share of the full level) and memories (days) of the departure.
DEPARTURE_SD = (0.02, 0.04, 0.07, 0.12, 0.2, 0.32)
DEPARTURE_MEMORY = (6.0, 18.0, 50.0)
# Day, value, sd, kind and whether it is stage, of one wetland's events in order of day.
Rows = tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray, np.ndarray]
_FIRST_SD, _FIRST_MEMORY = 0.12, 18.0


@dataclass(frozen=True, slots=True)
class Fitted:
    """One predictor kind, fitted to all wetlands; ``departure_prior`` (sd, memory) is what the pool says of departures."""

    kind: str
    prior: Prior
    posterior: Posterior
    departure: Departure
    departure_prior: np.ndarray


@dataclass(frozen=True, slots=True)
class Levels:
    """Level of wetlands a day: ``mean`` and ``sd`` (wetland, day), float32, m."""

    mean: np.ndarray
    sd: np.ndarray


def available_kinds(setup: Setup) -> tuple[str, ...]:
    """Return the predictor kinds that the inputs allow; the water balance needs weather."""
    return KINDS if setup.drivers.has_weather else (LINEAR,)


def _events_of(views: Events, stage: Events, i: int) -> Rows:
    v, s = slice(views.start[i], views.start[i + 1]), slice(stage.start[i], stage.start[i + 1])
    day = np.concatenate([views.day[v], stage.day[s]])
    is_stage = np.r_[np.zeros(views.day[v].size, bool), np.ones(stage.day[s].size, bool)]
    order = np.lexsort((is_stage, day))
    return (
        day[order],
        np.concatenate([views.value[v], stage.value[s]])[order],
        np.concatenate([views.sd[v], stage.sd[s]])[order],
        np.concatenate([views.kind[v], stage.kind[s]])[order],
        is_stage[order],
    )


def _sites(
    setup: Setup, i: int, paths: np.ndarray, events: Rows, sd: float, memory: float
) -> tuple[np.ndarray, np.ndarray]:
    path, spread = paths.mean(axis=0), paths.var(axis=0)
    site, site_var = np.empty(path.size), np.empty(path.size)
    phi = float(np.exp(-1 / memory))
    s0 = sd * sd
    table, full = setup.maps.share[i], float(setup.maps.full_m[i])
    day, value, error, kind, is_stage = events
    find_sites(
        path,
        spread,
        day,
        value,
        error,
        kind,
        is_stage,
        table,
        full,
        phi,
        s0 * (1 - phi * phi),
        s0,
        setup.options.outlier_share,
        site,
        site_var,
    )
    return site, site_var


def departure_loglik(setup: Setup, i: int, paths: np.ndarray, events: Rows) -> np.ndarray:
    """Return the log-likelihood (sd, memory) of a wetland's events for each candidate departure."""
    full = float(setup.maps.full_m[i])
    out = np.zeros((len(DEPARTURE_SD), len(DEPARTURE_MEMORY)))
    if events[0].size == 0:
        return out
    site, site_var = _sites(setup, i, paths, events, _FIRST_SD * full, _FIRST_MEMORY)
    y = site - paths.mean(axis=0)
    total = site_var + paths.var(axis=0)
    mean, var = np.empty(y.size), np.empty(y.size)
    for a, sd in enumerate(DEPARTURE_SD):
        for b, memory in enumerate(DEPARTURE_MEMORY):
            phi, s0 = float(np.exp(-1 / memory)), (sd * full) ** 2
            out[a, b] = smooth_one(y, total, phi, s0 * (1 - phi * phi), s0, mean, var)
    return out


def pool_departures(logliks: np.ndarray) -> np.ndarray:
    """Return the prior (sd, memory) over candidate departures that all wetlands support (EM).

    Parameters
    ----------
    logliks : ndarray, shape (wetland, sd, memory)

    Returns
    -------
    ndarray, shape (sd, memory)
    """
    flat = logliks.reshape(len(logliks), -1)
    like = np.exp(flat - flat.max(axis=1, keepdims=True))
    weight = np.full(flat.shape[1], 1 / flat.shape[1])
    for _ in range(30):
        member = like * weight
        member /= member.sum(axis=1, keepdims=True)
        weight = (member.sum(axis=0) + 1 / flat.shape[1]) / (len(flat) + 1)
    return weight.reshape(logliks.shape[1:])


def choose_departures(logliks: np.ndarray, prior: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the root mean square sd and the mean log memory (as days), shape (wetland,), under a prior (sd, memory)."""
    flat = logliks.reshape(len(logliks), -1)
    member = np.exp(flat - flat.max(axis=1, keepdims=True)) * prior.ravel()
    member /= member.sum(axis=1, keepdims=True)
    sd, memory = np.meshgrid(DEPARTURE_SD, DEPARTURE_MEMORY, indexing="ij")
    return np.sqrt(member @ (sd.ravel() ** 2)), np.exp(member @ np.log(memory.ravel()))


def learn_kind(setup: Setup, kind: str, views: Events, stage: Events, begin: Fitted | None = None) -> Fitted:
    """Learn the pooled prior of one predictor kind (EM) and its departure (likelihood) from the pool of wetlands.

    Parameters
    ----------
    setup : Setup
    kind : str
    views, stage : Events
    begin : Fitted or None
        An earlier result to start from.

    Returns
    -------
    Fitted
        With parameters of the pool's wetlands; others hold their prior.
    """
    count, items = len(setup.panel.ids), pool_items(setup)
    prior = first_prior(setup, kind) if begin is None else begin.prior
    departure = (
        Departure(np.full(count, _FIRST_SD), np.full(count, _FIRST_MEMORY)) if begin is None else begin.departure
    )
    say = np.full((len(DEPARTURE_SD), len(DEPARTURE_MEMORY)), 1 / (len(DEPARTURE_SD) * len(DEPARTURE_MEMORY)))
    theta = setup.group @ prior.coef if begin is None else begin.posterior.theta.copy()
    cov = np.repeat(prior.cov[None], count, axis=0)
    if not items.size:
        return Fitted(kind, prior, Posterior(theta, cov), departure, say)
    rounds = (12, 5, 5, 5) if begin is None else (5, 5)
    for step, most in enumerate(rounds):
        aims = {int(i): targets(setup, int(i), views, stage, departure) for i in items}
        post = fit_many(setup, kind, items.tolist(), aims, prior, theta, most)
        theta[items], cov[items] = post.theta, post.cov
        prior = pooled_prior(setup, kind, items, post)
        if step == 1:
            departure, say = _fit_departure(setup, kind, items, post, views, stage)
    return Fitted(kind, prior, Posterior(theta, cov), departure, say)


def fit_kind(setup: Setup, kind: str, views: Events, stage: Events, begin: Fitted | None = None) -> Fitted:
    """Fit one predictor kind to all wetlands under the prior that the pool teaches."""
    learned = learn_kind(setup, kind, views, stage, begin)
    everyone = range(len(setup.panel.ids))
    aims = {i: targets(setup, i, views, stage, learned.departure) for i in everyone}
    theta = setup.group @ learned.prior.coef
    items = pool_items(setup)
    theta[items] = learned.posterior.theta[items]
    post = fit_many(setup, kind, list(everyone), aims, learned.prior, theta, 8)
    departure, say = _fit_departure(setup, kind, np.arange(theta.shape[0]), post, views, stage)
    return Fitted(kind, learned.prior, post, departure, say)


def departure_logliks(
    setup: Setup, kind: str, items: np.ndarray, post: Posterior, views: Events, stage: Events
) -> np.ndarray:
    """Return log-likelihoods (item, sd, memory) of candidate departures; rows of ``post`` follow ``items``."""

    def work(row: int) -> np.ndarray:
        i = int(items[row])
        path = member_paths(setup, kind, i, post.theta[row][None])
        return departure_loglik(setup, i, path, _events_of(views, stage, i))

    return np.array(in_threads(work, range(len(items)), setup.options.workers))


def _fit_departure(
    setup: Setup, kind: str, items: np.ndarray, post: Posterior, views: Events, stage: Events
) -> tuple[Departure, np.ndarray]:
    logliks = departure_logliks(setup, kind, items, post, views, stage)
    prior = pool_departures(logliks)
    count = len(setup.panel.ids)
    flat = np.zeros((1, *prior.shape))
    every = choose_departures(flat, prior)
    sd, memory = np.repeat(every[0], count), np.repeat(every[1], count)
    sd[items], memory[items] = choose_departures(logliks, prior)
    return Departure(sd, memory), prior


def smooth_levels(
    setup: Setup, fit: Fitted, items: Sequence[int], views: Events, stage: Events, posterior: Posterior
) -> Levels:
    """Smooth levels of wetlands with one predictor; rows follow ``items``, as do those of ``posterior``."""
    days = len(setup.panel.dates)
    out = Levels(np.empty((len(items), days), np.float32), np.empty((len(items), days), np.float32))

    def work(row: int) -> None:
        i = int(items[row])
        rows = _events_of(views, stage, i)
        mean, var, _, _ = _smooth_one(setup, fit, i, (posterior.theta[row], posterior.cov[row]), rows)
        out.mean[row], out.sd[row] = mean, np.sqrt(np.maximum(var, 1e-8))

    in_threads(work, range(len(items)), setup.options.workers)
    return out


def _smooth_one(
    setup: Setup, fit: Fitted, i: int, parameters: tuple[np.ndarray, np.ndarray], rows: Rows
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Return mean and variance of the level (day,), and the normal observations that stand for the events."""
    sets, square = member_sets(setup, fit.kind, i, *parameters)
    paths = member_paths(setup, fit.kind, i, sets)
    sd, memory = float(fit.departure.sd[i] * setup.maps.full_m[i]), float(fit.departure.memory[i])
    site, site_var = _sites(setup, i, paths, rows, sd, memory)
    phi, s0 = float(np.exp(-1 / memory)), sd * sd
    mean, var = np.empty(paths.shape[1]), np.empty(paths.shape[1])
    score = member_scores(setup, fit, i, sets, square)
    smooth_members(paths, score, site, site_var, phi, s0 * (1 - phi * phi), s0, mean, var)
    return mean, var, site, site_var


def member_scores(setup: Setup, fit: Fitted, i: int, sets: np.ndarray, square: np.ndarray) -> np.ndarray:
    """Return the log of each member's prior over the density it was drawn from; infinite for a predictor without bends."""
    if fit.kind == LINEAR:
        return np.full(len(sets), np.inf)
    gap = sets - setup.group[i] @ fit.prior.coef
    away = np.einsum("mi,ij,mj->m", gap, np.linalg.inv(fit.prior.cov), gap)
    return 0.5 * (square - away)


def left_out_scores(setup: Setup, fit: Fitted, items: np.ndarray, views: Events, stage: Events) -> np.ndarray:
    """Return the standardised difference of each view from the level that all other events give.

    Parameters
    ----------
    setup : Setup
    fit : Fitted
    items : ndarray of int
        Wetlands whose views are scored.
    views, stage : Events

    Returns
    -------
    ndarray, shape (view,)
        In units of the view's and the prediction's joint standard deviation; NaN for views of other wetlands.
    """
    out = np.full(views.day.size, np.nan)

    def work(row: int) -> None:
        i = int(items[row])
        part = slice(views.start[i], views.start[i + 1])
        day = views.day[part]
        parameters = (fit.posterior.theta[i], fit.posterior.cov[i])
        mean, var, site, site_var = _smooth_one(setup, fit, i, parameters, _events_of(views, stage, i))
        seen = np.isfinite(site_var[day])
        held = np.where(seen, site_var[day], 1.0)
        left = np.where(seen, np.maximum(1 / var[day] - 1 / held, 1e-2 / var[day]), 1 / var[day])
        middle = np.where(seen, (mean[day] / var[day] - site[day] / held) / left, mean[day])
        share, spread = np.empty(day.size), np.empty(day.size)
        table, full = setup.maps.share[i], float(setup.maps.full_m[i])
        spread_shares(middle, np.sqrt(1 / left), table, full, share, spread)
        out[part] = (views.value[part] - share) / np.sqrt(views.sd[part] ** 2 + spread**2)

    in_threads(work, range(len(items)), setup.options.workers)
    return out


def with_leaves(bare: np.ndarray, leafy: np.ndarray, leaf: np.ndarray) -> np.ndarray:
    """Go from values on bare days to those on leafy days by leaf state code, halfway as leaves come and go; shapes broadcast."""
    return bare + np.array([0.0, 0.5, 1.0, 0.5], bare.dtype)[leaf] * (leafy - bare)


def day_weights(weights: np.ndarray, leaf: np.ndarray, kind: int) -> np.ndarray:
    """Return the weight of one kind (wetland, day): that of bare or of leafy days, halfway between as leaves come and go.

    Parameters
    ----------
    weights : ndarray, shape (2, wetland, kind)
        On bare and on leafy days.
    leaf : ndarray of uint8, shape (wetland, day)
    kind : int
    """
    bare, leafy = weights[:, :, kind].astype(np.float32)
    return with_leaves(bare[:, None], leafy[:, None], leaf)


def blend(levels: Sequence[Levels], weights: np.ndarray, leaf: np.ndarray) -> Levels:
    """Blend predictors' levels; the spread between them counts in the variance.

    Parameters
    ----------
    levels : sequence of Levels, one a kind
    weights : ndarray, shape (2, wetland, kind)
    leaf : ndarray of uint8, shape (wetland, day)

    Returns
    -------
    Levels
    """
    if len(levels) == 1:
        return levels[0]
    mean, var = np.zeros_like(levels[0].mean), np.zeros_like(levels[0].mean)
    for k, one in enumerate(levels):
        mean += day_weights(weights, leaf, k) * one.mean
    for k, one in enumerate(levels):
        var += day_weights(weights, leaf, k) * (one.sd**2 + (one.mean - mean) ** 2)
    return Levels(mean, np.sqrt(var))
