"""Step from logger files to the stage record of the area."""

from __future__ import annotations

import os
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from inundate.batch.inputs import stat_mark
from inundate.batch.layout import Layout
from inundate.batch.pipeline import Pipeline
from inundate.batch.work import Inputs, Work
from inundate.common.errors import InputError

if TYPE_CHECKING:
    import geopandas as gpd

    from inundate.stage import StageResult


def latitudes(layout: Layout) -> dict[str, float]:
    """Return the latitude of each wetland's centroid, degrees."""
    table = layout.wetlands
    return _latitudes(table["wetland_id"], table["x"], table["y"], layout.grid.crs)


def latitudes_of(shapes: gpd.GeoDataFrame) -> dict[str, float]:
    """Return the latitude of each wetland's centroid, degrees, from their polygons (with wetland_id)."""
    middle = shapes.geometry.centroid
    return _latitudes(shapes["wetland_id"], middle.x, middle.y, shapes.crs)


def _latitudes(ids: pd.Series, x: pd.Series, y: pd.Series, crs: object) -> dict[str, float]:
    from pyproj import Transformer

    _, lat = Transformer.from_crs(crs, "EPSG:4326", always_xy=True).transform(x, y)
    return dict(zip(ids, np.asarray(lat, float), strict=True))


def stage_record(work: Work, inputs: Inputs, layout: Layout, month: str | None = None) -> StageResult | None:
    """Build the stage record; None where the pipeline names no loggers.

    Raises
    ------
    InputError
        See :func:`make_stage`.
    """
    from inundate.stage import UNUSED_CHECK

    if "loggers.registry" not in work.pipeline.input_files():
        return None
    with work.progress.step("stage record"):
        result = make_stage(work.pipeline, latitudes(layout), inputs.weather)
        work.refuse([r for r in result.refused if r.kind != UNUSED_CHECK])
        work.notes.extend([*result.notes, *(r.reason for r in result.refused if r.kind == UNUSED_CHECK)])
    if month is not None:
        end = pd.Period(month, "M").end_time
        daily = result.daily[pd.to_datetime(result.daily["date"]) <= end].reset_index(drop=True)
        return replace(result, daily=daily)
    return result


def make_stage(pipeline: Pipeline, latitude: dict[str, float], weather: pd.DataFrame | None) -> StageResult:
    """Read the files that a pipeline names and make the stage of all its loggers.

    Parameters
    ----------
    pipeline : Pipeline
        With a registry.
    latitude : dict of wetland_id to degrees
        Of every wetland.
    weather : DataFrame or None

    Returns
    -------
    StageResult
        With the checks that can't be read among what is refused.

    Raises
    ------
    InputError
        When the registry, barometer or checks are wrong as a whole, when the registry names a wetland that there is not, or
        when no logger can be used.
    """
    from inundate.stage import LoggerFiles, StageOptions, daily_stage, read_barometer, read_checks, read_registry

    files, settings = pipeline.input_files(), pipeline.stage
    registry = read_registry(files["loggers.registry"])
    strange = registry[~registry["wetland_id"].isin(set(latitude))]
    if len(strange):
        first = strange.iloc[0]
        message = f"{files['loggers.registry']}: logger '{first['logger_id']}' stands in wetland '{first['wetland_id']}', which {files['area.wetlands']} does not have; correct wetland_id"
        raise InputError(message)
    barometer = None
    if "loggers.barometer" in files:
        barometer = read_barometer(files["loggers.barometer"], settings.barometer_utc_offset)
    checks, refused = read_checks(files["loggers.checks"], registry) if "loggers.checks" in files else (None, [])
    options = StageOptions(**settings.model_dump(exclude={"barometer_utc_offset"}))
    result = daily_stage(registry, LoggerFiles(registry), barometer, checks, latitude, options, weather=weather)
    return replace(result, refused=[*refused, *result.refused])


def logger_marks(pipeline: Pipeline) -> dict[str, str]:
    """Return marks (size and time of change) of every logger file that the registry names, by path from its folder."""
    from inundate.stage import logger_paths, read_registry

    files = pipeline.input_files()
    if "loggers.registry" not in files:
        return {}
    registry, folder = read_registry(files["loggers.registry"]), Path(files["loggers.registry"]).parent
    found = [path for path in logger_paths(registry) if path.is_file()]
    return {f"logger file {os.path.relpath(path, folder)}": stat_mark(str(path)) for path in found}
