"""Curves of every family: bounds, monotony, dry and full; elevation tables."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from inundate.common.errors import InputError
from inundate.relation.families import (
    ELEVATION,
    N_PARAM,
    curve_of,
    empty_table,
    full_stage,
    hypsometry_table,
    water_at_survey,
)
from inundate.relation.options import RelationOptions
from inundate.relation.powerlaw import power_from_two_points, power_p_from_volume
from tests.relation_world import bowl

STAGE = np.linspace(-0.5, 3.0, 701)
TABLE = hypsometry_table(*bowl(0.8, 1.3, 0.05))


@settings(max_examples=150, deadline=None)
@given(st.integers(0, 3), st.lists(st.floats(-3, 3), min_size=N_PARAM, max_size=N_PARAM))
def test_every_curve_is_zero_when_dry_rising_and_at_most_full(family, values):
    table, span = TABLE if family == ELEVATION else empty_table()
    share = curve_of(family, np.array(values), table, span, STAGE)
    assert np.all(share[STAGE <= 0] == 0)
    assert np.all(np.diff(share) >= -1e-12)
    assert share.min() >= 0
    assert share.max() <= 1


def test_spline_with_flat_increments_is_the_power_law():
    theta = np.array([np.log(0.7), np.log(1.4), 0, 0, 0, 0, 0.0])
    power = curve_of(0, theta, *empty_table(), STAGE)
    # knots lie on the straight line, so the cubic between them is the line itself
    np.testing.assert_allclose(curve_of(2, theta, *empty_table(), STAGE), power, atol=1e-12)
    np.testing.assert_allclose(curve_of(1, theta, *empty_table(), STAGE), power, atol=1e-12)
    assert full_stage(0, theta, *empty_table()) == pytest.approx(0.7, abs=1e-5)


def test_elevation_returns_its_own_hypsometry():
    stage, share = bowl(0.8, 1.3)
    table, span = hypsometry_table(stage, share)
    got = curve_of(ELEVATION, np.zeros(N_PARAM), table, span, stage)
    above = share > 0.05
    np.testing.assert_allclose(got[above], share[above], atol=0.01)


def test_roughness_blurs_and_sharpens_about_the_middle():
    stage, share = bowl(1.0, 1.0)
    table, span = hypsometry_table(stage, share)
    at = np.array([0.15, 0.85])
    still, rough, sharp = (curve_of(3, np.array([0, r, 0, 0, 0, 0, 0.0]), table, span, at) for r in (0.0, 0.2, -0.2))
    assert rough[0] > still[0] > sharp[0]
    assert rough[1] < still[1] < sharp[1]


def test_water_standing_at_the_survey_is_found_with_its_depth():
    stage, share = bowl(1.0, 1.4)
    wet = 0.4
    seen = np.arange(0, 0.7, 0.01)
    # cells under water lie within 2 cm of its surface; the ground above is as it is
    area = np.where(seen < 0.02, np.interp(wet, stage, share) * seen / 0.02, np.interp(wet + seen - 0.02, stage, share))
    _, hidden, depth = water_at_survey(seen, area)
    assert depth == pytest.approx(wet, abs=0.12)
    assert hidden == pytest.approx(depth, abs=0.03)
    assert water_at_survey(stage, share)[1:] == (0.0, 0.0)


@pytest.mark.parametrize("noise", [0.03, 0.09])
@pytest.mark.parametrize("wet", [0.25, 0.5])
def test_a_noisy_shore_does_not_hide_the_water(noise, wet):
    """Shore cells that noise put below the surface do not count as ground; stages count from the ground under water."""
    rng = np.random.default_rng(3)
    stage, share = bowl(1.0, 1.4)
    ground = np.interp(rng.random(4000), share, stage)
    model = np.where(ground < wet, wet + 0.01 * rng.standard_normal(4000), ground + noise * rng.standard_normal(4000))
    low = np.sort(model)[40]
    seen = np.arange(0, model.max() - low + 0.01, 0.01)
    area = np.searchsorted(np.sort(model - low), seen) / 4000
    floor, hidden, depth = water_at_survey(seen, np.where(seen > 0, area, 0.0))
    assert depth == pytest.approx(wet, abs=0.15)
    assert low - hidden == pytest.approx(wet - depth, abs=0.03)  # zero of the table, as the surface and the depth say
    assert low + floor == pytest.approx(wet, abs=0.05)


def test_bad_numbers_are_refused_with_place_and_rule():
    with pytest.raises(InputError, match="larger area"):
        power_from_two_points((0.2, 600), (0.5, 500))
    with pytest.raises(InputError, match="area x stage"):
        power_p_from_volume(0.5, 1000, 600)
    with pytest.raises(InputError, match="families"):
        RelationOptions(families=("parabola",))
    with pytest.raises(InputError, match="level"):
        RelationOptions(level=1.0)
