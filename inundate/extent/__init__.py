"""Pixel weights, elevation cells, observed extent, partial views.

A wetland's area in a scene is inferred from the water fractions of the pixels that are seen. Each wetland has a shape:
how each of its pixels fills as the wetland fills, from elevation cells or from how often pixels are water, refined by the
archive's own views. The level that best explains the visible pixels gives the hidden ones; visible pixels then correct the
shape where it is less certain than they are. Errors and their correlation are learnt from views against views, never from
truth. Sources: Olofsson et al. 2013, 2014 (area corrected by errors); exact area coverage of pixels by polygons.
"""

from inundate.extent.adjust import AdjustedArea, error_adjusted_area, fraction_errors
from inundate.extent.cells import cell_coverage, elevation_cells, hypsometry, lowest_elevation
from inundate.extent.combining import apply_decisions, combine_same_day, widen_observed
from inundate.extent.noise import NoiseModel
from inundate.extent.observer import (
    REASONS,
    ExtentObserver,
    observe_extents,
)
from inundate.extent.stack import ExtentOptions, SceneStack, weights_on_site
from inundate.extent.veil import darkness, haze_index, shaded, veiled
from inundate.extent.weights import check_wetlands, other_shares, pixel_weights

__all__ = [
    "REASONS",
    "AdjustedArea",
    "ExtentObserver",
    "ExtentOptions",
    "NoiseModel",
    "SceneStack",
    "apply_decisions",
    "cell_coverage",
    "check_wetlands",
    "combine_same_day",
    "darkness",
    "elevation_cells",
    "error_adjusted_area",
    "fraction_errors",
    "haze_index",
    "hypsometry",
    "lowest_elevation",
    "observe_extents",
    "other_shares",
    "pixel_weights",
    "shaded",
    "veiled",
    "weights_on_site",
    "widen_observed",
]
