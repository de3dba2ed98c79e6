"""Scaling, mask decoding and STAC semantics against their published definitions."""

from __future__ import annotations

import numpy as np
import pytest

from inundate.common.codes import ViewCode
from inundate.scenes import load_profile
from inundate.scenes.scene import band_source
from inundate.scenes.sensors import parse_profile
from inundate.scenes.stac import scene_from_item

C, K, S, ICE, F = (int(c) for c in (ViewCode.CLEAR, ViewCode.CLOUD, ViewCode.SHADOW, ViewCode.SNOW_ICE, ViewCode.FILL))


def reflectance(
    profile_name: str, dn: list[float], baseline: str | None = None, when: str = "2021-01-01"
) -> np.ndarray:
    """Reflectance of raw numbers through the reading kernel."""
    from inundate.scenes.kernels import copy_band

    profile = load_profile(profile_name)
    offset = profile.scaling.offset_for(baseline, np.datetime64(when, "ns"))
    source = band_source(("x", 1), "red", profile, offset, {})
    raw = np.array([dn], np.int32 if min(dn) < 0 else np.uint16).astype(np.int16 if min(dn) < 0 else np.uint16)
    out = np.empty(raw.shape, np.float32)
    code = np.zeros(raw.shape, np.uint8)
    fill = np.nan if source.fill is None else source.fill
    copy_band(raw, (0, 0), (source.scale, source.offset, fill, *source.valid), out, code)
    assert ((code == F) == np.isnan(out)).all()
    return out[0]


def test_landsat_collection_2_scaling():
    """rho = DN * 2.75e-5 - 0.2, DN 0 is fill: USGS LSDS-1619 (Landsat 8-9 Collection 2 Level 2 Science Product Guide)."""
    got = reflectance("landsat-c2-l2", [0, 7273, 10909, 18182, 43636])
    assert np.isnan(got[0])  # not -0.2
    np.testing.assert_allclose(got[1:], [7.5e-6, 0.0999975, 0.300005, 0.99999], atol=2e-8)


@pytest.mark.parametrize(("dn", "old", "new"), [(1000, 0.10, 0.00), (1500, 0.15, 0.05), (11000, 1.10, 1.00)])
def test_sentinel_2_offset_by_baseline(dn, old, new):
    """BOA_ADD_OFFSET -1000, quantification 10000 from baseline 04.00, in force 25 January 2022: ESA Sentinel-2 Products
    Specification Document, and the notice on processing baseline 04.00."""
    assert reflectance("sentinel-2-l2a", [dn], "03.01")[0] == pytest.approx(old, abs=1e-7)
    for baseline in ("04.00", "05.09", "N0510"):
        assert reflectance("sentinel-2-l2a", [dn], baseline)[0] == pytest.approx(new, abs=1e-7)
    # reprocessed old scene: the baseline counts, not the date
    assert reflectance("sentinel-2-l2a", [dn], "05.00", "2017-06-01")[0] == pytest.approx(new, abs=1e-7)
    # baseline not told: the date counts
    assert reflectance("sentinel-2-l2a", [dn], None, "2022-01-24")[0] == pytest.approx(old, abs=1e-7)
    assert reflectance("sentinel-2-l2a", [dn], None, "2022-01-25")[0] == pytest.approx(new, abs=1e-7)


def test_sentinel_2_no_data_before_offset():
    """DN 0 is no data before the offset is added (rule typed from memory of the same document)."""
    assert np.isnan(reflectance("sentinel-2-l2a", [0], "05.10")[0])
    assert reflectance("sentinel-2-l2a", [900], "05.10")[0] == pytest.approx(-0.01, abs=1e-7)  # dark water stays


def test_hls_scaling_and_fill():
    """Scale 1e-4, fill -9999: HLS Product User Guide v2.0 (values typed from memory)."""
    got = reflectance("hls-v2", [-9999, 0, 1234, -50])
    assert np.isnan(got[0])
    np.testing.assert_allclose(got[1:], [0.0, 0.1234, -0.005], atol=1e-7)


# QA_PIXEL bits: USGS LSDS-1328 (Landsat 8-9 Collection 2 Level-1 Data Format Control Book), table of quality bits.
# value -> (clear bit 6, cloud bit 3, shadow bit 4, snow bit 5, cirrus bit 2), and our code.
QA_PIXEL = {
    1: ((0, 0, 0, 0, 0), F),
    21824: ((1, 0, 0, 0, 0), C),
    21952: ((1, 0, 0, 0, 0), C),  # water
    22280: ((0, 1, 0, 0, 0), K),
    23888: ((1, 0, 1, 0, 0), S),  # trap: the clear bit is set on shadow
    30048: ((1, 0, 0, 1, 0), ICE),  # trap: and on snow
    54596: ((1, 0, 0, 0, 1), K),  # trap: and on cirrus
    55052: ((0, 1, 0, 0, 1), K),
    21826: ((1, 0, 0, 0, 0), K),  # dilated cloud, bit 1
}


@pytest.mark.parametrize("value", QA_PIXEL)
def test_qa_pixel_decode(value):
    bits, code = QA_PIXEL[value]
    assert tuple(value >> b & 1 for b in (6, 3, 4, 5, 2)) == bits  # the table itself
    rules = load_profile("landsat-c2-l2").mask.rules
    assert rules.decode(np.array([value], np.uint16))[0] == code
    assert rules.decode(np.array([value], np.float64))[0] == code


def test_qa_pixel_without_cirrus_bits():
    """TM and ETM+ leave bits 2, 14 and 15 unused (LSDS-1618, Landsat 4-7 Collection 2): 5440 clear, 5896 cloud, 7504 shadow.

    Values computed from the bit table."""
    clear = 1 << 6 | 1 << 8 | 1 << 10 | 1 << 12
    cloud = 1 << 3 | 3 << 8 | 1 << 10 | 1 << 12
    shadow = 1 << 6 | 1 << 4 | 1 << 8 | 3 << 10 | 1 << 12
    assert (clear, cloud, shadow) == (5440, 5896, 7504)
    rules = load_profile("landsat-c2-l2").mask.rules
    assert rules.decode(np.array([clear, cloud, shadow], np.uint16)).tolist() == [C, K, S]


def test_scene_classification():
    """SCL classes 0..11: ESA Sentinel-2 Level-2A Algorithm Theoretical Basis Document, scene classification."""
    rules = load_profile("sentinel-2-l2a").mask.rules
    got = rules.decode(np.arange(13, dtype=np.uint8)).tolist()
    assert got == [F, F, C, S, C, C, C, C, K, K, K, ICE, F]


# Fmask bits 1 cloud, 2 adjacent, 3 shadow, 4 snow/ice, 5 water, 6-7 aerosol; 255 fill: HLS Product User Guide v2.0.
FMASK = {32: C, 224: C, 64: C, 0: C, 8: S, 4: K, 2: K, 10: K, 16: ICE, 48: ICE, 255: F}


@pytest.mark.parametrize("value", FMASK)
def test_fmask_decode(value):
    assert load_profile("hls-v2").mask.rules.decode(np.array([value], np.uint8))[0] == FMASK[value]


def test_fmask_shadow_is_not_the_adjacent_bit():
    """Public code is known to swap bits 2 and 3: bit 3 (8) is shadow, bit 2 (4) is not."""
    rules = load_profile("hls-v2").mask.rules
    assert rules.decode(np.array([8, 4], np.uint8)).tolist() == [S, K]


def item(assets, **properties):
    return {
        "type": "Feature",
        "stac_version": "1.0.0",
        "id": "S",
        "geometry": None,
        "links": [],
        "properties": {"datetime": "2023-01-01T00:00:00Z", **properties},
        "assets": assets,
    }


PROFILE = """
name = "two"
step_m = 10.0
[scaling]
scale = 1e-4
offset = 0.0
fill = 0
baselines = [{ from = "04.00", offset = -0.1 }]
baseline_properties = ["s2:processing_baseline"]
[bands.red]
common_names = ["red"]
[mask]
assets = ["m"]
rules = [{ code = "clear", values = [1] }]
"""


def value_of(band, dn):
    return band.scale * dn + band.offset


@pytest.mark.parametrize("version", ["1.0", "1.1"])
def test_stac_scale_offset_semantics(version):
    """value = scale * DN + offset, the offset added after scaling: stac-extensions/raster v1.1 README; in STAC 1.1 the
    fields are raster:scale and raster:offset of ``bands`` (raster v2.0), nodata is common metadata."""
    profile = parse_profile(PROFILE, "test")
    if version == "1.0":
        red = {
            "href": "r.tif",
            "eo:bands": [{"name": "B4", "common_name": "red"}],
            "raster:bands": [{"scale": 1e-4, "offset": -0.1, "nodata": 0}],
        }
    else:
        red = {
            "href": "r.tif",
            "nodata": 0,
            "bands": [{"name": "B4", "eo:common_name": "red", "raster:scale": 1e-4, "raster:offset": -0.1}],
        }
    for baseline in ("03.00", "05.10"):  # what the asset states is taken once, whatever the baseline
        scene = scene_from_item(
            item({"x": red, "m": {"href": "m.tif"}}, **{"s2:processing_baseline": baseline}), "/d/s.json", profile
        )
        assert value_of(scene.bands["red"], 1500) == pytest.approx(0.05)
        assert scene.bands["red"].fill == 0


def test_stac_scale_alone_means_offset_zero():
    """An absent offset is 0 where the asset states its scale (default of the extension, typed from memory)."""
    profile = parse_profile(PROFILE, "test")
    red = {"href": "r.tif", "eo:bands": [{"common_name": "red"}], "raster:bands": [{"scale": 1e-4}]}
    raw = item({"x": red, "m": {"href": "m.tif"}}, **{"s2:processing_baseline": "05.10"})
    assert value_of(scene_from_item(raw, "/d/s.json", profile).bands["red"], 1500) == pytest.approx(0.15)


def test_offset_already_applied_is_not_applied_again():
    """A property that ends in boa_offset_applied says that the stored numbers hold no offset any more."""
    profile = parse_profile(PROFILE, "test")
    red = {"href": "r.tif", "eo:bands": [{"common_name": "red"}], "raster:bands": [{"scale": 1e-4, "offset": -0.1}]}
    raw = item(
        {"x": red, "m": {"href": "m.tif"}}, **{"s2:processing_baseline": "05.10", "any:boa_offset_applied": True}
    )
    assert value_of(scene_from_item(raw, "/d/s.json", profile).bands["red"], 1500) == pytest.approx(0.15)


@pytest.mark.parametrize(("told", "want"), [("nan", np.nan), ("-inf", -np.inf), (-9999, -9999)])
def test_stac_nodata_may_be_a_word(told, want):
    """nodata may be a number or "nan", "inf", "-inf": stac-extensions/raster v1.1 README."""
    profile = parse_profile(PROFILE, "test")
    red = {"href": "r.tif", "eo:bands": [{"common_name": "red"}], "raster:bands": [{"nodata": told}]}
    band = scene_from_item(item({"x": red, "m": {"href": "m.tif"}}), "/d/s.json", profile).bands["red"]
    np.testing.assert_equal(band.fill, want)


@pytest.mark.parametrize(
    ("platform", "keys"),
    [
        ("landsat-8", {"blue": "SR_B2", "red": "SR_B4", "nir": "SR_B5", "swir16": "SR_B6", "swir22": "SR_B7"}),
        ("landsat-9", {"blue": "SR_B2", "red": "SR_B4", "nir": "SR_B5", "swir16": "SR_B6", "swir22": "SR_B7"}),
        ("landsat-7", {"blue": "SR_B1", "red": "SR_B3", "nir": "SR_B4", "swir16": "SR_B5", "swir22": "SR_B7"}),
        ("landsat-5", {"blue": "SR_B1", "red": "SR_B3", "nir": "SR_B4", "swir16": "SR_B5", "swir22": "SR_B7"}),
    ],
)
def test_landsat_band_numbers_by_instrument(platform, keys):
    """Band numbers: stac-extensions/eo README, table of common band names; OLI B5 is nir08, TM and ETM+ B5 is swir16."""
    assets = {f"SR_B{k}": {"href": f"b{k}.tif"} for k in range(1, 8)} | {"QA_PIXEL": {"href": "qa.tif"}}
    scene = scene_from_item(item(assets, platform=platform), "/d/s.json", load_profile("landsat-c2-l2"))
    for role, key in keys.items():
        assert scene.bands[role].href == f"/d/b{key[-1]}.tif"


def test_landsat_narrow_near_infrared_serves_as_nir():
    names = ("blue", "green", "red", "nir08", "swir16", "swir22")
    assets = {n: {"href": f"{n}.tif", "eo:bands": [{"common_name": n}]} for n in names} | {
        "qa_pixel": {"href": "qa.tif"}
    }
    scene = scene_from_item(item(assets), "/d/s.json", load_profile("landsat-c2-l2"))
    assert scene.bands["nir"].href == "/d/nir08.tif"


@pytest.mark.parametrize(
    ("scene_id", "nir", "swir16", "extra"),
    [
        ("HLS.S30.T33UUS.2023001T100000.v2.0", "B8A", "B11", ["B05", "B06", "B07", "B08", "B8A", "B11", "B12"]),
        ("HLS.L30.T33UUS.2023001T100000.v2.0", "B05", "B06", ["B05", "B06", "B07"]),
    ],
)
@pytest.mark.parametrize("named", [True, False])
def test_hls_band_names(scene_id, nir, swir16, extra, named):
    """S30 and L30 give other bands the same number: HLS Product User Guide v2.0, spectral bands nomenclature."""
    assets = {key: {"href": f"{key}.tif"} for key in ["B02", "B03", "B04", *extra, "Fmask"]}
    raw = item(assets) | {"id": scene_id if named else "X"}
    scene = scene_from_item(raw, "/d/s.json", load_profile("hls-v2"))
    assert scene.bands["nir"].href == f"/d/{nir}.tif"
    assert scene.bands["swir16"].href == f"/d/{swir16}.tif"
