"""Kernels against slow plain versions, and laws of the offset's weighing."""

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from inundate.stage.choosing import choose_steps, evidence_with
from inundate.stage.datum import YEAR_NS, Evidence, Step, fit_offset
from inundate.stage.mixture import stated_sd
from inundate.stage.signals import HOUR_NS, best_path, hourly, interpolate, noise_of, outliers

floats = st.floats(-5, 5, allow_nan=False)


@given(st.lists(floats, min_size=3, max_size=30), st.lists(st.integers(0, 400), min_size=1, max_size=30))
@settings(max_examples=80, deadline=None)
def test_interpolation_equals_numpy_without_holes(values, at):
    """With the widest hole allowed it is numpy.interp inside, and NaN outside."""
    time = np.arange(len(values)) * 10
    at = np.sort(np.array(at))
    got = interpolate(at, time, np.array(values), 10**9)
    inside = at <= time[-1]
    np.testing.assert_allclose(got[inside], np.interp(at[inside], time, values), atol=1e-12)
    assert np.isnan(got[~inside]).all()


def test_interpolation_leaves_holes():
    """A hole one wider than allowed is not bridged, its ends are."""
    got = interpolate(np.array([0, 5, 10, 15, 30, 31]), np.array([0, 10, 30]), np.array([0.0, 1.0, 3.0]), 19)
    np.testing.assert_array_equal(got, [0.0, 0.5, 1.0, np.nan, 3.0, np.nan])
    assert np.isnan(interpolate(np.array([1]), np.empty(0, np.int64), np.empty(0), 5)).all()


def plain_outliers(time, x, reach, span, least):
    out = np.zeros(len(x), bool)
    for i in range(len(x)):
        near = [j for j in range(max(i - reach, 0), min(i + reach, len(x) - 1) + 1) if abs(time[j] - time[i]) <= span]
        if len(near) >= 4:
            middle = np.median(x[near])
            mad = 1.4826 * np.median(np.abs(x[near] - middle))
            out[i] = abs(x[i] - middle) > least and abs(x[i] - middle) > 6 * mad
    return out


@given(st.integers(0, 10_000))
@settings(max_examples=40, deadline=None)
def test_outliers_equal_the_plain_running_median(seed):
    """The quick way out for calm windows changes nothing."""
    rng = np.random.default_rng(seed)
    time = np.cumsum(rng.integers(1, 4, 80))
    x = np.cumsum(rng.normal(0, 0.1, 80))
    x[rng.choice(80, 5)] += rng.normal(0, 5, 5)
    np.testing.assert_array_equal(outliers(time, x, 5, 9, 0.5), plain_outliers(time, x, 5, 9, 0.5))


def test_outliers_leave_steps_and_ramps():
    """A level that jumps and stays, and a steep rise, are not spikes."""
    time = np.arange(200)
    step = np.where(time < 100, 0.0, 1.0)
    assert not outliers(time, step, 5, 20, 0.05).any()
    assert not outliers(time, np.clip((time - 80) * 0.1, 0, 2), 5, 20, 0.05).any()


@given(st.integers(0, 1000), st.floats(0.1, 5))
@settings(max_examples=30, deadline=None)
def test_best_path_is_the_cheapest_of_all(seed, change):
    """Against every path of six steps through three states."""
    cost = np.random.default_rng(seed).random((6, 3)) * 3

    def price(path):
        return sum(cost[i, s] for i, s in enumerate(path)) + change * sum(a != b for a, b in itertools.pairwise(path))

    least = min(price(p) for p in itertools.product(range(3), repeat=6))
    assert price(best_path(cost, change)) == pytest.approx(least)


def test_hours_gather_all_readings():
    """Counts, means and extremes of uneven readings."""
    time = np.array([10, 20, 3_599, 3_600, 9_000], np.int64) * 1_000_000_000
    got = hourly(time, np.array([1.0, 2.0, 6.0, 4.0, 5.0]))
    assert got.hour.tolist() == [0, 1, 2]
    assert got.n.tolist() == [3, 1, 1]
    assert got.mean.tolist() == [3.0, 4.0, 5.0]
    assert got.high.tolist() == [6.0, 4.0, 5.0]
    assert (got.time // HOUR_NS == got.hour).all()


def test_noise_is_seen_through_a_trend():
    """2 mm of noise on a slope and a slow wave."""
    rng = np.random.default_rng(3)
    i = np.arange(20_000)
    x = 1e-4 * i + 0.2 * np.sin(i / 300) + rng.normal(0, 0.002, i.size)
    assert noise_of(x) == pytest.approx(0.002, rel=0.05)


def evidence(offsets, years, sd=0.005, height=0.01):
    n = len(offsets)
    return Evidence(
        (np.array(years) * YEAR_NS).astype(np.int64),
        np.array(offsets, float),
        np.full(n, sd),
        np.zeros(n, bool),
        np.zeros(n, np.int64),
        0,
        (height,),
        0.005,
        np.zeros(n),
    )


YEARS = np.linspace(0.05, 2.9, 14)
ERRORS = np.array([3, -4, 1, 6, -2, -5, 2, 4, -3, 1, -6, 5, 0, -2]) / 1000


def test_noisy_checks_are_not_chased():
    """Checks that scatter by their sd give one constant, near the registry's height; no drift is taken off."""
    fit = fit_offset(evidence(ERRORS, YEARS))
    mean, sd = fit.at((np.array([0.5, 1.5, 2.5]) * YEAR_NS).astype(np.int64), np.zeros(3, np.int64))
    assert np.abs(mean).max() < 0.0015
    assert np.ptp(mean) < 0.0015
    assert (sd < 0.003).all()


def test_a_real_drift_is_followed():
    """3 cm a year is found to a few millimetres, also between checks."""
    fit = fit_offset(evidence(ERRORS + 0.03 * YEARS, YEARS))
    at = np.array([0.3, 1.4, 2.6])
    mean, _ = fit.at((at * YEAR_NS).astype(np.int64), np.zeros(3, np.int64))
    np.testing.assert_allclose(mean, 0.03 * at, atol=0.004)


def test_a_single_check_pulls_by_its_weight():
    """With survey 1 cm, sensor 5 mm and a check of 1 cm, about half of its difference is taken (models averaged)."""
    fit = fit_offset(evidence([0.01], [0.0], sd=0.01))
    mean, sd = fit.at(np.array([0]), np.array([0]))
    assert 0.003 < mean[0] < 0.007
    assert 0.005 < sd[0] < 0.011


def test_the_quick_step_search_equals_the_full_fit():
    """The rank-one update gives the log evidence of a full refit."""
    told = evidence(ERRORS + np.where(YEARS > 1.3, 0.05, 0.0), YEARS)
    step = Step(int(1.3 * YEAR_NS), -0.045, 0.01, 0.0, "jump")
    quick = evidence_with(fit_offset(told), step)
    assert quick == pytest.approx(fit_offset(told, (step,)).log_evidence, abs=1e-6)


def test_a_jump_the_checks_deny_is_refused_and_one_they_bear_out_is_taken():
    """The same sudden change of the record, with and without the checks behind it."""
    step = Step(int(1.3 * YEAR_NS), -0.06, 0.004, 3.0, "jump")
    assert choose_steps(evidence(ERRORS, YEARS), [step]).steps == ()
    moved = choose_steps(evidence(ERRORS + np.where(YEARS > 1.3, 0.06, 0.0), YEARS), [step])
    assert moved.steps == (step,)
    size, sd = moved.sizes()[0]
    assert size == pytest.approx(0.06, abs=0.004)
    assert sd < 0.005


@given(st.permutations(range(14)))
@settings(max_examples=15, deadline=None)
def test_order_of_checks_does_not_matter(order):
    """The fit is the same to rounding."""
    told = evidence(ERRORS + 0.01 * YEARS, YEARS)
    at = (np.array([0.7, 2.0]) * YEAR_NS).astype(np.int64)
    mean, sd = fit_offset(told).at(at, np.zeros(2, np.int64))
    other = fit_offset(told.take(np.array(order))).at(at, np.zeros(2, np.int64))
    np.testing.assert_allclose(mean, other[0], atol=1e-10)
    np.testing.assert_allclose(sd, other[1], atol=1e-10)


def test_the_stated_sd_keeps_the_promises_of_a_gaussian():
    """One Gaussian gives its own sd; of a mixture at least 68.3 % lie within one and 95.4 % within two, and no less sd does."""
    mean, sd = stated_sd(np.ones(1), np.array([[3.0, -1.0]]), np.array([[0.2, 5.0]]))
    np.testing.assert_allclose(mean, [3.0, -1.0])
    np.testing.assert_allclose(sd, [0.2, 5.0], rtol=4e-3)
    rng = np.random.default_rng(1)
    weight, means, sds = np.array([0.6, 0.3, 0.1]), np.array([[0.0], [1.0], [-4.0]]), np.array([[1.0], [0.3], [3.0]])
    mean, sd = stated_sd(weight, means, sds)
    assert mean[0] == pytest.approx(-0.1)
    pick = rng.choice(3, 400_000, p=weight)
    drawn = np.abs(rng.normal(means[pick, 0], sds[pick, 0]) - mean[0])
    one, two = (drawn < sd[0]).mean(), (drawn < 2 * sd[0]).mean()
    # sampling error of the shares is under 0.1 %
    assert min(one - 0.683, two - 0.954) == pytest.approx(0.0, abs=0.003)
    assert one > 0.68
    assert two > 0.951
