"""Step from logger files to the stage record of the area."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from inundate.batch.inputs import stat_mark
from inundate.batch.layout import Layout
from inundate.batch.pipeline import Pipeline
from inundate.batch.work import Inputs, Work
from inundate.common.errors import InputError

if TYPE_CHECKING:
    from inundate.stage import StageResult


def latitudes(layout: Layout) -> dict[str, float]:
    """Return the latitude of each wetland's centroid, degrees."""
    from pyproj import Transformer

    table = layout.wetlands
    _, lat = Transformer.from_crs(layout.grid.crs, "EPSG:4326", always_xy=True).transform(table["x"], table["y"])
    return dict(zip(table["wetland_id"], np.asarray(lat, float), strict=True))


def stage_record(work: Work, inputs: Inputs, layout: Layout, month: str | None = None) -> StageResult | None:
    """Build the stage record; None where the pipeline names no loggers.

    Raises
    ------
    InputError
        When the registry is wrong as a whole, or names a wetland that the layer does not have.
    """
    from inundate.stage import UNUSED_CHECK, LoggerFiles, daily_stage, read_barometer, read_checks, read_registry

    files = work.pipeline.input_files()
    if "loggers.registry" not in files:
        return None
    with work.progress.step("stage record"):
        registry = read_registry(files["loggers.registry"])
        known = set(layout.wetlands["wetland_id"])
        strange = registry[~registry["wetland_id"].isin(known)]
        if len(strange):
            first = strange.iloc[0]
            message = f"{files['loggers.registry']}: logger '{first['logger_id']}' stands in wetland '{first['wetland_id']}', which {files['area.wetlands']} does not have; correct wetland_id"
            raise InputError(message)
        barometer = read_barometer(files["loggers.barometer"]) if "loggers.barometer" in files else None
        checks, refused = read_checks(files["loggers.checks"], registry) if "loggers.checks" in files else (None, [])
        work.refuse(list(refused))
        readings = LoggerFiles(registry)
        result = daily_stage(registry, readings, barometer, checks, latitudes(layout), weather=inputs.weather)
        work.refuse([r for r in result.refused if r.kind != UNUSED_CHECK])
        work.notes.extend([*result.notes, *(r.reason for r in result.refused if r.kind == UNUSED_CHECK)])
    if month is not None:
        end = pd.Period(month, "M").end_time
        daily = result.daily[pd.to_datetime(result.daily["date"]) <= end].reset_index(drop=True)
        return replace(result, daily=daily)
    return result


def logger_marks(pipeline: Pipeline) -> dict[str, str]:
    """Return marks (size and time of change) of every logger file that the registry names."""
    from inundate.stage import logger_paths, read_registry

    files = pipeline.input_files()
    if "loggers.registry" not in files:
        return {}
    registry = read_registry(files["loggers.registry"])
    return {f"logger file {path}": stat_mark(str(path)) for path in logger_paths(registry) if path.is_file()}
