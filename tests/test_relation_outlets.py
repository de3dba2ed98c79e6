"""Outlets told by the stage record, and extents raised by what full wetlands show."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from inundate.relation import (
    believed_outlets,
    fit_relations,
    lasting_parts,
    make_pairs,
    outlet_levels,
    through_outlets,
    with_outlets,
)
from inundate.relation.outlets import up_to_rim

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


def test_an_outlet_ties_the_stage_of_a_wetland_that_no_view_shows_to_its_elevation_model():
    """The elevation model's zero lies too high (deep water hid the ground); the outlet alone tells."""
    stage = record(1.3, seed=4).assign(stage_sd_m=0.01)
    stage.loc[stage.index % 3 == 0, "stage_m"] = 1.3
    bowl = pd.DataFrame({"wetland_id": "a", "stage_m": np.arange(0, 0.51, 0.01)})
    # seen by the survey: a surface that holds a third of the largest extent, then ground up to the rim half a metre above
    bowl["area_m2"] = np.where(bowl["stage_m"] < 0.015, 0.0, 330 + 670 * (bowl["stage_m"] / 0.5) ** 1.2)
    none = make_pairs(
        pd.DataFrame(
            {"wetland_id": ["a"], "datetime": [DAYS[0]], "area_m2": [1.0], "area_sd_m2": [1.0], "view_fraction": [0.1], "leaf_state": ["leaf_on"], "used": [False]}
        ),
        stage,
    )  # fmt: skip
    wetlands = WETLANDS.assign(cover="evergreen")
    both = with_outlets(none, outlet_levels(stage), wetlands, bowl)
    assert set(both.columns) == {*none.columns, "made"}
    assert both["made"].all()
    assert both["stage_m"].max() == pytest.approx(1.285, abs=0.02)
    assert (np.diff(both.sort_values("stage_m")["area_m2"]) > 0).all()
    assert (
        len(with_outlets(none, outlet_levels(stage), wetlands)) == 1
    )  # without elevation: full at the outlet, no more
    at = np.array([0.8, 1.29])
    relations = fit_relations(both, wetlands, bowl)
    tied = relations.predict("a", at)["area_m2"]
    assert relations.relations["n_pairs"].iloc[0] == 0  # no view stands behind them
    assert relations.relations["stage_max_m"].isna().iloc[0]
    assert "outlet" in relations.relations["note"].iloc[0]
    loose = fit_relations(none, wetlands, bowl).predict("a", at)["area_m2"]
    assert tied.iloc[1] > 900
    assert tied.iloc[0] < 0.8 * loose.iloc[0]  # half a metre below its outlet the bowl is no longer near full
    assert with_outlets(none, outlet_levels(record(5.0)), wetlands).empty


def test_two_witnesses_err_less_than_one():
    """A bowl of 1 m whose extent rises evenly: 4 cm of depth are 4 % of it; views err by 5 % when it is half full."""
    bowl = pd.DataFrame({"wetland_id": "a", "stage_m": np.arange(0, 1.01, 0.01)})
    bowl["area_m2"] = 1000.0 * bowl["stage_m"]
    outlets = pd.DataFrame({"wetland_id": ["a"], "period": [0], "level_m": [0.9], "date": [DAYS[0]]})
    part = lasting_parts(outlets, WETLANDS, bowl, (0.08, 0.06))
    assert part["a"] == pytest.approx(0.04 / np.hypot(0.04, 0.05), rel=0.02)
    assert lasting_parts(outlets, WETLANDS, None, (0.08, 0.06)) == {}
    assert lasting_parts(outlets.iloc[:0], WETLANDS, bowl, (0.08, 0.06)) == {}
    assert lasting_parts(outlets, WETLANDS, bowl, (0.0, 0.0)) == {}


def test_a_level_that_views_contradict_is_no_outlet():
    """A weir below the rim: full by the record, a third full by every view; with two views only nobody can tell."""
    outlets = pd.DataFrame({"wetland_id": ["a"], "period": [0], "level_m": [0.38], "days": [100], "years": [3]})
    pairs = pd.DataFrame(
        {
            "wetland_id": "a",
            "period": 0,
            "stage_m": [0.39, 0.395, 0.4],
            "area_m2": [330.0, 350.0, 340.0],
            "leaf_state": "leaf_off",
        }
    )
    assert believed_outlets(outlets, pairs, WETLANDS).empty
    assert len(believed_outlets(outlets, pairs.iloc[:2], WETLANDS)) == 1
    assert len(believed_outlets(outlets, pairs.assign(area_m2=820.0), WETLANDS)) == 1
    assert len(believed_outlets(outlets, pairs.assign(leaf_state="leaf_on"), WETLANDS)) == 1
    assert believed_outlets(outlets.iloc[:0], pairs, WETLANDS).empty


@pytest.mark.parametrize("power", [0.7, 1.3, 2.5])
def test_noise_does_not_lift_the_rim(power):
    """A bowl of 1 m seen with 6 cm of noise: full at its rim again, within 4 cm, and untouched below 85 %."""
    rng = np.random.default_rng(1)
    ground = rng.random(20_000) ** (1 / power)
    model = np.sort(ground + 0.06 * rng.standard_normal(ground.size))
    stage = np.arange(model[0], model[-1] + 0.01, 0.01)
    share = np.searchsorted(model, stage) / model.size
    got = up_to_rim(stage, share)
    full = [float(stage[np.searchsorted(s, 0.999)]) for s in (share, got)]
    assert full[0] > 1.08
    assert full[1] == pytest.approx(1.0, abs=0.05)
    assert (np.diff(got) >= -1e-12).all()
    assert (got[share < 0.85] == share[share < 0.85]).all()
