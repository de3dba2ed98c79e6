"""What moved in the past since the last delivery, and why."""

from __future__ import annotations

import numpy as np
import pandas as pd

from inundate.common.errors import InputError

_KEY = ["wetland_id", "date"]


def _day_keys(table: pd.DataFrame | None, time: str, values: list[str]) -> pd.DataFrame:
    """Return one row a wetland and day: a text of the values that count there."""
    if table is None or not len(table):
        return pd.DataFrame(
            {
                "wetland_id": pd.Series(dtype=object),
                "date": pd.Series(dtype="datetime64[ns]"),
                "text": pd.Series(dtype=object),
            }
        )
    day = pd.to_datetime(table[time], utc=True).dt.tz_localize(None).dt.normalize().astype("datetime64[ns]")
    text = table[values[0]].astype(float).round(4).astype(str)
    for name in values[1:]:
        text = text + "/" + table[name].astype(float).round(4).astype(str)
    frame = pd.DataFrame(
        {
            "wetland_id": table["wetland_id"].astype(str).to_numpy(),
            "date": day.to_numpy(),
            "text": text.to_numpy(),
        }
    )
    return frame.sort_values([*_KEY, "text"]).groupby(_KEY)["text"].agg(";".join).reset_index()


def _moved_days(before: pd.DataFrame | None, now: pd.DataFrame | None, time: str, values: list[str]) -> pd.DataFrame:
    """Return days whose events are new, gone or changed: wetland_id, date, what."""
    old, new = _day_keys(before, time, values), _day_keys(now, time, values)
    both = old.merge(new, on=_KEY, how="outer", suffixes=("_old", "_new"))
    both = both[both["text_old"] != both["text_new"]]
    what = np.where(both["text_old"].isna(), "new", np.where(both["text_new"].isna(), "withdrawn", "revised"))
    return pd.DataFrame({"wetland_id": both["wetland_id"].to_numpy(), "date": both["date"].to_numpy(), "what": what})


def _used(table: pd.DataFrame | None) -> pd.DataFrame | None:
    return table if table is None or "used" not in table else table[table["used"].astype(bool)]


def changes(
    previous_daily: pd.DataFrame,
    daily: pd.DataFrame,
    observed_before: pd.DataFrame | None = None,
    observed_now: pd.DataFrame | None = None,
    *,
    stage_before: pd.DataFrame | None = None,
    stage_now: pd.DataFrame | None = None,
    least_m2: float = 1.0,
    near_days: int = 45,
) -> pd.DataFrame:
    """List the days whose delivered area moved, and why.

    Parameters
    ----------
    previous_daily, daily : DataFrame
        extent_daily of the last delivery and of this one.
    observed_before, observed_now : DataFrame or None
        extent_observed behind each.
    stage_before, stage_now : DataFrame or None
        stage_daily behind each.
    least_m2 : float
        Smaller moves are not listed.
    near_days : int
        A view or stage this near is named as the cause.

    Returns
    -------
    DataFrame
        wetland_id, date, area_before_m2, area_m2, why; sorted. ``why`` names the nearest new, revised or withdrawn view
        or stage of that wetland; else "parameters moved with the longer record". Days that only one delivery holds are
        not listed.

    Raises
    ------
    InputError
        If a series lacks a column.
    """
    for name, table in (("previous_daily", previous_daily), ("daily", daily)):
        gone = [c for c in (*_KEY, "area_m2") if c not in table.columns]
        if gone:
            msg = f"{name}: column {gone[0]!r} is missing: give an extent_daily table"
            raise InputError(msg)
    both = previous_daily[[*_KEY, "area_m2"]].merge(daily[[*_KEY, "area_m2"]], on=_KEY, suffixes=("_before", ""))
    both = both[(both["area_m2"] - both["area_m2_before"]).abs() >= least_m2].sort_values(_KEY, ignore_index=True)
    out = both.rename(columns={"area_m2_before": "area_before_m2"})[[*_KEY, "area_before_m2", "area_m2"]].copy()
    views = _moved_days(_used(observed_before), _used(observed_now), "datetime", ["area_m2", "area_sd_m2"])
    stage = _moved_days(stage_before, stage_now, "date", ["stage_m"])
    causes = pd.concat([views.assign(source="view"), stage.assign(source="stage")], ignore_index=True)
    out["why"] = _nearest_cause(out, causes, near_days)
    return out


def _nearest_cause(out: pd.DataFrame, causes: pd.DataFrame, near_days: int) -> np.ndarray:
    why = np.full(len(out), "parameters moved with the longer record", dtype=object)
    groups = {str(w): g.sort_values(["date", "source"]) for w, g in causes.groupby("wetland_id")}
    for wetland, rows in out.groupby("wetland_id").indices.items():
        own = groups.get(str(wetland))
        if own is None:
            continue
        at = own["date"].to_numpy().astype("datetime64[D]").astype(np.int64)
        day = out["date"].to_numpy()[rows].astype("datetime64[D]").astype(np.int64)
        right = np.clip(np.searchsorted(at, day), 0, at.size - 1)
        left = np.maximum(right - 1, 0)
        near = np.where(np.abs(at[left] - day) <= np.abs(at[right] - day), left, right)
        words = (own["what"] + " " + own["source"] + " of " + own["date"].dt.strftime("%Y-%m-%d")).to_numpy()
        close = np.abs(at[near] - day) <= near_days
        why[rows[close]] = words[near[close]]
    return why
