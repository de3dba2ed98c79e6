"""How mixed pixels show their water: settled by full wetlands, whose outline says what each pixel holds.

Bands blur over neighbours, and models lean to the likelier label: what a pixel shows is not its water fraction. When a wetland
is full its outline tells every pixel's fraction without an elevation model's errors, so such views say which responses can
be; among those that they cannot tell apart the evidence of all views decides (see ``learn.evidence``).
"""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np

from inundate.common.codes import LeafCode
from inundate.extent.estimate import Views, neighbour_mean, pixel_terms, shown
from inundate.extent.noise import NoiseModel
from inundate.extent.stack import WetlandPixels

GRID = np.array(
    list(itertools.product(np.linspace(0.0, 0.6, 7), (1.0, 1.3, 1.6, 2.0, 2.5, 3.0), (1.0, 1.3, 1.7, 2.2, 3.0))), float
)
"""Candidates (blur, steep, bend); see :class:`inundate.extent.noise.NoiseModel`. Bounds: common practice, no source."""
UNKNOWN = np.array([[0.0, 1.0, 1.0], [0.2, 1.1, 1.1], [0.3, 1.3, 1.3]])
"""Candidates where no wetland is seen full: none, or a little of each (common practice, no source)."""
_FULL = 0.92
"""Least mean of what all pixels inside the outline show in a wetland's wettest views when it may be full."""
_LEAST_VIEWS, _LEAST_MIXED = 10, 60
_CLOSE, _MOST = 1.06, 40  # common practice, no source


def full_pixels(views: Views, wetland: WetlandPixels, noise: NoiseModel) -> np.ndarray:
    """Return what a wetland's pixels hold and show when it is full.

    Parameters
    ----------
    views : Views
    wetland : WetlandPixels
    noise : NoiseModel
        Its dry and water ends scale what is shown to 0..1.

    Returns
    -------
    ndarray of float64, shape (3, pixel)
        Share inside the outline, mean of it over touching pixels, and mean of what the wettest tenth of clear leaf-off views
        shows; no pixel where the wetland has fewer than ten such views, no inner pixel, or never shows full.
    """
    nothing = np.empty((3, 0))
    good = (views.clear_fraction > 0.95) & (views.ice < 0.02) & (views.leaf == int(LeafCode.LEAF_OFF))
    inner = wetland.share > 0.99
    if good.sum() < _LEAST_VIEWS or not inner.any() or (wetland.pixel < 0).any():
        return nothing
    middle = np.where(good, views.fraction[:, inner].mean(axis=1), -1.0)
    top = good & (middle >= np.quantile(middle[good], 0.9))
    if middle[top].mean() < _FULL:
        return nothing
    value, _, slope = pixel_terms(views, noise, np.full(views.fraction.shape, 0.5))
    share = np.clip(wetland.share, 0.0, 1.0)
    seen = (slope[top] > 0).all(axis=0) & (wetland.other < 0.01)
    beside = neighbour_mean(share[:, None], wetland)[:, 0]
    return np.stack([share, beside, value[top].mean(axis=0)])[:, seen]


def possible_responses(parts: list[np.ndarray]) -> np.ndarray:
    """Return the responses under which full wetlands show what they do, best first.

    Parameters
    ----------
    parts : list of ndarray, shape (3, pixel)
        From :func:`full_pixels`, one a wetland.

    Returns
    -------
    ndarray of float64, shape (candidate, 3)
        Of ``GRID`` those whose root mean square error lies within 6 % of the least, at most 40; ``UNKNOWN`` with fewer than 60
        mixed pixels.
    """
    share, beside, value = np.concatenate([np.empty((3, 0)), *parts], axis=1)
    if ((share > 0.05) & (share < 0.95)).sum() < _LEAST_MIXED:
        return UNKNOWN
    error = np.array([np.sqrt(np.mean((value - shown((1 - b) * share + b * beside, k, c)) ** 2)) for b, k, c in GRID])
    order = np.argsort(error, kind="stable")
    return GRID[order[error[order] <= _CLOSE * error[order[0]]][:_MOST]]


def with_response(noise: NoiseModel, response: np.ndarray) -> NoiseModel:
    """Return a noise model with the given blur, steep and bend, shape (3,)."""
    blur, steep, bend = (float(v) for v in response)
    return replace(noise, blur=blur, steep=steep, bend=bend)
