"""Errors that last in a wetland: estimated from labels, carried into sds, bands, intervals and draws."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from inundate.extent import widen_observed
from inundate.pixels import between_sd, lasting_errors
from inundate.pixels.lasting import UNKNOWN
from inundate.relation import fit_relations, leaf_factors, widen_bands, with_shared_errors
from inundate.series.fill import widen_lasting

WETLANDS = pd.DataFrame({"wetland_id": ["a", "b"], "area_max_m2": [100.0, 1000.0]})


def test_between_sd_recovers_the_spread_it_was_made_with():
    """Group means drawn with a known sd, rows with much more scatter: the estimate is near the known sd on average."""
    found = []
    for seed in range(40):
        rng = np.random.default_rng(seed)
        group = np.repeat(np.arange(40), 25)
        value = rng.normal(0, 0.1, 40)[group] + rng.normal(0, 0.3, group.size)
        found.append(between_sd(value, group))
    assert abs(np.mean(found) - 0.1) < 0.01


def test_no_spread_gives_none():
    """Rows of one distribution give a spread near 0; too few groups tell nothing, and then the stated belief serves."""
    rng = np.random.default_rng(1)
    group = np.repeat(np.arange(50), 20)
    assert between_sd(rng.normal(0, 0.3, group.size), group) < 0.05
    assert between_sd(np.arange(4.0), np.array([0, 0, 1, 1])) is None
    none = np.zeros(4, bool)
    assert lasting_errors(np.full(4, 0.5), none, np.array(list("aabb")), ~none) == UNKNOWN


def test_missed_and_added_are_told_apart():
    """A landscape whose wetlands differ in missed water alone has a lasting part for water, not for dry ground."""
    rng = np.random.default_rng(2)
    wetland = np.repeat([f"w{i}" for i in range(40)], 40)
    water = np.tile(np.repeat([True, False], 20), 40)
    missed = np.repeat(np.clip(rng.normal(0.2, 0.12, 40), 0, 0.6), 40)
    p = np.where(water, 1 - missed, 0.05) + rng.normal(0, 0.02, water.size)
    sd = lasting_errors(p, water, wetland, np.ones(water.size, bool))
    assert 0.08 < sd[0] < 0.16
    assert sd[1] < 0.01


def test_observed_sd_grows_by_hand():
    """Worked by hand: area 60 of 100, sd 3, 10 % missed and 5 % added: sqrt(9 + 36 + 4)."""
    observed = pd.DataFrame({"wetland_id": ["a"], "area_m2": [60.0], "area_sd_m2": [3.0], "leaf_state": ["leaf_off"]})
    assert widen_observed(observed, WETLANDS, (0.1, 0.05))["area_sd_m2"].iloc[0] == 7.0


@given(st.integers(0, 10_000), st.floats(0, 0.4), st.floats(0, 0.3))
def test_bands_and_intervals_keep_their_bounds(seed, missed, added):
    """Widened bands hold the old ones, stay within bounds, never fall with stage; days known to be dry stay so."""
    rng = np.random.default_rng(seed)
    area = np.sort(rng.uniform(0, 100, 20))
    area[:3] = 0.0
    half = rng.uniform(0, 10)
    table = pd.DataFrame(
        {
            "wetland_id": "a",
            "stage_m": np.arange(20) / 100,
            "area_m2": area,
            "area_lo_m2": np.clip(area - half, 0, 100),
            "area_hi_m2": np.where(area > 0, np.clip(area + half, 0, 100), 0.0),
        }
    )
    out = widen_bands(table, WETLANDS, (missed, added))
    assert (out["area_lo_m2"] <= out["area_m2"]).all()
    assert (out["area_m2"] <= out["area_hi_m2"]).all()
    assert out["area_hi_m2"].between(0, 100 + 1e-9).all()
    assert (out["area_hi_m2"] >= table["area_hi_m2"] - 1e-9).all()
    assert (out["area_hi_m2"].diff().dropna() >= -1e-9).all()
    assert (out["area_hi_m2"].to_numpy()[:3] == 0).all()
    share = np.array([area, table["area_lo_m2"], table["area_hi_m2"]]) / 100
    before = share.copy()
    widen_lasting(share, (missed, added))
    assert (share[1] <= before[1] + 1e-12).all()
    assert (share[2] >= before[2] - 1e-12).all()
    assert ((share >= 0) & (share <= 1)).all()
    assert (share[:, before[2] == 0] == 0).all()


def test_leaf_factors_are_what_makes_nine_in_ten_views_fit():
    """Views under leaves err four times as much as they say: the factor is near four; unseen states take the largest."""
    rng = np.random.default_rng(3)
    wetlands = pd.DataFrame({"wetland_id": [f"w{i}" for i in range(8)], "area_max_m2": 1000.0, "cover": "open"})
    rows = []
    for w in wetlands["wetland_id"]:
        stage = rng.uniform(0.05, 0.5, 60)
        leafy = np.arange(60) % 2 == 0
        area = 1000 * np.clip((stage / 0.5) ** 1.2 + rng.normal(0, np.where(leafy, 0.08, 0.02)), 0, 1)
        state = np.where(leafy, "leaf_on", "leaf_off")
        rows.append(pd.DataFrame({"wetland_id": w, "stage_m": stage, "area_m2": area, "leaf_state": state}))
    pairs = pd.concat(rows, ignore_index=True).assign(
        date=pd.date_range("2031-01-01", periods=480).to_numpy(), area_sd_m2=20.0, stage_sd_m=0.005, censored=False
    )
    relations = fit_relations(pairs[pairs["leaf_state"] == "leaf_off"], wetlands)
    factors = leaf_factors(pairs, relations, wetlands, (0.0, 0.0))
    assert 3.2 < factors["leaf_on"] < 5.0
    assert factors["green_up"] == factors["leaf_on"]
    observed = pd.DataFrame(
        {
            "wetland_id": ["w0"] * 2,
            "area_m2": [500.0] * 2,
            "area_sd_m2": [20.0] * 2,
            "leaf_state": ["leaf_on", "leaf_off"],
        }
    )
    wide = widen_observed(observed, wetlands, (0.0, 0.0), factors)["area_sd_m2"].to_numpy()
    assert wide[0] == pytest.approx(20 * factors["leaf_on"])
    assert wide[1] == 20.0


def test_many_views_that_share_an_error_do_not_outvote_another_witness():
    """By hand: 3 wet views of wetland a share 0.05 of 100 m2; wetland b has no elevation on an outlet, dry and made rows stay."""
    pairs = pd.DataFrame(
        {
            "wetland_id": ["a"] * 6 + ["b"] * 2,
            "stage_m": [0.2, 0.3, 0.4, -0.1, 0.5, 0.45, 0.2, 0.3],
            "area_sd_m2": 6.0,
            "made": [False] * 4 + [True] * 2 + [False] * 2,
        }
    )
    got = with_shared_errors(pairs, WETLANDS, (0.08, 0.06))["area_sd_m2"]
    assert got.iloc[:3].to_numpy() == pytest.approx(np.sqrt(36 + 3 * 25.0))
    assert (got.iloc[3:] == 6.0).all()
    assert 1 / (1 / (got.iloc[:3] ** 2 - 36)).sum() == pytest.approx(25.0)  # together: the shared error, once
    assert with_shared_errors(pairs.iloc[:0], WETLANDS, (0.08, 0.06)).empty


def test_bands_take_the_part_that_is_left():
    rows = pd.DataFrame({"wetland_id": ["a", "b"], "stage_m": 0.5, "area_m2": [50.0, 500.0], "area_lo_m2": [49.0, 490.0], "area_hi_m2": [51.0, 510.0]})  # fmt: skip
    whole, part = (widen_bands(rows, WETLANDS, (0.2, 0.1), p) for p in (None, {"a": 0.5}))
    width = lambda t: (t["area_hi_m2"] - t["area_lo_m2"]).to_numpy()  # noqa: E731
    assert width(part)[0] < 0.6 * width(whole)[0]
    assert width(part)[1] == width(whole)[1]
