"""Planted changes are found, dated and put in words; steady records raise none."""

import numpy as np
import pandas as pd
import pytest

from inundate.relation import fit_relations
from tests.relation_world import DAY0, World

MOVE = DAY0 + pd.Timedelta(days=560)


def test_a_moved_sensor_is_found_dated_and_not_applied():
    world = World(seed=8, n=55)
    late = (world.pairs["wetland_id"] == "w03") & (world.pairs["date"] >= MOVE)
    world.pairs.loc[late, "stage_m"] += 0.12
    got = fit_relations(world.pairs, world.wetlands, seed=1)
    assert got.shifts["wetland_id"].tolist() == ["w03"]
    row = got.shifts.iloc[0]
    assert row["kind"] == "stage"
    assert row["size_m"] == pytest.approx(0.12, abs=0.04)
    assert row["date_lo"] <= MOVE <= row["date_hi"]
    assert f"from {row['date'].date()}" in row["words"]
    assert "cm more stage" in row["words"]
    assert row["confidence"] > 0.99
    assert len(got.relations[got.relations["wetland_id"] == "w03"]) == 1
    # while unconfirmed it widens the bands
    steady = fit_relations(World(seed=8, n=55).pairs, world.wetlands, seed=1)
    width = [(t["area_hi_m2"] - t["area_lo_m2"]).mean() for t in (x.predict("w03", [0.3, 0.4]) for x in (got, steady))]
    assert width[0] > 1.3 * width[1]


def test_extent_lost_at_the_same_stage_is_told_apart():
    world = World(seed=9, n=60)
    late = (world.pairs["wetland_id"] == "w05") & (world.pairs["date"] >= MOVE)
    world.pairs.loc[late, "area_m2"] *= 0.6
    got = fit_relations(world.pairs, world.wetlands, seed=1)
    assert got.shifts["wetland_id"].unique().tolist() == ["w05"]
    assert abs(got.shifts["date"].iloc[0] - MOVE) < pd.Timedelta(days=60)


def test_steady_records_raise_no_alarm():
    alarms = sum(
        len(fit_relations(w.pairs, w.wetlands, seed=1).shifts)
        for w in (World(seed=20 + s, n=45, n_loggers=12) for s in range(7))
    )
    # 84 wetlands x 3 years; the least wanted is 1 in 40
    assert alarms <= 1


def test_water_slow_to_spread_shows_as_hysteresis():
    world = World(seed=10, n=60)
    rng = np.random.default_rng(1)
    way = rng.choice([-1.0, 1.0], len(world.pairs))
    world.pairs["rising"] = 0.05 * way
    mine = world.pairs["wetland_id"] == "w01"
    world.pairs.loc[mine, "stage_m"] += 0.04 * way[mine]
    got = fit_relations(world.pairs, world.wetlands, seed=1)
    assert got.hysteresis["wetland_id"].tolist() == ["w01"]
    assert got.hysteresis["size_m"].iloc[0] == pytest.approx(0.08, abs=0.03)
    assert "rising water covers less" in got.hysteresis["words"].iloc[0]
