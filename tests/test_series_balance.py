"""The water balance that predicts levels: its slopes, its region, its members, and how views under leaves are read."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from inundate.series.balance import MEAN, NAMED, SD, balance_path, balance_slopes
from inundate.series.calibrate import choose_weights
from inundate.series.drivers import LAGS_DAYS, SOILS, leaky_sum, region_water
from inundate.series.heldout import Evidence
from inundate.series.inputs import Events
from inundate.series.model import Levels, blend, day_weights
from inundate.series.smooth import member_weights
from inundate.series.worth import correct_leafy

DAYS = 900
TABLE = np.linspace(0, 1, 41) ** 0.7


def weather(seed: int = 0) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    return rng.gamma(0.3, 0.012, DAYS), 0.002 + 0.0018 * np.sin(np.arange(DAYS) / 58.0)


def region(rain: np.ndarray, pet: np.ndarray) -> np.ndarray:
    water = [region_water(rain, pet, *soil) for soil in SOILS]
    heads = [(g - g.mean()) / 0.15 for _, g in water]
    signal = np.sin(np.arange(DAYS) / 40.0)
    return np.array([q for q, _ in water] + [leaky_sum(h, lag) for h in heads for lag in LAGS_DAYS] + [signal])


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10_000))
def test_slopes_are_those_of_the_path(seed):
    """Derivatives carried along equal central differences."""
    rng = np.random.default_rng(seed)
    rain, pet = weather(seed)
    drive = region(rain, pet)
    theta = np.r_[np.array(MEAN) + 0.5 * np.array(SD) * rng.standard_normal(NAMED), 0.1 * rng.standard_normal()]
    day = np.array([150, 400, 600, 850])
    jac = np.zeros((theta.size, day.size))
    balance_slopes(theta, rain, pet, drive, TABLE, 0.8, day, jac)
    up, down, away = np.empty(DAYS), np.empty(DAYS), np.empty_like(jac)
    for j in range(theta.size):
        step = np.zeros(theta.size)
        step[j] = 1e-6
        balance_path(theta + step, rain, pet, drive, TABLE, 0.8, up)
        balance_path(theta - step, rain, pet, drive, TABLE, 0.8, down)
        away[j] = ((up - down) / 2e-6)[day]
    # a kink (spill, dry floor) that one of the two steps crosses moves a difference, hardly ever more than one
    close = np.isclose(jac, away, rtol=1e-3, atol=1e-4)
    assert close.mean() >= 0.9


def test_a_bowl_between_walls_follows_rain_and_loss_alone():
    """No inflow, no exchange, no seepage, straight walls: the level falls by evapotranspiration and rises by rain."""
    rain, pet = np.zeros(60), np.full(60, 0.004)
    rain[10] = 0.03
    theta = np.array(MEAN, float)
    theta[[0, 2, 7]] = -40.0  # no inflow, exchange, seepage
    theta[6] = 0.0  # the floor is the whole bowl
    box = np.r_[0.0, np.ones(40)]
    path = np.empty(60)
    balance_path(theta, rain, pet, np.zeros((6, 60)), box, 1.0, path)
    assert path[:10] == pytest.approx(0.6 - 0.004 * np.arange(1, 11))
    assert path[10] == pytest.approx(path[9] + 0.03 - 0.004)


@settings(max_examples=20, deadline=None)
@given(st.integers(0, 1000), st.sampled_from(SOILS))
def test_no_water_is_made_in_the_region(seed, soil):
    """What runs off and what is stored below never exceed the rain and the stores at the start."""
    rain, pet = weather(seed)
    quick, ground = region_water(rain, pet, *soil)
    assert (quick >= 0).all()
    assert (ground >= 0).all()
    assert quick.sum() + ground[-1] <= rain.sum() + soil[0] + ground[0] + 1e-9


@given(st.lists(st.floats(-1e4, 50), min_size=2, max_size=80))
def test_weights_of_members_are_honest(like):
    """They add up, follow the likelihood, and never rest on fewer than a tenth of the members."""
    like = np.array(like)
    weight = member_weights(like)
    assert weight.sum() == pytest.approx(1.0)
    assert weight[np.argmax(like)] == weight.max()
    assert 1 / (weight**2).sum() >= min(0.1 * like.size, 1.0) - 1e-9 or 1 / (weight**2).sum() >= 0.1 * like.size * 0.99


def test_a_blend_turns_with_the_leaves():
    leaf = np.array([[0, 1, 2, 3]], np.uint8)
    weights = np.array([[[1.0, 0.0]], [[0.2, 0.8]]])
    assert day_weights(weights, leaf, 1)[0] == pytest.approx([0.0, 0.4, 0.8, 0.4])
    low, high = (Levels(np.full((1, 4), v, np.float32), np.full((1, 4), 0.1, np.float32)) for v in (0.0, 1.0))
    got = blend([low, high], weights, leaf)
    assert got.mean[0] == pytest.approx([0.0, 0.4, 0.8, 0.4])
    assert got.sd[0, 0] == pytest.approx(0.1, rel=1e-5)
    assert got.sd[0, 1] == pytest.approx(np.hypot(0.1, np.sqrt(0.4 * 0.6)), rel=1e-5)


def test_predictors_are_weighed_where_they_are_needed():
    """One is right on bare, the other on leafy days of hidden loggers; far views favour the first and may not outvote."""
    rng = np.random.default_rng(0)
    n = 400
    wetland, block = rng.integers(0, 8, n), rng.integers(0, 3, n)
    leaf = np.where(np.arange(n) % 2, 2, 0).astype(np.uint8)
    stage = np.arange(n) < 200
    leaf[~stage] = 0
    good, bad = np.full(n, 0.5) + 0.02 * rng.standard_normal(n), np.full(n, 0.8)
    share = np.where(leaf[None, :] == 0, np.array([good, bad]), np.array([bad, good]))
    nothing = np.zeros(n)
    evidence = Evidence(
        wetland,
        np.arange(n),
        block,
        leaf,
        np.full(n, 0.5),
        nothing,
        nothing,
        nothing,
        nothing,
        share,
        share,
        share,
        stage,
    )
    weights, scores = choose_weights(evidence, 8, 2)
    assert (weights[0, :, 0] == 1).all()
    assert (weights[1, :, 1] >= 0.75).all()
    assert np.isfinite(scores).all()
    even, none = choose_weights(None, 3, 2)
    assert (even == 0.5).all()
    assert np.isnan(none).all()


def leafy_views(seed: int, hidden: float, wetlands: int = 12) -> tuple[Events, Events, np.ndarray]:
    """Views under leaves that show only a part of the water, stage in the first eight wetlands, and the truth."""
    rng = np.random.default_rng(seed)
    day = np.tile(np.arange(0, 1095, 12), wetlands)
    owner = np.repeat(np.arange(wetlands), day.size // wetlands)
    truth = 0.5 + 0.45 * np.sin(day / 58.0 + owner)
    value = np.clip((1 - hidden) * truth + 0.05 * rng.standard_normal(day.size), 0, 1)
    start = np.searchsorted(owner, np.arange(wetlands + 1))
    views = Events(start, day, value, np.full(day.size, 0.1), np.full(day.size, 2, np.int8), np.full(day.size, 0.35))
    known = owner < 8
    stage = Events(
        np.minimum(start, known.sum()), day[known], truth[known], np.full(known.sum(), 0.01), np.zeros(known.sum(), np.int8),
        np.ones(known.sum()),
    )  # fmt: skip
    return views, stage, truth


def test_views_under_leaves_are_read_back():
    """Canopies that hide 60 % of the water: read through the loggers' line, views of other wetlands lie right on the whole."""
    views, stage, truth = leafy_views(1, 0.6)
    got = correct_leafy(views, stage, (truth[: stage.day.size], np.full(stage.day.size, 0.02)))
    assert got.day.size == views.day.size
    new = got.owner >= 8
    assert np.sqrt(np.mean((got.value - truth)[new] ** 2)) < 0.6 * np.sqrt(np.mean((views.value - truth)[new] ** 2))
    assert abs(np.mean((got.value - truth)[new])) < 0.06
    assert (got.sd > views.sd).all()


def test_views_that_follow_nothing_are_dropped():
    views, stage, truth = leafy_views(2, 0.0)
    rng = np.random.default_rng(0)
    blind = Events(views.start, views.day, rng.random(views.day.size), views.sd / 20, views.kind, views.open)
    got = correct_leafy(blind, stage, (truth[: stage.day.size], np.full(stage.day.size, 0.02)))
    assert got.day.size == 0


def test_without_loggers_views_under_leaves_count_little():
    views, stage, _ = leafy_views(3, 0.0)
    none = stage.keep(np.zeros(stage.day.size, bool))
    got = correct_leafy(views, none, (np.empty(0), np.empty(0)))
    assert got.value == pytest.approx(views.value)
    assert (got.sd >= 3 * views.sd).all()
