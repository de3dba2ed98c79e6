"""Fitting the relations of all wetlands together."""

from __future__ import annotations

import json
from dataclasses import dataclass

import numpy as np
import pandas as pd

from inundate.common.codes import LeafCode
from inundate.common.errors import Refusal
from inundate.relation import reading, solve
from inundate.relation.choose import band_scale, band_weights, choose, date_blocks, mixture_error, stage_blocks
from inundate.relation.curves import Curves
from inundate.relation.families import (
    ELEVATION,
    FAMILIES,
    FAMILY_SIZE,
    POWER,
    POWER_OFFSET,
    SPLINE,
)
from inundate.relation.options import RelationOptions
from inundate.relation.pairs import Units, lay_out
from inundate.relation.prior import Prior, default_prior, learn_prior
from inundate.relation.reading import Ground
from inundate.relation.relations import RELATION_COLUMNS, RelationSet, named_parameters
from inundate.relation.shifts import find_hysteresis, find_shifts

# Pairs' worth of belief in the noise scale that all wetlands share.
_NOISE_PAIRS = 6.0
# Starting belief that extents seen through leaves are twice as uncertain as stated, until their own residuals speak.
_LEAF_START = 2.0


@dataclass(slots=True)
class Fit:
    """One family's fits: ``theta`` (unit, N_PARAM), ``info`` and ``cov`` (unit, N_PARAM, N_PARAM), ``phi``, ``own`` (unit,)."""

    theta: np.ndarray
    info: np.ndarray
    cov: np.ndarray
    phi: np.ndarray
    own: np.ndarray


def fit_relations(
    pairs: pd.DataFrame,
    wetlands: pd.DataFrame,
    hypsometry: pd.DataFrame | None = None,
    *,
    seed: int = 0,
    options: RelationOptions | None = None,
) -> RelationSet:
    """Fit a stage-area relation to every wetland, all in one compiled pass.

    Parameters
    ----------
    pairs : DataFrame
        wetland_id, date, stage_m, area_m2 and, where known, stage_sd_m, area_sd_m2, censored, leaf_state, view_fraction,
        period, rising, made (see :func:`inundate.relation.with_outlets`). A wetland with several ``period`` values gets a
        relation for each (a confirmed split).
    wetlands : DataFrame
        wetland_id, area_max_m2 [, cover].
    hypsometry : DataFrame, optional
        wetland_id, stage_m above the lowest cell, area_m2.
    seed : int
        Seed of the drawn curves; each wetland draws its own.
    options : RelationOptions, optional

    Returns
    -------
    RelationSet
        Wetlands that have neither pairs nor elevation, and pairs that cannot be used, are named in ``refused``.

    Raises
    ------
    InputError
        When a column is missing or the wetlands table is not usable.
    """
    options = options or RelationOptions()
    units = lay_out(pairs, wetlands, hypsometry, options)
    codes = [FAMILIES.index(name) for name in FAMILIES if name in options.families]
    if not units.hypsometry:
        codes = [code for code in codes if code != ELEVATION] or [POWER]
    priors = {code: default_prior(code, units) for code in codes}
    stated = units.pairs[:, 3].copy()
    units.pairs[:, 3] = stated * np.where(_in_leaf(units), _LEAF_START, 1.0)
    noise = dict.fromkeys(codes, 1.0)
    fits = _fit_all(units, codes, priors, options.nu, noise)
    for _ in range(2):
        inflate = leaf_inflation(units, fits[codes[-1] if codes[-1] != ELEVATION else codes[0]], codes, stated)
        units.pairs[:, 3] = stated * inflate
        if options.pool:
            priors = {c: learn_prior(c, units, priors[c], fits[c].theta, fits[c].info) for c in codes}
        noise = {code: _shared_noise(units, fits[code]) for code in codes}
        fits = _fit_all(units, codes, priors, options.nu, noise)
    return _assemble(units, codes, priors, fits, seed, options)


def _in_leaf(units: Units) -> np.ndarray:
    return (units.leaf >= 0) & (units.leaf != int(LeafCode.LEAF_OFF))


def _starts(units: Units, code: int, prior: Prior, fits: dict[int, Fit]) -> np.ndarray:
    mean = prior.mean
    if code == ELEVATION:
        lift = np.array([0.0, 0.15, -0.1, 0.35, -0.3, -0.6])
        starts = np.repeat(mean[:, None], lift.size, axis=1)
        starts[:, :, 0] += lift
        return starts
    starts = np.repeat(mean[:, None], 2, axis=1)
    for u in range(units.first.size - 1):
        mine = units.pairs[units.first[u] : units.first[u + 1]]
        wet = (mine[:, 0] > 0.01) & (mine[:, 2] > 0.01) & (mine[:, 2] < 0.97)
        if wet.sum() >= 2:
            starts[u, 1, 0] = np.median(np.log(mine[wet, 0]) - np.log(mine[wet, 2]) / np.exp(mean[u, 1]))
    simpler = [fits[c].theta for c in (POWER, POWER_OFFSET) if c in fits and c < code]
    if simpler:
        starts = np.concatenate([starts[:, :1], simpler[-1][:, None]], axis=1)
    return starts


def ground_of(units: Units) -> Ground:
    """Return the hypsometry of all units as the compiled code reads it."""
    return Ground(units.tables, units.spans, units.table["hypsometry"].to_numpy(np.int64))


def _fit_all(
    units: Units, codes: list[int], priors: dict[int, Prior], nu: float, noise: dict[int, float]
) -> dict[int, Fit]:
    fits: dict[int, Fit] = {}
    for code in codes:
        starts = np.ascontiguousarray(_starts(units, code, priors[code], fits))
        belief = solve.Belief(priors[code].mean, priors[code].precision)
        settings = np.array([noise[code], _NOISE_PAIRS, nu])
        flat = solve.Flat(units.pairs, units.first)
        got = solve.fit_units(code, int(FAMILY_SIZE[code]), starts, belief, flat, ground_of(units), settings)
        fits[code] = Fit(*got)
    return fits


def _shared_noise(units: Units, fit: Fit) -> float:
    told = units.table["n_pairs"].to_numpy() >= 8
    return float(np.exp(np.median(np.log(fit.phi[told])))) if told.any() else 1.0


def predicted(units: Units, fit: Fit, code: int) -> np.ndarray:
    """Return the fitted share at every pair."""
    family = np.full(fit.theta.shape[0], code)
    return reading.share_of_units(
        family, fit.theta, units.unit_of_pair, ground_of(units), np.ascontiguousarray(units.pairs[:, 0])
    )


def leaf_inflation(units: Units, fit: Fit, codes: list[int], stated: np.ndarray) -> np.ndarray:
    """Return how many times larger than stated the area sd of each pair is, by leaf state; 1 for leaf-off pairs.

    Median squares of residuals over stated sd, pooled over wetlands, against those of leaf-off pairs; between 1 and 6. A
    leaf state with fewer than 15 pairs keeps the starting belief of 2.
    """
    code = codes[-1] if codes[-1] != ELEVATION else codes[0]
    gap = units.pairs[:, 2] - predicted(units, fit, code)
    z2 = (gap / stated) ** 2
    bare = ~_in_leaf(units) & ~units.made
    out = np.ones(stated.size)
    base = float(np.median(z2[bare])) if bare.sum() >= 15 else np.nan
    for state in range(1, 4):
        mine = units.leaf == state
        if mine.sum() >= 15 and np.isfinite(base):
            out[mine] = float(np.clip(np.sqrt(np.median(z2[mine]) / max(base, 1e-6)), 1.0, 6.0))
        else:
            out[mine] = _LEAF_START
    return out


def _hold_out(
    units: Units, codes: list[int], priors: dict[int, Prior], fits: dict[int, Fit], blocks: np.ndarray, nu: float
) -> dict[int, np.ndarray]:
    flat, ground = solve.Flat(units.pairs, units.first), ground_of(units)
    out = {}
    for code in codes:
        belief = solve.Belief(priors[code].mean, priors[code].precision)
        fitted = (fits[code].theta, fits[code].phi, float(nu))
        out[code] = solve.hold_out(code, int(FAMILY_SIZE[code]), fitted, belief, flat, ground, blocks)
    return out


def _scales(
    units: Units, by_date: dict[int, np.ndarray], by_stage: dict[int, np.ndarray], weights: np.ndarray, nu: float
) -> tuple[float, float]:
    unit, best = units.unit_of_pair, weights.argmax(axis=1)
    date = mixture_error(by_date, weights, unit, best)
    stage = mixture_error(by_stage, weights, unit, best)
    y = units.pairs[:, 2]
    scales = []
    for rows in (_judging(date, 0.0), _judging(stage, 1.0) | _judging(date, 1.0)):
        use = np.where((_judging(stage, 1.0) & rows)[:, None], stage, date)[rows]
        scales.append(band_scale(y[rows] - use[:, 0], use[:, 1], use[:, 2], nu))
    return scales[0], max(1.0, *scales)


def _judging(held: np.ndarray, outside: float) -> np.ndarray:
    """Say which held-out pairs judge the bands: of that side of the stages fitted to, and not cut off at empty or full."""
    with np.errstate(invalid="ignore"):
        return (held[:, 3] == outside) & (np.minimum(held[:, 0], 1.0 - held[:, 0]) > held[:, 2])


def unseen_scale(units: Units, prior: Prior, fit: Fit, nu: float) -> float:
    """Return the band factor of wetlands without pairs, from wetlands with pairs each predicted from elevation alone.

    At most 40 wetlands are left out in turn (evenly picked by name); the pairs of one count together as four, for they share
    its error. Never below 1; 1 with fewer than five wetlands.
    """
    table = units.table
    able = (table["hypsometry"].to_numpy() >= 0) & (table["n_pairs"].to_numpy() >= 6)
    names = table.loc[able, "wetland_id"].unique()
    if names.size < 5:
        return 1.0
    size = int(FAMILY_SIZE[ELEVATION])
    rows = []
    for name in names[np.unique(np.linspace(0, names.size - 1, 40).astype(int))]:
        mine = (table["wetland_id"] == name).to_numpy()
        blind = learn_prior(ELEVATION, units, prior, fit.theta, fit.info, without=mine)
        for u in np.flatnonzero(mine & able):
            pairs = units.pairs[units.first[u] : units.first[u + 1]]
            place = int(table["hypsometry"].iloc[u])
            got = solve.predict_from(
                ELEVATION, size, blind.mean[u], blind.cov[u], pairs, (units.tables[place], units.spans[place])
            )
            rows.append(np.column_stack([pairs[:, 2] - got[:, 0], got[:, 1], fit.phi[u] * got[:, 2], got[:, 0]]))
            rows[-1] = np.column_stack([rows[-1], np.full(len(pairs), min(1.0, 4.0 / len(pairs)))])
    gap, spread, noise, share, heft = np.concatenate(rows).T
    use = np.minimum(share, 1.0 - share) > noise
    return max(1.0, band_scale(gap[use], spread[use], noise[use], nu, heft[use]))


def datum_sd(units: Units) -> np.ndarray:
    """Return the sd (m) of the stage error that all pairs of a unit share.

    How much of the smallest stated variance is shared is not known: half of it is taken (common practice, no source).
    """
    out = np.zeros(units.first.size - 1)
    for u in range(out.size):
        mine = units.pairs[units.first[u] : units.first[u + 1], 1]
        out[u] = np.sqrt(0.5) * min(float(mine.min()), 0.05) if mine.size else 0.0
    return out


def middle_stage(units: Units) -> np.ndarray:
    """Return the median of the stages above 0 of each unit's pairs, m; 0.3 where there is none."""
    out = np.full(units.first.size - 1, 0.3)
    for u in range(out.size):
        mine = units.pairs[units.first[u] : units.first[u + 1], 0]
        if (mine > 0.02).any():
            out[u] = float(np.median(mine[mine > 0.02]))
    return out


def _with_shifts(datum: np.ndarray, units: Units, shifts: pd.DataFrame) -> np.ndarray:
    """Widen the datum error of wetlands with an unconfirmed stage shift: which side of it is right is not known."""
    out = datum.copy()
    for row in shifts.loc[shifts["kind"] == "stage"].to_dict("records"):
        mine = (units.table["wetland_id"] == row["wetland_id"]) & (units.table["period"] == row["period"])
        out[mine.to_numpy()] = np.hypot(out[mine.to_numpy()], 0.5 * abs(row["size_m"]))
    return out


def _assemble(
    units: Units,
    codes: list[int],
    priors: dict[int, Prior],
    fits: dict[int, Fit],
    seed: int,
    options: RelationOptions,
) -> RelationSet:
    by_date = _hold_out(units, codes, priors, fits, date_blocks(units, options.n_blocks), options.nu)
    by_stage = _hold_out(units, codes, priors, fits, stage_blocks(units), options.nu)
    choices, weights = choose(units, by_date, options.nu)
    wide = weights
    if SPLINE in codes:
        wide = band_weights(weights, units.table["n_pairs"].to_numpy() > 0)
    scale_in, scale_out = _scales(units, by_date, by_stage, weights, options.nu)
    unseen, seen = scale_out, units.seen()
    if ELEVATION in codes and options.pool:
        unseen = unseen_scale(seen, priors[ELEVATION], fits[ELEVATION], options.nu)
    known = _serving(units)
    shifts = find_shifts(seen, fits, priors, weights, options)
    curves = Curves(
        units.table.loc[known].assign(unit=np.arange(int(known.sum()))).reset_index(drop=True),
        {c: fits[c].theta[known] for c in codes},
        {c: fits[c].cov[known] for c in codes},
        weights[known].argmax(axis=1),
        wide[known],
        _with_shifts(datum_sd(units), units, shifts)[known],
        middle_stage(units)[known],
        (scale_in, scale_out, unseen),
        seed,
        options.n_draws,
        options.level,
        units.hypsometry,
    )
    tables = {
        "relations": _relations_table(units, fits, weights, choices).loc[known].reset_index(drop=True),
        "choices": choices,
        "shifts": shifts,
        "hysteresis": find_hysteresis(seen, fits, priors, weights, options),
    }
    return RelationSet(curves, tables, units.refused)


def _serving(units: Units) -> np.ndarray:
    """Say which units get a relation; the others are named in ``refused``."""
    known = (units.table["n_pairs"].to_numpy() > 0) | (units.table["hypsometry"].to_numpy() >= 0)
    for key in units.table.loc[~known, "wetland_id"]:
        reason = f"wetland {key}: no pairs and no elevation; a relation needs one of them; it gets none"
        units.refused.append(Refusal("wetland", str(key), reason))
    return known


def _relations_table(units: Units, fits: dict[int, Fit], weights: np.ndarray, choices: pd.DataFrame) -> pd.DataFrame:
    best = weights.argmax(axis=1)
    table = units.table
    size = table["area_max_m2"].to_numpy(float)
    scores = choices.loc[choices["chosen"], ["wetland_id", "period", "heldout_rmse_m2"]]
    rmse = table[["wetland_id", "period"]].merge(scores, on=["wetland_id", "period"], how="left")["heldout_rmse_m2"]
    own = np.array([fits[int(f)].own[u] / FAMILY_SIZE[f] for u, f in enumerate(best)])
    words = [json.dumps(named_parameters(int(f), fits[int(f)].theta[u], float(size[u]))) for u, f in enumerate(best)]
    out = table[
        ["wetland_id", "period", "n_pairs", "stage_min_m", "stage_max_m", "valid_from", "valid_to", "note"]
    ].copy()
    out["family"] = [FAMILIES[f] for f in best]
    out["parameters"] = words
    out["rmse_m2"] = rmse.to_numpy(float)
    out["pooled"] = own < 0.5
    return out[list(RELATION_COLUMNS)]
