"""The filled series on an invented landscape: invariants, honesty, and what it does when inputs lack."""

import dataclasses

import numpy as np
import pandas as pd
import pytest

from inundate.common.codes import BASES
from inundate.common.errors import InputError
from inundate.series import FillOptions, fill_series, hydroperiod, size_classes
from tests.series_world import make_world

QUICK = FillOptions(blocks=2)
pytestmark = pytest.mark.xdist_group("series")


@pytest.fixture(scope="module")
def world():
    return make_world(seed=3, wetlands=10, years=2, logged=3)


@pytest.fixture(scope="module")
def filled(world):
    return fill_series(world.inputs, options=QUICK, seed=1)


def table(result):
    return result.daily.sort_values(["wetland_id", "date"]).reset_index(drop=True)


def test_every_wetland_every_day_within_bounds(world, filled):
    """0 <= lo <= area <= hi <= largest extent; a known basis; no gap."""
    daily = filled.daily
    largest = daily["wetland_id"].map(world.wetlands.set_index("wetland_id")["area_max_m2"])
    assert len(daily) == len(world.wetlands) * daily["date"].nunique()
    assert (daily["area_lo_m2"] >= 0).all()
    assert (daily["area_lo_m2"] <= daily["area_m2"]).all()
    assert (daily["area_m2"] <= daily["area_hi_m2"]).all()
    assert (daily["area_hi_m2"] <= largest * (1 + 1e-6)).all()
    assert set(daily["basis"]) <= set(BASES)


def test_row_order_and_workers_do_not_tell(world, filled):
    """Shuffled tables and two threads give the same numbers to the last bit."""
    mixed = dataclasses.replace(
        world.inputs,
        observed=world.inputs.observed.sample(frac=1, random_state=1),
        stage_daily=world.inputs.stage_daily.sample(frac=1, random_state=2),
        wetlands=world.inputs.wetlands.sample(frac=1, random_state=3),
    )
    again = fill_series(mixed, options=dataclasses.replace(QUICK, workers=2), seed=1)
    pd.testing.assert_frame_equal(table(again), table(filled))


def errors(world, result):
    """RMSE (share of the largest extent) of logged and other wetlands against the truth."""
    share = table(result)["area_m2"].to_numpy().reshape(len(world.wetlands), -1)
    order = np.argsort(world.wetlands["wetland_id"].to_numpy())
    truth = world.share[order][:, : share.shape[1]]
    gap = share / world.wetlands["area_max_m2"].to_numpy()[order][:, None] - truth
    logged = world.logged[order]
    return np.sqrt((gap[logged] ** 2).mean()), np.sqrt((gap[~logged] ** 2).mean())


def test_beats_a_mean_and_loggers_help(world, filled):
    """Logged wetlands are told better than others, and both better than each wetland's own mean would."""
    logged, others = errors(world, filled)
    spread = np.sqrt(((world.share - world.share.mean(axis=1, keepdims=True)) ** 2).mean())
    assert logged < others < spread


def test_intervals_cover(world, filled):
    """90 % intervals hold between 75 and 99 % of the truth over all days of this small landscape."""
    daily = table(filled)
    order = np.argsort(world.wetlands["wetland_id"].to_numpy())
    days = daily["date"].nunique()
    truth = (world.share[order][:, :days] * world.wetlands["area_max_m2"].to_numpy()[order][:, None]).ravel()
    inside = (truth >= daily["area_lo_m2"] - 1) & (truth <= daily["area_hi_m2"] + 1)
    assert 0.75 < inside.mean() < 0.99


@pytest.mark.parametrize("lack", ["loggers", "weather", "elevation", "relations"])
def test_runs_with_less_and_says_so(world, filled, lack):
    """Without loggers, weather, elevation or relations it still gives every day; it tells what it lacked."""
    change = {
        "loggers": {"stage_daily": None, "relations": None},
        "weather": {"weather": None},
        "elevation": {"hypsometry": None},
        "relations": {"relations": None},
    }[lack]
    result = fill_series(dataclasses.replace(world.inputs, **change), options=QUICK, seed=1)
    assert len(result.daily) == len(filled.daily)
    assert not result.daily.isna().any().any()
    if lack in ("loggers", "weather"):
        assert any(lack[:6] in line for line in result.lacked), result.lacked


def test_a_wetland_never_seen_is_wide(world):
    """No view and no logger: a series all the same, wider than those of the others."""
    name = world.wetlands["wetland_id"][np.flatnonzero(~world.logged)[0]]
    seen = world.inputs.observed[world.inputs.observed["wetland_id"] != name]
    result = fill_series(dataclasses.replace(world.inputs, observed=seen), options=QUICK, seed=1)
    largest = result.daily["wetland_id"].map(world.wetlands.set_index("wetland_id")["area_max_m2"])
    width = (result.daily["area_hi_m2"] - result.daily["area_lo_m2"]) / largest
    mine = result.daily["wetland_id"] == name
    assert width[mine].mean() > width[~mine].mean()


def test_views_that_a_canopy_hides_serve_a_wetland_that_has_no_other(world):
    """Through gaps too small for an extent of its own, years of views still tell wet from dry; elsewhere they count nothing."""
    name, other = world.wetlands["wetland_id"].iloc[[4, 3]]  # an evergreen one, and one with usable views
    seen = world.inputs.observed
    hidden = seen.assign(
        clear_fraction=0.9, view_fraction=0.2, reason="canopy hides it", used=False, leaf_state="leaf_on"
    )
    size = world.wetlands.set_index("wetland_id")["area_max_m2"]
    hidden = hidden.assign(
        area_m2=0.95 * hidden["wetland_id"].map(size), area_sd_m2=0.1 * hidden["wetland_id"].map(size)
    )
    width, middle = {}, {}
    for key, table_seen in (
        ("none", seen[seen["wetland_id"] != name]),
        ("dim", pd.concat([seen[seen["wetland_id"] != name], hidden[hidden["wetland_id"].isin([name, other])]])),
    ):
        inputs = dataclasses.replace(world.inputs, observed=table_seen)
        daily = table(fill_series(inputs, options=QUICK, seed=1))
        width[key] = (daily["area_hi_m2"] - daily["area_lo_m2"]).groupby(daily["wetland_id"]).mean()
        middle[key] = daily.groupby("wetland_id")["area_m2"].mean()
    assert middle["dim"][name] > middle["none"][name] + 0.05 * size[name]
    assert width["dim"][name] < width["none"][name]
    assert middle["dim"][other] == pytest.approx(middle["none"][other], rel=0.02)


def test_lasting_errors_widen_intervals_and_draws(world, filled):
    """The lasting part leaves the middle alone, widens intervals, and spreads draws."""
    wide = fill_series(world.inputs, options=dataclasses.replace(QUICK, lasting=(0.2, 0.05)), seed=1)
    np.testing.assert_array_equal(table(wide)["area_m2"], table(filled)["area_m2"])
    assert (table(wide)["area_hi_m2"] >= table(filled)["area_hi_m2"] - 1e-3).all()
    assert wide.draws(20).std(axis=0).mean() > filled.draws(20).std(axis=0).mean()
    assert wide.draws(5).min() >= 0


def test_a_part_of_lasting_errors_is_left_where_something_else_tells(world):
    """One wetland with a quarter of the lasting errors lies between none and all; the others are as with all."""
    option = dataclasses.replace(QUICK, lasting=(0.2, 0.05))
    name = world.wetlands["wetland_id"].iloc[0]
    part = dataclasses.replace(world.inputs, lasting_part={name: 0.25})
    width = {}
    for key, inputs, options in (("none", world.inputs, QUICK), ("all", world.inputs, option), ("part", part, option)):
        daily = table(fill_series(inputs, options=options, seed=1))
        width[key] = (daily["area_hi_m2"] - daily["area_lo_m2"]).groupby(daily["wetland_id"]).mean()
    assert width["none"][name] < width["part"][name] < width["all"][name]
    others = width["all"].index != name
    assert (width["part"][others] == width["all"][others]).all()


def test_heldout_values_are_told(world, filled):
    """What was hidden and predicted stands beside the truth of the views, by kind."""
    held = filled.heldout
    assert set(held["kind"]) <= {"views", "logger"}
    assert (held["area_lo_m2"] <= held["area_m2"] + 1e-6).all()
    assert (held["area_m2"] <= held["area_hi_m2"] + 1e-6).all()
    assert held["known_m2"].ge(0).all()


def test_hydroperiod_and_size_classes_hang_together(world, filled):
    """Days inundated lie within the year; classes add up to the landscape."""
    years = hydroperiod(filled, 10)
    assert (years["wetland_id"].nunique()) == len(world.wetlands)
    classes = size_classes(filled, world.wetlands, (0.3, 1.0))
    parts = classes[classes["size_class"] != "all"].groupby("date")["area_m2"].sum()
    total = filled.daily.groupby("date")["area_m2"].sum()
    np.testing.assert_allclose(parts.to_numpy(), total.to_numpy(), rtol=0.02, atol=50)


def test_bad_tables_are_told(world):
    """A missing column and reversed dates are named."""
    with pytest.raises(InputError, match="area_sd_m2"):
        fill_series(dataclasses.replace(world.inputs, observed=world.inputs.observed.drop(columns="area_sd_m2")))
    with pytest.raises(InputError):
        fill_series(
            dataclasses.replace(
                world.inputs, first_date=pd.Timestamp("2040-01-01"), last_date=pd.Timestamp("2039-01-01")
            )
        )
