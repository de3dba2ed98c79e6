"""The loggers of the invented reserve without its scenes, so that many seeds can be tried in little time."""

from __future__ import annotations

from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pandas as pd

from inundate.common.writing import write_table
from inundate.reserve import hydrology, loggers, terrain, weather
from inundate.reserve.plan import make_plan
from inundate.reserve.write import write_csv, write_layer


def bare_land(seed: int, size: str = "default") -> SimpleNamespace:
    """Bowls, water and weather of the reserve that ``make_reserve`` makes from the same seed and size."""
    plan = make_plan(seed, size)
    bowls = terrain.make_bowls(plan)
    ground = terrain.make_ground(plan, bowls)
    tables = terrain.hypsometry(plan, bowls, ground)
    sky = weather.make_weather(plan, hydrology.LEAD_DAYS)
    depth = ground.sill_m - ground.lowest_m
    places = np.array([[b.x, b.y] for b in bowls])
    water, _ = hydrology.run_water(plan, sky, [b.wetland_id for b in bowls], tables, depth, places)
    return SimpleNamespace(plan=plan, bowls=bowls, water=water, weather=sky)


def write_ground_data(folder: Path, seed: int, size: str = "default") -> None:
    """Write the files that a stage record needs, and its truth, as ``make_reserve`` does."""
    land = bare_land(seed, size)
    field = loggers.make_loggers(land)
    inputs, true = folder / "inputs", folder / "truth"
    for one in (inputs / "readings", true):
        one.mkdir(parents=True, exist_ok=True)
    write_csv(inputs / "loggers.csv", field.registry)
    write_csv(inputs / "barometer.csv", field.barometer)
    write_csv(inputs / "checks.csv", field.checks)
    for name, table in field.readings.items():
        write_csv(inputs / "readings" / f"{name}.csv", table)
    sky = land.weather.iloc[-land.plan.n_days :]
    write_csv(inputs / "weather.csv", sky[["date", "precipitation_mm", "pet_mm", "air_temperature_c"]])
    write_layer(inputs / "wetlands.gpkg", terrain.wetlands_layer(land.bowls))
    write_table(true / "loggers.parquet", field.truth)
    ids = [b.wetland_id for b in land.bowls]
    days = land.plan.days
    stage = pd.DataFrame(land.water.daily.T, index=days, columns=ids).rename_axis("date").reset_index()
    write_table(true / "stage_daily.parquet", stage.melt("date", var_name="wetland_id", value_name="stage_m"))
