"""Fit the predictors of level wetland by wetland, with parameters pooled across wetlands by size and cover."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace

import numpy as np
from numba import njit

from inundate.common.seeds import rng_for
from inundate.series.balance import MEAN, SD, SIGNALS, balance_path
from inundate.series.drivers import Drivers
from inundate.series.fits import fit_balance, fit_linear, level_targets, linear_path
from inundate.series.inputs import Events, FillOptions, Panel
from inundate.series.maps import LevelMaps

# Day (spin-up included), level (m), and inverse errors below and above (1 / m) of a wetland's events.
Aim = tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]
BALANCE, LINEAR = "water balance", "linear"
KINDS = (BALANCE, LINEAR)
# Days between stage values that enter a fit (the departure between neighbours is nearly the same).
_STAGE_STEP = 7
# Weight of the prior covariance and of the prior mean in pooled estimates, in wetlands; common practice, no source.
_PRIOR_WETLANDS = 6.0
_POOL_WETLANDS = 300


@dataclass(frozen=True, slots=True)
class Departure:
    """Slowly varying departure of a wetland's level from its predictor.

    Attributes
    ----------
    sd : ndarray, shape (wetland,)
        Stationary standard deviation as a share of the full level.
    memory : ndarray, shape (wetland,)
        Days in which its correlation falls to 1/e.
    """

    sd: np.ndarray
    memory: np.ndarray


@dataclass(frozen=True, slots=True)
class Setup:
    """Everything that stays the same while predictors are fitted.

    Attributes
    ----------
    panel : Panel
    drivers : Drivers
    maps : LevelMaps
    options : FillOptions
    seed : int
    group : ndarray, shape (wetland, covariate)
        1, standardised log size, deciduous, evergreen.
    region, design : tuple of ndarray
        A fold each: what drives the water balance, the loggers' first signal last (row, spin + day), and design of the linear
        predictor (spin + day, column).
    """

    panel: Panel
    drivers: Drivers
    maps: LevelMaps
    options: FillOptions
    seed: int
    group: np.ndarray
    region: tuple[np.ndarray, ...]
    design: tuple[np.ndarray, ...]


@dataclass(frozen=True, slots=True)
class Prior:
    """Normal prior of parameters: mean ``group @ coef`` (covariate, parameter) and covariance."""

    coef: np.ndarray
    cov: np.ndarray


@dataclass(frozen=True, slots=True)
class Posterior:
    """Parameters a wetland: ``theta`` (wetland, parameter), ``cov`` (wetland, parameter, parameter)."""

    theta: np.ndarray
    cov: np.ndarray


def make_setup(panel: Panel, drivers: Drivers, options: FillOptions, seed: int) -> Setup:
    """Gather what fits share."""
    size = np.log(panel.area_max_m2)
    spread = size.std()
    size = (size - size.mean()) / (spread if spread > 0 else 1.0)
    group = np.column_stack([np.ones(size.size), size, panel.cover == 1, panel.cover == 2]).astype(float)
    region, design = [], []
    ones = np.ones((drivers.rain_m.size, 1))
    for signals in drivers.loggers:
        region.append(np.ascontiguousarray(np.vstack([drivers.region, signals[:, :1].T])))
        design.append(np.ascontiguousarray(np.column_stack([ones, drivers.season, drivers.wetness, signals])))
    return Setup(panel, drivers, panel.maps, options, seed, group, tuple(region), tuple(design))


def with_maps(setup: Setup, maps: LevelMaps) -> Setup:
    """Return the setup with other level maps."""
    return replace(setup, maps=maps)


def first_prior(setup: Setup, kind: str) -> Prior:
    """Return the wide prior before pooling."""
    if kind == BALANCE:
        more = setup.region[0].shape[0] - SIGNALS
        mean, sd = np.r_[MEAN, np.zeros(more)], np.r_[SD, np.full(more, 0.3)]
    else:
        more = setup.design[0].shape[1]
        mean, sd = np.zeros(more), np.full(more, 0.25)
        mean[0], sd[0] = 0.3, 0.6
    coef = np.zeros((setup.group.shape[1], mean.size))
    coef[0] = mean
    return Prior(coef, np.diag(sd**2))


def in_threads(work: Callable[[int], object], items: Sequence[int], workers: int) -> list:
    """Apply ``work`` to each item, in order, with as many threads; the result does not depend on their number."""
    if workers <= 1 or len(items) < 2:
        return [work(i) for i in items]
    with ThreadPoolExecutor(workers) as pool:
        return list(pool.map(work, items, chunksize=1))


@njit(cache=True, nogil=True)
def _crowding(day: np.ndarray, memory: float) -> np.ndarray:
    """Return 1 plus the summed correlation with the other events, by which correlated errors count less (two passes)."""
    ahead, behind = np.zeros(day.size), np.zeros(day.size)
    for n in range(1, day.size):
        behind[n] = (behind[n - 1] + 1) * np.exp(-(day[n] - day[n - 1]) / memory)
        m = day.size - 1 - n
        ahead[m] = (ahead[m + 1] + 1) * np.exp(-(day[m + 1] - day[m]) / memory)
    return 1 + ahead + behind


def targets(setup: Setup, i: int, views: Events, stage: Events, departure: Departure) -> Aim:
    """Return day (spin included), level and one-sided inverse errors of all events of a wetland, for a fit."""
    table, full = setup.maps.share[i], float(setup.maps.full_m[i])
    part = slice(views.start[i], views.start[i + 1])
    day_v = views.day[part]
    level = np.empty(day_v.size)
    low, high = np.empty(day_v.size), np.empty(day_v.size)
    level_targets(views.value[part], views.sd[part], table, full, level, low, high)
    own = slice(stage.start[i], stage.start[i + 1])
    thin = stage.day[own] % _STAGE_STEP == 0
    inv = 1 / stage.sd[own][thin]
    day = np.concatenate([day_v, stage.day[own][thin]])
    level = np.concatenate([level, stage.value[own][thin]])
    low = np.concatenate([low, np.where(stage.kind[own][thin] == 1, 0.0, inv)])
    high = np.concatenate([high, inv])
    order = np.argsort(day, kind="stable")
    day, level, low, high = day[order], level[order], low[order], high[order]
    extra = (departure.sd[i] * full) ** 2 * _crowding(day, float(departure.memory[i]))
    wide = [np.where(x > 0, 1 / np.sqrt(1 / np.where(x > 0, x, 1) ** 2 + extra), 0.0) for x in (low, high)]
    return day + setup.drivers.spin, level, wide[0], wide[1]


def fit_one(
    setup: Setup, kind: str, i: int, aim: Aim, prior: Prior, start: np.ndarray | None, rounds: int
) -> tuple[np.ndarray, np.ndarray]:
    """Return the most probable parameters of a wetland and their covariance."""
    mean = setup.group[i] @ prior.coef
    precision = np.linalg.inv(prior.cov)
    theta = (mean if start is None else start).copy()
    fold = setup.drivers.fold[i]
    table, full = setup.maps.share[i], float(setup.maps.full_m[i])
    if aim[0].size == 0:
        return mean, prior.cov
    if kind == BALANCE:
        d = setup.drivers
        hess = fit_balance(theta, mean, precision, d.rain_m, d.pet_m, setup.region[fold], table, full, *aim, rounds)
    else:
        hess = fit_linear(theta, mean, precision, setup.design[fold], full, *aim, rounds)
    return theta, np.linalg.inv(hess)


def fit_many(
    setup: Setup,
    kind: str,
    items: Sequence[int],
    aims: Mapping[int, Aim],
    prior: Prior,
    start: np.ndarray | None,
    rounds: int,
) -> Posterior:
    """Fit the wetlands in ``items``; rows of the posterior follow ``items``, those of ``start`` all wetlands."""

    def work(i: int) -> tuple[np.ndarray, np.ndarray]:
        return fit_one(setup, kind, i, aims[i], prior, None if start is None else start[i], rounds)

    got = in_threads(work, items, setup.options.workers)
    return Posterior(np.array([g[0] for g in got]), np.array([g[1] for g in got]))


def pooled_prior(setup: Setup, kind: str, items: np.ndarray, post: Posterior) -> Prior:
    """Return the prior that a set of fitted wetlands supports (one maximisation step of the EM algorithm)."""
    wide = first_prior(setup, kind)
    group = setup.group[items]
    ridge = np.diag([1.0, 4.0, 4.0, 4.0])
    coef = np.linalg.solve(group.T @ group + ridge, group.T @ post.theta + ridge @ wide.coef)
    gap = post.theta - group @ coef
    cov = (_PRIOR_WETLANDS * wide.cov + post.cov.sum(axis=0) + gap.T @ gap) / (_PRIOR_WETLANDS + len(items))
    return Prior(coef, cov)


def pool_items(setup: Setup) -> np.ndarray:
    """Return the wetlands that teach the pooled prior: all with stage, and a seeded sample of others with views."""
    seen = np.diff(setup.panel.views.start) + np.diff(setup.panel.stage.start) > 0
    logged = np.diff(setup.panel.stage.start) > 0
    order = np.array([rng_for(setup.seed, "pool", w).random() for w in setup.panel.ids])
    others = np.flatnonzero(seen & ~logged)
    others = others[np.argsort(order[others], kind="stable")][:_POOL_WETLANDS]
    return np.sort(np.concatenate([np.flatnonzero(logged)[:_POOL_WETLANDS], others]))


def member_sets(setup: Setup, kind: str, i: int, theta: np.ndarray, cov: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return parameter sets (member, parameter) of a wetland drawn from its posterior in antithetic pairs, and the squared length of each
    set's draw (member,).
    """
    half = max(setup.options.members // 2, 1)
    draw = rng_for(setup.seed, "members", kind, setup.panel.ids[i]).standard_normal((half, theta.size))
    values, vectors = np.linalg.eigh(cov)
    step = draw @ (vectors * np.sqrt(np.maximum(values, 0))).T
    return np.vstack([theta + step, theta - step]), np.tile((draw**2).sum(axis=1), 2)


def member_paths(setup: Setup, kind: str, i: int, sets: np.ndarray) -> np.ndarray:
    """Return levels (member, day) of a wetland for parameter sets (member, parameter)."""
    d, fold = setup.drivers, setup.drivers.fold[i]
    table, full = setup.maps.share[i], float(setup.maps.full_m[i])
    out = np.empty((len(sets), len(setup.panel.dates)))
    path = np.empty(d.rain_m.size)
    for m, one in enumerate(sets):
        if kind == BALANCE:
            balance_path(one, d.rain_m, d.pet_m, setup.region[fold], table, full, path)
        else:
            linear_path(one, setup.design[fold], full, path)
        out[m] = path[d.spin :]
    return out
