"""Gap-filled daily extent with intervals, joint draws, hydroperiod and size classes."""

from inundate.series.classes import area_days, class_names, size_classes
from inundate.series.fill import fill_series
from inundate.series.hydroperiod import hydroperiod, mean_timing, water_years
from inundate.series.inputs import FillOptions, SeriesInputs
from inundate.series.kalman import LocalLevel, local_level
from inundate.series.maps import Relations
from inundate.series.regime import MEASURES, circular_timing, flashiness, spells
from inundate.series.result import SeriesResult

__all__ = [
    "MEASURES", "FillOptions", "LocalLevel", "Relations", "SeriesInputs", "SeriesResult", "area_days",
    "circular_timing", "class_names", "fill_series", "flashiness", "hydroperiod", "local_level", "mean_timing",
    "size_classes", "spells", "water_years",
]  # fmt: skip
