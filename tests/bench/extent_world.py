"""Invented wetlands with known extent, for tests and benches of observed extent; no part of the package's own demo.

Errors of the simulated water fraction (stated so that they can be judged): noise of 0.05 at pure and 0.13 at half-water
pixels, half of its variance shared by 2 x 2 pixels; 0.02 shared by a scene, 0.02 by a wetland's scene, 0.03 kept by a
pixel for ever; dry look-alikes (4 % of pixels read 0.25 too high for ever); shift of 0.15 pixel a scene; one pixel in ten
beside a cloud is spoilt; canopy hides its share of the water and adds noise.
"""

from __future__ import annotations

from dataclasses import dataclass

import geopandas as gpd
import numpy as np
import pandas as pd
import shapely
from affine import Affine
from scipy import ndimage

from inundate.common.grid import Grid
from inundate.common.site import Site, make_site
from inundate.extent import SceneStack, pixel_weights, weights_on_site

FINE = 2.0
STEP = 10.0


@dataclass(frozen=True)
class World:
    grid: Grid
    site: Site
    wetlands: gpd.GeoDataFrame
    weights: pd.DataFrame
    elevation: np.ndarray
    transform: Affine
    stack: SceneStack
    truth: pd.DataFrame  # wetland_id, scene_id, area_m2


@dataclass(frozen=True)
class Bowl:
    ground: np.ndarray
    model: np.ndarray
    inside: np.ndarray
    polygon: shapely.Geometry
    sill: float


def _smooth(rng: np.random.Generator, shape: tuple[int, int], width: float) -> np.ndarray:
    out = ndimage.gaussian_filter(rng.normal(size=shape), width)
    return out / out.std()


def make_bowl(rng: np.random.Generator, area: float, west: float, north: float, size: int) -> Bowl:
    """Star-shaped bowl of about ``area`` in a block of ``size`` fine cells; outline is the sill's contour."""
    theta = np.linspace(0, 2 * np.pi, 181)[:-1]
    radius = 1 + sum(rng.normal(0, 0.18 / k) * np.cos(k * theta + rng.uniform(0, 6.3)) for k in (1, 2, 3, 4))
    radius = np.maximum(radius, 0.35)
    radius *= np.sqrt(area / (0.5 * np.sum(radius**2) * (theta[1] - theta[0])))
    mid = size * FINE / 2 + rng.uniform(-5, 5, 2)
    xy = np.column_stack([mid[0] + radius * np.cos(theta), mid[1] + radius * np.sin(theta)])
    polygon = shapely.Polygon(xy + np.array([west, north - size * FINE]))
    at = (np.arange(size) + 0.5) * FINE
    x, y = np.meshgrid(at, size * FINE - at)
    dx, dy = x - mid[0], y - mid[1]
    edge = np.interp(np.mod(np.arctan2(dy, dx), 2 * np.pi), np.r_[theta, 2 * np.pi], np.r_[radius, radius[0]])
    reach = np.hypot(dx, dy) / edge
    sill = rng.uniform(0.4, 1.2)
    ground = sill * reach ** rng.uniform(1.0, 3.0) + 0.10 * sill * _smooth(rng, x.shape, 4) * np.minimum(
        1, 2 * (1 - reach).clip(0)
    )
    ground = np.where(reach < 1, np.minimum(ground, sill - 0.01), np.maximum(ground, sill + 0.02))
    model = ground + 0.05 * _smooth(rng, x.shape, 1.5) + rng.normal(0, 0.08)
    water = rng.uniform(-0.2, 0.4) * sill
    return Bowl(ground, np.maximum(model, water), reach < 1, polygon, sill)


def stages(rng: np.random.Generator, days: np.ndarray, n: int) -> np.ndarray:
    """Relative stage (wetland, day): wet late winter, late summer dry-down, weather in common, flashier when small."""
    common = ndimage.gaussian_filter1d(rng.normal(size=days.size), 12) * 5
    out = np.empty((n, days.size))
    for i in range(n):
        season = 0.55 + rng.uniform(0.25, 0.5) * np.cos(2 * np.pi * (days - 75) / 365.25)
        own = ndimage.gaussian_filter1d(rng.normal(size=days.size), 5) * rng.uniform(0.1, 0.5)
        out[i] = np.clip(season + 0.25 * common + own, -0.2, 1.0)
    return out


def _canopy(cover: str, day: float, rng: np.random.Generator, shape: tuple[int, int]) -> tuple[np.ndarray, int]:
    doy = day % 365.25
    share = np.clip((doy - 105) / 30, 0, 1) - np.clip((doy - 285) / 30, 0, 1)
    leaf = 0 if share <= 0.05 else 2 if share >= 0.95 else 1 if doy < 200 else 3
    if cover == "open":
        return np.ones(shape), leaf
    return np.exp(-share * 2.2 * np.clip(1 + 0.5 * ndimage.gaussian_filter(rng.normal(size=shape), 0.7), 0.1, 2)), leaf


def make_world(seed: int = 1, wetlands: int = 40, scenes: int = 120, every_days: float = 7.0) -> World:
    """Wetlands on a lattice of separate blocks, each with its own clouds; truth by counting fine cells."""
    rng = np.random.default_rng(seed)
    area = np.exp(rng.uniform(np.log(500), np.log(40000), wetlands))
    block = 340.0
    per = int(np.ceil(np.sqrt(wetlands)))
    size, coarse = int(block / FINE), int(block / STEP)
    grid = Grid("EPSG:32633", 500000.0, 5800000.0, STEP, per * coarse, per * coarse)
    elevation = np.full((per * size, per * size), np.nan, np.float32)
    days = np.arange(scenes) * every_days + rng.integers(0, 3, scenes)
    daily = np.arange(int(days.max()) + 2).astype(float)
    relative = stages(rng, daily, wetlands)
    names = np.array([f"w{i:04d}" for i in range(wetlands)])
    cube = {n: np.zeros((scenes, grid.height, grid.width), np.float32) for n in ("fraction", "view")}
    code = np.zeros((scenes, grid.height, grid.width), np.uint8)
    leaf = np.zeros((scenes, wetlands), np.uint8)
    truth, outlines, covers = np.zeros((scenes, wetlands)), [], []
    shift = rng.normal(0, 0.15, (scenes, 2))
    common = rng.normal(0, 0.02, scenes)
    for i in range(wetlands):
        r, c = divmod(i, per)
        bowl = make_bowl(rng, area[i], grid.west + c * block, grid.north - r * block, size)
        outlines.append(bowl.polygon)
        covers.append("open" if rng.random() < 0.3 else "deciduous")
        elevation[r * size : (r + 1) * size, c * size : (c + 1) * size] = bowl.model
        at = (slice(r * coarse, (r + 1) * coarse), slice(c * coarse, (c + 1) * coarse))
        kept = rng.normal(0, 0.03, (coarse, coarse)) + 0.25 * (rng.random((coarse, coarse)) < 0.04)
        for t in range(scenes):
            stage = relative[i, int(days[t])] * bowl.sill
            wet = bowl.inside & (bowl.ground < stage) & (stage > 0)
            truth[t, i] = wet.sum() * FINE**2 / (bowl.inside.sum() * FINE**2) * bowl.polygon.area
            true = wet.reshape(coarse, 5, coarse, 5).mean(axis=(1, 3))
            view, leaf[t, i] = _canopy(covers[i], days[t], rng, true.shape)
            cube["fraction"][t][at] = _observe(rng, true, view, kept, shift[t], common[t])
            cube["view"][t][at] = np.clip(view + rng.normal(0, 0.05, view.shape) * (view < 1), 0, 1)
            code[t][at] = _cloud(rng, true.shape, cube["fraction"][t][at])
    frame = gpd.GeoDataFrame({"wetland_id": names, "cover": covers}, geometry=outlines, crs=grid.crs)
    frame["area_max_m2"] = frame.geometry.area
    weights = pixel_weights(frame, grid)
    site = make_site(grid, weights["row"].to_numpy(), weights["col"].to_numpy(), margin=1)
    pick = (slice(None), site.rows, site.cols)
    when = np.datetime64("2031-01-01T10:30", "ns") + (days * 86400e9).astype("timedelta64[ns]")
    ids = np.array([f"s{t:04d}" for t in range(scenes)])
    stack = SceneStack(ids, when, cube["fraction"][pick], code[pick], names, leaf, view=cube["view"][pick])
    table = pd.DataFrame(
        {
            "wetland_id": np.repeat(names, scenes),
            "scene_id": np.tile(ids, wetlands),
            "true_m2": truth.T.ravel(),
        }
    )
    transform = Affine(FINE, 0, grid.west, 0, -FINE, grid.north)
    return World(grid, site, frame, weights_on_site(weights, site), elevation, transform, stack, table)


def _observe(
    rng: np.random.Generator, true: np.ndarray, view: np.ndarray, kept: np.ndarray, shift: np.ndarray, common: float
) -> np.ndarray:
    moved = np.clip(ndimage.shift(ndimage.gaussian_filter(true, 0.35), shift, order=1, mode="nearest"), 0, 1)
    sd = np.sqrt(0.05**2 + (0.13**2 - 0.05**2) * 4 * moved * (1 - moved) + 0.15**2 * (1 - view))
    pairs = np.kron(rng.normal(size=(true.shape[0] // 2 + 1, true.shape[1] // 2 + 1)), np.ones((2, 2)))
    noise = sd * (rng.normal(size=true.shape) + pairs[: true.shape[0], : true.shape[1]]) / np.sqrt(2)
    hidden = 0.25 * (1 - view)
    return np.clip(
        0.02 + 0.95 * (moved * view + hidden * 0.3) + noise + kept * view + common + rng.normal(0, 0.02), 0, 1
    )


def _cloud(rng: np.random.Generator, shape: tuple[int, int], fraction: np.ndarray) -> np.ndarray:
    """View codes of a block; spoils one in ten clear pixels beside cloud in ``fraction``."""
    code = np.zeros(shape, np.uint8)
    draw = rng.random()
    if draw < 0.25:
        code[:] = 1
    elif draw < 0.6:
        field = _smooth(rng, shape, 5)
        code[field > np.quantile(field, rng.uniform(0.1, 0.9))] = 1
        beside = ndimage.binary_dilation(code == 1, iterations=2) & (code == 0) & (rng.random(shape) < 0.1)
        fraction[beside] = rng.uniform(0, 0.5, int(beside.sum()))
    elif draw < 0.62:
        code[:] = 3
    elif draw < 0.64:
        code[:] = 255
    return code
