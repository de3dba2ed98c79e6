"""Colours that people with any kind of colour vision tell apart, and where they come from.

Classes: Okabe and Ito (2008), Color Universal Design. Ramps: ColorBrewer (Harrower and Brewer 2003), single-hue or
blue-green ones that its authors mark as safe for colour-blind readers.
"""

from __future__ import annotations

import numpy as np

LEAF_COLOURS = {"leaf_off": "#0072B2", "green_up": "#009E73", "leaf_on": "#D55E00", "leaf_fall": "#E69F00"}
LEAF_MARKS = {"leaf_off": "circle", "green_up": "triangle", "leaf_on": "square", "leaf_fall": "inverted_triangle"}
CLASS_COLOURS = ("#56B4E9", "#0072B2", "#009E73", "#E69F00", "#CC79A7", "#D55E00", "#F0E442", "#999999")
FLAG_COLOURS = {"as read": "#999999", "stage": "#0072B2", "check": "#D55E00", "left out": "#CC79A7"}
SOURCE = "Colours: Okabe and Ito (2008) for classes, ColorBrewer ramps (Harrower and Brewer 2003) for amounts."


def ramp(name: str, n: int = 8) -> list[str]:
    """Return ``n`` colours of a ColorBrewer ramp, light to dark, without its palest end."""
    from matplotlib import colormaps
    from matplotlib.colors import to_hex

    return [to_hex(c) for c in colormaps[name](np.linspace(0.12, 1.0, n))]


def page_palettes() -> dict[str, object]:
    """Return all colours that the page uses."""
    return {
        "leaf": list(LEAF_COLOURS.values()),
        "leafMarks": list(LEAF_MARKS.values()),
        "classes": list(CLASS_COLOURS),
        "flags": FLAG_COLOURS,
        "extent": ramp("YlGnBu"),
        "width": ramp("Oranges"),
        "skill": ramp("Purples"),
        "unknown": "#b8b8b8",
    }
