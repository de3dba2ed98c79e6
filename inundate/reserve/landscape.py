"""Everything that stands before the first view: terrain, plants, weather, water."""

from __future__ import annotations

import numpy as np
import pandas as pd

from inundate.common.seeds import rng_for
from inundate.reserve import canopy, hydrology, terrain, weather
from inundate.reserve.plan import Plan
from inundate.reserve.scenes import Landscape


def _waters(plan: Plan, bowls: list[terrain.Bowl]) -> np.ndarray:
    """Draw stain (1/m), particles (1/m) and floor mix of each wetland's water; shape (wetland, 3)."""
    out = np.empty((len(bowls), 3))
    for i, bowl in enumerate(bowls):
        rng = rng_for(plan.seed, "water colour", bowl.wetland_id)
        stain = np.exp(rng.normal(np.log(4.0), 0.7))
        out[i] = np.clip(stain, 0.8, 16.0), np.exp(rng.normal(np.log(0.016), 0.5)), rng.uniform(0.6, 1.0)
    return out


def make_landscape(plan: Plan) -> tuple[Landscape, list[np.ndarray], pd.DataFrame]:
    """Build the landscape; returns it with the hypsometry tables and the parameters of the balances."""
    bowls = terrain.make_bowls(plan)
    ground = terrain.make_ground(plan, bowls)
    tables = terrain.hypsometry(plan, bowls, ground)
    sky = weather.make_weather(plan, hydrology.LEAD_DAYS)
    ids = [b.wetland_id for b in bowls]
    places = np.array([[b.x, b.y] for b in bowls])
    water, parameters = hydrology.run_water(plan, sky, ids, tables, ground.sill_m - ground.lowest_m, places)
    years = canopy.make_leaf_years(plan, len(bowls))
    cover = canopy.make_cover(plan, bowls, ground, years)
    grain = rng_for(plan.seed, "grain", plan.size).random(cover.lai.shape, dtype=np.float32)
    land = Landscape(plan, bowls, ground, cover, years, water, sky, _waters(plan, bowls), grain)
    return land, tables, parameters
