"""What grows where on the 2.5 m grid, and the calendar of leaves."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
import shapely
from rasterio import features
from scipy import ndimage
from scipy.spatial import cKDTree
from scipy.special import ndtr

from inundate.common.seeds import rng_for
from inundate.reserve.fields import rough_field, smooth_field
from inundate.reserve.plan import Plan
from inundate.reserve.terrain import Bowl, Ground

NO_TREES, DECIDUOUS, EVERGREEN = 0, 1, 2
HERB_KINDS = ("understorey", "emergent", "meadow", "winter_crop", "summer_crop", "none")
OFFSET_RANGE_D = 24
UP_WIDTH_D, FALL_WIDTH_D = 18.0, 26.0
"""Days between 10 % and 90 % of leaf-out and of leaf fall (common practice, no source)."""


@dataclass(frozen=True, slots=True)
class Cover:
    """Plants and ground of each 2.5 m cell; arrays of shape (row, column).

    Attributes
    ----------
    trees : ndarray of uint8
        NO_TREES, DECIDUOUS or EVERGREEN.
    lai, wai : ndarray of uint8
        Peak leaf area index in tenths, woody area index in twentieths.
    height_m : ndarray of float32
        Height of the tree crowns.
    offset : ndarray of uint8
        Days by which leaf-out and leaf fall differ from the region's, plus OFFSET_RANGE_D.
    herb, herb_lai : ndarray of uint8
        Position in HERB_KINDS; peak leaf area index in tenths.
    ground, mix : ndarray of uint8
        Position in spectra.GROUND_KINDS; mix in tenths.
    texture : ndarray of float32
        Brightness of the ground against its kind's mean.
    patch : ndarray of float32
        Smooth field of standard deviation 1, for patchy snow, ice and wetness.
    """

    trees: np.ndarray
    lai: np.ndarray
    wai: np.ndarray
    height_m: np.ndarray
    offset: np.ndarray
    herb: np.ndarray
    herb_lai: np.ndarray
    ground: np.ndarray
    mix: np.ndarray
    texture: np.ndarray
    patch: np.ndarray


@dataclass(frozen=True, slots=True)
class LeafYears:
    """Leaf calendar: region's half dates by year and the wetlands' own days.

    Attributes
    ----------
    up, fall : dict of int to float
        Day of year of half leaf-out and of half leaf fall, by year.
    offset : ndarray of int64, shape (wetland,)
        Each wetland's days late (both).
    """

    up: dict[int, float]
    fall: dict[int, float]
    offset: np.ndarray


def make_leaf_years(plan: Plan, n_wetlands: int) -> LeafYears:
    """Draw the leaf calendar: years differ by 6 days (standard deviation), wetlands by 4."""
    years = range(plan.days[0].year - 1, plan.days[-1].year + 2)
    up, fall = {}, {}
    for year in years:
        rng = rng_for(plan.seed, "leaf year", year)
        up[year] = 119.0 + 6.0 * float(np.clip(rng.standard_normal(), -2, 2))
        fall[year] = 296.0 + 6.0 * float(np.clip(rng.standard_normal(), -2, 2))
    own = rng_for(plan.seed, "leaf wetlands", plan.size).normal(0, 4.0, n_wetlands)
    return LeafYears(up, fall, np.clip(np.round(own), -11, 11).astype(np.int64))


def leaf_share(years: LeafYears, day: pd.Timestamp, offset_d: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the share of full leaf (0..1) and of autumn colour (0..1) for offsets in days."""
    doy = day.day_of_year + 0.45
    k_up, k_fall = 2 * np.log(9) / UP_WIDTH_D, 2 * np.log(9) / FALL_WIDTH_D
    up = 1 / (1 + np.exp(-k_up * (doy - years.up[day.year] - offset_d)))
    late = doy - years.fall[day.year] - offset_d
    stay = 1 / (1 + np.exp(k_fall * late))
    colour = 1 / (1 + np.exp(-2 * np.log(9) / 22.0 * (late + 9.0)))
    summer = 1.0 - 0.08 * np.clip((doy - 160) / 120, 0, 1)
    return up * stay * summer, colour


def herb_state(kind: int, day: pd.Timestamp, up_doy: float) -> tuple[float, float]:
    """Return leaf area as a share of the peak, and the green share of it, for a kind of herb on a day."""
    doy = float(day.day_of_year)
    rise = 1 / (1 + np.exp(-(doy - up_doy - 12) / 9.0))
    fade = 1 / (1 + np.exp((doy - 275) / 12.0))
    name = HERB_KINDS[kind]
    if name == "understorey":
        early = 1 / (1 + np.exp(-(doy - up_doy + 8) / 6.0))
        return float(0.05 + 0.95 * early * fade), float(0.1 + 0.9 * early * fade)
    if name == "emergent":
        late = 1 / (1 + np.exp(-(doy - up_doy - 25) / 10.0))
        lodged = 0.4 * np.exp(-max(doy - 285.0, 0.0) / 25.0)  # dead stems break down by the turn of the year
        return float(0.06 + 0.94 * late * (fade + (1 - fade) * lodged)), float(0.03 + 0.97 * late * fade)
    if name == "meadow":
        mown = min(abs(doy - 172), abs(doy - 238))
        return float(0.35 + 0.65 * rise * fade * np.clip(mown / 25.0, 0.35, 1)), float(0.45 + 0.5 * rise * fade)
    if name == "winter_crop":
        grown = np.interp(
            doy, [1, 70, 130, 175, 200, 205, 270, 300, 366], [0.15, 0.2, 0.9, 1, 0.8, 0.1, 0.02, 0.1, 0.15]
        )
        return float(grown), float(np.interp(doy, [1, 160, 195, 205, 280, 300, 366], [1, 1, 0.15, 0.1, 0.3, 1, 1]))
    if name == "summer_crop":
        grown = np.interp(doy, [1, 130, 195, 240, 270, 280, 366], [0.02, 0.02, 0.8, 1, 0.8, 0.08, 0.02])
        return float(grown), float(np.interp(doy, [1, 230, 275, 366], [1, 1, 0.2, 0.1]))
    return 0.0, 0.0


_STANDS = {  # name: trees, closure, leaf area, herb kind, herb LAI, ground kind
    "deciduous": (DECIDUOUS, 0.93, 5.2, 0, 0.9, 0),
    "evergreen": (EVERGREEN, 0.90, 4.6, 0, 0.3, 0),
    "mixed": (DECIDUOUS, 0.90, 4.8, 0, 0.6, 0),
    "meadow": (NO_TREES, 0.02, 4.0, 2, 3.0, 1),
    "winter_crop": (NO_TREES, 0.0, 0.0, 3, 4.0, 2),
    "summer_crop": (NO_TREES, 0.0, 0.0, 4, 4.0, 2),
}
_STAND_WEIGHTS = (0.52, 0.11, 0.08, 0.13, 0.09, 0.07)


def _stands(plan: Plan, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """Return the stand number of each cell and the kind of each stand: cells go to the nearest of random centres."""
    fine = plan.fine
    n = max(8, round((plan.side_px * 10.0) ** 2 / 36000.0))
    side = fine.height * fine.step
    centres = rng.uniform(-0.03 * side, 1.03 * side, (n, 2))
    kinds = rng.choice(len(_STANDS), n, p=_STAND_WEIGHTS)
    coarse = np.arange(0, fine.height, 2) * fine.step + 2.5
    yy, xx = np.meshgrid(coarse, coarse, indexing="ij")
    wiggle = 9.0 * smooth_field(rng, yy.shape, 10.0)
    _, near = cKDTree(centres).query(np.stack([yy + wiggle, 1.15 * xx - wiggle], axis=-1))
    number = np.repeat(np.repeat(near, 2, axis=0), 2, axis=1)[: fine.height, : fine.width]
    return number, kinds


def _tracks(plan: Plan, rng: np.random.Generator) -> np.ndarray:
    """Raster of a few gravel tracks, bool."""
    west, south, east, north = plan.grid.bounds
    lines = []
    for i in range(5 if plan.size == "default" else 2):
        t = np.linspace(0, 1, 14)
        across = west + (east - west) * t
        y0, y1 = rng.uniform(south, north, 2)
        along = y0 + (y1 - y0) * t + np.cumsum(rng.normal(0, 0.018 * (north - south), 14))
        pts = np.stack([across, along], axis=1)
        if i % 2:
            pts = np.stack([west + along - south, south + across - west], axis=1)
        lines.append(shapely.LineString(pts).buffer(3.2))
    shape = (plan.fine.height, plan.fine.width)
    return features.rasterize(lines, out_shape=shape, transform=plan.fine.transform, dtype="uint8") > 0


def _wetland_fields(bowls: list[Bowl], plan: Plan) -> dict[str, np.ndarray]:
    """Draw each wetland's plant and floor properties."""
    n = len(bowls)
    out = {k: np.empty(n) for k in ("closure", "lai", "wai", "herb", "mix", "trees", "herb_kind")}
    for i, bowl in enumerate(bowls):
        rng = rng_for(plan.seed, "plants", bowl.wetland_id)
        out["closure"][i] = bowl.closure
        out["trees"][i] = {"open": DECIDUOUS, "deciduous": DECIDUOUS, "evergreen": EVERGREEN}[bowl.cover]
        out["lai"][i] = rng.uniform(3.6, 5.8) if bowl.cover != "evergreen" else rng.uniform(2.6, 4.0)
        out["wai"][i] = rng.uniform(0.4, 0.8)
        out["herb"][i] = rng.uniform(0.6, 2.6) if bowl.cover == "open" else rng.uniform(0.1, 0.9)
        out["herb_kind"][i] = 1 if bowl.cover == "open" else 0
        out["mix"][i] = rng.uniform(0.45, 1.0) if bowl.cover == "open" else rng.uniform(0.15, 0.75)
    return out


def _crowns(rng: np.random.Generator, shape: tuple[int, int], closure: np.ndarray) -> np.ndarray:
    """Where the crowns stand: clumped, with openings; a cell is crown where a rank field lies below the closure."""
    field = rough_field(rng, shape, (2.2, 5.0, 13.0), 0.55)
    return ndtr(field) < closure


def make_cover(plan: Plan, bowls: list[Bowl], ground: Ground, years: LeafYears) -> Cover:
    """Grow the plants and lay the ground."""
    rng = rng_for(plan.seed, "cover", plan.size)
    shape = (plan.fine.height, plan.fine.width)
    number, kinds = _stands(plan, rng)
    stand = np.array(list(_STANDS.values()))[kinds]
    vary = rng.normal(1.0, 0.10, len(kinds)).clip(0.75, 1.25)
    trees = stand[:, 0].astype(np.uint8)[number]
    closure, lai = stand[:, 1][number], (stand[:, 2] * vary)[number]
    herb, herb_lai = stand[:, 3].astype(np.uint8)[number], (stand[:, 4] * vary)[number]
    kind, mix = stand[:, 5].astype(np.uint8)[number], rng.uniform(0.05, 0.35, len(kinds))[number]
    soil = kind == 2
    mix = np.where(soil, rng.uniform(0.2, 0.95, len(kinds))[number], mix)
    mixed = (kinds == 2)[number] & (smooth_field(rng, shape, 9.0) > 0.25)
    trees = np.where(mixed, np.uint8(EVERGREEN), trees)
    dark = (smooth_field(rng, shape, 26.0) > 2.05) & (ground.wetland < 0) & (kind != 3)
    mix = np.where(dark, 0.95, mix)
    kind = np.where(dark, np.uint8(0), kind)
    plants = _wetland_fields(bowls, plan)
    ring = ground.distance_m < 22.0
    inside = ground.wetland >= 0
    near = ground.nearest
    woody = plants["closure"][near] > 0.3
    own = inside | (ring & woody)
    closure = np.where(own, plants["closure"][near], closure)
    trees = np.where(own, plants["trees"][near].astype(np.uint8), trees)
    lai = np.where(own, plants["lai"][near], lai)
    herb = np.where(inside, plants["herb_kind"][near].astype(np.uint8), herb)
    patchy = np.clip(1.0 + 0.65 * smooth_field(rng, shape, 7.0), 0.05, 2.6)
    herb_lai = np.where(inside, plants["herb"][near] * patchy, herb_lai)
    bottom = np.clip(1.2 - ground.distance_m * 0.05, 0, 1)
    mix = np.where(own, plants["mix"][near] * np.where(inside, 1.0, bottom), mix)
    mix = np.clip(mix + 0.12 * smooth_field(rng, shape, 5.0), 0, 1)
    kind = np.where(own, np.uint8(0), kind)
    track = _tracks(plan, rng) & ~inside & (ground.distance_m > 12)
    kind = np.where(track, np.uint8(3), kind)
    herb_lai = np.where(track, 0.1, herb_lai)
    closure = np.where(track, 0.25 * closure, closure)
    crown = _crowns(rng, shape, closure)
    return _finish(rng, crown, (trees, lai, plants["wai"][near], herb, herb_lai, kind, mix), ground, years)


def _finish(rng: np.random.Generator, crown: np.ndarray, parts: tuple, ground: Ground, years: LeafYears) -> Cover:
    """Vary within crowns and pack into small integers."""
    trees, lai, wai, herb, herb_lai, kind, mix = parts
    shape = crown.shape
    vary = np.clip(1.0 + 0.22 * smooth_field(rng, shape, 3.0), 0.4, 1.7)
    forest = ndimage.uniform_filter(crown.astype(np.float32), 9) > 0.35
    lai = np.where(crown, lai * vary, 0.0)
    shrubs = (~crown & forest & (rng.random(shape) < 0.25)) * 0.5
    lai = np.where(~crown & (trees != EVERGREEN), shrubs, lai)
    lai = np.where(~crown & (trees == EVERGREEN), 0.0, lai)
    wai = np.where(crown, wai * np.clip(1.0 + 0.25 * smooth_field(rng, shape, 2.5), 0.3, 1.8), 0.12 * forest)
    trees = np.where(lai + wai > 0, trees, np.uint8(NO_TREES))
    height = np.where(crown, np.clip(15.0 + 2.5 * smooth_field(rng, shape, 20.0), 8, 26), 0.0)
    offset = np.clip(np.round(2.5 * smooth_field(rng, shape, 60.0)), -8, 8)
    at_wetland = ground.distance_m < 22.0
    small = np.clip(np.round(1.2 * smooth_field(rng, shape, 4.0)), -3, 3)
    offset = np.where(at_wetland, years.offset[ground.nearest], offset) + small
    texture = np.clip(1.0 + 0.10 * rough_field(rng, shape, (2.0, 12.0), 0.8), 0.6, 1.5)
    return Cover(
        trees.astype(np.uint8),
        np.clip(np.round(lai / 0.1), 0, 70).astype(np.uint8),
        np.clip(np.round(wai / 0.05), 0, 40).astype(np.uint8),
        height.astype(np.float32),
        (np.clip(offset, -OFFSET_RANGE_D, OFFSET_RANGE_D) + OFFSET_RANGE_D).astype(np.uint8),
        herb.astype(np.uint8),
        np.clip(np.round(herb_lai / 0.1), 0, 70).astype(np.uint8),
        kind.astype(np.uint8),
        np.clip(np.round(mix * 10), 0, 10).astype(np.uint8),
        texture.astype(np.float32),
        smooth_field(rng, shape, 6.0),
    )
