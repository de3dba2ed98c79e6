"""How each pixel of a wetland fills as the wetland's area grows: from elevation, from views, or from the outline."""

from __future__ import annotations

import numpy as np
import pandas as pd
from scipy import ndimage

from inundate.extent.kernels import balance, fill_order, isotonic_rows
from inundate.extent.stack import WetlandPixels

LEAST_COVER = 0.5
"""Share of a wetland with elevation from which elevation shapes are used; common practice, no source."""
RAMP = 0.2
"""Width, as a share of the largest extent, over which a ranked pixel fills; widened or narrowed by the views."""


def _settle(shape: np.ndarray, area_m2: np.ndarray) -> np.ndarray:
    """Return fractions that never fall with the step and sum to the right area at each (float32)."""
    share = area_m2 / area_m2.sum()
    ones = np.ones_like(shape)
    for _ in range(2):
        balance(shape, share)
        isotonic_rows(shape, ones)
    shape[:, 0], shape[:, -1] = 0.0, 1.0
    return np.ascontiguousarray(shape, dtype=np.float32)


def shape_from_cells(cells: pd.DataFrame, wetland: WetlandPixels, steps: int) -> np.ndarray | None:
    """Filling of pixels from elevation cells, lowest first.

    The vertical datum plays no part: only the order of cells matters.

    Parameters
    ----------
    cells : DataFrame
        ``row``, ``col``, ``elevation_m``, ``area_m2`` of this wetland.
    wetland : WetlandPixels
    steps : int

    Returns
    -------
    ndarray of float32, shape (pixel, step), or None
        Water fraction of the wetland's part of each pixel at area k / (steps - 1) of the largest extent; None when
        less than half the wetland has elevation or all is flat.
    """
    seen = (wetland.pixel >= 0) & (wetland.share > 0)
    if not seen.any() or cells.empty or cells["area_m2"].sum() < LEAST_COVER * wetland.area_max_m2:
        return None
    place = np.full((int(np.ptp(wetland.row[seen])) + 1, int(np.ptp(wetland.col[seen])) + 1), -1, np.int64)
    r0, c0 = wetland.row[seen].min(), wetland.col[seen].min()
    place[wetland.row[seen] - r0, wetland.col[seen] - c0] = np.flatnonzero(seen)
    r, c = cells["row"].to_numpy() - r0, cells["col"].to_numpy() - c0
    inside = (r >= 0) & (c >= 0) & (r < place.shape[0]) & (c < place.shape[1])
    pixel = np.where(inside, place[np.where(inside, r, 0), np.where(inside, c, 0)], -1)
    keep = pixel >= 0
    z, area, pixel = cells["elevation_m"].to_numpy(float)[keep], cells["area_m2"].to_numpy(float)[keep], pixel[keep]
    if z.size == 0 or np.ptp(z) <= 0:
        return None
    order = np.lexsort((pixel, z))
    shape = fill_order(pixel[order], z[order], area[order], wetland.pixel.size, steps)
    shape = np.where(np.isfinite(shape), shape, np.linspace(0, 1, steps)[None, :])
    return _settle(shape, wetland.area_m2)


def edge_distance(wetland: WetlandPixels) -> np.ndarray:
    """Distance of each pixel from the wetland's outline, in pixels, with shares smoothing the edge; float64 (pixel,)."""
    r, c = wetland.row - wetland.row.min() + 1, wetland.col - wetland.col.min() + 1
    full = np.zeros((int(r.max()) + 2, int(c.max()) + 2))
    np.maximum.at(full, (r, c), np.minimum(wetland.share, 1.0))
    inner = ndimage.distance_transform_edt(full > 0.5)
    return inner[r, c] + full[r, c]


def shape_from_order(score: np.ndarray, wetland: WetlandPixels, steps: int) -> np.ndarray:
    """Filling of pixels by a score, highest first, each over a fifth of the largest extent.

    Parameters
    ----------
    score : ndarray of float, shape (pixel,)
        For example how often a pixel is water when seen; equal scores fill together.
    wetland : WetlandPixels
    steps : int

    Returns
    -------
    ndarray of float32, shape (pixel, step)
    """
    order = np.argsort(-score, kind="stable")
    share = wetland.area_m2[order] / wetland.area_m2.sum()
    end = np.cumsum(share)
    start = end - share
    level = score[order]
    tie = np.flatnonzero(np.r_[True, np.diff(level) != 0])
    which = np.repeat(np.arange(tie.size), np.diff(np.r_[tie, level.size]))
    start, end = start[tie][which], np.maximum.reduceat(end, tie)[which]
    grid = np.linspace(0, 1, steps)
    low, high = start - RAMP / 2, end + RAMP / 2
    shape = np.empty((score.size, steps))
    shape[order] = np.clip((grid[None, :] - low[:, None]) / (high - low)[:, None], 0.0, 1.0)
    return _settle(shape, wetland.area_m2)


def refine_shape(
    prior: np.ndarray,
    prior_weight: float,
    wetland: WetlandPixels,
    post: np.ndarray,
    filled: np.ndarray,
    precision: np.ndarray,
) -> np.ndarray:
    """Blend a prior shape with what views show.

    Parameters
    ----------
    prior : ndarray of float32, shape (pixel, step)
    prior_weight : float
        Precision (1 / variance of a water fraction) of the prior shape.
    wetland : WetlandPixels
    post : ndarray of float64, shape (scene, step)
        Posterior over area of each teaching scene.
    filled : ndarray of float64, shape (scene, pixel)
        Water fraction of the wetland's part of each pixel, unbiased, maybe outside 0..1; NaN where not seen.
    precision : ndarray of float64, shape (scene, pixel)
        1 / variance of ``filled``; 0 where not seen.

    Returns
    -------
    ndarray of float32, shape (pixel, step)
    """
    steps = prior.shape[1]
    values = np.where(precision > 0, np.clip(np.nan_to_num(filled), -0.5, 1.5), 0.0)
    num = post.T @ (values * precision)
    den = post.T @ precision
    width = max(1.0, 0.03 * steps)
    num = ndimage.gaussian_filter1d(num, width, axis=0, mode="constant") * 2.5 * width
    den = ndimage.gaussian_filter1d(den, width, axis=0, mode="constant") * 2.5 * width
    shape = ((num.T + prior_weight * prior) / (den.T + prior_weight)).astype(float)
    isotonic_rows(shape, (den.T + prior_weight).astype(float))
    return _settle(np.clip(shape, 0.0, 1.0), wetland.area_m2)
