"""Errors of water fractions by kind of view: what is learnt once for all wetlands and kept."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from inundate.common.codes import LEAF_STATES
from inundate.common.errors import InputError

VIEW_EDGES = (0.15, 0.35, 0.65, 0.9)
"""Edges of the classes of canopy view, and with them of the kinds of pixel view."""
VIEW_CLASSES = len(VIEW_EDGES) + 1
KINDS = len(LEAF_STATES) * VIEW_CLASSES * 2
OPEN_CLASS = 3
"""Class of canopy view from which a view's own level judges its pixels; below, neighbouring dates do."""
BAND_EDGES = (0.3, 0.5, 0.7, 0.9)
"""Edges of the bands of view fraction within which sd is scaled."""
_SLOPE = (0.2, 0.4, 0.65, 0.9, 1.0)
_PURE = (0.08, 0.07, 0.05, 0.025, 0.01)
_MIXED = 0.02
SHIFTS = np.linspace(0.03, 0.33, 4)
"""Candidates for the sd of a scene's leftover shift, pixels."""
_HELD = 200.0
"""Pixels that the starting values of a kind weigh."""


def kind_of(leaf: np.ndarray, view: np.ndarray, near: np.ndarray) -> np.ndarray:
    """Kind of a pixel's view from leaf state, canopy view and nearness of cloud.

    Parameters
    ----------
    leaf : ndarray of int
        ``LeafCode``.
    view : ndarray of float
        Share of ground that the canopy lets through.
    near : ndarray of bool
        Cloud or shadow within two pixels.

    Returns
    -------
    ndarray of int16
        0 .. ``KINDS`` - 1.
    """
    step = np.digitize(view, VIEW_EDGES)
    return ((np.asarray(leaf, np.int64) * VIEW_CLASSES + step) * 2 + near).astype(np.int16)


@dataclass(frozen=True, slots=True)
class NoiseModel:
    """What the archive says of errors; small, the same for all wetlands, kept as JSON.

    Attributes
    ----------
    table : ndarray of float64, shape (kind, 4)
        Mean fraction of dry pixels, rise to that of water pixels, variance at pure pixels, added variance of a
        half-water pixel.
    rho : float
        Correlation of pixel errors within a wetland's scene.
    temper : float
        Divisor of the log-likelihood for errors shared by neighbouring pixels.
    shape_var : dict of str to float
        Variance of a pixel's filling about the shape from ``cells``, ``order`` or ``outline``.
    area_prior : ndarray of float64, shape (step,)
        How often each step of area occurs, pooled.
    drift_var : float
        Variance a day by which a wetland's area (share of the largest) wanders.
    scale : ndarray of float64, shape (band,)
        Factor on sd by band of view.
    steady_var : float
        Variance (share of the largest extent, at half full) of errors that a wetland keeps from scene to scene.
    blur : float
        Part of a pixel's water fraction that comes from the eight pixels around it.
    shift_px : float
        Standard deviation of the shift that is left in a scene, pixels, each way.
    bend : float
        Factor by which the odds of water shown by a mixed pixel fall short of the odds of water held.
    steep : float
        Power of the odds of water held in the odds of water shown.
    """

    table: np.ndarray
    rho: float
    temper: float
    shape_var: dict[str, float]
    area_prior: np.ndarray
    drift_var: float
    scale: np.ndarray
    steady_var: float
    blur: float = 0.0
    shift_px: float = 0.1
    bend: float = 1.0
    steep: float = 1.0

    def to_dict(self) -> dict[str, object]:
        """Return plain values for JSON."""
        return {
            "table": self.table.tolist(),
            "rho": self.rho,
            "temper": self.temper,
            "shape_var": dict(self.shape_var),
            "area_prior": self.area_prior.tolist(),
            "drift_var": self.drift_var,
            "scale": self.scale.tolist(),
            "steady_var": self.steady_var,
            "blur": self.blur,
            "shift_px": self.shift_px,
            "bend": self.bend,
            "steep": self.steep,
        }

    @classmethod
    def from_dict(cls, values: dict[str, object]) -> NoiseModel:
        """Rebuild from :meth:`to_dict`."""
        arrays = {k: np.asarray(values[k], float) for k in ("table", "area_prior", "scale")}
        return cls(**{**values, **arrays})  # type: ignore[arg-type]


def start_noise(steps: int, errors: pd.DataFrame | None = None) -> NoiseModel:
    """Noise before any view is looked at.

    Parameters
    ----------
    steps : int
        Steps of area.
    errors : DataFrame, optional
        ``leaf_state``, ``omission``, ``commission`` as :func:`inundate.extent.fraction_errors` gives them (out of fold).

    Returns
    -------
    NoiseModel

    Raises
    ------
    InputError
        Unknown leaf state, or omission and commission that leave no contrast.
    """
    table = np.zeros((KINDS, 4))
    for leaf in range(len(LEAF_STATES)):
        for view in range(VIEW_CLASSES):
            row = np.array([0.0, _SLOPE[view], _PURE[view], _MIXED])
            table[(leaf * VIEW_CLASSES + view) * 2 + np.array([0, 1])] = row
    if errors is not None:
        states = errors["leaf_state"].astype(str).to_numpy()
        rates = errors[["omission", "commission"]].to_numpy(float)
        for state, (omission, commission) in zip(states, rates, strict=True):
            if state not in LEAF_STATES:
                text = f"errors: leaf_state {state!r} is not one of {LEAF_STATES}; rename it"
                raise InputError(text)
            contrast = 1.0 - omission - commission
            if not (0.1 < contrast <= 1.0 and omission >= 0 and commission >= 0):
                text = (
                    f"errors: {state} has omission {omission} and commission {commission}; both must be 0 or more and "
                    "sum to less than 0.9; check the classifier's out-of-fold scores"
                )
                raise InputError(text)
            first = LEAF_STATES.index(state) * VIEW_CLASSES * 2
            clear = slice(first + OPEN_CLASS * 2, first + VIEW_CLASSES * 2)
            table[clear, 0], table[clear, 1] = commission, contrast
    prior = np.full(steps, 1.0 / steps)
    var = {"cells": 0.04, "order": 0.08, "outline": 0.12}
    return NoiseModel(table, 0.05, 1.5, var, prior, 0.02**2, np.ones(len(BAND_EDGES) + 1), 0.0)


def anchor_noise(start: NoiseModel, sums: NoiseSums, errors: pd.DataFrame | None) -> NoiseModel:
    """Starting noise with dry and water ends from pixels that are dry or water by where they lie.

    Leaf states with out-of-fold errors keep those; they weigh as much as ``_HELD`` pixels.
    """
    table = start.table.copy()
    known = np.zeros(KINDS, bool)
    if errors is not None:
        for state in errors["leaf_state"].astype(str):
            first = LEAF_STATES.index(state) * VIEW_CLASSES * 2
            known[first + OPEN_CLASS * 2 : first + VIEW_CLASSES * 2] = True
    n, f, m, g = sums.anchor.T
    low = (f + 30 * table[:, 0]) / (n + 30)
    top = (g + 30 * (table[:, 0] + table[:, 1])) / (m + 30)
    table[~known, 0] = np.clip(low, 0.0, 0.5)[~known]
    table[~known, 1] = np.maximum(np.clip(top, 0.0, 1.0) - table[:, 0], 0.1)[~known]
    return replace(start, table=table)


class NoiseSums:
    """Sums over wetlands from which a noise model is renewed; the order of wetlands does not matter to the result."""

    def __init__(self, steps: int, responses: int = 1) -> None:
        self.dry = np.zeros((KINDS, 3))
        self.wet = np.zeros((KINDS, 3))
        self.half = np.zeros((KINDS, 2))
        self.line = np.zeros((KINDS, 6))
        self.pairs = np.zeros((3, 2))
        self.area = np.zeros(steps)
        self.anchor = np.zeros((KINDS, 4))
        self.shift = np.zeros(SHIFTS.size)
        self.response = np.zeros(responses)
        self.shape = {name: np.zeros(2) for name in ("cells", "order", "outline")}

    def add(self, other: NoiseSums) -> None:
        """Add the sums of another wetland."""
        for name in ("dry", "wet", "half", "line", "pairs", "area", "anchor", "shift", "response"):
            getattr(self, name)[...] += getattr(other, name)
        for name, value in other.shape.items():
            self.shape[name] += value

    def add_own(self, kind: np.ndarray, f: np.ndarray, e: np.ndarray, var: np.ndarray, fit: np.ndarray) -> None:
        """Add pixels judged by the view's own level: kind, fraction, expected water, variance, fitted fraction."""
        r2 = (f - fit) ** 2
        w = 1.0 / (1.0 + r2 / var / 9.0) ** 2
        for store, chosen in ((self.dry, e < 0.03), (self.wet, e > 0.97)):
            k = kind[chosen]
            for j, value in enumerate((w[chosen], (w * f)[chosen], (w * r2)[chosen])):
                store[:, j] += np.bincount(k, weights=value, minlength=KINDS)
        middle = (e > 0.25) & (e < 0.75)
        self.half[:, 0] += np.bincount(kind[middle], weights=w[middle], minlength=KINDS)
        self.half[:, 1] += np.bincount(kind[middle], weights=(w * r2)[middle], minlength=KINDS)

    def add_line(self, kind: np.ndarray, f: np.ndarray, e: np.ndarray, weight: np.ndarray) -> None:
        """Add pixels judged by neighbouring dates: sums for a weighted line of fraction on expected water."""
        for j, value in enumerate((np.ones_like(f), e, f, e * e, e * f, f * f)):
            self.line[:, j] += np.bincount(kind, weights=weight * value, minlength=KINDS)


def renew_noise(old: NoiseModel, sums: NoiseSums, start: NoiseModel) -> NoiseModel:
    """Noise model from sums over wetlands, held towards its starting values where pixels are few.

    Parameters
    ----------
    old, start : NoiseModel
        The last and the starting model.
    sums : NoiseSums

    Returns
    -------
    NoiseModel
    """
    table = start.table.copy()
    own, line = _own_rows(sums, start), _line_rows(sums, start)
    clear = (np.arange(KINDS) // 2) % VIEW_CLASSES >= OPEN_CLASS
    table[clear], table[~clear] = own[clear], line[~clear]
    within = [float(a / max(n, 1.0)) if n > 100 else np.nan for a, n in sums.pairs]
    rho = float(np.clip(np.nan_to_num(within[0], nan=old.rho), 0.0, 0.8))
    beside = [max(float(np.nan_to_num(c, nan=0.1)) - rho, 0.0) for c in within[1:]]
    temper = float(np.clip(1.0 + 4.0 * beside[0] + 4.0 * beside[1], 1.0, 4.0))
    prior = sums.area + 1e-9
    prior = 0.5 * prior / prior.sum() + 0.5 / prior.size
    var = {}
    for name, first in start.shape_var.items():
        total, n = sums.shape[name]
        var[name] = float(np.clip((total + 50 * first) / (n + 50), 0.003, 0.15))
    shift = _top_of(SHIFTS, sums.shift)
    return replace(old, table=table, rho=rho, temper=temper, shape_var=var, area_prior=prior, shift_px=shift)


def _top_of(x: np.ndarray, y: np.ndarray) -> float:
    """Place of the highest value, by a parabola through it and its neighbours; 0 when nothing tells."""
    top = int(np.argmax(y))
    if np.ptp(y) < 2.0 or top == 0:
        return float(x[0])
    if top == y.size - 1:
        return float(x[-1])
    left, mid, right = y[top - 1 : top + 2]
    return float(x[top] + 0.5 * (x[1] - x[0]) * (left - right) / (left - 2 * mid + right))


def _own_rows(sums: NoiseSums, start: NoiseModel) -> np.ndarray:
    """Rows of the table from pixels that the view's own level says are dry, water or half."""
    low = (sums.dry[:, 1] + _HELD * start.table[:, 0]) / (sums.dry[:, 0] + _HELD)
    top = start.table[:, 0] + start.table[:, 1]
    high = (sums.wet[:, 1] + _HELD * top) / (sums.wet[:, 0] + _HELD)
    n = sums.dry[:, 0] + sums.wet[:, 0]
    pure = (sums.dry[:, 2] + sums.wet[:, 2] + _HELD * start.table[:, 2]) / (n + _HELD)
    half = (sums.half[:, 1] + _HELD * (start.table[:, 2] + start.table[:, 3])) / (sums.half[:, 0] + _HELD)
    pure = np.clip(pure, 4e-4, 0.1)
    slope = np.maximum(high - low, 0.05)
    return np.column_stack([np.clip(low, 0.0, 0.5), slope, pure, np.clip(half - pure, 4e-4, 0.1)])


def _line_rows(sums: NoiseSums, start: NoiseModel) -> np.ndarray:
    """Rows of the table from a line of fraction on the water that neighbouring dates expect, held by a ridge."""
    n, e, f, ee, ef, ff = sums.line.T
    hold = _HELD / 4
    spread = ee - e * e / np.maximum(n, 1e-9)
    both = ef - e * f / np.maximum(n, 1e-9)
    slope = (both + hold * 0.08 * start.table[:, 1]) / (spread + hold * 0.08)
    slope = np.clip(slope, 0.0, 1.1)
    offset = (f - slope * e + hold * start.table[:, 0]) / (n + hold)
    rest = ff - 2 * (slope * ef + offset * f) + slope**2 * ee + 2 * slope * offset * e + n * offset**2
    pure = (np.maximum(rest, 0.0) + hold * start.table[:, 2]) / (n + hold)
    return np.column_stack([np.clip(offset, 0.0, 0.9), slope, np.clip(pure, 1e-3, 0.15), np.full(n.size, 4e-3)])
