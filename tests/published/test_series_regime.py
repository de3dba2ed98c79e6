"""Outside checks of the regime measures: flashiness, circular timing, spells, rates."""

import numpy as np
import pytest

from inundate.series import circular_timing, flashiness, spells
from inundate.series.regime import MEASURES, year_measures


def test_richards_baker_on_the_first_days_of_a_gauge_record():
    """First days of water year 1975 at gauge 03238500 as printed in public documentation of the index.

    Index: Baker et al., J. Am. Water Resour. Assoc. 40:503, 2004; the first day is left out of the denominator.
    """
    assert flashiness(np.array([38, 32, 26, 20, 23, 23])) == pytest.approx(21 / 124, abs=1e-12)


@pytest.mark.parametrize(("q", "expected"), [([5, 5, 5, 5], 0.0), ([1, 3, 1, 3, 1, 3], 10 / 11)])
def test_richards_baker_by_hand(q, expected):
    """Worked by hand from the formula."""
    assert flashiness(np.array(q)) == pytest.approx(expected, abs=1e-10)


def test_richards_baker_has_no_value_without_flow():
    assert np.isnan(flashiness(np.zeros(4)))
    assert np.isnan(flashiness(np.ones(1)))


@pytest.mark.parametrize(
    ("days", "mean", "r"),
    [
        ((350, 360, 5, 15), 365.125, 0.981229),
        ((80, 100, 120), 100.0, 0.960931),
        ((90, 95, 100, 105, 110), 100.0, 0.992617),
    ],
)
def test_circular_mean_day_and_concentration(days, mean, r):
    """Method of Burn, J. Hydrol. 202, 1997; values computed from the formula and equal to scipy.stats.circmean."""
    from scipy.stats import circmean

    got = circular_timing(np.array(days))
    assert got[0] == pytest.approx(mean, abs=1e-6)
    assert got[1] == pytest.approx(r, abs=1e-6)
    assert got[0] % 365.25 == pytest.approx(circmean(days, high=365.25), abs=1e-9)


def test_opposite_days_have_no_mean():
    mean, r = circular_timing(np.array([10, 10 + 365.25 / 2]))
    assert np.isnan(mean)
    assert r == pytest.approx(0, abs=1e-9)


def test_spells_by_hand():
    """A series worked by hand (events, their lengths, dry lengths)."""
    wet = np.array([0, 0, 1, 1, 1, 0, 1, 0, 0, 0, 1, 1, 1, 1, 0], bool)
    start, length = spells(wet)
    assert start.tolist() == [2, 6, 10]
    assert length.tolist() == [3, 1, 4]
    assert spells(~wet)[1].tolist() == [2, 1, 3, 1]
    out = np.empty(len(MEASURES))
    year_measures(wet.astype(float), 0.5, 1.0, out)
    got = dict(zip(MEASURES, out, strict=True))
    assert got["days_inundated"] == 8
    assert got["share_inundated"] == pytest.approx(8 / 15)
    assert got["n_events"] == 3
    assert got["mean_event_days"] == pytest.approx(8 / 3)
    assert got["longest_event_days"] == 4
    assert got["longest_dry_days"] == 3
    assert got["first_wet_day"] == 3
    assert got["first_dry_day"] == 6


def test_rates_of_change_by_hand():
    """Stage-like series worked by hand: means of rises and falls, and reversals (rates as in PMC3307621, table 2)."""
    h = np.array([0.10, 0.10, 0.22, 0.40, 0.36, 0.33, 0.31, 0.30, 0.45, 0.41])
    out = np.empty(len(MEASURES))
    year_measures(h, 0.05, 1.0, out)
    got = dict(zip(MEASURES, out, strict=True))
    assert got["mean_rise_m2_per_day"] == pytest.approx(0.15)
    assert got["mean_fall_m2_per_day"] == pytest.approx(-0.028)
    assert got["n_reversals"] == 3
    assert got["flashiness"] == pytest.approx(flashiness(h))
    assert got["max_day"] == 9
    assert got["variability"] == pytest.approx(h.std())
