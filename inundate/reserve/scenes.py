"""Views of the reserve: which days, in what state, and the numbers that the sensor stores."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from inundate.common.seeds import rng_for
from inundate.reserve import canopy, clouds, light, spectra
from inundate.reserve.canopy import OFFSET_RANGE_D, Cover, LeafYears
from inundate.reserve.hydrology import Water
from inundate.reserve.plan import Plan
from inundate.reserve.render import BANDS_10M, BANDS_20M, Surface, draw_surface
from inundate.reserve.terrain import Bowl, Ground


@dataclass(frozen=True, slots=True)
class ViewPlan:
    """What is drawn beforehand for one view."""

    scene_id: str
    day: pd.Timestamp
    time: pd.Timestamp
    sun_elevation: float
    sun_azimuth: float
    cloudiness: float
    swath_edge: bool
    dx_m: float
    dy_m: float
    gain: float
    band_gain: np.ndarray
    haze: float
    baseline: str


@dataclass(frozen=True, slots=True)
class Landscape:
    """All that a view is drawn from."""

    plan: Plan
    bowls: list[Bowl]
    ground: Ground
    cover: Cover
    years: LeafYears
    water: Water
    weather: pd.DataFrame
    stain: np.ndarray
    grain: np.ndarray


@dataclass(frozen=True, slots=True)
class ViewData:
    """One view as stored, and its truth.

    Attributes
    ----------
    ten, twenty : ndarray of uint16
        Stored numbers, (4, row, column) at 10 m and (6, row, column) at 20 m.
    classes : ndarray of uint8
        Scene classification at 20 m.
    truth : ndarray of uint8, shape (3, row, column)
        Water share in percent, visible share in percent, true view code; 10 m.
    """

    ten: np.ndarray
    twenty: np.ndarray
    classes: np.ndarray
    truth: np.ndarray


def plan_views(plan: Plan) -> list[ViewPlan]:
    """Draw the views that are kept: every few days, overcast ones dropped."""
    days = plan.days[2 :: plan.view_every_days]
    views = []
    for day in days:
        rng = rng_for(plan.seed, "view", day.date())
        winter = float(np.cos(2 * np.pi * (day.day_of_year - 10) / 365.25))
        elevation, azimuth = light.sun_position(day)
        early = (day - plan.days[0]).days < 0.3 * plan.n_days
        gain = float(1 + 0.03 * np.clip(rng.standard_normal(), -2.5, 2.5))
        shift = 3.5 * np.clip(rng.standard_normal(2), -2.0, 2.0)
        views.append(
            ViewPlan(
                scene_id=f"SR_{day:%Y%m%d}",
                day=day,
                time=day + pd.Timedelta(hours=10, minutes=5, seconds=31),
                sun_elevation=elevation,
                sun_azimuth=azimuth,
                cloudiness=clouds.draw_cloudiness(rng, winter),
                swath_edge=bool(rng.random() < 0.05),
                dx_m=float(shift[0]),
                dy_m=float(shift[1]),
                gain=gain,
                band_gain=gain * (1 + 0.008 * rng.standard_normal(spectra.N_BANDS)),
                haze=float(np.clip(rng.normal(0.002, 0.003), -0.005, 0.010)),
                baseline="03.01" if early else "05.10",
            )
        )
    fewest, most = plan.scene_limits
    order = sorted(views, key=lambda v: v.cloudiness)
    good = [v for v in order if v.cloudiness < 0.86]
    kept = order[: min(max(len(good), fewest), most)]
    return sorted(kept, key=lambda v: v.day)


def make_surface(land: Landscape, view: ViewPlan) -> Surface:
    """Put together the state of the landscape at one view."""
    plan, cover = land.plan, land.cover
    hour = int((view.time - plan.days[0]) / pd.Timedelta(hours=1))
    day = (view.day - plan.days[0]).days
    zenith = round((90.0 - view.sun_elevation) / 2.0) * 2.0
    offsets = np.arange(-OFFSET_RANGE_D, OFFSET_RANGE_D + 1)
    share, colour = canopy.leaf_share(land.years, view.day, offsets)
    green, autumn = spectra.layer_table("green", zenith), spectra.layer_table("autumn", zenith)
    mix = colour.astype(np.float32)[:, None, None, None]
    up = land.years.up[view.day.year]
    herb, dead = spectra.layer_table("herb", zenith), spectra.layer_table("dead", zenith)
    state = [canopy.herb_state(k, view.day, up) for k in range(len(canopy.HERB_KINDS))]
    herbs = np.stack([np.float32(g) * herb + np.float32(1 - g) * dead for _, g in state])
    water = np.stack([spectra.water_table(s, c, m, zenith) for s, c, m in land.stain])
    region = float(np.interp(0, offsets, share))
    plant = np.where(cover.trees == canopy.DECIDUOUS, np.float32(0.1 * region), np.float32(0.1)) * cover.lai
    plant += np.float32(0.05) * cover.wai
    beam = light.beam_map(cover.height_m, plant, land.grain, view.sun_elevation, view.sun_azimuth)
    weather = land.weather.iloc[land.weather.shape[0] - plan.n_days + day]
    return Surface(
        stage=land.water.hourly[:, hour],
        water=water,
        leaves=((1 - mix) * green + mix * autumn).astype(np.float32),
        share=share.astype(np.float32),
        needles=spectra.layer_table("needle", zenith),
        bark=spectra.layer_table("bark", zenith),
        herbs=herbs.astype(np.float32),
        herb_share=np.array([s for s, _ in state], np.float32),
        beam=beam,
        sky=spectra.sky_share(zenith).astype(np.float32),
        wetness=float(np.clip(land.water.antecedent_mm[day] / 25.0, 0.05, 0.9)),
        snow_mm=float(weather["snow_mm"]),
        ice_m=float(weather["ice_m"]),
    )


def _stored(rng: np.random.Generator, seen: np.ndarray, positions: tuple[int, ...], view: ViewPlan) -> np.ndarray:
    """Gain, haze, noise, and the stored whole numbers (0 is kept for fill)."""
    gain = view.band_gain[list(positions)].astype(np.float32)[:, None, None]
    haze = (view.haze * clouds.HAZE_COLOUR[list(positions)]).astype(np.float32)[:, None, None]
    noise = rng.standard_normal(seen.shape, dtype=np.float32)
    value = gain * seen + haze + noise * (np.float32(0.0012) + np.float32(0.008) * seen)
    offset = 0.0 if view.baseline < "04.00" else 1000.0
    return np.clip(np.round(value * 10000.0 + offset), 1, 65535).astype(np.uint16)


def draw_view(land: Landscape, view: ViewPlan) -> ViewData:
    """Draw one view completely."""
    rng = rng_for(land.plan.seed, "air", view.scene_id)
    ten, twenty, facts = draw_surface(land.cover, land.ground, make_surface(land, view), view.dx_m, view.dy_m)
    sun = (view.sun_elevation, view.sun_azimuth)
    sky = clouds.draw_sky(rng, land.plan.side_px, view.cloudiness, sun, swath_edge=view.swath_edge)
    seen10 = clouds.through_air(ten, BANDS_10M, sky)
    seen20 = clouds.through_air(twenty, BANDS_20M, sky)
    classes = clouds.classify_scene(rng, seen10, seen20, sky)
    stored10 = _stored(rng, seen10, BANDS_10M, view)
    stored20 = _stored(rng, seen20, BANDS_20M, view)
    stored10[:, sky.fill] = 0
    n = classes.shape[0]
    stored20[:, sky.fill.reshape(n, 2, n, 2).any(axis=(1, 3))] = 0
    code = clouds.true_codes(sky, facts[2])
    percent = np.round(100 * np.clip(facts[:2], 0, 1)).astype(np.uint8)
    return ViewData(stored10, stored20, classes, np.concatenate([percent, code[None]]))
