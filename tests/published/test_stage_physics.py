"""Density, gravity, standard atmosphere, units and depth against published values and reference libraries."""

import numpy as np
import pytest

from inundate.stage.physics import (
    METRE,
    PASCAL,
    carry_pressure,
    depth_of_pressure,
    geopotential_height,
    gravity,
    standard_pressure,
    water_density,
)
from inundate.stage.prepare import convert

T = np.array([0.0, 4.0, 10.0, 15.0, 20.0, 25.0, 30.0])


def test_density_against_the_handbook_table():
    """CRC Handbook of Chemistry and Physics, standard density of water (0 and 4 C from memory); Tanaka 2001 formula."""
    crc = [999.8426, 999.9750, 999.7026, 999.1026, 998.2071, 997.0479, 995.6502]
    np.testing.assert_allclose(water_density(T), crc, atol=1.5e-3)


def test_density_against_iapws95():
    """Equation of state IAPWS-95 (Wagner and Pruss 2002) at 101325 Pa, computed by the iapws library."""
    iapws = pytest.importorskip("iapws")
    reference = [iapws.IAPWS95(T=t + 273.15, P=0.101325).rho for t in T]
    np.testing.assert_allclose(water_density(T), reference, atol=7e-4)


def test_density_against_teos10():
    """TEOS-10 fresh water by in-situ temperature (gsw.rho_t_exact); the 75-term polynomial is off by 1 g and no reference."""
    gsw = pytest.importorskip("gsw")
    np.testing.assert_allclose(water_density(T), gsw.rho_t_exact(0.0, T, 0.0), atol=8e-4)


def test_density_is_not_the_misprinted_kell_formula():
    """Kell 1975 (J. Chem. Eng. Data 20:97) with 16.879850e-3, and the copy with swapped digits that loses 0.27 kg/m3."""
    top = 999.83952 + 16.945176 * T - 7.9870401e-3 * T**2 - 46.170461e-6 * T**3 + 105.56302e-9 * T**4
    top -= 280.54253e-12 * T**5
    # Kell's scale has 999.972 where today's has 999.975: 3 g/m3
    np.testing.assert_allclose(water_density(T), top / (1 + 16.879850e-3 * T) + 0.003, atol=1.5e-3)
    assert abs(water_density(20.0) - (top / (1 + 16.897850e-3 * T))[4]) > 0.2


def test_density_peaks_at_its_published_maximum():
    """999.974950 kg/m3 at 3.983035 C (Tanaka et al. 2001, Metrologia 38:301)."""
    assert water_density(3.983035) == pytest.approx(999.974950, abs=1e-9)
    near = water_density(np.array([3.8, 3.983035, 4.2]))
    assert near.argmax() == 1


def test_density_keeps_nan_and_holds_its_limits():
    """Outside 0..40 C the formula is not published; values are held, never extrapolated."""
    assert np.isnan(water_density(np.nan))
    assert water_density(-3.0) == water_density(0.0)
    assert water_density(55.0) == water_density(40.0)


def test_normal_gravity_of_wgs84():
    """NGA.STND.0036 closed formula; values at the equator and pole are its defining constants (9.7803253359, 9.8321849379)."""
    latitude = [0, 30, 38, 45, 60, 90]
    table = [9.7803253, 9.7932473, 9.7999282, 9.8061978, 9.8191770, 9.8321849]
    np.testing.assert_allclose(gravity(latitude), table, atol=6e-8)
    np.testing.assert_allclose(gravity([-45.0]), gravity([45.0]))


def test_gravity_falls_with_height():
    """Second-order height expansion of the same standard; about -3.086e-6 per second squared (free-air gradient)."""
    assert gravity(45.0, 500.0) == pytest.approx(9.8046552, abs=1e-7)
    assert gravity(45.0, 1000.0) == pytest.approx(9.8031129, abs=1e-7)
    assert (gravity(45.0, 1.0) - gravity(45.0)) == pytest.approx(-3.086e-6, rel=1e-3)


def test_gravity_against_teos10():
    """gsw.grav uses GRS80-like constants; within 2.2e-6 of WGS 84."""
    gsw = pytest.importorskip("gsw")
    latitude = np.linspace(-90, 90, 37)
    np.testing.assert_allclose(gravity(latitude), gsw.grav(latitude, 0.0), atol=2.3e-6)


def test_standard_atmosphere_table():
    """U.S. Standard Atmosphere 1976, table by geopotential height (same as ISO 2533 below 32 km)."""
    height = [0, 100, 305, 500, 1000, 2000, 3000, 5000]
    table = [101325.00, 100129.44, 97714.23, 95460.84, 89874.56, 79495.20, 70108.53, 54019.89]
    np.testing.assert_allclose(standard_pressure(height, geopotential=True), table, atol=0.01)


def test_standard_atmosphere_against_ambiance():
    """The ambiance library (ICAO Doc 7488) takes geometric height."""
    ambiance = pytest.importorskip("ambiance")
    height = np.array([0.0, 250.0, 1000.0, 2000.0, 4000.0])
    np.testing.assert_allclose(standard_pressure(height), ambiance.Atmosphere(height).pressure, rtol=2e-6)
    assert geopotential_height(2000.0) == pytest.approx(1999.371, abs=1e-3)


def test_a_barometer_ten_metres_off_shifts_depth_by_a_centimetre():
    """dp/dz = -12.013 Pa/m at sea level in the standard atmosphere: 12.2 mm of water a 10 m."""
    shift = carry_pressure(101325.0, 0.0, 10.0) - 101325.0
    assert shift == pytest.approx(-120.1, abs=0.2)
    assert depth_of_pressure(-shift, 15.0, 9.81) == pytest.approx(0.01225, abs=5e-5)


@pytest.mark.parametrize(
    ("ours", "theirs"),
    [
        ("kPa", "kilopascal"),
        ("hPa", "hectopascal"),
        ("mbar", "millibar"),
        ("psi", "psi"),
        ("mmHg", "millimeter_Hg"),
        ("cmH2O", "centimeter_H2O"),
    ],
)
def test_pressure_units_against_pint(ours, theirs):
    """Exact definitions (NIST SP 811, Appendix B); pint as the second opinion."""
    pint = pytest.importorskip("pint")
    reference = pint.UnitRegistry().Quantity(1.0, theirs).to("pascal").magnitude
    # pint's mercury and water columns carry few digits
    assert PASCAL[ours] == pytest.approx(reference, rel=1e-6 if ours in ("mmHg", "cmH2O") else 1e-12)


def test_lengths_are_exact():
    """The international foot is 0.3048 m by definition (1959)."""
    assert METRE == {"m": 1.0, "cm": 0.01, "ft": 0.3048}


@pytest.mark.parametrize(
    ("total_kpa", "air_kpa", "warmth_c", "latitude", "depth_m"),
    [
        (111.325, 101.325, 4.0, 45.0, 1.0197888),
        (111.325, 101.325, 20.0, 38.0, 1.0222488),
        (103.325, 101.325, 20.0, 38.0, 0.2044498),
        (102.3, 101.325, 25.0, 30.0, 0.0998533),
    ],
)
def test_depth_worked_by_hand(total_kpa, air_kpa, warmth_c, latitude, depth_m):
    """(P_total - P_air) / (rho g), worked with the tables above; e.g. 10 000 Pa / (999.97495 x 9.8061978) = 1.0197888 m."""
    got = depth_of_pressure((total_kpa - air_kpa) * 1000, warmth_c, gravity(latitude))
    assert got == pytest.approx(depth_m, abs=5e-8)
    # a fixed 1000 kg/m3 and 9.80665 would be 2.5 mm short a metre at 20 C and 38 degrees
    if warmth_c == 20.0 and depth_m > 1:
        assert got - 10_000 / (1000 * 9.80665) == pytest.approx(0.00253, abs=2e-5)


def test_every_unit_gives_the_same_depth():
    """One metre of cold water told in every unit of the registry."""
    pascal = 999.97495 * 9.8061978
    for unit, factor in PASCAL.items():
        depth = depth_of_pressure(convert(np.array([pascal / factor]), unit, "vented"), 4.0, 9.8061978)
        assert depth[0] == pytest.approx(1.0, abs=1e-7)
    for unit, factor in METRE.items():
        assert convert(np.array([1.0 / factor]), unit, "level")[0] == pytest.approx(1.0, abs=1e-12)
