"""The power law of a basin against its paper and closed forms.

Source: Hayashi & van der Kamp (2000), Journal of Hydrology 237, 74-85, doi:10.1016/S0022-1694(00)00300-0: A = s (h/h0)^(2/p),
V = s h0 / (1 + 2/p) (h/h0)^(1 + 2/p), s and p from two (A, h) pairs. The p of 1.72 and 3.3 are those stated in public
documentation for prairie wetlands below and above 1 ha; 0.91 is the median of 40 beaver ponds, Karran et al. (2017), HESS 21,
1039. Numbers beside them were computed from the formula and by scipy.integrate.quad.
"""

import numpy as np
import pandas as pd
import pytest
from scipy.integrate import quad

from inundate.relation import RelationOptions, fit_relations
from inundate.relation.powerlaw import (
    power_area,
    power_from_two_points,
    power_p_from_volume,
    power_stage_of_volume,
    power_volume,
)

AT_06 = {
    0.91: (650.804169, 122.109648),
    1.0: (720.0, 144.0),
    1.72: (1104.247268, 306.339565),
    2.0: (1200.0, 360.0),
    3.3: (1467.493573, 548.233448),
    6.0: (1686.865331, 759.089399),
    1e9: (2000.0, 1200.0),
}


@pytest.mark.parametrize(("p", "expected"), AT_06.items())
def test_area_and_volume_at_published_shapes(p, expected):
    area, volume = float(power_area(0.6, 2000, p)), float(power_volume(0.6, 2000, p))
    assert (area, volume) == pytest.approx(expected, rel=1e-8)
    assert volume == pytest.approx(quad(lambda h: float(power_area(h, 2000, p)), 0, 0.6)[0], rel=1e-7)
    assert float(power_stage_of_volume(volume, 2000, p)) == pytest.approx(0.6, rel=1e-9)
    # mean depth over depth is p / (p + 2)
    assert volume / area / 0.6 == pytest.approx(p / (p + 2), rel=1e-9)


def test_two_points_give_the_constants():
    s, p = power_from_two_points((0.2, 600), (0.5, 1500))
    assert (s, p) == pytest.approx((3000, 2))
    assert float(power_volume(0.5, s, p)) == pytest.approx(375)
    assert power_p_from_volume(0.5, 1500, 375) == pytest.approx(2)


@pytest.mark.parametrize(
    ("p", "volume", "s"),
    [(1.0, 628.318531, 558.505361), (2.0, 942.477796, 837.758041), (1e9, 1884.955592, 1256.637061)],
)
def test_cone_paraboloid_and_cylinder(p, volume, s):
    """Radius 20 m, depth 1.5 m: a third, a half and the whole of base times depth."""
    full = np.pi * 20**2
    assert s * 1.5 ** (2 / p) == pytest.approx(full, rel=1e-6)
    assert float(power_volume(1.5, s, p)) == pytest.approx(volume, rel=1e-6)


@pytest.mark.parametrize("p", [0.91, 1.0, 1.72, 2.0, 3.3])
def test_the_calibrator_returns_the_law_it_was_shown(p):
    """Exact pairs of a power law: area, constants and the tabled volume come back."""
    stage = np.linspace(0.05, 0.6, 25)
    pairs = pd.DataFrame(
        {
            "wetland_id": "w",
            "date": pd.date_range("2031-01-01", periods=25, freq="14D"),
            "stage_m": stage,
            "stage_sd_m": 0.002,
            "area_m2": power_area(stage, 2000, p),
            "area_sd_m2": 5.0,
        }
    )
    size = float(power_area(0.8, 2000, p))
    wetlands = pd.DataFrame({"wetland_id": ["w"], "area_max_m2": [size]})
    got = fit_relations(pairs, wetlands, options=RelationOptions(families=("power",)))
    table = got.table(0.01).set_index("stage_m")
    at = table.index[np.abs(table.index - 0.6) < 1e-9][0]
    # the pull of the wide prior on 25 pairs of 1 % is below half a percent
    assert table.loc[at, "area_m2"] == pytest.approx(AT_06[p][0], rel=0.005)
    assert table.loc[at, "volume_m3"] == pytest.approx(AT_06[p][1], rel=0.005)
