"""Pairing of extents with stage, and the groups by which skill is told apart."""

from __future__ import annotations

import numpy as np
import pandas as pd

SIZE_EDGES_M2 = (3000.0, 10000.0)
SIZE_NAMES = ("under 0.3 ha", "0.3 to 1 ha", "1 ha and more")
VIEW_EDGES = (0.3, 0.5, 0.7, 0.9)
VIEW_NAMES = ("under 30 %", "30 to 50 %", "50 to 70 %", "70 to 90 %", "90 % and more")
SEASONS = ("Dec-Feb", "Mar-May", "Jun-Aug", "Sep-Nov")


def size_class(area_max_m2: np.ndarray) -> np.ndarray:
    """Return the size class (text) of largest extents, m2."""
    return np.asarray(SIZE_NAMES, object)[np.digitize(np.asarray(area_max_m2, float), SIZE_EDGES_M2)]


def view_class(view_fraction: np.ndarray) -> np.ndarray:
    """Return the class (text) of view fractions, 0..1."""
    return np.asarray(VIEW_NAMES, object)[np.digitize(np.nan_to_num(np.asarray(view_fraction, float)), VIEW_EDGES)]


def season_of(dates: pd.Series) -> np.ndarray:
    """Return the quarter of the year (text) of dates."""
    return np.asarray(SEASONS, object)[(pd.to_datetime(dates).dt.month.to_numpy() % 12) // 3]


def with_groups(table: pd.DataFrame, wetlands: pd.DataFrame, *, date: str = "date") -> pd.DataFrame:
    """Add area_max_m2, cover, size, season and year to a table of wetland days.

    Parameters
    ----------
    table : DataFrame
        wetland_id and a date column.
    wetlands : DataFrame
        wetland_id, area_max_m2 [, cover].
    date : str
        Name of the date column.

    Returns
    -------
    DataFrame
        Rows of wetlands that ``wetlands`` does not have are dropped.
    """
    keep = [c for c in ("wetland_id", "area_max_m2", "cover") if c in wetlands.columns]
    out = table.drop(columns=[c for c in ("area_max_m2", "cover") if c in table.columns])
    out = out.merge(wetlands[keep], on="wetland_id", how="inner")
    out["size"] = size_class(out["area_max_m2"].to_numpy())
    out["season"] = season_of(out[date])
    out["year"] = pd.to_datetime(out[date]).dt.year.astype(str)
    return out


def pair_with_stage(observed: pd.DataFrame, stage: pd.DataFrame, wetlands: pd.DataFrame) -> pd.DataFrame:
    """Pair what scenes showed with the stage that loggers measured that day.

    Parameters
    ----------
    observed : DataFrame
        extent_observed; rows with ``used`` false are left out.
    stage : DataFrame
        wetland_id, date, stage_m, stage_sd_m, censored; one row a wetland and day (the row of least sd where several).
    wetlands : DataFrame
        wetland_id, area_max_m2, cover.

    Returns
    -------
    DataFrame
        wetland_id, date, leaf_state, view, area_m2, area_sd_m2, stage_m, stage_sd_m, known_wet (True, False, or NA where
        the logger cannot tell: stage within its own two standard deviations of 0, or censored above 0), seen_wet, and the
        groups of :func:`with_groups`. A wetland is seen wet where its area exceeds 2 % of the largest extent (common
        practice, no source).
    """
    seen = observed[observed["used"].astype(bool) & observed["area_m2"].notna()].copy()
    seen["date"] = (
        pd.to_datetime(seen["datetime"], utc=True).dt.tz_localize(None).dt.normalize().astype("datetime64[ns]")
    )
    days = stage.sort_values(["wetland_id", "date", "stage_sd_m"]).drop_duplicates(["wetland_id", "date"]).copy()
    days["date"] = pd.to_datetime(days["date"]).astype("datetime64[ns]")
    columns = ["wetland_id", "date", "stage_m", "stage_sd_m", "censored"]
    both = seen.merge(days[columns], on=["wetland_id", "date"], how="inner")
    both = with_groups(both, wetlands)
    both["view"] = view_class(both["view_fraction"].to_numpy())
    margin = 2.0 * both["stage_sd_m"].fillna(0.0)
    censored = both["censored"].astype(bool)
    known = np.where(
        censored,
        np.where(both["stage_m"] <= 0.0, 0, -1),
        np.where(both["stage_m"] > margin, 1, np.where(both["stage_m"] < -margin, 0, -1)),
    )
    both["known_wet"] = pd.array([None if k < 0 else bool(k) for k in known], dtype="boolean")
    both["seen_wet"] = both["area_m2"] > 0.02 * both["area_max_m2"]
    return both.sort_values(["wetland_id", "date", "scene_id"]).reset_index(drop=True)
