"""What a report is made from."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import pandas as pd

if TYPE_CHECKING:
    import geopandas as gpd

    from inundate.products.report.thumbnails import Thumbnail


@dataclass(frozen=True, slots=True)
class ReportTables:
    """Tables of one delivery and what the archive keeps beside them; what is not there is None or empty.

    Attributes
    ----------
    run : dict
        month, last_day, area, notes, refused (kind, name, reason), settings, versions, inputs, scenes.
    shapes : GeoDataFrame
        wetland_id, area_max_m2, cover, geometry (m).
    daily, observed, stage, relations, relation_table, hydroperiod, size_classes, changes : DataFrame
        The product tables.
    skill : dict
        As of ``skill.score_all``.
    trend : list of (month, measure, value)
        Headline scores of all deliveries.
    warnings : list of str
        Scores outside their usual range.
    heldout : DataFrame or None
        Views and loggers that were hidden and predicted (see ``skill.SkillInputs``).
    pairs, shifts, reasons, corrections : DataFrame or None
        Stage-area pairs, shifts found, how each wetland was filled, corrections of loggers.
    loggers : DataFrame or None
        wetland_id, logger_id, time, level_m (as read), stage_m, flag; thinned.
    checks : DataFrame or None
        wetland_id, logger_id, time, stage_m, sd_m.
    thumbnails : dict of str to list of Thumbnail
        By wetland_id.
    """

    run: dict[str, Any]
    shapes: gpd.GeoDataFrame
    daily: pd.DataFrame
    observed: pd.DataFrame
    stage: pd.DataFrame
    relations: pd.DataFrame
    relation_table: pd.DataFrame
    hydroperiod: pd.DataFrame
    size_classes: pd.DataFrame
    changes: pd.DataFrame
    skill: dict[str, Any]
    trend: list[tuple[str, str, float]] = field(default_factory=list)
    warnings: list[str] = field(default_factory=list)
    heldout: pd.DataFrame | None = None
    pairs: pd.DataFrame | None = None
    shifts: pd.DataFrame | None = None
    reasons: pd.DataFrame | None = None
    corrections: pd.DataFrame | None = None
    loggers: pd.DataFrame | None = None
    checks: pd.DataFrame | None = None
    thumbnails: dict[str, list[Thumbnail]] = field(default_factory=dict)
