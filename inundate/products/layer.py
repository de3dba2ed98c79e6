"""The polygons with the month's summary columns, as GeoPackage."""

from __future__ import annotations

import sqlite3
from pathlib import Path
from typing import TYPE_CHECKING

import pandas as pd

from inundate.common.writing import replacing

if TYPE_CHECKING:
    import geopandas as gpd

_STAMP = "2000-01-01T00:00:00.000Z"
_COUNTERS = (24, 92)  # file change counter, version-valid-for number (SQLite database file format, section 1.3)


def month_summary(daily: pd.DataFrame, month: str) -> pd.DataFrame:
    """Return one row a wetland: mean, least and largest extent of the month, interval width, share of days by basis."""
    days = daily[pd.to_datetime(daily["date"]).dt.strftime("%Y-%m") == month]
    group = days.assign(width=days["area_hi_m2"] - days["area_lo_m2"]).groupby("wetland_id")
    out = pd.DataFrame(
        {
            "month": month,
            "area_mean_m2": group["area_m2"].mean(),
            "area_least_m2": group["area_m2"].min(),
            "area_most_m2": group["area_m2"].max(),
            "interval_mean_m2": group["width"].mean(),
            "days_observed": group["basis"].agg(lambda b: int((b == "observed").sum())),
            "days_stage": group["basis"].agg(lambda b: int((b == "stage").sum())),
        }
    )
    return out.reset_index()


def write_wetlands_layer(path: Path, shapes: gpd.GeoDataFrame, columns: pd.DataFrame) -> None:
    """Write the wetlands as GeoPackage with summary columns; the same rows give the same bytes.

    Parameters
    ----------
    path : Path
    shapes : GeoDataFrame
        wetland_id and geometry.
    columns : DataFrame
        One row a wetland, joined on wetland_id.
    """
    layer = shapes[["wetland_id", "geometry"]].merge(columns, on="wetland_id", how="left")
    with replacing(path) as scratch:
        scratch.unlink()
        layer.to_file(scratch, layer="wetlands", driver="GPKG", engine="pyogrio")
        with sqlite3.connect(scratch) as db:
            db.execute("UPDATE gpkg_contents SET last_change = ?", (_STAMP,))
        db.close()
        with scratch.open("r+b") as file:  # how many transactions GDAL took differs from run to run
            for place in _COUNTERS:
                file.seek(place)
                file.write((1).to_bytes(4, "big"))
