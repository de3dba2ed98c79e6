"""Shifts: dates from which the same extent goes with another stage, and differences between rising and falling water.

Each wetland's residuals are regressed, weighted, on what its curve could still do (the curve's parameters under their prior),
on leaf states, and on a step at each date in turn. The step is either one of stage (a moved sensor, a wrong datum, another
outlet) or one of extent (filled in, overgrown, drained). The largest F of all dates and both kinds is judged against its
chance among that many trials (Bonferroni), after widening for the serial correlation of residuals.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd
from scipy import stats

from inundate.relation import reading, solve
from inundate.relation.families import FAMILY_SIZE, SPLINE
from inundate.relation.options import RelationOptions
from inundate.relation.pairs import Units
from inundate.relation.prior import Prior

if TYPE_CHECKING:
    from inundate.relation.fit import Fit

SHIFT_COLUMNS = (
    "wetland_id",
    "period",
    "date",
    "date_lo",
    "date_hi",
    "kind",
    "size_m",
    "share",
    "confidence",
    "n_before",
    "n_after",
    "words",
)
HYSTERESIS_COLUMNS = ("wetland_id", "period", "size_m", "confidence", "words")
_LEAST_SIDE = 4
_LEAST_PAIRS = 12
_MOST_SHIFTS = 3


@dataclass(slots=True)
class Scene:
    """One unit's residuals made ready: rows in order of date.

    Attributes
    ----------
    gap : ndarray, shape (row,)
        Observed minus fitted share.
    sd : ndarray, shape (row,)
        Standard deviation of each row.
    heft : ndarray, shape (row,)
        Weight of each row: 1 / variance, less for outliers.
    nuisance : ndarray, shape (row, column); hold : ndarray, shape (column,)
        What may explain residuals without a shift, and the ridge on each.
    slope, share : ndarray, shape (row,)
        Rise of the fitted share per m of stage, and the fitted share.
    date : ndarray of datetime64
    """

    gap: np.ndarray
    sd: np.ndarray
    heft: np.ndarray
    nuisance: np.ndarray
    hold: np.ndarray
    slope: np.ndarray
    share: np.ndarray
    date: np.ndarray

    def cleaner(self, extra: list[np.ndarray]) -> np.ndarray:
        """Return the matrix that takes the nuisance (and ``extra`` columns) out of weighted products."""
        x = np.column_stack([self.nuisance, *extra])
        hold = np.concatenate([self.hold, np.full(len(extra), 1e-9)])
        wx = self.heft[:, None] * x
        return np.diag(self.heft) - wx @ np.linalg.solve(x.T @ wx + np.diag(hold), wx.T)


def _scene(units: Units, u: int, code: int, fit: Fit, prior: Prior) -> Scene | None:
    rows = slice(int(units.first[u]), int(units.first[u + 1]))
    pairs = units.pairs[rows]
    free = pairs[:, solve.CENSORED] < 0.5
    if free.sum() < _LEAST_PAIRS:
        return None
    pairs = pairs[free]
    size = int(FAMILY_SIZE[code])
    place = max(int(units.table["hypsometry"].iloc[u]), 0)
    table, span = units.tables[place], units.spans[place]
    ground = reading.Ground(table[None], span[None], np.zeros(1, np.int64))
    at = np.zeros(len(pairs), np.int64)

    def share(stage: np.ndarray) -> np.ndarray:
        return reading.share_of_units(np.array([code]), fit.theta[u : u + 1], at, ground, np.ascontiguousarray(stage))

    stage = pairs[:, solve.STAGE]
    reach = np.maximum(pairs[:, solve.STAGE_SD], 0.02)
    slope = (share(stage + reach) - share(stage - reach)) / (2 * reach)
    jac = np.zeros((len(pairs), size))
    for i, h in enumerate(stage):
        solve.gradient(code, size, fit.theta[u], (table, span), h, jac[i])
    root = np.linalg.cholesky(prior.cov[u][:size, :size])
    leaf = units.leaf[rows][free]
    dummies = [leaf == state for state in (1, 2, 3) if 0 < (leaf == state).sum() < leaf.size]
    nuisance = np.column_stack([jac @ root, *dummies]).astype(float)
    hold = np.concatenate([np.ones(size), np.full(len(dummies), 1.0 / 0.1**2)])
    fitted = share(stage)
    gap = pairs[:, solve.SHARE] - fitted
    sd = np.sqrt(pairs[:, solve.SHARE_SD] ** 2 + (slope * pairs[:, solve.STAGE_SD]) ** 2) * fit.phi[u]
    scene = Scene(gap, sd, 1.0 / sd**2, nuisance, hold, slope, fitted, units.date[rows][free])
    _reweigh(scene, gap)
    return scene


def _steps(scene: Scene) -> tuple[np.ndarray, np.ndarray]:
    """Return candidate rows (first row after a step), and the step columns (row, candidate) as zeros and ones."""
    rows = np.flatnonzero(np.diff(scene.date) > np.timedelta64(0)) + 1
    rows = rows[(rows >= _LEAST_SIDE) & (rows <= scene.date.size - _LEAST_SIDE)]
    return rows, (np.arange(scene.date.size)[:, None] >= rows[None, :]).astype(float)


def _gains(scene: Scene, clean: np.ndarray, columns: np.ndarray) -> np.ndarray:
    """Return the drop of the weighted sum of squares by each column; 0 where it says nothing."""
    along = columns.T @ (clean @ scene.gap)
    size = np.einsum("ik,ij,jk->k", columns, clean, columns)
    bare = np.einsum("ik,i,ik->k", columns, scene.heft, columns)
    told = size > 1e-3 * np.maximum(bare, 1e-12)
    safe = np.where(told, size, 1.0)
    return np.where(told, along**2 / safe, 0.0)


def _left(scene: Scene, clean: np.ndarray, column: np.ndarray) -> tuple[float, np.ndarray]:
    """Return the coefficient of one column and what is left of the residuals (share), nuisance taken out."""
    along = clean @ scene.gap
    coef = float(column @ along) / max(float(column @ clean @ column), 1e-12)
    return coef, (along - coef * (clean @ column)) / scene.heft


def _f_ratio(scene: Scene, clean: np.ndarray, column: np.ndarray) -> tuple[float, float]:
    """Return the F of one column and its degrees of freedom.

    The variance is the sandwich of the weighted scores (White 1980, Econometrica 48, 817), which outliers that keep little
    weight do not inflate, widened for serial correlation of residuals at most 40 days apart.
    """
    coef, left = _left(scene, clean, column)
    lean = clean @ column
    dof = max(float(np.trace(clean / scene.heft[:, None])) - 1.0, 1.0)
    variance = float(np.sum((lean * left) ** 2)) / max(float(column @ lean), 1e-12) ** 2 * scene.date.size / dof
    near = np.diff(scene.date) <= np.timedelta64(40, "D")
    even = left * np.sqrt(scene.heft)
    serial = 0.0
    if near.any():
        serial = float(np.sum(even[1:][near] * even[:-1][near]) / max(np.sum(even[1:][near] ** 2), 1e-12))
        serial = min(max(serial - 1.0 / np.sqrt(near.sum()), 0.0), 0.8)
    return coef**2 / max(variance, 1e-12) / ((1 + serial) / (1 - serial)), dof


def _reweigh(scene: Scene, left: np.ndarray) -> None:
    """Renew the weights: Student-t of 4 degrees of freedom about the residuals left, at their own median scale."""
    z = np.abs(left) / scene.sd
    z /= max(float(np.median(z)) / 0.6745, 1e-3)
    scene.heft = 5.0 / (4.0 + z**2) / scene.sd**2


@dataclass(slots=True)
class Found:
    """One shift: first row after it, kind, coefficient, chance, rows of its date range, and its column."""

    row: int
    kind: str
    size: float
    chance: float
    low: int
    high: int
    column: np.ndarray


def _best_step(
    scene: Scene, clean: np.ndarray, columns: np.ndarray
) -> tuple[int, float, float, np.ndarray]:
    """Return the candidate of largest gain, its F, degrees of freedom, and the gains of all."""
    gains = _gains(scene, clean, columns)
    k = int(gains.argmax())
    ratio, dof = _f_ratio(scene, clean, columns[:, k])
    return k, ratio, dof, gains


def _search(scene: Scene, before: list[np.ndarray], options: RelationOptions) -> Found | None:
    rows, steps = _steps(scene)
    if rows.size == 0:
        return None
    best: Found | None = None
    top = 0.0
    for kind, shape in (("stage", -scene.slope), ("extent", scene.share)):
        columns = steps * shape[:, None]
        trial = replace(scene)
        for _ in range(3):
            clean = trial.cleaner(before)
            k, ratio, dof, gains = _best_step(trial, clean, columns)
            coef, left = _left(trial, clean, columns[:, k])
            _reweigh(trial, left)
        if ratio <= top:
            continue
        top = ratio
        chance = min(float(stats.f.sf(ratio, 1, dof)) * 2 * rows.size, 1.0)
        near = np.flatnonzero(gains >= gains[k] * (1.0 - min(stats.chi2.ppf(0.95, 1) / max(ratio, 1e-9), 1.0)))
        best = Found(int(rows[k]), kind, coef, chance, int(rows[near[0]]), int(rows[near[-1]]), columns[:, k])
    if best is None or best.chance >= options.shift_alpha:
        return None
    least = options.shift_least_m if best.kind == "stage" else options.shift_least_share
    return best if abs(best.size) >= least else None


def _day(stamp: np.datetime64) -> str:
    return str(pd.Timestamp(stamp).date())


def _words(kind: str, size: float, when: str, low: str, high: str) -> str:
    span = f" (between {low} and {high})"
    if kind == "stage":
        more = "more" if size > 0 else "less"
        return (
            f"from {when}{span} the same extent goes with {abs(size) * 100:.0f} cm {more} stage: was the sensor moved, its datum "
            "changed, or the outlet? Confirm by a field check or split the logger's period in the registry"
        )
    more = "more" if size > 0 else "less"
    why = "was ground lowered or vegetation cleared?" if size > 0 else "was ground filled, drained or overgrown?"
    return (
        f"from {when}{span} the same stage goes with {abs(size) * 100:.0f} % {more} extent: {why} Confirm in the field or split the "
        "logger's period in the registry"
    )


def find_shifts(
    units: Units, fits: dict[int, Fit], priors: dict[int, Prior], weights: np.ndarray, options: RelationOptions
) -> pd.DataFrame:
    """Look for shifts in every unit of at least 12 pairs.

    Parameters
    ----------
    units : Units
    fits, priors : dict
        Family -> fits and prior.
    weights : ndarray, shape (unit, family)
    options : RelationOptions

    Returns
    -------
    DataFrame
        ``SHIFT_COLUMNS``, sorted by wetland and date. ``date`` is the first day seen after the change; it happened between
        ``date_lo`` and ``date_hi`` (95 %). ``size_m`` > 0: more stage for the same extent (NaN for an extent shift);
        ``share`` > 0: more extent for the same stage (NaN for a stage shift). ``confidence`` is 1 - chance of noise.
    """
    records = []
    for u in range(units.first.size - 1):
        code = SPLINE if SPLINE in fits else int(weights[u].argmax())
        scene = _scene(units, u, code, fits[code], priors[code])
        taken: list[np.ndarray] = []
        while scene is not None and len(taken) < _MOST_SHIFTS:
            found = _search(scene, taken, options)
            if found is None:
                break
            taken.append(found.column)
            low, high = scene.date[found.low - 1], scene.date[found.high]
            words = _words(found.kind, found.size, _day(scene.date[found.row]), _day(low), _day(high))
            records.append(
                (
                    units.table["wetland_id"].iloc[u],
                    units.table["period"].iloc[u],
                    scene.date[found.row],
                    low,
                    high,
                    found.kind,
                    found.size if found.kind == "stage" else np.nan,
                    found.size if found.kind == "extent" else np.nan,
                    1.0 - found.chance,
                    found.row,
                    scene.date.size - found.row,
                    words,
                )
            )
    table = pd.DataFrame(records, columns=list(SHIFT_COLUMNS))
    for column in ("date", "date_lo", "date_hi"):
        table[column] = pd.to_datetime(table[column]).astype("datetime64[ns]")
    return table.sort_values(["wetland_id", "date"], kind="stable").reset_index(drop=True)


def find_hysteresis(
    units: Units, fits: dict[int, Fit], priors: dict[int, Prior], weights: np.ndarray, options: RelationOptions
) -> pd.DataFrame:
    """Test each unit for extents that differ between rising and falling water at the same stage.

    Parameters are those of :func:`find_shifts`; water counts as rising or falling when stage moved more than 1 cm in the week
    before. Returns ``HYSTERESIS_COLUMNS``: ``size_m`` is the stage by which rising water lags falling water at the same
    extent (positive: rising water covers less), reported at a chance below 1 in 1,000 and at least 2 cm.
    """
    records = []
    for u in range(units.first.size - 1):
        code = SPLINE if SPLINE in fits else int(weights[u].argmax())
        scene = _scene(units, u, code, fits[code], priors[code])
        if scene is None:
            continue
        rows = slice(int(units.first[u]), int(units.first[u + 1]))
        rising = units.rising[rows][units.pairs[rows, solve.CENSORED] < 0.5]
        way = np.where(np.abs(rising) > 0.01, np.sign(rising), 0.0)
        way[~np.isfinite(rising)] = 0.0
        if min((way > 0).sum(), (way < 0).sum()) < _LEAST_SIDE:
            continue
        column = -0.5 * way * scene.slope
        clean = scene.cleaner([])
        coef = _left(scene, clean, column)[0]
        ratio, dof = _f_ratio(scene, clean, column)
        chance = float(stats.f.sf(ratio, 1, dof))
        if chance < 0.001 and abs(coef) >= 0.02:
            less = "less" if coef > 0 else "more"
            words = (
                f"at the same stage rising water covers {less} ground than falling water, as if stage were "
                f"{abs(coef) * 100:.0f} cm apart: water takes time to spread or to drain, or the logger stands apart"
            )
            key = units.table["wetland_id"].iloc[u], units.table["period"].iloc[u]
            records.append((*key, coef, 1.0 - chance, words))
    del options
    return pd.DataFrame(records, columns=list(HYSTERESIS_COLUMNS))
