"""The filled series, and joint draws of it."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np
import pandas as pd
from numba import njit

from inundate.common.codes import BASES, LEAF_STATES
from inundate.common.errors import InputError
from inundate.common.seeds import rng_for
from inundate.series.maps import LevelMaps, share_at


@njit(cache=True, nogil=True)
def _areas_of(
    mean: np.ndarray,
    sd: np.ndarray,
    common: np.ndarray,
    own: np.ndarray,
    phi: float,
    shared: float,
    table: np.ndarray,
    full: float,
    area_max: float,
    out: np.ndarray,
) -> None:
    """Fill ``out`` (draw, day) with areas (m2): levels whose standard scores share part of a regional series."""
    keep = np.sqrt(1.0 - phi * phi)
    a, b = np.sqrt(shared), np.sqrt(1.0 - shared)
    for n in range(out.shape[0]):
        z = 0.0
        for t in range(out.shape[1]):
            z = own[n, t] if t == 0 else phi * z + keep * own[n, t]
            out[n, t] = area_max * share_at(mean[t] + sd[t] * (a * common[n, t] + b * z), table, full)


@njit(cache=True, nogil=True)
def _regional(shocks: np.ndarray, phi: float) -> np.ndarray:
    out = np.empty_like(shocks)
    keep = np.sqrt(1.0 - phi * phi)
    for n in range(shocks.shape[0]):
        for t in range(shocks.shape[1]):
            out[n, t] = shocks[n, t] if t == 0 else phi * out[n, t - 1] + keep * shocks[n, t]
    return out


@dataclass(frozen=True, slots=True)
class Joint:
    """How errors hang together: ``memory_days`` in time (1/e), ``shared`` the part of their variance that is regional."""

    memory_days: float
    shared: float


@dataclass(frozen=True, slots=True)
class SeriesResult:
    """Filled daily series of every wetland, with all that joint draws need.

    Attributes
    ----------
    daily : DataFrame
        extent_daily: wetland_id, date, area_m2, area_lo_m2, area_hi_m2, basis, leaf_state; sorted.
    reasons : DataFrame
        A row a wetland: predictor, why, held-out scores (RMSE as share of the largest extent), and what it rests on.
    lacked : tuple of str
        What the inputs lacked, in words.
    wetland_ids : tuple of str
    dates : ndarray of datetime64[ns], shape (day,)
    level_mean_m, level_sd_m : ndarray of float32, shape (wetland, day)
        Level above lowest ground (below 0: under ground), calibrated.
    maps : LevelMaps
    area_max_m2 : ndarray, shape (wetland,)
    joint : Joint
    seed : int
    lasting : (float, float)
        See ``FillOptions.lasting``; the intervals hold it, and each draw a wetland's own share of it.
    lasting_part : dict
        wetland_id -> part of ``lasting`` that is left there; 1 where not named.
    heldout : DataFrame or None
        What was hidden and predicted: wetland_id, date, kind (``views`` / ``logger``), leaf_state, known_m2, known_sd_m2,
        area_m2, area_lo_m2, area_hi_m2.
    """

    daily: pd.DataFrame
    reasons: pd.DataFrame
    lacked: tuple[str, ...]
    wetland_ids: tuple[str, ...]
    dates: np.ndarray
    level_mean_m: np.ndarray
    level_sd_m: np.ndarray
    maps: LevelMaps
    area_max_m2: np.ndarray
    joint: Joint
    seed: int
    lasting: tuple[float, float] = (0.0, 0.0)
    lasting_part: dict[str, float] = field(default_factory=dict)
    heldout: pd.DataFrame | None = None

    @property
    def area_m2(self) -> np.ndarray:
        """Best daily extent, m2, float32, shape (wetland, day)."""
        return self.daily["area_m2"].to_numpy(np.float32).reshape(len(self.wetland_ids), len(self.dates))

    def iter_draws(self, n: int) -> Iterator[tuple[int, np.ndarray]]:
        """Yield each wetland's position and its draws of extent (draw, day), m2, float32; draws hang together across wetlands.

        Parameters
        ----------
        n : int
            Number of draws (> 0); the first draws are the same for any n.

        Raises
        ------
        InputError
            If ``n`` is not positive.
        """
        if n < 1:
            msg = f"n: got {n} draws: it must be 1 or more"
            raise InputError(msg)
        days = len(self.dates)
        phi = float(np.exp(-1 / max(self.joint.memory_days, 0.5)))
        common = _regional(
            rng_for(self.seed, "draws", "region").standard_normal((n, days), dtype=np.float32),
            phi,
        )
        for i, wetland in enumerate(self.wetland_ids):
            own = rng_for(self.seed, "draws", wetland).standard_normal((n, days), dtype=np.float32)
            out = np.empty((n, days), np.float32)
            _areas_of(
                self.level_mean_m[i], self.level_sd_m[i], common, own, phi, self.joint.shared,
                self.maps.share[i], float(self.maps.full_m[i]), float(self.area_max_m2[i]), out,
            )  # fmt: skip
            yield i, self._with_lasting(out, wetland, n)

    def _with_lasting(self, out: np.ndarray, wetland: str, n: int) -> np.ndarray:
        """Add to each draw (draw, day) what views of this wetland may keep missing or adding, in place."""
        missed, added = lasting_left(self.lasting, self.lasting_part, wetland)
        if missed > 0 or added > 0:
            z = rng_for(self.seed, "lasting", wetland).standard_normal((n, 2), dtype=np.float32)
            largest = np.float32(self.area_max_m2[self.wetland_ids.index(wetland)])
            wet = out > 0
            out += np.float32(missed) * z[:, :1] * out + np.float32(added) * z[:, 1:] * (largest - out) * wet
            np.clip(out, 0.0, largest, out=out)
        return out

    def draws(self, n: int) -> np.ndarray:
        """Return ``n`` plausible landscapes: extent in m2, float32, shape (draw, wetland, day).

        Raises
        ------
        InputError
            If ``n`` is not positive.
        """
        out = np.empty((n, len(self.wetland_ids), len(self.dates)), np.float32) if n > 0 else np.empty(0)
        for i, block in self.iter_draws(n):
            out[:, i] = block
        return out


def lasting_left(lasting: tuple[float, float], parts: dict[str, float], wetland: str) -> tuple[float, float]:
    """Return the lasting errors (missed, added) that are left in a wetland."""
    part = parts.get(wetland, 1.0)
    return part * lasting[0], part * lasting[1]


def daily_table(
    ids: tuple[str, ...],
    dates: np.ndarray,
    areas: np.ndarray,
    basis: np.ndarray,
    leaf: np.ndarray,
) -> pd.DataFrame:
    """Build extent_daily from arrays (wetland, day) of basis and leaf codes, and ``areas`` (mean low high, wetland, day) in m2."""
    days = len(dates)
    return pd.DataFrame(
        {
            "wetland_id": np.repeat(np.array(ids, dtype=object), days),
            "date": np.tile(dates, len(ids)),
            "area_m2": areas[0].ravel(),
            "area_lo_m2": areas[1].ravel(),
            "area_hi_m2": areas[2].ravel(),
            "basis": np.array(BASES, dtype=object)[basis.ravel()],
            "leaf_state": np.array(LEAF_STATES, dtype=object)[leaf.ravel()],
        }
    )
