"""Formulas behind the reserve against printed values of their sources."""

import numpy as np
import pytest

from inundate.reserve import loggers, spectra, weather


def test_radiation_at_the_top_of_the_atmosphere():
    """Allen et al. 1998, FAO paper 56, example 8: 20 degrees south on 3 September (day 246) gives 32.2 MJ m-2 d-1 (from memory)."""
    assert weather.extraterrestrial_radiation(np.array([246]), -20.0)[0] == pytest.approx(32.2, abs=0.05)


def test_evapotranspiration_formula():
    """Oudin et al. 2005 by hand: Re / 2.45 x (T + 5) / 100; nothing below -5 degrees C."""
    energy = weather.extraterrestrial_radiation(np.array([172]), 45.0)[0]
    assert weather.oudin_pet(np.array([20.0]), np.array([172]), 45.0)[0] == pytest.approx(energy / 2.45 * 0.25)
    assert weather.oudin_pet(np.array([-5.0]), np.array([172]), 45.0)[0] == 0


@pytest.mark.parametrize(
    ("t", "density"), [(3.983035, 999.97495), (10.0, 999.7025), (20.0, 998.2067), (30.0, 995.6488)]
)
def test_water_density(t, density):
    """Tanaka et al. 2001, Metrologia 38:301, table of the recommended formula (values from memory)."""
    assert loggers.water_density(np.array([t]))[0] == pytest.approx(density, abs=2e-3)


@pytest.mark.parametrize(("latitude", "gravity"), [(0.0, 9.7803267715), (45.0, 9.8061992), (90.0, 9.8321863685)])
def test_normal_gravity(latitude, gravity):
    """GRS80 (Moritz 2000, J. Geodesy 74:128): equator and pole as printed, 45 degrees (from memory)."""
    assert loggers.normal_gravity(latitude) == pytest.approx(gravity, abs=5e-7)


def test_pure_water_absorption():
    """Pope & Fry 1997 (Appl. Opt. 36:8710): 0.062 at 560 nm, 0.43 at 665 nm within a sixth; the infrared strongly (from memory)."""
    absorb = spectra.water_absorption()
    assert absorb[1] == pytest.approx(0.062, rel=0.17)
    assert absorb[2] == pytest.approx(0.43, rel=0.17)
    assert absorb[8] > 500
    assert absorb[9] > 1500
