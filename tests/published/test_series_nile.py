"""The Nile series: local-level model against published values and statsmodels.

Durbin and Koopman, Time Series Analysis by State Space Methods, 2nd ed. 2012, chapter 2: variances 15099 and 1469.1;
states computed with statsmodels 0.15, exact diffuse start.
"""

import numpy as np
import pytest
import statsmodels.api as sm
from statsmodels.tsa.statespace.structural import UnobservedComponents

from inundate.series import local_level

NOISE, STEP = 15099.0, 1469.1


@pytest.fixture(scope="module")
def nile() -> np.ndarray:
    y = sm.datasets.nile.load_pandas().data["volume"].to_numpy(float)
    assert y.sum() == 91935
    return y


def reference(y):
    model = UnobservedComponents(y, "llevel", use_exact_diffuse=True)
    return model.smooth([NOISE, STEP])


@pytest.mark.parametrize(
    ("year", "filtered", "filtered_var", "smoothed", "smoothed_var"),
    [
        (1871, 1120.0, 15099.0, 1111.668319, 4032.157942),
        (1872, 1140.927840, 7899.736379, 1110.857665, 3242.930073),
        (1900, 984.554494, 4032.158018, 919.489869, 2326.756895),
        (1913, 749.420450, 4032.157942, 799.453269, 2326.756870),
        (1970, 798.370293, 4032.157942, 798.370293, 4032.157942),
    ],
)
def test_states(nile, year, filtered, filtered_var, smoothed, smoothed_var):
    got, t = local_level(nile, NOISE, STEP), year - 1871
    for name, value in (
        ("filtered", filtered),
        ("filtered_var", filtered_var),
        ("smoothed", smoothed),
        ("smoothed_var", smoothed_var),
    ):
        assert getattr(got, name)[t] == pytest.approx(value, abs=1e-6)


def test_loglik_and_steady_state(nile):
    got = local_level(nile, NOISE, STEP)
    assert got.loglik == pytest.approx(-633.464564, abs=1e-6)
    steady = (STEP + np.sqrt(STEP**2 + 4 * STEP * NOISE)) / 2
    assert got.filtered_var[-1] + STEP == pytest.approx(steady, abs=1e-6)
    assert steady == pytest.approx(5501.257942, abs=1e-6)


def test_equals_statsmodels_everywhere_and_with_gaps(nile):
    for gaps in (False, True):
        y = nile.copy()
        if gaps:
            y[20:40] = np.nan
            y[60:80] = np.nan
        got, ref = local_level(y, NOISE, STEP), reference(y)
        np.testing.assert_allclose(got.smoothed, ref.smoothed_state[0], atol=1e-6)
        np.testing.assert_allclose(got.smoothed_var, ref.smoothed_state_cov[0, 0], atol=1e-6, rtol=1e-9)
        np.testing.assert_allclose(got.filtered, ref.filtered_state[0], atol=1e-6)
        assert got.loglik == pytest.approx(ref.llf, abs=1e-6)


def test_published_gap_values(nile):
    """Filtered mean stays, variance grows over the first gap (1891-1910); smoothed values inside it."""
    y = nile.copy()
    y[20:40] = np.nan
    y[60:80] = np.nan
    got = local_level(y, NOISE, STEP)
    np.testing.assert_allclose(got.filtered[20:40], 1026.141555, atol=1e-6)
    np.testing.assert_allclose(got.filtered_var[[20, 29, 39]], [5501.296, 18723.196, 33414.196], atol=1e-3)
    np.testing.assert_allclose(
        got.smoothed[[20, 29, 39, 69]], [990.083526, 903.421103, 807.129522, 837.177324], atol=1e-6
    )
    np.testing.assert_allclose(got.smoothed_var[[20, 29, 39, 69]], [4723.604, 9715.006, 4723.597, 9715.006], atol=1e-3)
