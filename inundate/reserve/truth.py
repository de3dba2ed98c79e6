"""Tables of the truth, which only scoring and tests may read."""

from __future__ import annotations

import numpy as np
import pandas as pd

from inundate.common.codes import ViewCode
from inundate.reserve.canopy import FALL_WIDTH_D, UP_WIDTH_D
from inundate.reserve.hydrology import area_at
from inundate.reserve.scenes import Landscape, ViewPlan


def daily_tables(land: Landscape) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Return extent_daily (wetland_id, date, area_m2) and stage_daily (wetland_id, date, stage_m).

    The area is that of the true relation at the day's mean stage.
    """
    n, days = len(land.bowls), land.plan.days
    ids = np.repeat([b.wetland_id for b in land.bowls], days.size)
    dates = np.tile(days.to_numpy(), n)
    extent = pd.DataFrame({"wetland_id": ids, "date": dates, "area_m2": land.water.area_daily.ravel()})
    stage = pd.DataFrame({"wetland_id": ids, "date": dates, "stage_m": land.water.daily.ravel()})
    return extent, stage


def wetlands_table(land: Landscape, parameters: pd.DataFrame) -> pd.DataFrame:
    """Return one row a wetland: cover, largest area, sill, elevations, bowl, canopy and balance parameters."""
    cover, ground = land.cover, land.ground
    rows = []
    for i, bowl in enumerate(land.bowls):
        mine = ground.wetland == i
        lai = cover.lai[mine] * 0.1
        rows.append(
            {
                "wetland_id": bowl.wetland_id,
                "cover": bowl.cover,
                "area_max_m2": bowl.polygon.area,
                "sill_m": float(ground.sill_m[i] - ground.lowest_m[i]),
                "sill_elevation_m": float(ground.sill_m[i]),
                "lowest_elevation_m": float(ground.lowest_m[i]),
                "profile_power": bowl.power,
                "closure": float((cover.height_m[mine] > 0).mean()),
                "peak_lai": float(lai.mean()),
                "leaf_offset_d": int(land.years.offset[i]),
                "stain_per_m": float(land.stain[i, 0]),
            }
        )
    return pd.DataFrame(rows).merge(parameters, on="wetland_id", validate="1:1")


def leaves_table(land: Landscape) -> pd.DataFrame:
    """Return leaf dates by wetland and year; NaT where the wetland's trees keep no deciduous calendar."""
    rows = []
    wetlands = wetlands_table(land, pd.DataFrame({"wetland_id": [b.wetland_id for b in land.bowls]}))
    peak_lai = wetlands["peak_lai"].to_numpy(float)
    first, last = land.plan.days[0], land.plan.days[-1]
    for i, bowl in enumerate(land.bowls):
        for year in range(first.year, last.year + 1):
            row: dict[str, object] = {"wetland_id": bowl.wetland_id, "year": year}
            for name, half, width in (
                ("green_up", land.years.up[year], UP_WIDTH_D),
                ("leaf_fall", land.years.fall[year], FALL_WIDTH_D),
            ):
                middle = half + float(land.years.offset[i])
                for percent, away in ((10, -width / 2), (50, 0.0), (90, width / 2)):
                    # day-of-year values count from 1 January = 1 and refer to the overpass, 0.45 d into the day
                    date = pd.Timestamp(year, 1, 1) + pd.Timedelta(days=round(middle + away - 0.45) - 1)
                    row[f"{name}_{percent}"] = date if bowl.cover == "deciduous" else pd.NaT
            row["peak_lai"] = peak_lai[i]
            rows.append(row)
    table = pd.DataFrame(rows)
    for name in table.columns:
        if name.startswith(("green_up", "leaf_fall")):
            table[name] = table[name].astype("datetime64[ns]")
    return table


def scenes_table(land: Landscape, views: list[ViewPlan], truths: dict[str, np.ndarray]) -> pd.DataFrame:
    """Return one row a scene: shift, gain, haze, true share of cloud and shadow, ice."""
    rows = []
    for view in views:
        code = truths[view.scene_id][2]
        day = land.weather.iloc[land.weather.shape[0] - land.plan.n_days + (view.day - land.plan.days[0]).days]
        rows.append(
            {
                "scene_id": view.scene_id,
                "date": view.day,
                "dx_m": view.dx_m,
                "dy_m": view.dy_m,
                "gain": view.gain,
                "haze": view.haze,
                "cloud_share": float(np.isin(code, (ViewCode.CLOUD, ViewCode.SHADOW)).mean()),
                "ice": bool(day["ice_m"] > 0.005 or day["snow_mm"] > 1.0),
                "ice_m": float(day["ice_m"]),
                "snow_mm": float(day["snow_mm"]),
                "sun_elevation_deg": view.sun_elevation,
                "baseline": view.baseline,
            }
        )
    return pd.DataFrame(rows)


def relations_table(land: Landscape, tables: list[np.ndarray]) -> pd.DataFrame:
    """Return the true relation of each wetland at 1 cm steps to 5 cm above its sill: wetland_id, stage_m, area_m2."""
    parts = []
    for bowl, table in zip(land.bowls, tables, strict=True):
        stage = np.arange(table.size + 5) / 100.0
        parts.append(pd.DataFrame({"wetland_id": bowl.wetland_id, "stage_m": stage, "area_m2": area_at(table, stage)}))
    return pd.concat(parts, ignore_index=True)
