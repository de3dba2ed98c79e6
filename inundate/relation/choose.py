"""Choice among families by held-out date blocks, and the scale of the bands from the same held-out pairs."""

from __future__ import annotations

import numpy as np
import pandas as pd
from scipy import stats

from inundate.relation.families import ELEVATION, FAMILIES, SPLINE
from inundate.relation.pairs import Units

# Pairs' worth of evidence that the other wetlands' scores bring to a wetland's choice.
_SHARED_PAIRS = 6.0
_SCALES = np.exp(np.linspace(np.log(0.5), np.log(5.0), 60))
# sd of log scale before seeing data: bands are widened readily and narrowed on strong evidence only.
_WIDER_SD, _NARROWER_SD = 0.3, 0.07


def date_blocks(units: Units, n_blocks: int) -> np.ndarray:
    """Number contiguous blocks of dates within each unit (int64, (pair,)); equal counts, same day same block; -1 where made."""
    out = np.full(units.date.size, -1, np.int64)
    for u in range(units.first.size - 1):
        mine = units.seen_rows(u)
        n = mine.size
        if n < 3:
            continue
        place = np.searchsorted(units.date[mine], units.date[mine], side="left")
        out[mine] = np.unique(place * min(n_blocks, n) // n, return_inverse=True)[1]
    return out


def stage_blocks(units: Units) -> np.ndarray:
    """Number the lowest and the highest third of stages of each unit 0 and 1, the rest -1 (int64, (pair,))."""
    out = np.full(units.date.size, -1, np.int64)
    for u in range(units.first.size - 1):
        mine = units.seen_rows(u)
        if mine.size < 6:
            continue
        stage = units.pairs[mine, 0]
        low, high = np.quantile(stage, [1 / 3, 2 / 3])
        out[mine[stage < low]] = 0
        out[mine[stage > high]] = 1
    return out


def log_density(gap: np.ndarray, sd: np.ndarray, nu: float) -> np.ndarray:
    """Return the log density of a Student-t of scale ``sd`` at ``gap``."""
    return stats.t.logpdf(gap / sd, nu) - np.log(sd)


def choose(units: Units, held: dict[int, np.ndarray], nu: float) -> tuple[pd.DataFrame, np.ndarray]:
    """Weigh the families of every unit.

    Parameters
    ----------
    units : Units
    held : dict
        Family -> (pair, 4) held-out predictions of :func:`inundate.relation.solve.hold_out` over date blocks.
    nu : float

    Returns
    -------
    choices : DataFrame
        wetland_id, period, family, n_heldout, heldout_rmse_m2, heldout_score (mean log density of the share), weight, chosen.
    weights : ndarray, shape (unit, 4)
        Weight of each family, rows sum to 1; 0 for families that cannot serve.
    """
    n_units = units.first.size - 1
    unit = units.unit_of_pair
    known = units.table["hypsometry"].to_numpy() >= 0
    score = np.full((n_units, len(FAMILIES)), -np.inf)
    density = {}
    for family, out in held.items():
        gap = units.pairs[:, 2] - out[:, 0]
        density[family] = log_density(gap, np.sqrt(out[:, 1] ** 2 + out[:, 2] ** 2), nu)
    reference = density[min(density)]
    for family, value in density.items():
        gain = np.where(np.isfinite(value - reference), value - reference, 0.0)
        own, count = np.bincount(unit, gain, n_units), np.bincount(unit, np.isfinite(value), n_units)
        square = np.bincount(unit, gain**2, n_units)
        error = np.sqrt(np.maximum(square - own**2 / np.maximum(count, 1), 0.0))
        able = known if family == ELEVATION else np.ones(n_units, bool)
        told = able & (count >= 6)
        shared = float(np.mean(own[told] / count[told])) if told.any() else 0.0
        score[:, family] = np.where(able, own - 0.5 * error + _SHARED_PAIRS * shared, -np.inf)
    dead = ~np.isfinite(score).any(axis=1)
    score[dead, min(held)] = 0.0
    without = units.table["n_pairs"].to_numpy() == 0
    if ELEVATION in held:
        score[without & known] = -np.inf
        score[without & known, ELEVATION] = 0.0
    weights = np.exp(score - score.max(axis=1, keepdims=True))
    weights /= weights.sum(axis=1, keepdims=True)
    return _choice_table(units, held, density, weights), weights


def _choice_table(
    units: Units, held: dict[int, np.ndarray], density: dict[int, np.ndarray], weights: np.ndarray
) -> pd.DataFrame:
    unit, n_units = units.unit_of_pair, units.first.size - 1
    size = units.table["area_max_m2"].to_numpy(float)
    best = weights.argmax(axis=1)
    parts = []
    for family, out in held.items():
        gap = units.pairs[:, 2] - out[:, 0]
        seen = np.isfinite(gap)
        count = np.bincount(unit, seen, n_units)
        with np.errstate(invalid="ignore", divide="ignore"):
            rmse = size * np.sqrt(np.bincount(unit, np.where(seen, gap, 0.0) ** 2, n_units) / count)
            mean = np.bincount(unit, np.where(seen, density[family], 0.0), n_units) / count
        parts.append(
            pd.DataFrame(
                {
                    "wetland_id": units.table["wetland_id"],
                    "period": units.table["period"],
                    "family": FAMILIES[family],
                    "n_heldout": count.astype(np.int64),
                    "heldout_rmse_m2": rmse,
                    "heldout_score": mean,
                    "weight": weights[:, family],
                    "chosen": best == family,
                    "order": family,
                    "unit": np.arange(n_units),
                }
            )
        )
    table = pd.concat(parts, ignore_index=True)
    able = (table["order"] != ELEVATION) | (units.table["hypsometry"].to_numpy()[table["unit"]] >= 0)
    table = table.loc[able].sort_values(["unit", "order"], kind="stable")
    return table.drop(columns=["order", "unit"]).reset_index(drop=True)


def band_weights(weights: np.ndarray, able: np.ndarray) -> np.ndarray:
    """Return the weights of families in the bands: half by score, half to the spline, which holds the power laws as cases.

    Where elevation has the score, which knows the bowl outside the stages seen, the spline gets a quarter.

    Scores cannot tell families apart where no stage was seen; the spline's free knots say how far the curve may bend there.

    Parameters
    ----------
    weights : ndarray, shape (unit, family)
    able : ndarray of bool, shape (unit,)
        Units with pairs; the others keep their weights.
    """
    out = weights.copy()
    part = 0.5 - 0.25 * weights[able, ELEVATION]
    out[able] *= 1.0 - part[:, None]
    out[able, SPLINE] += part
    return out


def mixture_error(held: dict[int, np.ndarray], weights: np.ndarray, unit: np.ndarray, best: np.ndarray) -> np.ndarray:
    """Return held-out predictions of the chosen family (pair, 4) whose model sd holds the spread between families too."""
    total = np.zeros(unit.size)
    square = np.zeros(unit.size)
    chosen = np.full((unit.size, 4), np.nan)
    for family, out in held.items():
        mine = best[unit] == family
        chosen[mine] = out[mine]
    for family, out in held.items():
        heft = weights[unit, family]
        good = np.isfinite(out[:, 0]) & (heft > 0)
        gap = np.where(good, out[:, 0] - chosen[:, 0], 0.0)
        total += np.where(good, heft, 0.0)
        square += np.where(good, heft * (gap**2 + out[:, 1] ** 2), 0.0)
    chosen[:, 1] = np.sqrt(square / np.maximum(total, 1e-9))
    return chosen


def band_scale(
    gap: np.ndarray, model_sd: np.ndarray, noise_sd: np.ndarray, nu: float, heft: np.ndarray | None = None
) -> float:
    """Return the factor on the model's sd under which held-out gaps are likeliest, with a weak prior about 1.

    Parameters
    ----------
    gap, model_sd, noise_sd : ndarray, shape (pair,)
        Held-out observed minus predicted share; sd of the prediction; sd of the observation. NaN rows are left out.
    nu : float
        Degrees of freedom.
    heft : ndarray, shape (pair,), optional
        Worth of each pair: less than 1 where pairs share an error.

    Returns
    -------
    float
        Between 0.5 and 5; 1 when there is nothing to learn from.
    """
    good = np.isfinite(gap) & np.isfinite(model_sd) & np.isfinite(noise_sd) & (model_sd > 1e-4)
    if good.sum() < 10:
        return 1.0
    worth = np.ones(gap.size) if heft is None else heft
    gap, model_sd, noise_sd, worth = gap[good], model_sd[good], noise_sd[good], worth[good]
    best = [
        float(np.sum(worth * log_density(gap, np.sqrt((c * model_sd) ** 2 + noise_sd**2), nu)))
        - 0.5 * (np.log(c) / (_WIDER_SD if c > 1 else _NARROWER_SD)) ** 2
        for c in _SCALES
    ]
    return float(_SCALES[int(np.argmax(best))])
