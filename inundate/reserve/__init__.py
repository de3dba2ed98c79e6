"""The invented Sallow Reserve: a physics-based landscape of small wetlands with known truth, for the demo and for tests.

Weather drives an hourly water balance of every depression; canopy radiative transfer over water, wet ground and litter gives
what a sensor would see through leaves, air and cloud; loggers, field checks and labels come with the faults of the field.
``make_reserve`` writes it in the package's own input contract, with the truth beside it.
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pandas as pd

from inundate.common.writing import replacing_folder, write_json, write_table, write_text
from inundate.reserve import elevation, labels, loggers, terrain, truth, write
from inundate.reserve.landscape import make_landscape
from inundate.reserve.plan import Plan, make_plan
from inundate.reserve.scenes import Landscape, ViewPlan, draw_view, plan_views

__all__ = ["make_reserve"]

Progress = Callable[[str, int, int], None]


def make_reserve(
    folder: Path, *, seed: int = 1, size: str = "default", progress: Progress | None = None, workers: int = 2
) -> None:
    """Write the reserve's ``inputs/`` and ``truth/`` into a folder; each replaces what stood under its name.

    Parameters
    ----------
    folder : Path
        Made where it does not exist.
    seed : int
        Another seed gives another reserve; the same seed the same bytes.
    size : str
        ``default`` (44 wetlands, three years) or ``small`` (8 wetlands, a year and a half).
    progress : callable, optional
        Called with (what, done, total) after each view.
    workers : int
        Threads; the files do not depend on it.

    Raises
    ------
    InputError
        Where size or seed is not known.
    """
    plan = make_plan(seed, size)
    folder = Path(folder)
    with replacing_folder(folder / "truth") as true, replacing_folder(folder / "inputs") as inputs:
        _write_all(plan, inputs, true, progress, max(1, workers))


def _write_all(plan: Plan, inputs: Path, true: Path, progress: Progress | None, workers: int) -> None:
    land, tables, parameters = make_landscape(plan)
    views = plan_views(plan)
    truths = _write_views(land, views, inputs, true, progress, workers)
    write.write_catalog(inputs, plan, views)
    write.write_layer(inputs / "wetlands.gpkg", terrain.wetlands_layer(land.bowls))
    model, flight = elevation.make_elevation(land)
    write.write_raster(inputs / "elevation.tif", model, plan.fine.transform, nodata=-9999.0)
    given = labels.make_labels(land, views, truths)
    write.write_layer(inputs / "labels.gpkg", given.labels)
    _write_ground_data(land, inputs, true)
    write_text(inputs / "pipeline.toml", write.PIPELINE)
    extent, stage = truth.daily_tables(land)
    write_table(true / "extent_daily.parquet", extent)
    write_table(true / "stage_daily.parquet", stage)
    write_table(true / "wetlands.parquet", truth.wetlands_table(land, parameters))
    write_table(true / "leaves.parquet", truth.leaves_table(land))
    write_table(true / "scenes.parquet", truth.scenes_table(land, views, truths))
    write_table(true / "labels.parquet", given.truth)
    write_table(true / "relations.parquet", truth.relations_table(land, tables))
    write_table(true / "balance.parquet", land.water.balance)
    write_json(true / "about.json", {"seed": plan.seed, "size": plan.size, "elevation": flight})


def _write_views(
    land: Landscape, views: list[ViewPlan], inputs: Path, true: Path, progress: Progress | None, workers: int
) -> dict[str, np.ndarray]:
    """Draw and write every view; returns the truth of each."""
    truths: dict[str, np.ndarray] = {}

    def one(view: ViewPlan) -> tuple[str, np.ndarray]:
        data = draw_view(land, view)
        write.write_view(inputs / "scenes", land.plan, view, data)
        write.write_raster(true / "pixels" / f"{view.scene_id}.tif", data.truth, land.plan.grid.transform)
        return view.scene_id, data.truth

    first = one(views[0])  # compiles once, before threads
    truths[first[0]] = first[1]
    with ThreadPoolExecutor(workers) as pool:
        for done, (name, value) in enumerate(pool.map(one, views[1:]), start=2):
            truths[name] = value
            if progress is not None:
                progress("views", done, len(views))
    return truths


def _write_ground_data(land: Landscape, inputs: Path, true: Path) -> None:
    """Write loggers, barometer, checks, walked extents and weather."""
    field = loggers.make_loggers(land)
    write.write_csv(inputs / "loggers.csv", field.registry)
    write.write_csv(inputs / "barometer.csv", field.barometer)
    write.write_csv(inputs / "checks.csv", field.checks)
    write.write_csv(inputs / "walked_extents.csv", field.walked)
    for name, table in field.readings.items():
        write.write_csv(inputs / "readings" / f"{name}.csv", table)
    weather: pd.DataFrame = land.weather.iloc[-land.plan.n_days :]
    daily = weather[["date", "precipitation_mm", "pet_mm", "air_temperature_c"]].copy()
    daily["date"] = daily["date"].dt.strftime("%Y-%m-%d")
    write.write_csv(inputs / "weather.csv", daily)
    write_table(true / "loggers.parquet", field.truth)
