"""The data of one wetland's part of the page."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from inundate.common.codes import BASES, LEAF_STATES
from inundate.products.report.encode import bytes_, codes_of, day_numbers, floats, runs, whole
from inundate.products.report.tables import ReportTables
from inundate.products.report.thumbnails import data_uri

RELATION_POINTS = 150
YEAR_COLUMNS = ("mean_area_m2", "max_area_m2", "days_inundated", "longest_dry_days")
_EMPTY = pd.DataFrame()


class Split:
    """Rows of every table by wetland, found in one pass each."""

    def __init__(self, tables: ReportTables) -> None:
        names = ("daily", "observed", "stage", "relations", "relation_table", "hydroperiod", "changes")
        extra = ("pairs", "shifts", "reasons", "loggers", "checks")
        self._tables: dict[str, tuple[pd.DataFrame, dict[str, np.ndarray]]] = {}
        for name in (*names, *extra):
            table = getattr(tables, name)
            if table is not None and len(table):
                table = table.reset_index(drop=True)
                groups = {str(k): v for k, v in table.groupby("wetland_id", sort=False).indices.items()}
                self._tables[name] = (table, groups)

    def rows(self, name: str, wetland_id: str) -> pd.DataFrame:
        """Return one wetland's rows of a table; an empty frame where there are none."""
        table, groups = self._tables.get(name, (_EMPTY, {}))
        place = groups.get(wetland_id)
        return _EMPTY if place is None else table.iloc[place]


def _series(split: Split, wetland_id: str) -> dict[str, Any]:
    daily = split.rows("daily", wetland_id)
    if daily.empty:
        return {"first": 0, "n": 0}
    days = day_numbers(daily["date"])
    out: dict[str, Any] = {"first": int(days[0]), "n": len(daily)}
    for key, column in (("area", "area_m2"), ("lo", "area_lo_m2"), ("hi", "area_hi_m2")):
        out[key] = floats(daily[column])
    out["basis"] = runs(codes_of(daily["basis"], BASES))
    out["leaf"] = runs(codes_of(daily["leaf_state"], LEAF_STATES))
    stage = split.rows("stage", wetland_id)
    if len(stage):
        place = day_numbers(stage["date"]) - days[0]
        inside = (place >= 0) & (place < len(daily))
        for key, column in (("stage", "stage_m"), ("stageSd", "stage_sd_m")):
            values = np.full(len(daily), np.nan, np.float32)
            values[place[inside]] = stage[column].to_numpy(float)[inside]
            out[key] = floats(values)
    return out


def _views(split: Split, wetland_id: str) -> dict[str, Any]:
    seen = split.rows("observed", wetland_id)
    if seen.empty:
        return {"n": 0}
    reason = pd.Categorical(seen["reason"].fillna("").astype(str))
    return {
        "n": len(seen),
        "scene": seen["scene_id"].astype(str).tolist(),
        "day": whole(day_numbers(seen["datetime"])),
        "area": floats(seen["area_m2"]),
        "sd": floats(seen["area_sd_m2"]),
        "clear": bytes_(np.round(100 * seen["clear_fraction"].fillna(0.0).clip(0, 1))),
        "view": bytes_(np.round(100 * seen["view_fraction"].fillna(0.0).clip(0, 1))),
        "leaf": bytes_(codes_of(seen["leaf_state"], LEAF_STATES)),
        "used": bytes_(seen["used"].astype(bool)),
        "reason": bytes_(np.minimum(reason.codes.astype(int), 254)),
        "reasons": [str(c) for c in reason.categories],
    }


def _relation(split: Split, wetland_id: str) -> dict[str, Any] | None:
    relation, table = split.rows("relations", wetland_id), split.rows("relation_table", wetland_id)
    if relation.empty or table.empty:
        return None
    last = relation.iloc[-1]
    table = table.iloc[np.unique(np.linspace(0, len(table) - 1, RELATION_POINTS).astype(int))]
    out: dict[str, Any] = {
        "family": str(last["family"]).replace("_", " with "),
        "pooled": bool(last["pooled"]),
        "n": int(last["n_pairs"]),
        "rmse": float(last["rmse_m2"]),
        "from": float(last["stage_min_m"]),
        "to": float(last["stage_max_m"]),
        "parameters": str(last["parameters"]),
    }
    for key, column in (("stage", "stage_m"), ("area", "area_m2"), ("lo", "area_lo_m2"), ("hi", "area_hi_m2")):
        out[key] = floats(table[column])
    pairs = split.rows("pairs", wetland_id)
    if len(pairs):
        out["pairs"] = {
            "stage": floats(pairs["stage_m"]),
            "area": floats(pairs["area_m2"]),
            "day": whole(day_numbers(pairs["date"])),
            "leaf": bytes_(codes_of(pairs["leaf_state"], LEAF_STATES)),
            "censored": bytes_(pairs["censored"].astype(bool)),
        }
    return out


def _loggers(split: Split, wetland_id: str, corrections: pd.DataFrame | None) -> list[dict[str, Any]]:
    record, checks = split.rows("loggers", wetland_id), split.rows("checks", wetland_id)
    out = []
    for name, rows in [] if record.empty else record.groupby("logger_id", sort=True):
        minutes = pd.to_datetime(rows["time"]).to_numpy("datetime64[m]").astype(np.int64)
        flags = pd.Categorical(rows["flag"].astype(str))
        one: dict[str, Any] = {
            "logger": str(name),
            "minute": whole(minutes),
            "level": floats(rows["level_m"]),
            "stage": floats(rows["stage_m"]),
            "flag": bytes_(flags.codes),
            "flags": [str(c).replace("_", " ") for c in flags.categories],
        }
        if len(checks) and len(mine := checks[checks["logger_id"] == name]):
            one["checks"] = {
                "minute": whole(pd.to_datetime(mine["time"]).to_numpy("datetime64[m]").astype(np.int64)),
                "stage": floats(mine["stage_m"]),
                "sd": floats(mine["sd_m"]),
            }
        if corrections is not None and len(corrections):
            mine = corrections[corrections["logger_id"] == name]
            kinds = mine.groupby("kind", sort=True)
            one["corrections"] = [
                {"kind": str(k), "n": len(g), "why": str(g["why"].iloc[0]), "largest": float(g["value_m"].abs().max())}
                for k, g in kinds
            ]
        out.append(one)
    return out


def _outline(shape: Any, bounds: tuple[float, float, float, float]) -> str:
    """Return the polygon as an SVG path in thousandths of a picture's width."""
    west, _, east, north = bounds
    scale = 1000.0 / (east - west)
    parts = []
    for polygon in getattr(shape, "geoms", [shape]):
        for ring in (polygon.exterior, *polygon.interiors):
            xy = np.asarray(ring.coords)[:, :2]
            points = np.round(np.column_stack([(xy[:, 0] - west) * scale, (north - xy[:, 1]) * scale])).astype(int)
            parts.append("M" + "L".join(f"{x} {y}" for x, y in points) + "Z")
    return "".join(parts)


def _pictures(tables: ReportTables, split: Split, wetland_id: str, shape: Any) -> list[dict[str, Any]]:
    seen = split.rows("observed", wetland_id)
    out = []
    for picture in tables.thumbnails.get(wetland_id, []):
        row = seen[seen["scene_id"].astype(str) == picture.scene_id].iloc[0]
        out.append(
            {
                "scene": picture.scene_id,
                "date": f"{pd.Timestamp(row['datetime']):%Y-%m-%d}",
                "leaf": str(row["leaf_state"]).replace("_", "-"),
                "area": float(row["area_m2"]),
                "sd": float(row["area_sd_m2"]),
                "size": list(picture.size),
                "true": data_uri(picture.true_colour),
                "false": data_uri(picture.false_colour),
                "water": data_uri(picture.probability),
                "outline": _outline(shape, picture.bounds) if shape is not None and not shape.is_empty else "",
            }
        )
    return out


def _years(split: Split, wetland_id: str) -> list[dict[str, Any]]:
    rows = split.rows("hydroperiod", wetland_id)
    out = []
    for _, row in rows.iterrows():
        one: dict[str, Any] = {"year": int(row["water_year"]), "days": int(row["n_days"])}
        for column in YEAR_COLUMNS:
            if column in rows.columns:
                one[column] = [
                    float(row[c]) if c in rows.columns else np.nan for c in (column, f"{column}_lo", f"{column}_hi")
                ]
        out.append(one)
    return out


def wetland_details(tables: ReportTables, split: Split, row: pd.Series, shape: Any) -> dict[str, Any]:
    """Return everything that the page shows of one wetland.

    Parameters
    ----------
    tables : ReportTables
    split : Split
        The same tables by wetland.
    row : Series
        The wetland's row of ``summary.wetland_rows``.
    shape : shapely geometry or None

    Returns
    -------
    dict
        id, cover, areaMax, series, views, relation (or None), loggers, pictures, years, shifts, why.
    """
    wetland_id = str(row["wetland_id"])
    why, shifts = split.rows("reasons", wetland_id), split.rows("shifts", wetland_id)
    return {
        "id": wetland_id,
        "cover": str(row["cover"]),
        "areaMax": float(row["area_max_m2"]),
        "series": _series(split, wetland_id),
        "views": _views(split, wetland_id),
        "relation": _relation(split, wetland_id),
        "loggers": _loggers(split, wetland_id, tables.corrections),
        "pictures": _pictures(tables, split, wetland_id, shape),
        "years": _years(split, wetland_id),
        "shifts": [] if shifts.empty else [str(w) for w in shifts["words"]],
        "why": "" if why.empty else str(why["why"].iloc[0]),
        "changedDays": int(row["changed_days"]),
    }
