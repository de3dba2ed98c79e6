"""The data of the page's own part: table, map by day, landscape total, skill figures."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from inundate.products.report.encode import bytes_, day_numbers, floats
from inundate.products.report.palettes import page_palettes
from inundate.products.report.tables import ReportTables

MOST_CELLS = 2_500_000
MAP_SIZE = 1000.0
NOT_KNOWN = 255


def map_paths(shapes: Any, order: list[str]) -> dict[str, Any]:
    """Return an SVG path a wetland (in ``order``), in thousandths of the map's longer side, and the map's size and scale."""
    west, south, east, north = (float(v) for v in shapes.total_bounds)
    span = max(east - west, north - south, 1.0)
    scale = MAP_SIZE / span
    geometry = dict(zip(shapes["wetland_id"].astype(str), shapes.geometry, strict=True))
    paths = []
    for name in order:
        shape = geometry.get(name)
        if shape is None or shape.is_empty:
            paths.append("")
            continue
        shape = shape.simplify(0.15 / scale, preserve_topology=True)
        parts = []
        for polygon in getattr(shape, "geoms", [shape]):
            for ring in (polygon.exterior, *polygon.interiors):
                xy = np.asarray(ring.coords)[:, :2]
                points = np.round(np.column_stack([(xy[:, 0] - west) * scale, (north - xy[:, 1]) * scale]), 1)
                parts.append("M" + "L".join(f"{x:g} {y:g}" for x, y in points) + "Z")
        paths.append("".join(parts))
    return {
        "paths": paths,
        "width": (east - west) * scale,
        "height": (north - south) * scale,
        "metres": span / MAP_SIZE,
    }


def map_days(tables: ReportTables, rows: pd.DataFrame) -> dict[str, Any]:
    """Return extent and interval width of every wetland by day, in half per cent of its largest extent.

    Returns
    -------
    dict
        first (day number), step (days; more than 1 where days times wetlands would be too many), n, extent and width
        (uint8, shape (day, wetland), 255 not known). The last step is the last day.
    """
    days = day_numbers(tables.daily["date"])
    if not days.size:
        return {"first": 0, "step": 1, "n": 0, "extent": bytes_([]), "width": bytes_([])}
    first, last = int(days.min()), int(days.max())
    step = max(1, -(-(last - first + 1) * max(len(rows), 1) // MOST_CELLS))
    if step > 1:
        step = 7 * -(-step // 7)
    n = (last - first) // step + 1
    first = last - (n - 1) * step
    column = pd.Index(rows["wetland_id"]).get_indexer(tables.daily["wetland_id"].astype(str))
    keep = ((days - first) % step == 0) & (days >= first) & (column >= 0)
    largest = rows["area_max_m2"].to_numpy(float)[column[keep]]
    place = ((days[keep] - first) // step, column[keep])
    daily = tables.daily[keep]
    out: dict[str, Any] = {"first": first, "step": step, "n": n}
    width = (daily["area_hi_m2"] - daily["area_lo_m2"]).to_numpy(float)
    for key, values in (("extent", daily["area_m2"].to_numpy(float)), ("width", width)):
        grid = np.full((n, len(rows)), NOT_KNOWN, np.uint8)
        share = np.divide(values, largest, out=np.full(values.shape, np.nan), where=largest > 0)
        known = np.isfinite(share)
        grid[place[0][known], place[1][known]] = np.round(200 * np.clip(share[known], 0, 1))
        out[key] = bytes_(grid)
    return out


def totals(size_classes: pd.DataFrame) -> dict[str, Any]:
    """Return the landscape's total by size class and day, ha; the class ``all`` is left out, the others add up to it."""
    size_classes = size_classes[size_classes["size_class"].astype(str) != "all"]
    if size_classes.empty:
        return {"first": 0, "n": 0, "classes": []}
    table = size_classes.assign(day=day_numbers(size_classes["date"]))
    first, n = int(table["day"].min()), int(table["day"].max() - table["day"].min() + 1)
    largest = table.groupby("size_class")[["area_max_m2", "n_wetlands"]].max()
    order = sorted(largest.index, key=lower_edge)
    areas = []
    for name in order:
        rows = table[table["size_class"] == name]
        values = np.full(n, np.nan, np.float32)
        values[rows["day"].to_numpy() - first] = rows["area_m2"].to_numpy(float) / 1e4
        areas.append(floats(values))
    return {
        "first": first,
        "n": n,
        "classes": [str(c) for c in order],
        "area": areas,
        "largest": [float(largest.loc[c, "area_max_m2"]) / 1e4 for c in order],
        "wetlands": [int(largest.loc[c, "n_wetlands"]) for c in order],
    }


def lower_edge(name: str) -> tuple[float, str]:
    """Return a key that sorts size classes by their first number; ``under x`` and ``< x`` come first."""
    import re

    found = re.search(r"\d+(\.\d+)?", str(name))
    below = str(name).lower().startswith(("under", "<", "below"))
    return (-1.0 if below else float(found.group()) if found else np.inf, str(name))


def _finite(values: pd.Series) -> list[float | None]:
    return [float(v) if np.isfinite(v) else None for v in values.astype(float)]


def table_columns(rows: pd.DataFrame, flags: np.ndarray) -> dict[str, Any]:
    """Return the wetland table by column."""
    return {
        "id": rows["wetland_id"].tolist(),
        "cover": rows["cover"].tolist(),
        "areaMax": _finite(rows["area_max_m2"]),
        "mean": _finite(rows["area_mean_m2"]),
        "least": _finite(rows["area_least_m2"]),
        "most": _finite(rows["area_most_m2"]),
        "interval": _finite(rows["interval_mean_m2"]),
        "viewsMonth": rows["views_month"].tolist(),
        "viewsUsed": rows["views_used"].tolist(),
        "lastView": [None if pd.isna(v) else f"{v:%Y-%m-%d}" for v in rows["last_view"]],
        "family": [f.replace("_", " with ") for f in rows["family"]],
        "pairs": rows["n_pairs"].tolist(),
        "rmse": _finite(rows["rmse_m2"]),
        "hidden": _finite(rows["hidden_rmse_share"]),
        "logger": rows["logger"].astype(bool).tolist(),
        "changed": rows["changed_days"].tolist(),
        "look": flags.tolist(),
    }


def skill_figures(tables: ReportTables) -> dict[str, Any]:
    """Return what the skill charts draw: reliability, coverage by group, trend, hidden views."""
    skill = tables.skill
    reliability = (skill.get("classifier") or {}).get("reliability") or {}
    if isinstance(reliability, list):
        reliability = {"all": reliability}
    coverage = []
    for kind in ("views", "logger"):
        scored = (skill.get("filled") or {}).get(kind) or {}
        for group in ("all", "by_leaf_state", "by_size", "by_cover"):
            entries = {"all": scored.get("all") or {}} if group == "all" else scored.get(group) or {}
            for name, row in entries.items():
                if row.get("n"):
                    coverage.append(
                        {
                            "kind": kind,
                            "group": group,
                            "name": name,
                            **{k: row.get(k) for k in ("n", "coverage", "width", "rmse", "bias", "crps")},
                        }
                    )
    out: dict[str, Any] = {"reliability": reliability, "coverage": coverage, "trend": [list(t) for t in tables.trend]}
    if tables.heldout is not None and len(tables.heldout):
        hidden = tables.heldout.merge(tables.shapes[["wetland_id", "area_max_m2"]], on="wetland_id")
        hidden = hidden.iloc[np.unique(np.linspace(0, len(hidden) - 1, 3000).astype(int))] if len(hidden) else hidden
        out["hidden"] = {
            "known": floats(hidden["known_m2"] / hidden["area_max_m2"]),
            "filled": floats(hidden["area_m2"] / hidden["area_max_m2"]),
            "kind": [str(k) for k in hidden["kind"]],
        }
    return out


def index_data(tables: ReportTables, rows: pd.DataFrame, flags: np.ndarray, *, paged: bool) -> dict[str, Any]:
    """Return all data of the page but the wetlands' details."""
    return {
        "area": tables.run.get("area", ""),
        "month": tables.run["month"],
        "paged": paged,
        "palette": page_palettes(),
        "table": table_columns(rows, flags),
        "map": map_paths(tables.shapes, rows["wetland_id"].tolist()),
        "days": map_days(tables, rows),
        "totals": totals(tables.size_classes),
        "skill": skill_figures(tables),
    }
