"""Shifts: dates from which the same extent goes with another stage, and differences between rising and falling water.

Each wetland's residuals are regressed, weighted, on what its curve could still do (the curve's parameters under their prior),
on leaf states, and on a step at each date in turn, under Student-t errors. The step is either one of stage (a moved sensor,
a wrong datum, another outlet) or one of extent (filled in, overgrown, drained). The largest likelihood ratio of all dates and
both kinds is judged against its chance among that many trials (Bonferroni), less the serial correlation of residuals.
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
_LEAST_SIDE = 5
_LEAST_PAIRS = 12
_MOST_SHIFTS = 3
_NU = 4.0
# Steps that gain less than this chi-square of 1 degree cannot pass any sensible chance and are not looked at closer.
_SCREEN = 8.0
# An extent shift must beat a stage shift by this chi-square: moved sensors are some 20 times as common (common practice).
_STAGE_FIRST = 6.0


@dataclass(slots=True)
class Scene:
    """One unit's residuals made ready: rows in order of date.

    Attributes
    ----------
    gap : ndarray, shape (row,)
        Observed minus fitted share.
    sd : ndarray, shape (row,)
        Standard deviation of each row.
    nuisance : ndarray, shape (row, column); hold : ndarray, shape (column,)
        What may explain residuals without a shift, and the ridge on each.
    slope, share : ndarray, shape (row,)
        Rise of the fitted share per m of stage, and the fitted share.
    date : ndarray of datetime64
    """

    gap: np.ndarray
    sd: np.ndarray
    nuisance: np.ndarray
    hold: np.ndarray
    slope: np.ndarray
    share: np.ndarray
    date: np.ndarray

    def design(self, extra: list[np.ndarray]) -> tuple[np.ndarray, np.ndarray]:
        """Return the nuisance columns with ``extra`` ones beside them, and the ridge on each."""
        return np.column_stack([self.nuisance, *extra]), np.concatenate([self.hold, np.full(len(extra), 1e-9)])


@dataclass(slots=True)
class Account:
    """A Student-t regression of residuals: its log posterior, coefficients, what is left, and the weights."""

    score: float
    coef: np.ndarray
    left: np.ndarray
    heft: np.ndarray


def _account(scene: Scene, extra: list[np.ndarray]) -> Account:
    """Regress residuals on nuisance and ``extra`` columns under a Student-t of own scale (Lange, Little & Taylor 1989)."""
    x, hold = scene.design(extra)
    spread, heft = 1.0, 1.0 / scene.sd**2
    coef = np.zeros(x.shape[1])
    left = scene.gap
    for step in range(40):
        wx = heft[:, None] * x
        new = np.linalg.solve(x.T @ wx + np.diag(hold), wx.T @ scene.gap)
        left = scene.gap - x @ new
        z2 = (left / scene.sd) ** 2
        if step == 0:
            spread = max(float(np.median(np.sqrt(z2))) / 0.6745, 0.2)
        else:
            spread = max(float(np.sqrt(np.mean(z2 * (_NU + 1) / (_NU + z2 / spread**2)))), 0.2)
        heft = (_NU + 1) / (_NU + z2 / spread**2) / (spread * scene.sd) ** 2
        still = float(np.max(np.abs(new - coef))) < 1e-6
        coef = new
        if still and step > 3:
            break
    density = -0.5 * (_NU + 1) * np.log1p(z2 / spread**2 / _NU) - np.log(spread)
    return Account(float(density.sum() - 0.5 * np.sum(hold * coef**2)), coef, left, heft)


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
    return Scene(gap, sd, nuisance, hold, slope, fitted, units.date[rows][free])


def _steps(scene: Scene) -> tuple[np.ndarray, np.ndarray]:
    """Return candidate rows (first row after a step), and the step columns (row, candidate) as zeros and ones."""
    rows = np.flatnonzero(np.diff(scene.date) > np.timedelta64(0)) + 1
    rows = rows[(rows >= _LEAST_SIDE) & (rows <= scene.date.size - _LEAST_SIDE)]
    return rows, (np.arange(scene.date.size)[:, None] >= rows[None, :]).astype(float)


def _gains(scene: Scene, base: Account, before: list[np.ndarray], columns: np.ndarray) -> np.ndarray:
    """Return the drop of the weighted sum of squares by each column; 0 where it says nothing."""
    x, hold = scene.design(before)
    wx = base.heft[:, None] * x
    rest = columns - x @ np.linalg.solve(x.T @ wx + np.diag(hold), wx.T @ columns)
    size = np.einsum("ik,i,ik->k", rest, base.heft, columns)
    bare = np.einsum("ik,i,ik->k", columns, base.heft, columns)
    told = size > 0.02 * np.maximum(bare, 1e-12)
    along = columns.T @ (base.heft * base.left)
    return np.where(told, along**2 / np.where(told, size, 1.0), 0.0)


def _ratio(scene: Scene, base: Account, other: Account) -> float:
    """Return the likelihood ratio of two accounts as a chi-square of 1 degree, less where residuals run on in time.

    Shrunk by the parameters spent, and by (1 + r) / (1 - r) with r the correlation of residuals at most 40 days apart beyond
    its own noise.
    """
    even = other.left * np.sqrt(other.heft)
    near = np.diff(scene.date) <= np.timedelta64(40, "D")
    serial = 0.0
    if near.any():
        serial = float(np.sum(even[1:][near] * even[:-1][near]) / max(np.sum(even[1:][near] ** 2), 1e-12))
        serial = min(max(serial - 1.0 / np.sqrt(near.sum()), 0.0), 0.8)
    spent = 1.0 - min(other.coef.size / scene.date.size, 0.8)
    return max(2.0 * (other.score - base.score), 0.0) * spent * (1 - serial) / (1 + serial)


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


def _search(scene: Scene, before: list[np.ndarray], options: RelationOptions) -> Found | None:
    rows, steps = _steps(scene)
    if rows.size == 0:
        return None
    base = _account(scene, before)
    best: Found | None = None
    top = 0.0
    for kind, shape in (("stage", -scene.slope), ("extent", scene.share)):
        columns = steps * shape[:, None]
        gains = _gains(scene, base, before, columns)
        tried: set[int] = set()
        k = int(gains.argmax())
        while gains[k] > _SCREEN and k not in tried and len(tried) < 4:
            tried.add(k)
            other = _account(scene, [*before, columns[:, k]])
            ratio = _ratio(scene, base, other)
            again = _gains(
                scene, replace(base, heft=other.heft, left=_left_without(scene, other, before)), before, columns
            )
            ratio_kind = ratio - (_STAGE_FIRST if kind == "extent" else 0.0)
            if ratio_kind > top:
                top = ratio_kind
                chance = min(float(stats.chi2.sf(ratio, 1)) * 2 * rows.size, 1.0)
                near = np.flatnonzero(again >= again.max() - stats.chi2.ppf(0.95, 1))
                best = Found(
                    int(rows[k]),
                    kind,
                    float(other.coef[-1]),
                    chance,
                    int(rows[near[0]]),
                    int(rows[near[-1]]),
                    columns[:, k],
                )
            k = int(again.argmax())
    if best is None or best.chance >= options.shift_alpha:
        return None
    least = options.shift_least_m if best.kind == "stage" else options.shift_least_share
    return best if abs(best.size) >= least else None


def _left_without(scene: Scene, other: Account, before: list[np.ndarray]) -> np.ndarray:
    """Return residuals after the nuisance alone, under the weights of another account."""
    x, hold = scene.design(before)
    wx = other.heft[:, None] * x
    return scene.gap - x @ np.linalg.solve(x.T @ wx + np.diag(hold), wx.T @ scene.gap)


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
        base, other = _account(scene, []), _account(scene, [column])
        coef = float(other.coef[-1])
        chance = float(stats.chi2.sf(_ratio(scene, base, other), 1))
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
