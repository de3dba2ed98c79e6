"""Fitted curves of all wetlands with their bands: what prediction, tables and draws read."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from inundate.common.seeds import rng_for
from inundate.relation import reading
from inundate.relation.families import ELEVATION, FAMILY_SIZE, N_PARAM, full_stage
from inundate.relation.pairs import stack_tables
from inundate.relation.reading import Drawn, Ground

N_GRID = 141
AREA_LO, AREA_HI, AREA_SD, VOLUME, VOLUME_LO, VOLUME_HI = range(6)


def draw_curves(
    keys: list[tuple[str, str]],
    fits: tuple[dict[int, np.ndarray], dict[int, np.ndarray]],
    weights: np.ndarray,
    stages: tuple[np.ndarray, np.ndarray],
    random: tuple[int, int],
) -> Drawn:
    """Draw curves of every unit: families by their weights, parameters about their fits, one datum error each.

    The power-like families are drawn in log share at a stage that was seen, not in log full stage: pairs at one stage fix that
    share and leave the shape free, which is a straight ridge there and a bent one in the other.

    Parameters
    ----------
    keys : list of (wetland_id, period)
        Each unit's generator is seeded by its key.
    fits : (theta, cov)
        Family -> (unit, N_PARAM), and family -> (unit, N_PARAM, N_PARAM).
    weights : ndarray, shape (unit, family)
    stages : (datum, reference)
        sd of the shared stage error and the middle of the stages seen, m, each (unit,).
    random : (seed, number of draws)

    Returns
    -------
    Drawn
    """
    seed, n = random
    datum, reference = stages
    family = np.zeros((len(keys), n), np.int64)
    drawn = np.zeros((len(keys), n, N_PARAM))
    shift = np.zeros((len(keys), n))
    centres, roots = {}, {}
    for code in fits[0]:
        centres[code], turn = _to_share(code, fits[0][code], reference)
        roots[code] = _roots(turn @ fits[1][code] @ turn.transpose(0, 2, 1), int(FAMILY_SIZE[code]))
    for u, key in enumerate(keys):
        z = rng_for(seed, "curves", *key).standard_normal((n, N_PARAM + 1))
        shift[u] = z[:, N_PARAM] * datum[u]
        cut = np.rint(np.cumsum(weights[u]) * n).astype(int)
        begin = 0
        for code in range(weights.shape[1]):
            if code in roots and cut[code] > begin:
                rows = slice(begin, cut[code])
                family[u, rows] = code
                drawn[u, rows] = _from_share(
                    code, centres[code][u] + z[rows, :N_PARAM] @ roots[code][u].T, reference[u]
                )
            begin = cut[code]
    return Drawn(family, drawn, shift)


def _to_share(code: int, theta: np.ndarray, reference: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return parameters (unit, N_PARAM) with log share at the reference stage first, and the Jacobian of that change."""
    turn = np.repeat(np.eye(N_PARAM)[None], theta.shape[0], axis=0)
    if code == ELEVATION:
        return theta, turn
    b = np.exp(theta[:, 1])
    depth = np.maximum(reference - theta[:, 2], 0.02)
    out = theta.copy()
    out[:, 0] = b * (np.log(depth) - theta[:, 0])
    turn[:, 0, 0], turn[:, 0, 1], turn[:, 0, 2] = -b, out[:, 0], -b / depth
    return out, turn


def _from_share(code: int, values: np.ndarray, reference: float) -> np.ndarray:
    """Undo :func:`_to_share` for draws (draw, N_PARAM) of one unit."""
    if code == ELEVATION:
        return values
    out = values.copy()
    depth = np.maximum(reference - values[:, 2], 0.02)
    out[:, 0] = np.log(depth) - values[:, 0] / np.exp(np.clip(values[:, 1], -3.0, 3.0))
    return out


def _roots(cov: np.ndarray, size: int) -> np.ndarray:
    out = np.zeros_like(cov)
    block = cov[:, :size, :size]
    out[:, :size, :size] = np.linalg.cholesky(0.5 * (block + block.transpose(0, 2, 1)) + 1e-12 * np.eye(size))
    return out


@dataclass(slots=True)
class Curves:
    """Curves of all units, ready to be read.

    Attributes
    ----------
    table : DataFrame
        One row a unit: wetland_id, period, area_max_m2, cover, valid_from, valid_to, n_pairs, stage_min_m, stage_max_m,
        hypsometry, note.
    theta, cov : dict
        Family code -> parameters (unit, N_PARAM) and their covariance.
    family : ndarray of int, shape (unit,)
        Family of the curve itself.
    weights : ndarray, shape (unit, 4)
        Weight of each family in the bands.
    datum_sd_m, reference_m : ndarray, shape (unit,)
        sd of the stage error that all pairs share, and the middle of the stages seen.
    scale : (float, float, float)
        Factor on the bands' half widths inside and outside the stages seen, and for wetlands without pairs, from held-out
        pairs.
    seed, n_draws, level
        How curves are drawn and what share of the truth the bands should hold.
    hypsometry : dict
        wetland_id -> (stage_m, share).
    """

    table: pd.DataFrame
    theta: dict[int, np.ndarray]
    cov: dict[int, np.ndarray]
    family: np.ndarray
    weights: np.ndarray
    datum_sd_m: np.ndarray
    reference_m: np.ndarray
    scale: tuple[float, float, float]
    seed: int
    n_draws: int
    level: float
    hypsometry: dict[str, tuple[np.ndarray, np.ndarray]]
    best: np.ndarray = field(init=False)
    ground: Ground = field(init=False)
    grid: np.ndarray = field(init=False)
    values: np.ndarray = field(init=False)
    drawn: Drawn = field(init=False)

    def __post_init__(self) -> None:
        """Draw curves and lay the bands out on each unit's grid of stages."""
        self.best = np.zeros((self.family.size, N_PARAM))
        for code in self.theta:
            self.best[self.family == code] = self.theta[code][self.family == code]
        place = {key: i for i, key in enumerate(self.hypsometry)}
        which = self.table["wetland_id"].map(place).fillna(-1).to_numpy(np.int64)
        self.ground = Ground(*stack_tables(self.hypsometry), which)
        keys = list(zip(self.table["wetland_id"], self.table["period"], strict=True))
        self.drawn = draw_curves(
            keys, (self.theta, self.cov), self.weights, (self.datum_sd_m, self.reference_m), (self.seed, self.n_draws)
        )
        self.grid = self._grid()
        self.values = self._bands()

    @property
    def size(self) -> int:
        """Number of units."""
        return self.family.size

    def central(self, unit: np.ndarray, stage_m: np.ndarray) -> np.ndarray:
        """Return the share of the largest extent (row,) at each row's stage on its unit's curve."""
        return reading.share_of_units(self.family, self.best, unit, self.ground, np.asarray(stage_m, float))

    def top_stage(self) -> np.ndarray:
        """Return the stage (m) at which each unit's curve reaches its largest extent."""
        place = np.maximum(self.ground.which, 0)
        return np.array(
            [
                full_stage(int(self.family[u]), self.best[u], self.ground.tables[t], self.ground.spans[t])
                for u, t in enumerate(place)
            ]
        )

    def _grid(self) -> np.ndarray:
        seen = self.table["stage_max_m"].fillna(0.0).to_numpy(float)
        top = np.minimum(self.top_stage(), np.maximum(4.0 * np.maximum(seen, 0.0), 6.0))
        end = np.maximum(1.15 * top, 1.25 * seen) + 0.10
        return end[:, None] * np.linspace(0.0, 1.0, N_GRID)[None, :]

    def _bands(self) -> np.ndarray:
        unit = np.repeat(np.arange(self.size), N_GRID)
        centre = self.central(unit, self.grid.ravel()).reshape(self.grid.shape)
        out = reading.bands(self.drawn, self.ground, self.grid, centre, 0.5 * (1.0 - self.level))
        factor = self.widening()
        for low, high, mid, cap in (
            (AREA_LO, AREA_HI, centre, 1.0),
            (VOLUME_LO, VOLUME_HI, out[:, VOLUME], np.inf),
        ):
            # bounds that reach empty or full stay there, however the scale narrows
            lo = np.where(out[:, low] <= 0.0, 0.0, mid - factor * np.maximum(mid - out[:, low], 0.0))
            hi = np.where(out[:, high] >= cap, cap, mid + factor * np.maximum(out[:, high] - mid, 0.0))
            lo = np.minimum.accumulate(lo[:, ::-1], axis=1)[:, ::-1]
            hi = np.maximum.accumulate(hi, axis=1)
            out[:, low], out[:, high] = np.clip(lo, 0.0, cap), np.clip(hi, 0.0, cap)
        out[:, VOLUME_HI] = np.minimum(out[:, VOLUME_HI], self.grid)
        out[:, AREA_SD] *= factor
        return out

    def widening(self) -> np.ndarray:
        """Return the factor on half widths (unit, step): the inside one where stages were seen, blending outside."""
        inside, beyond, unseen = self.scale
        outside = np.where(self.table["n_pairs"].to_numpy() > 0, beyond, unseen)[:, None]
        low = self.table["stage_min_m"].to_numpy(float)[:, None]
        high = self.table["stage_max_m"].to_numpy(float)[:, None]
        reach = np.maximum(0.1 * (high - low), 0.02)
        away = np.maximum(low - self.grid, self.grid - high) / reach
        part = np.clip(np.where(np.isfinite(away), away, 1.0), 0.0, 1.0)
        return inside + part * (outside - inside)

    def read(self, unit: np.ndarray, stage_m: np.ndarray) -> pd.DataFrame:
        """Return stage_m, area_m2, area_lo_m2, area_hi_m2, area_sd_m2 at each row (NaN for NaN)."""
        stage = np.asarray(stage_m, float)
        size = self.table["area_max_m2"].to_numpy(float)[unit]
        share = self.central(unit, stage)
        side = reading.band_at(self.grid, self.values[:, :3], unit, stage)
        return pd.DataFrame(
            {
                "stage_m": stage,
                "area_m2": share * size,
                "area_lo_m2": np.minimum(side[:, 0], share) * size,
                "area_hi_m2": np.maximum(side[:, 1], share) * size,
                "area_sd_m2": side[:, 2] * size,
            }
        )

    def sample(self, unit: int, stage_m: np.ndarray, n: int) -> np.ndarray:
        """Return ``n`` drawn curves of one unit at the stages, m2, (draw, stage); widened as the bands are, never falling."""
        family, theta, shift = self.drawn
        take = np.arange(n) * self.n_draws // n if n <= self.n_draws else np.arange(n) % self.n_draws
        grid, factor = self.grid[unit], self.widening()[unit]
        centre = self.central(np.full(N_GRID, unit), grid)
        out = np.empty((n, np.size(stage_m)))
        size = float(self.table["area_max_m2"].iloc[unit])
        stage = np.asarray(stage_m, float)
        ground = self.ground._replace(which=self.ground.which[unit : unit + 1])
        at = np.zeros(N_GRID, np.int64)
        for row, d in enumerate(take):
            wet = np.where(grid > 0, grid + shift[unit, d], 0.0)
            one = reading.share_of_units(family[unit, d : d + 1], theta[unit, d : d + 1], at, ground, wet)
            curve = np.clip(np.maximum.accumulate(centre + factor * (one - centre)), 0.0, 1.0)
            out[row] = np.where(stage > 0, np.interp(stage, grid, curve), 0.0) * size
            out[row, np.isnan(stage)] = np.nan
        return out
