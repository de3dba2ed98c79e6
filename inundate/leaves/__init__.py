"""Leaves: when each wetland's canopy greens and falls, and how much of the ground it lets through.

``LeafCalendar`` reads leaf dates, their uncertainty and the kind of cover from greenness through time, pooled over
years and neighbours, with air temperature, the day of the year or a user's fixed dates where greenness does not tell.
``view_fraction`` turns a pixel's full-leaf and leaf-off greenness and the day's leaf share into the share of ground that
can be seen.
"""

from inundate.leaves.calendar import LeafCalendar
from inundate.leaves.canopy import (
    Canopy,
    gap_fraction,
    leaf_area_from_gap,
    leaf_area_from_ndvi,
    leaf_area_over_ground,
    ndvi_from_leaf_area,
    view_fraction,
)
from inundate.leaves.curves import (
    Optics,
    beck,
    canopy_greenness,
    curvature_dates,
    curvature_rate,
    elmore,
)

__all__ = [
    "Canopy",
    "LeafCalendar",
    "Optics",
    "beck",
    "canopy_greenness",
    "curvature_dates",
    "curvature_rate",
    "elmore",
    "gap_fraction",
    "leaf_area_from_gap",
    "leaf_area_from_ndvi",
    "leaf_area_over_ground",
    "ndvi_from_leaf_area",
    "view_fraction",
]
