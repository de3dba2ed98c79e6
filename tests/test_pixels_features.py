"""Features: values, missing bands, bad input."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from inundate.common.codes import BAND_ROLES
from inundate.common.errors import InputError
from inundate.pixels import FEATURES, features, scene_context

COL = {name: i for i, name in enumerate(FEATURES)}


def test_bands_pass_through_in_any_order():
    rng = np.random.default_rng(0)
    values = rng.random((10, 7)).astype("f4")
    order = rng.permutation(10)
    x = features(values[order], tuple(np.array(BAND_ROLES)[order]), 0.25, 40.0)
    assert x.dtype == np.float32
    assert x.shape == (7, len(FEATURES))
    np.testing.assert_array_equal(x[:, :10], values.T)
    np.testing.assert_array_equal(x[:, COL["leaf_share"]], 0.25)
    np.testing.assert_array_equal(x[:, COL["sun_elevation_deg"]], 40.0)


def test_four_band_sensor_gives_nan_where_a_band_is_needed():
    x = features(np.full((4, 3), 0.1, "f4"), ("blue", "green", "red", "nir"), 0.0, 30.0)
    known = np.isfinite(x).all(axis=0)
    wanted = {"blue", "green", "red", "nir", "ndvi", "ndwi", "leaf_share", "sun_elevation_deg"}
    assert {name for name, k in zip(FEATURES, known, strict=True) if k} == wanted
    assert np.isnan(x[:, ~known]).all()


def test_nir08_stands_in_for_nir_pixel_by_pixel():
    values = np.array([[0.1, 0.1], [np.nan, 0.4], [0.3, 0.3]], "f4")
    x = features(values, ("red", "nir", "nir08"), 0.0, 30.0)
    np.testing.assert_allclose(x[:, COL["ndvi"]], [0.5, 0.6], rtol=1e-6)


def test_negative_reflectance_of_dark_water_stays_water_like():
    x = features(np.array([[0.02], [-0.004], [-0.01]], "f4"), ("green", "nir", "swir16"), 0.0, 30.0)
    assert 0.98 < x[0, COL["ndwi"]] <= 1
    assert 0.98 < x[0, COL["mndwi"]] <= 1


@settings(max_examples=40, deadline=None)
@given(hnp.arrays(np.float32, (6, 5), elements=st.one_of(st.just(np.nan), st.floats(-0.0625, 1.5, width=32))))
def test_ratios_stay_within_one_and_each_pixel_is_its_own(values):
    bands = ("blue", "green", "red", "nir", "swir16", "swir22")
    x = features(values, bands, 0.0, 30.0)
    ratios = x[:, [COL[k] for k in ("ndvi", "ndwi", "mndwi", "ndmi")]]
    assert (np.abs(ratios[np.isfinite(ratios)]) <= 1).all()
    for i in range(5):
        np.testing.assert_array_equal(features(values[:, i : i + 1], bands, 0.0, 30.0)[0], x[i])


@pytest.mark.parametrize(
    ("bands", "shape", "words"),
    [
        (("blue", "teal"), (2, 3), "unknown or repeated role"),
        (("blue", "blue"), (2, 3), "unknown or repeated role"),
        (("blue",), (2, 3), "does not agree with 1 bands"),
    ],
)
def test_bad_bands_are_named(bands, shape, words):
    with pytest.raises(InputError, match=words):
        features(np.zeros(shape, "f4"), bands, 0.0, 30.0)


def test_leaf_share_of_wrong_length_is_refused():
    with pytest.raises(InputError, match=r"leaf_share: shape \(2,\) for 3 pixels"):
        features(np.zeros((1, 3), "f4"), ("blue",), np.zeros(2), 30.0)


def test_a_scene_wide_factor_leaves_the_comparison_with_the_ground():
    rng = np.random.default_rng(1)
    values, code = rng.uniform(0.02, 0.3, (10, 200)).astype("f4"), np.zeros(200, "u1")
    code[:20] = 1
    ground = np.arange(200) < 120
    base = scene_context(values, BAND_ROLES, code, ground)
    np.testing.assert_allclose(base, np.median(values[:, 20:120], axis=1), rtol=1e-6)
    columns = [COL[name] for name in FEATURES if name.endswith("_to_ground")]
    plain = features(values, BAND_ROLES, 0.0, 30.0, base)[:, columns]
    dimmed = features(0.6 * values, BAND_ROLES, 0.0, 30.0, scene_context(0.6 * values, BAND_ROLES, code, ground))[
        :, columns
    ]
    np.testing.assert_allclose(plain, dimmed, atol=1e-5)
    np.testing.assert_allclose(plain[:, 0], np.log(values[0] / base[0]), atol=1e-5)


def test_context_is_unknown_where_little_ground_is_clear_or_none_is_given():
    values, code = np.full((10, 60), 0.1, "f4"), np.zeros(60, "u1")
    code[:30] = 1
    base = scene_context(values, BAND_ROLES, code, np.ones(60, bool))
    assert np.isnan(base).all()
    columns = [COL[name] for name in FEATURES if name.endswith("_to_ground")]
    assert np.isnan(features(values, BAND_ROLES, 0.0, 30.0)[:, columns]).all()
    with pytest.raises(InputError, match=r"context: shape \(3,\) for 60 pixels"):
        features(values, BAND_ROLES, 0.0, 30.0, np.zeros(3))
