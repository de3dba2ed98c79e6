"""What a canopy lets through: bounds, order, inverses, dark ground."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from inundate.common.errors import InputError
from inundate.leaves import (
    Canopy,
    Optics,
    canopy_greenness,
    gap_fraction,
    leaf_area_from_gap,
    leaf_area_from_ndvi,
    leaf_area_over_ground,
    ndvi_from_leaf_area,
    view_fraction,
)

NDVI = st.floats(-0.5, 1.0)


@given(peak=NDVI, bare=NDVI, first=st.floats(0, 1), second=st.floats(0, 1), zenith=st.floats(0, 70))
def test_more_leaves_never_show_more_ground(
    peak: float, bare: float, first: float, second: float, zenith: float
) -> None:
    """Seen share lies in 0..1 and never rises with leaf share, whatever the two greenness values are."""
    less, more = sorted((first, second))
    seen = view_fraction(np.full(2, peak), np.full(2, bare), np.array([less, more]), view_zenith_deg=zenith)
    assert ((seen > 0) & (seen <= 1)).all()
    assert seen[1] <= seen[0] + 1e-12


@given(low=NDVI, high=NDVI, bare=st.floats(-0.3, 0.3))
def test_greener_in_summer_shows_less(low: float, high: float, bare: float) -> None:
    seen = view_fraction(np.array(sorted((low, high))), np.full(2, bare), 1.0)
    assert seen[1] <= seen[0] + 1e-12


def test_wood_stays_when_leaves_are_off() -> None:
    """Under closed woods the wood alone hides part of the ground in winter; an open pixel shows nearly all of it."""
    closed, bare = view_fraction(np.array([0.93, 0.15]), np.array([0.15, 0.15]), 0.0)
    assert closed == pytest.approx(np.exp(-0.5 * 0.5), abs=0.03)
    assert bare > 0.99
    assert view_fraction(np.array([0.93]), np.array([0.15]), 1.0)[0] < 0.1


def test_evergreen_hides_in_winter_too() -> None:
    """A pixel as green in winter as in summer is hidden whatever the leaf share."""
    off, on = view_fraction(np.full(2, 0.90), np.full(2, 0.88), np.array([0.0, 1.0]))
    assert off < 0.3
    assert off - on < 0.1


def test_missing_values_stay_missing() -> None:
    """No peak greenness gives no answer; no leaf-off greenness is taken as ground's."""
    seen = view_fraction(np.array([np.nan, 0.8, 0.8]), np.array([0.1, np.nan, Canopy().ground_ndvi]), 0.5)
    assert np.isnan(seen[0])
    assert seen[1] == seen[2]


@given(area=st.floats(0.0, 6.0), ground=st.floats(-0.2, 0.25))
def test_leaf_area_over_ground_inverts_the_curve(area: float, ground: float) -> None:
    """Full leaf of the greenness curve over a ground, taken back to its leaf area."""
    parameters = np.array([ground, ground, np.log(max(area, 1e-9)), 0.0, 50.0, 0.0, 350.0, 0.0])
    ndvi = canopy_greenness(np.array([200.0]), parameters, Optics(0.95, 200.0))
    assert leaf_area_over_ground(ndvi, np.array([ground]))[0] == pytest.approx(area, abs=1e-6)


@given(area=st.floats(0, 7.5), zenith=st.floats(0, 75), extinction=st.floats(0.2, 0.9))
def test_gap_fraction_inverts(area: float, zenith: float, extinction: float) -> None:
    gap = gap_fraction(np.array([area]), zenith, extinction)
    assert leaf_area_from_gap(gap, zenith, extinction)[0] == pytest.approx(area, abs=1e-9)


@given(area=st.floats(0, 7.5), ground=st.floats(-0.2, 0.4), rate=st.floats(0.3, 1.2))
def test_greenness_and_leaf_area_invert(area: float, ground: float, rate: float) -> None:
    ndvi = ndvi_from_leaf_area(np.array([area]), 0.94, ground, rate)
    assert leaf_area_from_ndvi(ndvi, 0.94, ground, rate)[0] == pytest.approx(area, abs=1e-6)


def test_few_leaves_over_dark_ground_look_like_many_over_bright() -> None:
    """The same NDVI means less leaf area over water than over litter."""
    over_water, over_litter = leaf_area_over_ground(np.full(2, 0.6), np.array([-0.2, 0.25]))
    assert over_water < 0.7 * over_litter


@pytest.mark.parametrize("angle", [-1.0, 90.0, 120.0])
def test_angles_that_cannot_be_are_refused(angle: float) -> None:
    with pytest.raises(InputError, match=f"zenith angle {angle} degrees lies outside 0 to below 90"):
        gap_fraction(np.array([1.0]), angle)


def test_canopy_that_cannot_be_is_refused() -> None:
    with pytest.raises(InputError, match=r"top_ndvi 0.1 is not above ground_ndvi 0.15"):
        view_fraction(np.array([0.5]), np.array([0.1]), 0.5, canopy=Canopy(top_ndvi=0.1))
