"""Hydroperiod by wetland and water year, with uncertainty from joint draws of the series."""

from __future__ import annotations

import numpy as np
import pandas as pd

from inundate.common.errors import InputError
from inundate.series.regime import MEASURES, YEAR_DAYS, circular_timing, year_measures
from inundate.series.result import SeriesResult

# Shares of the largest extent from which a day counts as inundated: the least that a view of ten pixels can tell
# from none, common practice, no source.
WET_SHARE = 0.05
_DAY_MEASURES = ("max_day", "first_wet_day", "first_dry_day")


def water_years(dates: np.ndarray, start_month: int) -> np.ndarray:
    """Return the water year of each date: named by the calendar year in which it ends (its own where it starts in January).

    Raises
    ------
    InputError
        If the month is not 1..12.
    """
    if not 1 <= start_month <= 12:
        msg = f"water_year_start_month: got {start_month}: it must be a month from 1 to 12"
        raise InputError(msg)
    stamps = pd.DatetimeIndex(dates)
    return (stamps.year + ((stamps.month >= start_month) if start_month > 1 else 0)).to_numpy(np.int64)


def hydroperiod(
    result: SeriesResult,
    water_year_start_month: int = 10,
    n_draws: int = 100,
    *,
    wet_share: float = WET_SHARE,
) -> pd.DataFrame:
    """Return measures of the flow regime by wetland and water year, from joint draws.

    Parameters
    ----------
    result : SeriesResult
    water_year_start_month : int
        1..12; a water year is named by the calendar year in which it ends.
    n_draws : int
        Draws; the value of a measure is their median, ``_lo`` and ``_hi`` their 5th and 95th percentile.
    wet_share : float
        A day is inundated from this share of the largest extent.

    Returns
    -------
    DataFrame
        wetland_id, water_year, n_days, and each of ``MEASURES`` with ``_lo`` and ``_hi``. Magnitude: mean_area_m2,
        max_area_m2, variability (sd / largest extent). Frequency: n_events. Duration: days_inundated,
        share_inundated, mean_event_days, longest_event_days, longest_dry_days. Timing: max_day, first_wet_day,
        first_dry_day (day of the water year, from 1; NaN if none in more than half of the draws; medians of max_day
        are circular), timing_r (concentration of max_day over draws). Rate of change: mean_rise_m2_per_day,
        mean_fall_m2_per_day, n_reversals, flashiness (Richards-Baker on area).

    Raises
    ------
    InputError
        If the month or ``n_draws`` is out of range.
    """
    years = water_years(result.dates, water_year_start_month)
    names, start = np.unique(years, return_index=True)
    stop = np.append(start[1:], years.size)
    table = np.full((len(result.wetland_ids), names.size, len(MEASURES), 3), np.nan)
    concentration = np.full((len(result.wetland_ids), names.size), np.nan)
    one = np.empty(len(MEASURES))
    place = MEASURES.index("max_day")
    for i, draws in result.iter_draws(n_draws):
        largest = float(result.area_max_m2[i])
        for y in range(names.size):
            got = np.empty((n_draws, len(MEASURES)))
            for n in range(n_draws):
                year_measures(draws[n, start[y] : stop[y]].astype(np.float64), wet_share * largest, largest, one)
                got[n] = one
            table[i, y] = _summary(got)
            middle, concentration[i, y] = circular_timing(got[:, place])
            if np.isfinite(middle):
                table[i, y, place, 0] = middle
    return _frame(result, names, stop - start, table, concentration)


def _summary(got: np.ndarray) -> np.ndarray:
    """Return median, 5th and 95th percentile (measure, 3) of draws (draw, measure); NaN where most draws have none."""
    out = np.full((got.shape[1], 3), np.nan)
    for m in range(got.shape[1]):
        known = got[np.isfinite(got[:, m]), m]
        if known.size * 2 > got.shape[0]:
            out[m] = np.percentile(known, [50, 5, 95])
    return out


def _frame(
    result: SeriesResult, names: np.ndarray, days: np.ndarray, table: np.ndarray, concentration: np.ndarray
) -> pd.DataFrame:
    wetlands = len(result.wetland_ids)
    out: dict[str, np.ndarray] = {
        "wetland_id": np.repeat(np.array(result.wetland_ids, dtype=object), names.size),
        "water_year": np.tile(names, wetlands),
        "n_days": np.tile(days, wetlands).astype(np.int64),
    }
    for m, name in enumerate(MEASURES):
        for k, tail in enumerate(("", "_lo", "_hi")):
            out[name + tail] = table[:, :, m, k].ravel()
    out["timing_r"] = concentration.ravel()
    return pd.DataFrame(out)


def mean_timing(hydro: pd.DataFrame, measure: str = "max_day") -> pd.DataFrame:
    """Return each wetland's circular mean day and concentration of a day measure over its water years.

    Raises
    ------
    InputError
        If the measure is not a day.
    """
    if measure not in _DAY_MEASURES:
        msg = f"measure: got {measure!r}: it must be one of {', '.join(_DAY_MEASURES)}"
        raise InputError(msg)
    rows = [(w, *circular_timing(g[measure].dropna().to_numpy(), YEAR_DAYS)) for w, g in hydro.groupby("wetland_id")]
    return pd.DataFrame(rows, columns=["wetland_id", "mean_day", "r"])
