"""Greenness views in order: checked, sorted, with season year and day."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from inundate.common.errors import InputError
from inundate.leaves.fitting import Series

HALF_YEAR_DAYS = 182


@dataclass(frozen=True, slots=True)
class Views:
    """Greenness views sorted by wetland and date.

    Attributes
    ----------
    ids : ndarray of str, shape (wetland,)
    wetland : ndarray of int64, shape (n,)
        Position in ``ids``.
    year : ndarray of int64, shape (n,)
        Season year: calendar year of the date less ``offset_days``.
    day : ndarray of float64, shape (n,)
        Days since the start of the season year, 1 on its first day.
    value, weight : ndarray of float64, shape (n,)
    offset_days : int
        0 where the growing season lies within the calendar year, 182 where it spans New Year.
    """

    ids: np.ndarray
    wetland: np.ndarray
    year: np.ndarray
    day: np.ndarray
    value: np.ndarray
    weight: np.ndarray
    offset_days: int

    def series(self, keep: np.ndarray, *, by_year: bool) -> tuple[Series, np.ndarray, np.ndarray]:
        """Cut views into series of one wetland, or of one wetland and year.

        Returns
        -------
        (Series, wetland, year)
            With one entry a series; ``year`` is 0 when not ``by_year``.
        """
        wetland, year = self.wetland[keep], self.year[keep] if by_year else np.zeros(int(keep.sum()), np.int64)
        change = np.flatnonzero((np.diff(wetland) != 0) | (np.diff(year) != 0)) + 1
        first = np.concatenate([[0], change]).astype(np.int64) if wetland.size else np.zeros(0, np.int64)
        start = np.concatenate([first, [wetland.size]]).astype(np.int64)
        cut = Series(self.day[keep], self.value[keep], self.weight[keep], start)
        return cut, wetland[first], year[first]


def check_frame(frame: object, name: str, columns: tuple[str, ...]) -> pd.DataFrame:
    """Refuse what is not a table with the columns asked for.

    Raises
    ------
    InputError
    """
    if not isinstance(frame, pd.DataFrame):
        message = f"{name}: got {type(frame).__name__}, need a pandas DataFrame with columns {', '.join(columns)}"
        raise InputError(message)
    missing = [c for c in columns if c not in frame.columns]
    if missing:
        message = (
            f"{name}: column {missing[0]!r} is missing among {list(frame.columns)}; give columns {', '.join(columns)}"
        )
        raise InputError(message)
    return frame


def check_dates(values: object, name: str) -> np.ndarray:
    """Return dates as naive UTC ``datetime64[ns]``.

    Raises
    ------
    InputError
        If a value is no date; the message names its position.
    """
    dates = pd.to_datetime(pd.Series(np.atleast_1d(np.asarray(values)).ravel()), errors="coerce", utc=True)
    bad = np.flatnonzero(dates.isna().to_numpy())
    if bad.size:
        got = np.atleast_1d(np.asarray(values)).ravel()[bad[0]]
        message = f"{name}: value {got!r} at position {bad[0]} is not a date; give ISO 8601 dates"
        raise InputError(message)
    return dates.dt.tz_localize(None).to_numpy("datetime64[ns]")


def season_time(dates: np.ndarray, offset_days: int) -> tuple[np.ndarray, np.ndarray]:
    """Return season year (int64) and day within it (float64, 1 on its first day) of dates."""
    shifted = dates.astype("datetime64[D]") - np.timedelta64(offset_days, "D")
    year = shifted.astype("datetime64[Y]").astype(np.int64) + 1970
    day = (shifted - shifted.astype("datetime64[Y]").astype("datetime64[D]")).astype(float) + 1.0
    return year, day


def season_date(year: np.ndarray, day: np.ndarray, offset_days: int) -> np.ndarray:
    """Return dates (``datetime64[ns]``, midnight) of days of season years, rounded to the nearest day; NaN gives NaT."""
    first = (np.asarray(year, np.int64) - 1970).astype("datetime64[Y]").astype("datetime64[D]")
    day = np.asarray(day, float)
    whole = np.where(np.isnan(day), 0, np.rint(np.nan_to_num(day)) - 1).astype(np.int64) + offset_days
    out = (first + whole.astype("timedelta64[D]")).astype("datetime64[ns]")
    return np.where(np.isnan(day), np.datetime64("NaT", "ns"), out)


def prepare(greenness: pd.DataFrame) -> Views:
    """Check greenness and bring it into one order, whatever the order of its rows.

    Parameters
    ----------
    greenness : DataFrame
        wetland_id, date, ndvi [, weight]. Rows with NaN ndvi or a weight not above 0 are dropped.

    Returns
    -------
    Views

    Raises
    ------
    InputError
        On missing columns, dates that are none, or greenness outside -1..1.
    """
    frame = check_frame(greenness, "greenness", ("wetland_id", "date", "ndvi"))
    value = pd.to_numeric(frame["ndvi"], errors="coerce").to_numpy(float)
    weight = frame["weight"].to_numpy(float) if "weight" in frame.columns else np.ones(value.size)
    bad = np.flatnonzero(np.abs(value) > 1.0)
    if bad.size:
        row = frame.iloc[bad[0]]
        message = (
            f"greenness row {bad[0]} (wetland_id {row['wetland_id']}): ndvi {row['ndvi']} lies outside -1..1; "
            "give the normalized difference of surface reflectance, not a scaled integer"
        )
        raise InputError(message)
    date = check_dates(frame["date"], "greenness date") if len(frame) else np.zeros(0, "datetime64[ns]")
    names = frame["wetland_id"].astype(str).to_numpy(str) if len(frame) else np.zeros(0, "U1")
    ids, wetland = np.unique(names, return_inverse=True)
    keep = np.isfinite(value) & (weight > 0)
    order = np.lexsort((weight, value, date, wetland))
    order = order[keep[order]]
    offset = _offset(date[order], value[order])
    year, day = season_time(date[order], offset)
    return Views(ids, wetland[order].astype(np.int64), year, day, value[order], weight[order].astype(float), offset)


def _offset(date: np.ndarray, value: np.ndarray) -> int:
    """Return 182 when greenness peaks between November and March (first harmonic of monthly medians), else 0."""
    if date.size < 12:
        return 0
    month = date.astype("datetime64[M]").astype(np.int64) % 12
    medians = np.array([np.median(value[month == m]) if (month == m).any() else np.nan for m in range(12)])
    seen = np.isfinite(medians)
    if seen.sum() < 6:
        return 0
    angle = 2 * np.pi * (np.arange(12)[seen] + 0.5) / 12
    design = np.column_stack([np.ones(seen.sum()), np.cos(angle), np.sin(angle)])
    _, c, s = np.linalg.lstsq(design, medians[seen], rcond=None)[0]
    peak = (np.arctan2(s, c) / (2 * np.pi) * 365) % 365
    return HALF_YEAR_DAYS if peak < 75 or peak > 305 else 0
