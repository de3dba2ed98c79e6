"""Outlets told by the stage record, and extents raised by what full wetlands show."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from inundate.relation import outlet_levels, through_outlets

DAYS = pd.date_range("2031-01-01", periods=3 * 365)
WETLANDS = pd.DataFrame({"wetland_id": ["a"], "area_max_m2": [1000.0]})


def record(sill: float, seed: int = 0) -> pd.DataFrame:
    """Daily stage of a bucket with rain, losses and an outlet at ``sill``."""
    rng = np.random.default_rng(seed)
    level, out = 0.2, []
    for day in DAYS.dayofyear:
        rain = 0.03 * rng.gamma(0.3) * (1.4 + np.cos(2 * np.pi * day / 365))
        level = min(level + rain - 0.012 * (1 - 0.7 * np.cos(2 * np.pi * day / 365)), sill)
        level = max(level, 0.0)
        out.append(level)
    stage = np.array(out) + rng.normal(0, 0.002, len(out))
    return pd.DataFrame({"wetland_id": "a", "date": DAYS, "stage_m": stage, "censored": False, "period": 0})


def test_an_outlet_is_found_where_water_piles_up():
    """The level found lies within 4 cm below the outlet; without one in reach nothing is found."""
    found = outlet_levels(record(0.4))
    assert len(found) == 1
    assert 0.36 <= found["level_m"].iloc[0] <= 0.4
    assert found["years"].iloc[0] == 3
    assert outlet_levels(record(5.0)).empty


def test_one_wet_spell_is_no_outlet():
    """A flat top in a single year may be one flood."""
    stage = record(0.4)
    stage = stage[stage["date"].dt.year == 2031]
    assert outlet_levels(stage).empty


def test_raising_by_hand():
    """Full views show 776 of 1000 m2 (0.776 / 0.97 = 0.8); with sharp views and a wide belief nearly all of it is given back."""
    pairs = pd.DataFrame(
        {
            "wetland_id": "a",
            "stage_m": [0.39, 0.395, 0.4, 0.2],
            "area_m2": [776.0, 776.0, 776.0, 388.0],
            "area_sd_m2": 1.0,
        }
    )
    outlets = pd.DataFrame({"wetland_id": ["a"], "period": [0], "level_m": [0.38], "days": [100], "years": [3]})
    got, told = through_outlets(pairs, outlets, WETLANDS, 10.0)
    shown = told["shown"].iloc[0]
    assert shown == pytest.approx(0.8, abs=1e-4)
    assert got["area_m2"].iloc[:3].to_numpy() == pytest.approx(776 / shown, rel=1e-6)
    assert got["area_m2"].iloc[3] == pytest.approx(388 * (1 + 0.5 * (1 / shown - 1)), rel=1e-6)
    same, none = through_outlets(pairs, outlets, WETLANDS, 0.0)
    assert none.empty
    pd.testing.assert_frame_equal(same, pairs)


@given(st.lists(st.floats(1, 1000), min_size=4, max_size=30), st.floats(0.01, 0.5), st.integers(0, 100))
def test_raised_extents_keep_order_and_bounds(areas, missed, seed):
    """Never lowered, never above the largest extent, never out of order."""
    rng = np.random.default_rng(seed)
    pairs = pd.DataFrame(
        {"wetland_id": "a", "stage_m": rng.uniform(0, 0.4, len(areas)), "area_m2": areas, "area_sd_m2": 20.0}
    )
    outlets = pd.DataFrame({"wetland_id": ["a"], "period": [0], "level_m": [0.2], "days": [100], "years": [3]})
    got = through_outlets(pairs, outlets, WETLANDS, missed)[0]["area_m2"].to_numpy()
    before = np.array(areas)
    assert (got >= before - 1e-9).all()
    assert (got <= 1000.0).all()
    assert (np.diff(got[np.argsort(before, kind="stable")]) >= -1e-9).all()
