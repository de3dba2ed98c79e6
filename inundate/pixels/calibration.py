"""Calibration of raw scores by leaf state: beta calibration, each state shrunken towards the pooled map."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.optimize import minimize
from scipy.special import expit

RELIABILITY_EDGES = np.linspace(0.0, 1.0, 11)


def _terms(raw: np.ndarray) -> np.ndarray:
    """Return ln p and -ln(1-p) of the score, each shifted to 0 at p = 1/2; shape (row, 2)."""
    raw = np.clip(np.asarray(raw, float), -30.0, 30.0)
    return np.column_stack([np.log(2.0) - np.logaddexp(0.0, -raw), np.logaddexp(0.0, raw) - np.log(2.0)])


def _fit_beta(raw: np.ndarray, y: np.ndarray, weight: np.ndarray, centre: np.ndarray, strength: float) -> np.ndarray:
    """Weighted logistic regression of y on the two terms, slopes >= 0, with a pull to ``centre``."""
    terms = _terms(raw)

    def loss(theta: np.ndarray) -> tuple[float, np.ndarray]:
        z = terms @ theta[:2] + theta[2]
        p = expit(z)
        value = float((weight * (np.logaddexp(0.0, z) - y * z)).sum())
        residual = weight * (p - y)
        pull = theta - centre
        gradient = np.array([*(terms.T @ residual), residual.sum()]) + strength * pull
        return value + 0.5 * strength * float(pull @ pull), gradient

    found = minimize(loss, centre, jac=True, method="L-BFGS-B", bounds=[(0.0, None), (0.0, None), (None, None)])
    return np.asarray(found.x)


@dataclass(frozen=True, slots=True)
class Calibration:
    """Map from raw score to probability, one for each leaf state.

    Attributes
    ----------
    pooled : tuple of float
        Slopes of ln p and -ln(1-p), and intercept, over all examples.
    states : dict of int to tuple of float
        The same for single leaf states (code); a state that is absent uses the pooled map.

    Notes
    -----
    Beta calibration: Kull, Silva Filho & Flach 2017 (doi:10.1214/17-EJS1338SI). Slopes are never negative, so ranks hold
    within a state. A state's parameters have a Gaussian prior around the pooled ones, worth ``shrink`` in squared
    parameter units: states with few examples stay near the pooled map.
    """

    pooled: tuple[float, float, float] = (1.0, 1.0, 0.0)
    states: dict[int, tuple[float, float, float]] | None = None

    @classmethod
    def fit(
        cls, raw: np.ndarray, y: np.ndarray, weight: np.ndarray, leaf_state: np.ndarray | None, shrink: float
    ) -> Calibration:
        """Fit on out-of-fold raw scores.

        Parameters
        ----------
        raw : ndarray, shape (row,)
            Out-of-fold score, log-odds.
        y : ndarray of 0 and 1, shape (row,)
        weight : ndarray, shape (row,)
        leaf_state : ndarray of int or None, shape (row,)
        shrink : float
            Strength of the pull of each state to the pooled map (and of the pooled map to the identity: a tenth of it).

        Returns
        -------
        Calibration
        """
        start = np.array([1.0, 1.0, 0.0])
        if raw.size == 0 or np.unique(y).size < 2:
            return cls()
        pooled = _fit_beta(raw, y, weight, start, shrink / 10.0)
        states: dict[int, tuple[float, float, float]] = {}
        if leaf_state is not None:
            for code in np.unique(leaf_state[leaf_state >= 0]):
                mine = leaf_state == code
                a, b, c = _fit_beta(raw[mine], y[mine], weight[mine], pooled, shrink)
                states[int(code)] = (float(a), float(b), float(c))
        return cls((float(pooled[0]), float(pooled[1]), float(pooled[2])), states)

    def apply(self, raw: np.ndarray, leaf_state: np.ndarray | None = None) -> np.ndarray:
        """Return probabilities, float64, shape (row,); ``leaf_state`` codes choose the map, None or -1 the pooled one."""
        raw = np.asarray(raw, float)
        if leaf_state is None or not self.states:
            return self._map(raw, self.pooled)
        leaf_state = np.broadcast_to(np.asarray(leaf_state), raw.shape)
        out = np.empty(raw.shape)
        for code in np.unique(leaf_state):
            mine = leaf_state == code
            out[mine] = self._map(raw[mine], self.states.get(int(code), self.pooled))
        return out

    @staticmethod
    def _map(raw: np.ndarray, theta: tuple[float, float, float]) -> np.ndarray:
        return np.asarray(expit(_terms(raw) @ np.asarray(theta[:2]) + theta[2]))

    def to_json(self) -> dict[str, object]:
        """Return a plain dictionary for the card."""
        return {"pooled": list(self.pooled), "states": {str(k): list(v) for k, v in (self.states or {}).items()}}

    @classmethod
    def from_json(cls, value: dict) -> Calibration:
        """Read what :meth:`to_json` wrote."""
        a, b, c = value["pooled"]
        return cls((a, b, c), {int(k): (v[0], v[1], v[2]) for k, v in value["states"].items()})


def reliability(probability: np.ndarray, y: np.ndarray, weight: np.ndarray | None = None) -> list[dict[str, float]]:
    """Return the reliability table by tenths of probability: low, high, n, mean_probability, share_water, gap, gap_sd."""
    weight = np.ones(y.size) if weight is None else weight
    tenth = np.clip(np.searchsorted(RELIABILITY_EDGES, probability, side="right") - 1, 0, 9)
    rows = []
    for k in range(10):
        mine = tenth == k
        n = int(mine.sum())
        total = float(weight[mine].sum())
        mean_p = float((weight * probability)[mine].sum() / total) if total > 0 else np.nan
        share = float((weight * y)[mine].sum() / total) if total > 0 else np.nan
        sd = float(np.sqrt(max(share * (1 - share), 1e-4) / n)) if n else np.nan
        rows.append(
            {
                "low": k / 10,
                "high": (k + 1) / 10,
                "n": n,
                "mean_probability": mean_p,
                "share_water": share,
                "gap": share - mean_p,
                "gap_sd": sd,
            }
        )
    return rows
