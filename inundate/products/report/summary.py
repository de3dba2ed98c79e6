"""What the page says in words and in its table: one row a wetland, what changed, what to look at."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from inundate.products.layer import month_summary
from inundate.products.report.tables import ReportTables

MOST_NAMED = 8


def _utc_day(values: pd.Series) -> pd.Series:
    return pd.to_datetime(values, utc=True).dt.tz_localize(None).dt.normalize()


def _count(table: pd.DataFrame, wetlands: pd.Series) -> np.ndarray:
    """Return how many rows of a table each wetland has."""
    return table.groupby("wetland_id").size().reindex(wetlands, fill_value=0).to_numpy(int)


def wetland_rows(tables: ReportTables) -> pd.DataFrame:
    """Return one row a wetland, sorted by wetland_id.

    Returns
    -------
    DataFrame
        wetland_id, cover, area_max_m2, area_mean_m2, area_least_m2, area_most_m2, interval_mean_m2 (of the delivered
        month), days_observed, days_stage, views_used, views_month, last_view (date or NaT), family, n_pairs, rmse_m2,
        hidden_rmse_share (of hidden views), coverage, changed_days, logger (bool). Numbers that are not there are NaN.
    """
    shapes = tables.shapes
    base = pd.DataFrame({"wetland_id": shapes["wetland_id"].astype(str).to_numpy()})
    base["area_max_m2"] = shapes["area_max_m2"].to_numpy(float)
    base["cover"] = shapes["cover"].astype(str).to_numpy() if "cover" in shapes else ""
    month = month_summary(tables.daily, tables.run["month"]).drop(columns="month")
    out = base.merge(month, on="wetland_id", how="left").sort_values("wetland_id").reset_index(drop=True)
    used = tables.observed[tables.observed["used"].astype(bool)]
    used = used.assign(day=_utc_day(used["datetime"]))
    key = out["wetland_id"]
    out["views_used"] = _count(used, key)
    recent = used[used["day"].dt.strftime("%Y-%m") == tables.run["month"]]
    out["views_month"] = _count(recent, key)
    out["last_view"] = pd.to_datetime(used.groupby("wetland_id")["day"].max().reindex(key)).to_numpy()
    last = tables.relations.drop_duplicates("wetland_id", keep="last").set_index("wetland_id")
    last = last.reindex(key)
    out["family"] = last["family"].astype(object).fillna("").astype(str).to_numpy()
    out["n_pairs"] = last["n_pairs"].astype(float).fillna(0).to_numpy(int)
    out["rmse_m2"] = last["rmse_m2"].to_numpy(float)
    own = tables.skill.get("by_wetland") or {}
    for column, name in (("hidden_rmse_share", "filled_rmse_share"), ("coverage", "filled_coverage")):
        out[column] = np.array([(own.get(w) or {}).get(name) for w in key], dtype=float)
    out["changed_days"] = _count(tables.changes, key)
    out["logger"] = key.isin(set(tables.stage["wetland_id"]))
    return out


def _item(text: str, wetlands: pd.Series | list[str]) -> dict[str, Any]:
    names = [str(w) for w in wetlands]
    return {"text": text, "wetlands": names[:MOST_NAMED], "more": max(len(names) - MOST_NAMED, 0)}


def _worst(rows: pd.DataFrame, measure: pd.Series, limit: float) -> pd.DataFrame:
    """Return the rows whose measure is over a limit, greatest first, then by name."""
    ranked = rows.assign(measure=measure.to_numpy(float)).sort_values(
        ["measure", "wetland_id"], ascending=[False, True]
    )
    return ranked[ranked["measure"] > limit]


def look_at(tables: ReportTables, rows: pd.DataFrame) -> list[dict[str, Any]]:
    """Return what needs a human eye, most pressing first: text, wetlands (at most eight named) and how many more.

    Notes
    -----
    The limits (a view older than 60 days, an interval wider than half of the largest extent, relation error over a fifth of
    it) are common practice, no source.
    """
    items = [_item(text, []) for text in tables.warnings]
    loggers = [r for r in tables.run.get("refused", []) if r.get("kind") in ("logger", "wetland")]
    items += [_item(str(r["reason"]), []) for r in loggers[:MOST_NAMED]]
    if tables.shifts is not None and len(tables.shifts):
        words = tables.shifts.sort_values(["wetland_id", "date"])
        items.append(
            _item(
                "Stage and extent stopped agreeing as before: a moved logger or a changed wetland?",
                words["wetland_id"].unique().tolist(),
            )
        )
    never = rows[rows["views_used"] == 0]
    if len(never):
        items.append(
            _item("No usable view at all; the series rests on the rest of the landscape.", never["wetland_id"])
        )
    end = pd.Timestamp(tables.run["last_day"])
    age = (end - rows["last_view"]).dt.days
    old = _worst(rows, age, 60)
    if len(old):
        items.append(_item(f"No usable view for more than 60 days before {end:%Y-%m-%d}.", old["wetland_id"]))
    share = rows["interval_mean_m2"] / rows["area_max_m2"]
    wide = _worst(rows, share, 0.5)
    if len(wide):
        items.append(
            _item("The month's interval is on average wider than half of the largest extent.", wide["wetland_id"])
        )
    error = rows["rmse_m2"] / rows["area_max_m2"]
    rough = _worst(rows, error, 0.2)
    if len(rough):
        items.append(
            _item(
                "The stage-area relation misses held-out pairs by more than a fifth of the largest extent.",
                rough["wetland_id"],
            )
        )
    poor = rows[(rows["coverage"] < 0.75)].sort_values(["coverage", "wetland_id"])
    if len(poor):
        items.append(_item("Intervals covered fewer than three quarters of the hidden views.", poor["wetland_id"]))
    return items


def look_flags(items: list[dict[str, Any]], rows: pd.DataFrame, tables: ReportTables) -> np.ndarray:
    """Return which wetlands (bool, by row) any item of :func:`look_at` is about, named or not."""
    named = {w for i in items for w in i["wetlands"]}
    if tables.shifts is not None:
        named |= set(tables.shifts["wetland_id"])
    end = pd.Timestamp(tables.run["last_day"])
    flag = rows["wetland_id"].isin(named) | (rows["views_used"] == 0) | ((end - rows["last_view"]).dt.days > 60)
    flag |= rows["interval_mean_m2"] / rows["area_max_m2"] > 0.5
    flag |= rows["rmse_m2"] / rows["area_max_m2"] > 0.2
    return (flag | (rows["coverage"] < 0.75)).to_numpy(bool)


def delivered(tables: ReportTables, rows: pd.DataFrame) -> list[tuple[str, str]]:
    """Return the headline facts (label, value as text)."""
    daily, run = tables.daily, tables.run
    days = pd.to_datetime(daily["date"])
    month = daily[days.dt.strftime("%Y-%m") == run["month"]]
    total = month.groupby("date")["area_m2"].sum().mean() if len(month) else np.nan
    basis = month["basis"].value_counts(normalize=True) if len(month) else pd.Series(dtype=float)
    rest = 1.0 - float(basis.get("observed", 0.0)) - float(basis.get("stage", 0.0))
    return [
        ("wetlands", f"{len(rows):,}"),
        ("days each", f"{days.nunique():,}"),
        ("first to last day", f"{days.min():%Y-%m-%d} to {days.max():%Y-%m-%d}" if len(days) else "none"),
        ("mean inundated area of the month", area_text(total)),
        ("share of the landscape's largest extent", percent_text(total / rows["area_max_m2"].sum())),
        (
            "of the month's wetland days: seen by a scene",
            percent_text(float(basis.get("observed", np.nan)) if len(basis) else np.nan, 0.0),
        ),
        ("told by an own logger", percent_text(float(basis.get("stage", np.nan)) if len(basis) else np.nan, 0.0)),
        ("told by neighbours, weather or season", percent_text(rest if len(basis) else np.nan)),
        ("usable views in the month", f"{int(rows['views_month'].sum()):,}"),
    ]


def refused(tables: ReportTables) -> list[dict[str, Any]]:
    """Return refusals by kind: kind, n and the reasons with their names."""
    found = pd.DataFrame(tables.run.get("refused") or [], columns=["kind", "name", "reason"])
    out = []
    for kind, group in found.groupby("kind", sort=True):
        rows = group[["name", "reason"]].astype(str).to_dict("records")
        out.append({"kind": str(kind), "n": len(rows), "rows": rows[:200], "more": max(len(rows) - 200, 0)})
    return out


def changed(tables: ReportTables) -> dict[str, Any]:
    """Return what moved since the last delivery: n days, n wetlands, by reason, and the largest moves."""
    moved = tables.changes
    if moved.empty:
        return {"days": 0, "wetlands": 0, "why": [], "largest": []}
    by_why = moved.groupby("why").agg(days=("date", "size"), wetlands=("wetland_id", "nunique")).reset_index()
    size = (moved["area_m2"] - moved["area_before_m2"]).abs()
    worst = moved.assign(size=size).sort_values(["size", "wetland_id"], ascending=[False, True])
    worst = worst.drop_duplicates("wetland_id").head(MOST_NAMED)
    largest = [
        {
            "wetland": str(r.wetland_id),
            "date": f"{pd.Timestamp(r.date):%Y-%m-%d}",  # type: ignore[arg-type]
            "before": area_text(float(r.area_before_m2)),  # type: ignore[arg-type]
            "now": area_text(float(r.area_m2)),  # type: ignore[arg-type]
            "why": str(r.why),
        }
        for r in worst.itertuples()
    ]
    return {
        "days": len(moved),
        "wetlands": int(moved["wetland_id"].nunique()),
        "why": by_why.sort_values(["days", "why"], ascending=[False, True]).to_dict("records"),
        "largest": largest,
    }


def area_text(value: float) -> str:
    """Return an area in plain words: m² below one hectare, else hectares; a dash where not known."""
    if not np.isfinite(value):
        return "–"
    return f"{value:,.0f} m²" if abs(value) < 1e4 else f"{value / 1e4:,.2f} ha"


def percent_text(value: float, missing: float | None = None) -> str:
    """Return a share as per cent with one decimal; ``missing`` (or a dash) where not known."""
    if value is None or not np.isfinite(value):
        if missing is None:
            return "–"
        value = missing
    return f"{100 * value:.1f} %"
