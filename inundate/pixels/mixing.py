"""Mixed examples: labelled pixels of the same view, mixed linearly along random shorelines."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from inundate.common.codes import BAND_ROLES
from inundate.common.seeds import rng_for
from inundate.pixels.examples import ExampleSet

COARSE_ROLES = ("rededge071", "rededge075", "rededge078", "nir08", "swir16", "swir22")
"""Bands that are twice as coarse as the others where a sensor has two pixel sizes."""


@dataclass(frozen=True, slots=True)
class MixOptions:
    """How mixed examples are made.

    Attributes
    ----------
    n : int
        Number of mixed examples.
    coarse : bool
        True: the bands of ``COARSE_ROLES`` are twice as coarse as the others (their fraction is that of the 2 x 2
        blocks around the pixel, interpolated bilinearly). False: all bands have one pixel size.
    offset_px : float
        Standard deviation of the offset between fine and coarse bands, and of band to band registration, in fine pixels.
    seed : int
    """

    n: int = 4000
    coarse: bool = True
    offset_px: float = 0.15
    seed: int = 0


def shoreline_fractions(n: int, rng: np.random.Generator, offset_px: float) -> tuple[np.ndarray, np.ndarray]:
    """Draw water fractions of a fine pixel as its fine and its coarse bands see it, along random shores.

    Parameters
    ----------
    n : int
    rng : Generator
    offset_px : float

    Returns
    -------
    fine, coarse : ndarray of float64, shape (n,)
        ``fine``: mean over 8 x 8 points of the pixel of a plane cut by a circle of drawn radius (0.6 to 30 fine pixels;
        the large ones are near straight); the inside is water or dry with equal chance. ``coarse``: means of the four
        coarse pixels (2 x 2 fine ones) around the fine pixel's centre, weighed 9, 3, 3, 1 sixteenths as in bilinear
        interpolation to the fine grid.
    """
    step = (np.arange(8) + 0.5) / 8
    fx, fy = (a.ravel() for a in np.meshgrid(step, step))
    wide = (np.arange(16) + 0.5) / 4  # a block of 4 x 4 fine pixels: two coarse ones a side
    gx, gy = (a.ravel() for a in np.meshgrid(wide, wide))
    # the fine pixel is the second or third of the block's four, along either side
    second = rng.integers(0, 2, (n, 2))
    corner = -(1.0 + second) + offset_px * rng.standard_normal((n, 2))
    radius = np.exp(rng.uniform(np.log(0.6), np.log(30.0), n))
    angle = rng.uniform(0, 2 * np.pi, n)
    away = rng.uniform(-1.6, 1.6, n)  # of the shore from the fine pixel's centre
    cx = 0.5 + np.cos(angle) * (radius + away)
    cy = 0.5 + np.sin(angle) * (radius + away)
    square = radius[:, None] ** 2
    fine = ((fx[None] - cx[:, None]) ** 2 + (fy[None] - cy[:, None]) ** 2 < square).mean(axis=1)
    px, py = gx[None] + corner[:, :1], gy[None] + corner[:, 1:]
    inside = (px - cx[:, None]) ** 2 + (py - cy[:, None]) ** 2 < square
    across = np.where(gx[None] < 2, 0.75 - 0.5 * second[:, :1], 0.25 + 0.5 * second[:, :1])
    along = np.where(gy[None] < 2, 0.75 - 0.5 * second[:, 1:], 0.25 + 0.5 * second[:, 1:])
    coarse = (inside * across * along).sum(axis=1) / (across * along).sum(axis=1)
    turn = rng.random(n) < 0.5
    return np.where(turn, 1 - fine, fine), np.where(turn, 1 - coarse, coarse)


def _partners(table: pd.DataFrame, chosen: np.ndarray, pool: np.ndarray, rng: np.random.Generator) -> np.ndarray:
    """Choose for each row a row of the pool: of the same scene, else the same leaf state, else any; -1 never."""
    out = np.empty(chosen.size, np.int64)
    scene, state = table["scene_id"].to_numpy(), table["leaf_state"].to_numpy()
    by_scene = {k: pool[v] for k, v in pd.Series(pool).groupby(scene[pool]).indices.items() if k}
    by_state = {k: pool[v] for k, v in pd.Series(pool).groupby(state[pool]).indices.items()}
    for k, row in enumerate(chosen):
        group = by_scene.get(scene[row])
        if group is None or group.size < 3:
            group = by_state.get(state[row], pool)
        out[k] = group[int(rng.integers(group.size))]
    return out


def mix_examples(
    examples: ExampleSet, trusted: np.ndarray | None = None, *, options: MixOptions | None = None
) -> ExampleSet:
    """Make mixed examples with a known water fraction.

    Parameters
    ----------
    examples : ExampleSet
        Labelled pixels.
    trusted : ndarray of bool, shape (row,), optional
        Rows that may be mixed (for example those whose label the other examples do not contradict); all by default.
    options : MixOptions, optional

    Returns
    -------
    ExampleSet
        The trusted rows themselves (fraction 0 or 1, or their own), then ``options.n`` mixed ones (label -1 below a
        majority of 0.6; ``purity`` max(fraction, 1-fraction)). The group and date of a mixed example are those of its
        water pixel; ``partner_id`` names the group of its dry pixel.

    Notes
    -----
    Linear mixing in reflectance (Adams, Smith & Johnson 1986, doi:10.1029/JB091iB08p08098).
    """
    options = options or MixOptions()
    rng = rng_for(options.seed, "mixed examples")
    keep = np.ones(len(examples.table), bool) if trusted is None else np.asarray(trusted, bool)
    own_fraction = examples.table["fraction"].to_numpy(float)
    y = examples.y
    pure = keep & (y >= 0) & ~((own_fraction > 0) & (own_fraction < 1))
    water, dry = np.flatnonzero(pure & (y == 1)), np.flatnonzero(pure & (y == 0))
    base = examples.take(keep)
    base.table["fraction"] = np.where(np.isfinite(own_fraction[keep]), own_fraction[keep], y[keep])
    base.table["partner_id"] = base.table["wetland_id"]
    if water.size == 0 or dry.size == 0 or options.n <= 0:
        return base
    one = water[rng.integers(water.size, size=options.n)]
    two = _partners(examples.table, one, dry, rng)
    fine, coarse = shoreline_fractions(options.n, rng, options.offset_px)
    share = np.tile(fine, (len(BAND_ROLES), 1))
    if options.coarse:
        share[[BAND_ROLES.index(role) for role in COARSE_ROLES]] = coarse
    values = share * examples.reflectance[:, one] + (1 - share) * examples.reflectance[:, two]
    table = examples.table.iloc[one].reset_index(drop=True)
    table["fraction"], table["purity"], table["row"] = fine, np.maximum(fine, 1 - fine), -1
    table["label"] = np.where(np.abs(fine - 0.5) < 0.1, -1, fine >= 0.5).astype(np.int8)
    table["partner_id"] = examples.table["wetland_id"].to_numpy()[two]
    table["source"] = "mixed"
    joined = pd.concat([base.table, table], ignore_index=True)
    reflectance = np.concatenate([base.reflectance, values.astype(np.float32)], axis=1)
    context = np.concatenate([base.context, examples.context[:, one]], axis=1)
    return ExampleSet(joined, reflectance, context, examples.notes, examples.refused)
