"""Curves, thresholds, gap fraction and leaf area against published forms and values."""

from __future__ import annotations

import numpy as np
import pytest

from inundate.leaves import (
    Optics,
    beck,
    canopy_greenness,
    curvature_dates,
    curvature_rate,
    elmore,
    gap_fraction,
    leaf_area_from_gap,
    leaf_area_from_ndvi,
    leaf_area_over_ground,
    ndvi_from_leaf_area,
)

# Beck et al. (2006), Remote Sensing of Environment 100:321, eq. 3; parameters of the published example in Julien & Sobrino
# (2009), values computed from the formula.
BECK = [
    (
        (0.07, 0.68, (119, 0.19), (282, 0.13)),
        {60: 0.070008, 100: 0.086067, 119: 0.375, 130: 0.612856, 200: 0.679986, 282: 0.375, 300: 0.123597},
    ),
    (
        (0.30, 0.85, (110, 0.12), (290, 0.08)),
        {60: 0.301360, 100: 0.427311, 110: 0.575, 120: 0.722688, 200: 0.849578, 290: 0.575, 320: 0.345745},
    ),
]


@pytest.mark.parametrize(("parameters", "values"), BECK)
def test_beck_values(parameters: tuple, values: dict[int, float]) -> None:
    np.testing.assert_allclose(beck(np.array(list(values)), *parameters), list(values.values()), atol=1.01e-6)


def test_elmore_values() -> None:
    """Elmore et al. (2012), Global Change Biology 18:656, eq. 4; values computed from the formula."""
    want = {60: 0.301002, 100: 0.411350, 110: 0.5475, 120: 0.680877, 200: 0.749745, 290: 0.5025, 320: 0.329585}
    got = elmore(np.array(list(want)), (0.30, 0.55, 110, 8, 290, 12, 0.0005))
    np.testing.assert_allclose(got, list(want.values()), atol=1e-6)


def test_elmore_without_decline_is_beck() -> None:
    """With m7 = 0 the two published forms are one."""
    day = np.arange(1.0, 366.0)
    one = elmore(day, (0.30, 0.55, 110, 1 / 0.12, 290, 1 / 0.08, 0.0))
    np.testing.assert_allclose(one, beck(day, 0.30, 0.85, (110, 0.12), (290, 0.08)), atol=1e-14)


def test_plain_greenness_curve_is_beck() -> None:
    """The fitted curve, with far-off saturation, is the published double logistic."""
    day, far = np.arange(1.0, 366.0), 4000.0
    parameters = np.array([0.3, 0.3, np.log(0.55 / far), 0.0, 110, np.log(1 / 0.12), 290, np.log(1 / 0.08)])
    got = canopy_greenness(day, parameters, Optics(0.3 + far, 200.0, plain=True))
    np.testing.assert_allclose(got, beck(day, 0.30, 0.85, (110, 0.12), (290, 0.08)), atol=1e-4)


def test_zhang_curvature() -> None:
    """Zhang et al. (2003), Remote Sensing of Environment 84:471; values computed with mpmath from the definition."""
    got = curvature_rate(np.array([110.0, 95.0]), 13.2, -0.12, 0.55)
    np.testing.assert_allclose(got, [-1.18751501555e-4, 3.1178705173e-5], rtol=1e-10)
    np.testing.assert_allclose(curvature_dates(13.2, -0.12, 0.55), (90.8944, 110.0, 129.1056), atol=1e-3)


def test_zhang_dates_of_a_falling_limb_mirror_the_rising_one() -> None:
    rising, falling = curvature_dates(13.2, -0.12, 0.55), curvature_dates(-13.2, 0.12, 0.55)
    np.testing.assert_allclose(rising, falling, atol=1e-3)


def test_zhang_limit_in_amplitude() -> None:
    """For small slopes the dates lie at 9.175 % and 90.825 % of the amplitude (ln(5 + 2 sqrt 6), computed)."""
    start, _, end = curvature_dates(13.2, -0.12, 1e-4)
    share = 1 / (1 + np.exp(13.2 - 0.12 * np.array([start, end])))
    np.testing.assert_allclose(share, [0.09175, 0.90825], atol=2e-4)


# Monsi & Saeki (1953); Nilson (1971), Agricultural Meteorology 8:25. Values computed from P = exp(-k LAI / cos theta).
GAPS = [
    (0.5, 1, 0, 0.6065307),
    (0.5, 3, 0, 0.2231302),
    (0.5, 3, 30, 0.1769212),
    (0.5, 3, 57.3, 0.0622534),
    (0.6, 5, 0, 0.0497871),
    (0.5, 0, 45, 1.0),
]


@pytest.mark.parametrize(("extinction", "area", "zenith", "want"), GAPS)
def test_gap_fraction_table(extinction: float, area: float, zenith: float, want: float) -> None:
    gap = gap_fraction(np.array([float(area)]), zenith, extinction)
    np.testing.assert_allclose(gap, want, atol=6e-8)
    np.testing.assert_allclose(leaf_area_from_gap(gap, zenith, extinction), area, atol=1e-12)


def test_baret_guyot_values_and_round_trip() -> None:
    """Baret & Guyot (1991), Remote Sensing of Environment 35:161: form published, values computed from it."""
    area = np.array([0, 0.5, 1, 2, 3, 5])
    want = [0.15, 0.357345, 0.510951, 0.709045, 0.817761, 0.910170]
    ndvi = ndvi_from_leaf_area(area, 0.95, 0.15, 0.6)
    np.testing.assert_allclose(ndvi, want, atol=1e-6)
    np.testing.assert_allclose(leaf_area_from_ndvi(ndvi, 0.95, 0.15, 0.6), area, atol=1e-9)


def test_leaf_area_against_radiative_transfer() -> None:
    """NDVI by PROSPECT-D with 4SAIL over a soil (sun at 30 degrees, nadir) gives back its leaf area.

    Baret & Guyot with the parameters fitted to this table (top 0.9412, soil 0.1503, K 0.8915): within 25 %, 0.5 to 3. The form
    for wetland ground takes ground of this NDVI for darker than this dry soil, so it errs low: within 0.35 m2/m2.
    """
    area = np.array([0.5, 1, 1.5, 2, 3])
    ndvi = np.array([0.4215, 0.6137, 0.7409, 0.8190, 0.8925])
    np.testing.assert_allclose(leaf_area_from_ndvi(ndvi, 0.9412, 0.1503, 0.8915), area, rtol=0.25)
    np.testing.assert_allclose(leaf_area_over_ground(ndvi, 0.1503), area, atol=0.35)


def test_greenness_over_grounds_by_radiative_transfer() -> None:
    """Leaf area over water, wet soil, moist soil and litter, each run through PROSPECT-D with 4SAIL in this test."""
    prosail = pytest.importorskip("prosail")
    wavelength = np.arange(400, 2501)
    red, nir = (wavelength >= 636) & (wavelength <= 673), (wavelength >= 851) & (wavelength <= 879)
    worst = []
    for soil in ((0.03, 0.02), (0.05, 0.06), (0.08, 0.12), (0.15, 0.25)):
        spectrum = np.where(wavelength < 750, soil[0], soil[1])
        ground = (soil[1] - soil[0]) / (soil[1] + soil[0])
        for area in (0.25, 0.5, 1.0, 2.0, 4.0):
            run = prosail.run_prosail(
                1.5, 40, 8, 0.0, 0.01, 0.009, area, 57.3, 0.01, 30, 0, 0,
                prospect_version="D", rsoil0=spectrum, typelidf=2,
            )  # fmt: skip
            ndvi = (run[nir].mean() - run[red].mean()) / (run[nir].mean() + run[red].mean())
            parameters = np.array([ground, ground, np.log(area), 0, 50, 0, 350, 0])
            worst.append(canopy_greenness(np.array([200.0]), parameters, Optics(0.95, 200.0))[0] - ndvi)
    assert np.sqrt(np.mean(np.square(worst))) < 0.03
