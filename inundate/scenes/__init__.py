"""Sensor profiles, catalog, windows of reflectance and clear view, co-registration, normalisation, elevation windows.

Everything that opens scene files lives here. A profile says how a sensor's bands and mask are found and scaled, the
catalog turns a STAC catalog or a table into scenes, ``read_view`` gives blocks on the area's grid.
"""

from inundate.scenes.areas import area_grid, band_steps, context_windows
from inundate.scenes.catalog import Catalog, open_catalog, scene_times
from inundate.scenes.detail import Detail, add_detail, fit_detail
from inundate.scenes.elevation import read_elevation
from inundate.scenes.looks import ShiftOptions
from inundate.scenes.masks import MaskRule, MaskRules
from inundate.scenes.normalise import Gain, apply_gain
from inundate.scenes.reading import SceneReader, read_view
from inundate.scenes.reference import CHANNELS, NO_SHIFT, Reference, Shift
from inundate.scenes.scene import BandSource, MaskSource, Scene, SceneError, fingerprint
from inundate.scenes.sensors import SHIPPED_PROFILES, SensorProfile, load_profile
from inundate.scenes.shifting import apply_shift
from inundate.scenes.view import Block, View

__all__ = [
    "CHANNELS",
    "NO_SHIFT",
    "SHIPPED_PROFILES",
    "BandSource",
    "Block",
    "Catalog",
    "Detail",
    "Gain",
    "MaskRule",
    "MaskRules",
    "MaskSource",
    "Reference",
    "Scene",
    "SceneError",
    "SceneReader",
    "SensorProfile",
    "Shift",
    "ShiftOptions",
    "View",
    "add_detail",
    "apply_gain",
    "apply_shift",
    "area_grid",
    "band_steps",
    "context_windows",
    "fingerprint",
    "fit_detail",
    "load_profile",
    "open_catalog",
    "read_elevation",
    "read_view",
    "scene_times",
]
