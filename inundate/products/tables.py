"""The product tables: exactly their columns, types and order."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

from inundate.common.writing import write_table

COLUMNS: dict[str, tuple[str, ...]] = {
    "extent_daily": ("wetland_id", "date", "area_m2", "area_lo_m2", "area_hi_m2", "basis", "leaf_state"),
    "extent_observed": (
        "wetland_id",
        "scene_id",
        "datetime",
        "area_m2",
        "area_sd_m2",
        "clear_fraction",
        "view_fraction",
        "leaf_state",
        "used",
        "reason",
    ),
    "stage_daily": ("wetland_id", "date", "stage_m", "stage_sd_m", "quality"),
    "relations": (
        "wetland_id",
        "family",
        "parameters",
        "n_pairs",
        "stage_min_m",
        "stage_max_m",
        "rmse_m2",
        "pooled",
        "valid_from",
        "valid_to",
    ),
    "relation_table": ("wetland_id", "stage_m", "area_m2", "area_lo_m2", "area_hi_m2", "volume_m3"),
    "size_classes": ("date", "size_class", "area_m2", "area_max_m2", "n_wetlands"),
    "changes": ("wetland_id", "date", "area_before_m2", "area_m2", "why"),
}
_KEYS = ("wetland_id", "size_class", "date", "water_year", "valid_from", "scene_id", "stage_m")
_WHOLE = ("n_pairs", "n_wetlands")
_FLAGS = ("used", "pooled")
_TIMES = ("date", "datetime", "valid_from", "valid_to")


def shape_table(name: str, table: pd.DataFrame) -> pd.DataFrame:
    """Return the table with exactly its product columns, types and row order.

    Parameters
    ----------
    name : str
        Product name, a key of ``COLUMNS`` or any other (then the columns stay as they are).
    table : DataFrame

    Returns
    -------
    DataFrame
        ``date`` columns are midnight UTC (``datetime64[ms]``), ``datetime`` is UTC-aware; text is ``str``;
        measures are float64.

    Raises
    ------
    ValueError
        When a column is missing.
    """
    columns = COLUMNS.get(name, tuple(table.columns))
    missing = [c for c in columns if c not in table.columns]
    if missing:
        message = f"product {name}: column {missing[0]!r} is missing (has {list(table.columns)})"
        raise ValueError(message)
    out = table.loc[:, list(columns)].copy()
    for column in columns:
        if column == "datetime":
            out[column] = pd.to_datetime(out[column], utc=True).astype("datetime64[ms, UTC]")
        elif column in _TIMES:
            out[column] = pd.to_datetime(out[column]).astype("datetime64[ms]")
        elif column in _WHOLE:
            out[column] = out[column].astype("int64")
        elif column in _FLAGS:
            out[column] = out[column].astype(bool)
        elif pd.api.types.is_float_dtype(out[column]):
            out[column] = out[column].astype("float64") + 0.0
        elif isinstance(out[column].dtype, pd.CategoricalDtype) or pd.api.types.is_string_dtype(out[column]):
            out[column] = out[column].astype("str")
    keys = [k for k in _KEYS if k in columns]
    if name == "size_classes":
        keys = ["date", "size_class"]
    return out.sort_values(keys, kind="stable").reset_index(drop=True) if keys else out


def write_product_table(folder: Path, name: str, table: pd.DataFrame) -> pd.DataFrame:
    """Write ``folder/name.parquet`` and return the table as written."""
    out = shape_table(name, table)
    write_table(folder / f"{name}.parquet", out)
    return out


def changes(
    before: pd.DataFrame | None,
    now: pd.DataFrame,
    new_views: set[tuple[str, pd.Timestamp]],
    new_stage: set[tuple[str, pd.Timestamp]],
    *,
    floor_m2: float = 1.0,
) -> pd.DataFrame:
    """Tell which days moved since the last delivery, and why.

    Parameters
    ----------
    before, now : DataFrame
        extent_daily tables; ``before`` is None on the first delivery.
    new_views, new_stage : set of (wetland_id, date)
        Views and stage days that were not there at the last delivery.
    floor_m2 : float
        Smaller moves are left out, m2.

    Returns
    -------
    DataFrame
        wetland_id, date, area_before_m2, area_m2, why.
    """
    empty = pd.DataFrame({c: pd.Series(dtype="object") for c in COLUMNS["changes"]})
    empty = empty.astype({"area_before_m2": float, "area_m2": float, "date": "datetime64[ns]"})
    if before is None:
        return empty
    both = before[["wetland_id", "date", "area_m2", "basis"]].merge(
        now[["wetland_id", "date", "area_m2", "basis"]], on=["wetland_id", "date"], suffixes=("_before", "")
    )
    moved = both[(both["area_m2"] - both["area_m2_before"]).abs() > floor_m2].copy()
    if moved.empty:
        return empty
    viewed, staged = {w for w, _ in new_views}, {w for w, _ in new_stage}
    days = list(zip(moved["wetland_id"], pd.to_datetime(moved["date"]), strict=True))
    moved["why"] = np.select(
        [
            [d in new_views for d in days],
            [d in new_stage for d in days],
            moved["wetland_id"].isin(viewed).to_numpy() & moved["wetland_id"].isin(staged).to_numpy(),
            moved["wetland_id"].isin(viewed).to_numpy(),
            moved["wetland_id"].isin(staged).to_numpy(),
        ],
        [
            "a view of this day was added or read anew",
            "a stage reading of this day was added or corrected",
            "new views and stage of this wetland on other days",
            "new views of this wetland on other days",
            "new stage of this wetland on other days",
        ],
        default="new data elsewhere moved the region's estimate",
    )
    return moved.rename(columns={"area_m2_before": "area_before_m2"})[list(COLUMNS["changes"])]
