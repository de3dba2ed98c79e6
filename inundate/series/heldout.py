"""Held-out evidence: whole seasons of views hidden, and loggers hidden, predicted as if they had never been seen."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numba import njit

from inundate.common.seeds import rng_for
from inundate.series.fitting import (
    Departure,
    Prior,
    Setup,
    fit_many,
    pool_items,
    pooled_prior,
    targets,
    with_maps,
)
from inundate.series.inputs import Events
from inundate.series.maps import LevelMaps, level_at, share_at
from inundate.series.model import Fitted, Levels, choose_departures, departure_logliks, smooth_levels


@dataclass(frozen=True, slots=True)
class Evidence:
    """Hidden values beside their predictions, one row each.

    Attributes
    ----------
    wetland, day, block : ndarray of int64, shape (row,)
        Position, day and block (rows of one wetland and block are not independent).
    leaf : ndarray of uint8, shape (row,)
    truth, truth_sd : ndarray, shape (row,)
        Share of the largest extent that was hidden, and its standard deviation.
    low, high : ndarray, shape (row,)
        Lowest and highest level (m) that agree with the hidden share.
    level_sd : ndarray, shape (row,)
        Standard deviation of the hidden value in m of level.
    mean, sd : ndarray, shape (kind, row)
        Predicted level, m.
    share : ndarray, shape (kind, row)
        Share at the predicted level.
    from_stage : ndarray of bool, shape (row,)
        True where the hidden value came from a logger.
    """

    wetland: np.ndarray
    day: np.ndarray
    block: np.ndarray
    leaf: np.ndarray
    truth: np.ndarray
    truth_sd: np.ndarray
    low: np.ndarray
    high: np.ndarray
    level_sd: np.ndarray
    mean: np.ndarray
    sd: np.ndarray
    share: np.ndarray
    from_stage: np.ndarray

    def where(self, wanted: np.ndarray) -> Evidence:
        """Return the rows where ``wanted`` is true."""
        return Evidence(*(getattr(self, name)[..., wanted] for name in self.__slots__))


def join(parts: Sequence[Evidence]) -> Evidence:
    """Return the rows of several pieces, one after another."""
    return Evidence(*(np.concatenate([getattr(p, name) for p in parts], axis=-1) for name in Evidence.__slots__))


def season_blocks(setup: Setup) -> np.ndarray:
    """Return the block of each day: years cut in the middle of the leafy season, so that one leaf-off season is whole.

    A record with fewer than two such years is cut into thirds.
    """
    days = len(setup.panel.dates)
    leafy = np.flatnonzero((setup.panel.leaf == 2).mean(axis=0) > 0.3)
    stamps = setup.panel.dates.astype("datetime64[D]").astype(np.int64)
    turn = 2 * np.pi * (stamps[leafy] if leafy.size else stamps[:1]) / 365.25
    middle = np.arctan2(np.sin(turn).sum(), np.cos(turn).sum()) / (2 * np.pi) * 365.25
    block = np.floor((stamps - middle) / 365.25).astype(np.int64)
    block -= block.min()
    if np.unique(block[np.unique(setup.panel.views.day)]).size < 2:
        block = (np.arange(days) * 3) // days
    return block


def _rows(
    setup: Setup,
    items: np.ndarray,
    row: np.ndarray,
    day: np.ndarray,
    truth: np.ndarray,
    truth_sd: np.ndarray,
    block: np.ndarray,
    levels: Sequence[Levels],
    from_stage: bool,
) -> Evidence:
    wetland = items[row]
    count = row.size
    low, high, level_sd = np.empty(count), np.empty(count), np.empty(count)
    share = np.empty((len(levels), count))
    mean = np.array([one.mean[row, day] for one in levels], float).reshape(len(levels), count)
    sd = np.array([one.sd[row, day] for one in levels], float).reshape(len(levels), count)
    _place(setup.maps.share, setup.maps.full_m, wetland, truth, truth_sd, mean, low, high, level_sd, share)
    stage = np.full(count, from_stage)
    return Evidence(
        wetland,
        day,
        block,
        setup.panel.leaf[wetland, day],
        truth,
        truth_sd,
        low,
        high,
        level_sd,
        mean,
        sd,
        share,
        stage,
    )


def hide_loggers(
    setup: Setup, blind: LevelMaps, fits: Sequence[Fitted], views: Events, stage: Events
) -> Evidence | None:
    """Hide every logger, fold by fold, and predict its wetland's extent from the views and the other loggers.

    Parameters
    ----------
    setup : Setup
    blind : LevelMaps
        Maps that use no logger (as a wetland without logger would have).
    fits : sequence of Fitted
    views, stage : Events

    Returns
    -------
    Evidence or None
        None without loggers.
    """
    fold = setup.drivers.fold
    if not fold.any():
        return None
    hidden = with_maps(setup, blind)
    pool = pool_items(setup)
    parts = []
    block_of = season_blocks(setup)
    for f in range(1, int(fold.max()) + 1):
        items = np.flatnonzero(fold == f)
        others = pool[fold[pool] != f]
        levels = []
        for fit in fits:
            post = type(fit.posterior)(fit.posterior.theta[others], fit.posterior.cov[others])
            prior = pooled_prior(setup, fit.kind, others, post)
            levels.append(_as_unlogged(hidden, fit, prior, items, views))
        wanted = stage.keep(np.isin(stage.owner, items)).certain()
        row = np.searchsorted(items, wanted.owner)
        truth, truth_sd = relation_share(setup, wanted)
        parts.append(_rows(hidden, items, row, wanted.day, truth, truth_sd, block_of[wanted.day], levels, True))
    return join(parts)


def _as_unlogged(setup: Setup, fit: Fitted, prior: Prior, items: np.ndarray, views: Events) -> Levels:
    """Fit and smooth wetlands from views alone, with a departure that views alone support."""
    none = views.keep(np.zeros(views.day.size, bool))
    sd, memory = choose_departures(np.zeros((1, *fit.departure_prior.shape)), fit.departure_prior)
    count = len(setup.panel.ids)
    departure = Departure(np.full(count, sd[0]), np.full(count, memory[0]))
    aims = {int(i): targets(setup, int(i), views, none, departure) for i in items}
    got = fit_many(setup, fit.kind, items.tolist(), aims, prior, None, 12)
    own = choose_departures(departure_logliks(setup, fit.kind, items, got, views, none), fit.departure_prior)
    departure.sd[items], departure.memory[items] = own
    return smooth_levels(setup, replace(fit, departure=departure), items.tolist(), views, none, got)


def relation_share(setup: Setup, stage: Events) -> tuple[np.ndarray, np.ndarray]:
    """Return the share of the largest extent at each stage event, and its standard deviation."""
    return _shares(setup.maps.share, setup.maps.sd, setup.maps.full_m, stage.owner, stage.value, stage.sd)


@njit(cache=True, nogil=True)
def _shares(
    tables: np.ndarray,
    errors: np.ndarray,
    full: np.ndarray,
    owner: np.ndarray,
    value: np.ndarray,
    sd: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    share, error = np.empty(value.size), np.empty(value.size)
    for n in range(value.size):
        table, top = tables[owner[n]], full[owner[n]]
        share[n] = share_at(value[n], table, top)
        rise = share_at(value[n] + sd[n], table, top) - share_at(value[n] - sd[n], table, top)
        error[n] = np.hypot(0.5 * rise, share_at(value[n], errors[owner[n]], top))
    return share, error


@njit(cache=True, nogil=True)
def _place(
    tables: np.ndarray,
    tops: np.ndarray,
    owner: np.ndarray,
    truth: np.ndarray,
    truth_sd: np.ndarray,
    mean: np.ndarray,
    low: np.ndarray,
    high: np.ndarray,
    level_sd: np.ndarray,
    share: np.ndarray,
) -> None:
    """Fill levels that agree with hidden shares, their error in m, and predicted shares (kind, row)."""
    for n in range(owner.size):
        table, full = tables[owner[n]], tops[owner[n]]
        here = level_at(truth[n], table, full)
        low[n] = -np.inf if truth[n] <= 1e-3 else here
        high[n] = np.inf if truth[n] >= table[-1] - 1e-3 else here
        up, down = (
            level_at(truth[n] + truth_sd[n], table, full),
            level_at(truth[n] - truth_sd[n], table, full),
        )
        level_sd[n] = 0.5 * (up - down)
        for k in range(mean.shape[0]):
            share[k, n] = share_at(mean[k, n], table, full)


def hide_blocks(setup: Setup, fits: Sequence[Fitted], views: Events, stage: Events) -> Evidence | None:
    """Hide whole seasons of views in turn, stage with them, and predict them.

    Returns
    -------
    Evidence or None
        None where fewer than two blocks hold views.
    """
    block_of = season_blocks(setup)
    group = block_of % min(setup.options.blocks, max(int(block_of.max()) + 1, 2))
    count = np.diff(views.start)
    order = np.array([rng_for(setup.seed, "score", w).random() for w in setup.panel.ids])
    items = np.flatnonzero(count >= 4)
    items = np.sort(items[np.argsort(order[items], kind="stable")][: setup.options.score_wetlands])
    parts = []
    if not items.size:
        return None
    sample = views.keep(np.isin(views.owner, items))
    for g in np.unique(group[sample.day]):
        seen, kept = views.keep(group[views.day] != g), stage.keep(group[stage.day] != g)
        levels = []
        for fit in fits:
            aims = {int(i): targets(setup, int(i), seen, kept, fit.departure) for i in items}
            got = fit_many(setup, fit.kind, items.tolist(), aims, fit.prior, fit.posterior.theta, 4)
            levels.append(smooth_levels(setup, fit, items.tolist(), seen, kept, got))
        gone = sample.keep((group[sample.day] == g) & (sample.kind == 0))
        row = np.searchsorted(items, gone.owner)
        parts.append(_rows(setup, items, row, gone.day, gone.value, gone.sd, block_of[gone.day], levels, False))
    return join(parts)
