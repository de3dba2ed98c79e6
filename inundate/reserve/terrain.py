"""Wetland outlines, bowls and the ground of the reserve, on the 2.5 m grid."""

from __future__ import annotations

from dataclasses import dataclass

import geopandas as gpd
import numpy as np
import shapely
from affine import Affine
from rasterio import features
from scipy import ndimage

from inundate.common.grid import Grid
from inundate.common.seeds import rng_for
from inundate.reserve.fields import rough_field, smooth_field
from inundate.reserve.plan import CRS, Plan

ROUGH_M = 0.06
"""Height spread of the ground inside one 2.5 m cell: it floods evenly over this span of stage (uniform micro-relief)."""


@dataclass(frozen=True, slots=True)
class Bowl:
    """Outline and shape of one wetland.

    Attributes
    ----------
    wetland_id, cover : str
    x, y : float
        Centre, m.
    polygon : shapely Polygon
        Largest extent.
    depth_m, power : float
        Depth at the sill and the exponent of the profile (Hayashi & van der Kamp 2000, J. Hydrol. 237:74).
    closure : float
        Share of the wetland under tree crowns.
    """

    wetland_id: str
    cover: str
    x: float
    y: float
    polygon: shapely.Polygon
    depth_m: float
    power: float
    closure: float


@dataclass(frozen=True, slots=True)
class Ground:
    """The ground on the 2.5 m grid; arrays have shape (row, column), row 0 is north.

    Attributes
    ----------
    elevation : ndarray of float32
        Mean ground elevation of a cell, m.
    wetland : ndarray of int16
        Position of the wetland that holds the cell (any part of it), -1 outside.
    share : ndarray of float32
        Share of the cell inside its wetland's polygon, 0..1.
    distance_m : ndarray of float32
        Distance to the nearest wetland, 0 inside.
    nearest : ndarray of int16
        Position of the nearest wetland.
    sill_m, lowest_m : ndarray of float64, shape (wetland,)
        Elevation of the sill and of the lowest ground.
    """

    elevation: np.ndarray
    wetland: np.ndarray
    share: np.ndarray
    distance_m: np.ndarray
    nearest: np.ndarray
    sill_m: np.ndarray
    lowest_m: np.ndarray


def _areas_ha(rng: np.random.Generator, plan: Plan) -> np.ndarray:
    low, high = plan.area_limits_ha
    small = -(-plan.n_wetlands // 3)
    edge = 0.3
    little = low * (edge / low) ** ((np.arange(small) + rng.random(small)) / (small + 0.3))
    rest = plan.n_wetlands - small
    rank = ((np.arange(rest) + rng.random(rest)) / rest) ** 1.35
    large = edge * 1.02 * (high / (edge * 1.02)) ** np.minimum(rank, 0.995)
    return np.concatenate([little, large])[::-1]


def _outline(rng: np.random.Generator, area_m2: float) -> tuple[np.ndarray, float]:
    """Return ring coordinates (vertex, 2) around 0 with exactly ``area_m2``, and the largest radius."""
    n = int(np.clip(28 + 6 * np.sqrt(area_m2) / 3, 40, 150))
    theta = np.linspace(0, 2 * np.pi, n, endpoint=False)
    radius = np.ones(n)
    for k in range(2, 9):
        radius += rng.normal(0, 0.42 / k**1.25) * np.cos(k * theta + rng.uniform(0, 2 * np.pi))
    radius = np.clip(radius, 0.38, None)
    stretch = rng.uniform(1.0, 1.7)
    x, y = radius * np.cos(theta) * stretch, radius * np.sin(theta)
    turn = rng.uniform(0, np.pi)
    ring = np.stack([x * np.cos(turn) - y * np.sin(turn), x * np.sin(turn) + y * np.cos(turn)], axis=1)
    ring *= np.sqrt(area_m2 / shapely.Polygon(ring).area)
    return ring, float(np.hypot(ring[:, 0], ring[:, 1]).max())


def _covers(rng: np.random.Generator, n: int) -> list[str]:
    evergreen = max(1, round(0.10 * n))
    open_ones = max(1, round(0.22 * n))
    names = ["evergreen"] * evergreen + ["open"] * open_ones + ["deciduous"] * (n - evergreen - open_ones)
    return [names[i] for i in rng.permutation(n)]


def make_bowls(plan: Plan) -> list[Bowl]:
    """Place the wetlands and draw their outlines and shapes; ids run from west to east."""
    rng = rng_for(plan.seed, "bowls", plan.size)
    grid = plan.grid
    west, south, east, north = grid.bounds
    areas = _areas_ha(rng, plan) * 1e4
    placed: list[tuple[float, float, float, np.ndarray]] = []
    for area in areas:
        ring, reach = _outline(rng, float(area))
        margin, gap = reach + 40.0, 45.0
        for _ in range(4000):
            x, y = rng.uniform(west + margin, east - margin), rng.uniform(south + margin, north - margin)
            if all(np.hypot(x - a, y - b) > reach + r + gap for a, b, r, _ in placed):
                break
            gap = max(gap * 0.999, 12.0)
        placed.append((x, y, reach, ring))
    covers = _covers(rng, plan.n_wetlands)
    order = np.argsort([p[0] for p in placed])
    bowls = []
    for rank, place in enumerate(order):
        x, y, _, ring = placed[place]
        polygon = shapely.Polygon(np.round(ring + np.array([x, y]), 3))
        ha = polygon.area / 1e4
        depth = float(np.clip(0.62 * ha**0.16 * np.exp(rng.normal(0, 0.28)), 0.28, 1.5))
        power = float(np.clip(np.exp(rng.normal(0.45, 0.40)), 0.7, 4.0))
        cover = covers[rank]
        closure = {
            "open": rng.uniform(0.0, 0.15),
            "deciduous": 1.0 - 0.5 * rng.beta(1.2, 2.2),
            "evergreen": rng.uniform(0.55, 0.85),
        }[cover]
        bowls.append(Bowl(f"SR{rank + 1:03d}", cover, x, y, polygon, depth, power, float(closure)))
    return bowls


def _share_of_cells(polygon: shapely.Polygon, fine: Grid, box: tuple[slice, slice]) -> np.ndarray:
    """Share of each cell inside the polygon, from an 8 x 8 raster of points in each cell."""
    rows, cols = box
    parts = 8
    step = fine.step / parts
    transform = Affine(step, 0, fine.west + cols.start * fine.step, 0, -step, fine.north - rows.start * fine.step)
    shape = ((rows.stop - rows.start) * parts, (cols.stop - cols.start) * parts)
    hit = features.rasterize([(polygon, 1)], out_shape=shape, transform=transform, dtype="uint8")
    return hit.reshape(shape[0] // parts, parts, shape[1] // parts, parts).mean(axis=(1, 3), dtype=np.float64)


def _box(polygon: shapely.Polygon, fine: Grid, margin: int = 2) -> tuple[slice, slice]:
    west, south, east, north = polygon.bounds
    (r0, r1), (c0, c1) = fine.locate(np.array([west, east]), np.array([north, south]))
    return (
        slice(max(int(r0) - margin, 0), min(int(r1) + margin + 1, fine.height)),
        slice(max(int(c0) - margin, 0), min(int(c1) + margin + 1, fine.width)),
    )


def _relative_radius(bowl: Bowl, x: np.ndarray, y: np.ndarray) -> np.ndarray:
    """Distance from the bowl's centre over the distance to its outline in the same direction (star-shaped)."""
    ring = shapely.get_coordinates(bowl.polygon)[:-1] - np.array([bowl.x, bowl.y])
    angle = np.arctan2(ring[:, 1], ring[:, 0])
    order = np.argsort(angle)
    radius = np.hypot(ring[:, 0], ring[:, 1])[order]
    angle = angle[order]
    angle = np.concatenate([angle[-1:] - 2 * np.pi, angle, angle[:1] + 2 * np.pi])
    radius = np.concatenate([radius[-1:], radius, radius[:1]])
    dx, dy = x - bowl.x, y - bowl.y
    return np.hypot(dx, dy) / np.interp(np.arctan2(dy, dx), angle, radius)


def _bowl_floor(plan: Plan, bowl: Bowl, x: np.ndarray, y: np.ndarray) -> np.ndarray:
    """Height of the bowl's ground below its sill (m, <= -ROUGH_M / 2), with secondary basins and hummocks."""
    rng = rng_for(plan.seed, "bowl", bowl.wetland_id)
    rho = np.clip(_relative_radius(bowl, x, y), 0, 1)
    floor = -bowl.depth_m * (1.0 - rho**bowl.power)
    swell = smooth_field(rng, x.shape, 12.0) * 0.13 * bowl.depth_m
    humps = smooth_field(rng, x.shape, 3.0) * 0.06 + rng.normal(0, 0.015, x.shape)
    floor = floor + (swell + humps) * np.clip(3.0 * (1.0 - rho), 0.15, 1.0)
    return np.minimum(floor, -ROUGH_M / 2)


def make_ground(plan: Plan, bowls: list[Bowl]) -> Ground:
    """Lay the bowls into a gently rolling landscape."""
    fine = plan.fine
    shape = (fine.height, fine.width)
    rng = rng_for(plan.seed, "ground", plan.size)
    relief = 6.0 * rough_field(rng, shape, (240.0, 90.0, 30.0), 0.42) + 0.12 * smooth_field(rng, shape, 8.0)
    relief += 164.0 - np.float32(relief.min()) * np.float32(0.5)
    wetland = np.full(shape, -1, np.int16)
    share = np.zeros(shape, np.float32)
    for i, bowl in enumerate(bowls):
        box = _box(bowl.polygon, fine)
        part = _share_of_cells(bowl.polygon, fine, box)
        better = part > share[box]
        wetland[box] = np.where(better, np.int16(i), wetland[box])
        share[box] = np.where(better, part, share[box])
    distance, (near_r, near_c) = ndimage.distance_transform_edt(wetland < 0, return_indices=True)
    nearest = wetland[near_r, near_c]
    distance = (distance * fine.step).astype(np.float32)
    sill = np.array([float(np.quantile(relief[wetland == i], 0.1)) for i in range(len(bowls))])
    blend = 1.0 - np.exp(-((distance / 45.0) ** 2))
    rise = 0.04 + 0.5 * (1.0 - np.exp(-distance / 25.0)) * (1.0 - blend)
    near = sill[nearest] + rise + rng.normal(0, 0.02, shape)
    outside = near + (relief - sill[nearest]) * blend
    elevation = outside.astype(np.float64)
    lowest = np.empty(len(bowls))
    for i, bowl in enumerate(bowls):
        box = _box(bowl.polygon, fine)
        mine = wetland[box] == i
        rows, cols = np.mgrid[box]
        x, y = fine.centres(rows, cols)
        floor = sill[i] + _bowl_floor(plan, bowl, x, y)
        elevation[box] = np.where(mine, floor, elevation[box])
        lowest[i] = float(np.float32(floor[mine]).min()) - ROUGH_M / 2
    return Ground(elevation.astype(np.float32), wetland, share, distance, nearest, sill, lowest)


def cell_fraction(stage_m: float | np.ndarray, height_m: np.ndarray) -> np.ndarray:
    """Return the share of cells under water: ``height_m`` is a cell's mean ground above the lowest ground."""
    return np.clip(0.5 + (stage_m - height_m) / ROUGH_M, 0.0, 1.0)


def hypsometry(plan: Plan, bowls: list[Bowl], ground: Ground, step_m: float = 0.01) -> list[np.ndarray]:
    """Return for each wetland the area (m2) at stages 0, 1, 2 ... cm, up to and with the sill (rounded up).

    The last value is the polygon's own area; the cells' shares are scaled to add up to it.
    """
    tables = []
    for i, bowl in enumerate(bowls):
        box = _box(bowl.polygon, plan.fine)
        mine = ground.wetland[box] == i
        height = ground.elevation[box][mine].astype(np.float64) - ground.lowest_m[i]
        weight = ground.share[box][mine].astype(np.float64)
        weight *= bowl.polygon.area / weight.sum()
        top = int(np.ceil((ground.sill_m[i] - ground.lowest_m[i]) / step_m - 1e-9))
        stages = np.arange(top + 1) * step_m
        area = np.array([float((cell_fraction(s, height) * weight).sum()) for s in stages])
        area[-1] = bowl.polygon.area
        tables.append(np.minimum(area, bowl.polygon.area))
    return tables


def wetlands_layer(bowls: list[Bowl]) -> gpd.GeoDataFrame:
    """Return the polygon layer of the inputs: wetland_id, cover and the mapped area."""
    return gpd.GeoDataFrame(
        {
            "wetland_id": [b.wetland_id for b in bowls],
            "cover": [b.cover for b in bowls],
            "mapped_ha": [round(b.polygon.area / 1e4, 4) for b in bowls],
        },
        geometry=[b.polygon for b in bowls],
        crs=CRS,
    )
