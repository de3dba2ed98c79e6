"""Names and small integer codes used everywhere: bands, view codes, leaf states, cover, basis."""

from __future__ import annotations

from enum import IntEnum

BAND_ROLES = (
    "blue",
    "green",
    "red",
    "rededge071",
    "rededge075",
    "rededge078",
    "nir",
    "nir08",
    "swir16",
    "swir22",
)
LEAF_STATES = ("leaf_off", "green_up", "leaf_on", "leaf_fall")
COVERS = ("open", "deciduous", "evergreen")
CANOPY_HIDES = "canopy hides it"
"""Reason of a view that is not used."""
BASES = ("observed", "stage", "neighbours", "season")
MAP_NOT_SEEN = 255


class ViewCode(IntEnum):
    """What a scene's mask says of a pixel."""

    CLEAR = 0
    CLOUD = 1
    SHADOW = 2
    SNOW_ICE = 3
    FILL = 255


class LeafCode(IntEnum):
    """Integer code of a leaf state; the position in ``LEAF_STATES``."""

    LEAF_OFF = 0
    GREEN_UP = 1
    LEAF_ON = 2
    LEAF_FALL = 3
