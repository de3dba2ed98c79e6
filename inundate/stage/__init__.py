"""From logger readings to daily stage: files, clock, pressure and depth, quality, datum, drift and steps, days.

``read_registry``, ``LoggerFiles`` (or ``read_readings``), ``read_barometer`` and ``read_checks`` open files; all else
takes and returns tables. ``daily_stage`` makes the record of all loggers, ``build_record`` that of one,
``wetland_daily`` one row a wetland and date, ``plots.plot_logger`` a picture of a logger; each change and each refused
reading is in ``corrections`` and ``flagged``.
A record made after the event from small loggers is no basis for flood warning, dam safety or a legal boundary.
"""

from inundate.stage.checks import UNUSED_CHECK
from inundate.stage.daily import StageResult, daily_stage, wetland_daily
from inundate.stage.options import FLAGS, QUALITIES, StageOptions
from inundate.stage.readings import (
    Barometer,
    LoggerFiles,
    Readings,
    logger_paths,
    read_barometer,
    read_checks,
    read_readings,
    read_registry,
)
from inundate.stage.record import LoggerRecord, build_record

__all__ = [
    "FLAGS",
    "QUALITIES",
    "UNUSED_CHECK",
    "Barometer",
    "LoggerFiles",
    "LoggerRecord",
    "Readings",
    "StageOptions",
    "StageResult",
    "build_record",
    "daily_stage",
    "logger_paths",
    "read_barometer",
    "read_checks",
    "read_readings",
    "read_registry",
    "wetland_daily",
]
