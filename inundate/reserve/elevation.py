"""The elevation model of the inputs: airborne-lidar-like, water flattened, noisy, a few centimetres off."""

from __future__ import annotations

import numpy as np

from inundate.common.seeds import rng_for
from inundate.reserve.canopy import EVERGREEN
from inundate.reserve.scenes import Landscape


def make_elevation(land: Landscape) -> tuple[np.ndarray, dict[str, object]]:
    """Return the model (m, float32, row and column of the 2.5 m grid) and its truth: day, bias_m, noise_sd_m.

    The flight is on the day of the record's late summer or autumn with the least water; standing water then shows as a
    flat surface at its level.
    """
    plan, ground = land.plan, land.ground
    rng = rng_for(plan.seed, "elevation", plan.size)
    total = land.water.area_daily.sum(axis=0)
    month = plan.days.month.to_numpy()
    season = np.flatnonzero((month >= 8) & (month <= 11))
    day = int(season[np.argmin(np.abs(total[season] - np.quantile(total[season], 0.25)))])
    noise = float(rng.uniform(0.04, 0.06))
    bias = float(rng.choice([-1, 1]) * rng.uniform(0.02, 0.06))
    spread = np.where(land.cover.trees == EVERGREEN, 1.6 * noise, noise)
    model = ground.elevation + bias + spread * rng.standard_normal(ground.elevation.shape)
    inside = ground.wetland >= 0
    level = (land.water.daily[:, day] + ground.lowest_m)[np.where(inside, ground.wetland, 0)]
    flooded = inside & (ground.elevation < level)
    flat = level + bias + 0.012 * rng.standard_normal(ground.elevation.shape)
    model = np.where(flooded, flat, model)
    facts = {"acquired": plan.days[day], "bias_m": bias, "noise_sd_m": noise}
    return np.round(model, 3).astype(np.float32), facts
