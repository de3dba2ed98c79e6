"""Leaf dates without greenness: warmth of the year, or the usual day."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from inundate.common.errors import InputError
from inundate.leaves.views import check_dates, check_frame, season_time

BASE_C = 5.0
"""Base of growing degree days for temperate trees (common practice, no source)."""
GENERIC_DEGREE_DAYS = 200.0
"""Growing degree days at mid green-up when no year tells (common practice, no source)."""
GENERIC_COOL_C = 9.0
"""Running 21-day air temperature at mid leaf fall when no year tells (common practice, no source)."""
WARMTH_SD_DAYS = 7.0
"""Uncertainty of a date told by warmth (common practice, no source)."""


@dataclass(frozen=True, slots=True)
class Warmth:
    """Daily warmth of each season year.

    Attributes
    ----------
    years : ndarray of int64, shape (year,)
    degree_days : ndarray, shape (year, 366)
        Sum above 5 C since the season year began; NaN where the record does not reach.
    running_c : ndarray, shape (year, 366)
        Mean of the 21 days that end on the day.
    """

    years: np.ndarray
    degree_days: np.ndarray
    running_c: np.ndarray

    def rise_day(self, degree_days: float) -> np.ndarray:
        """Return the first day whose degree days reach the sum, shape (year,), NaN where unknown."""
        return _first(self.degree_days >= degree_days)

    def fall_day(self, cool_c: float) -> np.ndarray:
        """Return the first day after midsummer whose running mean is at or below, shape (year,), NaN where unknown."""
        cool = self.running_c <= cool_c
        cool[:, :210] = False
        return _first(cool)


def _first(hit: np.ndarray) -> np.ndarray:
    return np.where(hit.any(axis=1), hit.argmax(axis=1) + 1.0, np.nan)


def read_warmth(temperature: pd.DataFrame | None, offset_days: int) -> Warmth | None:
    """Sum daily air temperature into growing degree days and running means.

    Parameters
    ----------
    temperature : DataFrame or None
        date, air_temperature_c; gaps up to 10 days are bridged, a longer one leaves the rest of the year unknown.
    offset_days : int
        Start of the season year after New Year.

    Returns
    -------
    Warmth or None
        None without a single usable day.

    Raises
    ------
    InputError
        On missing columns, bad dates, or temperatures outside -80..60 C.
    """
    if temperature is None:
        return None
    frame = check_frame(temperature, "temperature", ("date", "air_temperature_c"))
    value = pd.to_numeric(frame["air_temperature_c"], errors="coerce").to_numpy(float)
    bad = np.flatnonzero((value < -80) | (value > 60))
    if bad.size:
        message = (
            f"temperature row {bad[0]}: air_temperature_c {value[bad[0]]} lies outside -80..60; give degrees Celsius"
        )
        raise InputError(message)
    keep = np.isfinite(value)
    if not keep.any():
        return None
    date = check_dates(frame["date"], "temperature date").astype("datetime64[D]")
    daily = pd.Series(value[keep], index=pd.DatetimeIndex(date[keep])).groupby(level=0).mean().sort_index()
    daily = daily.asfreq("D").interpolate(limit=10, limit_area="inside")
    year, day = season_time(daily.index.to_numpy(), offset_days)
    years = np.arange(year.min(), year.max() + 1)
    table = np.full((years.size, 366), np.nan)
    table[year - years[0], day.astype(np.int64) - 1] = daily.to_numpy()
    running = np.full_like(table, np.nan)
    running[year - years[0], day.astype(np.int64) - 1] = daily.rolling(21, min_periods=21).mean().to_numpy()
    last = np.isnan(table[:, 365]) & np.isfinite(table[:, 364])
    table[last, 365] = table[last, 364]
    return Warmth(years, np.cumsum(np.maximum(table - BASE_C, 0.0), axis=1), running)


def warmth_dates(warmth: Warmth, known_years: np.ndarray, known_days: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Tell mid green-up and mid leaf fall of each year from warmth, calibrated on years whose dates are known.

    Parameters
    ----------
    warmth : Warmth
    known_years : ndarray of int64, shape (k,)
    known_days : ndarray, shape (k, 2)
        Days of mid green-up and mid leaf fall seen in greenness; NaN where not seen.

    Returns
    -------
    (days, sd_days)
        Shapes (year, 2) and (2,).
    """
    days, sd = np.full((warmth.years.size, 2), np.nan), np.full(2, WARMTH_SD_DAYS)
    place = np.searchsorted(warmth.years, known_years)
    inside = (place < warmth.years.size) & np.isin(known_years, warmth.years)
    for limb, (table, generic) in enumerate(
        ((warmth.degree_days, GENERIC_DEGREE_DAYS), (warmth.running_c, GENERIC_COOL_C))
    ):
        use = inside & np.isfinite(known_days[:, limb])
        row, day = place[use], np.clip(np.rint(known_days[use, limb]), 1, 366).astype(np.int64)
        at = table[row, day - 1]
        level = float(np.median(at[np.isfinite(at)])) if np.isfinite(at).any() else generic
        days[:, limb] = warmth.rise_day(max(level, 1e-6)) if limb == 0 else warmth.fall_day(level)
        miss = days[row, limb] - known_days[use, limb]
        miss = miss[np.isfinite(miss)]
        if miss.size >= 4:
            sd[limb] = max(float(np.sqrt(np.mean(miss**2) * miss.size / (miss.size - 1))), 2.0)
    return days, sd
