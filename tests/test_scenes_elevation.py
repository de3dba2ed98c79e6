"""Elevation windows: place, nodata, scaled integers, another system, window = whole."""

from __future__ import annotations

import numpy as np
import pytest
import rasterio
from pyproj import Transformer
from scenes_files import CRS, NORTH, WEST, plane, write_tif

from inundate.common.errors import InputError
from inundate.scenes import read_elevation


def test_cells_under_the_box_at_their_place(tmp_path):
    data = plane(WEST, NORTH, 2.0, (200, 300)).astype(np.float32)
    data[10, 20] = -9999
    path = write_tif(tmp_path / "e.tif", data, step=2.0, nodata=-9999)
    values, transform, crs = read_elevation(path, CRS, (WEST + 35.0, NORTH - 41.0, WEST + 81.0, NORTH - 15.0))
    assert (values.dtype, crs) == (np.float32, CRS)
    assert (transform.c, transform.f, transform.a) == (WEST + 34.0, NORTH - 14.0, 2.0)
    assert values.shape == (14, 24)
    want = plane(WEST + 34.0, NORTH - 14.0, 2.0, (14, 24))
    want[3, 3] = np.nan
    np.testing.assert_allclose(values, want, rtol=1e-6)


def test_integer_and_scaled_models(tmp_path):
    raw = np.arange(64, dtype=np.int16).reshape(8, 8)
    raw[0, 0] = -32768
    path = write_tif(tmp_path / "e.tif", raw, step=5.0, nodata=-32768)
    with rasterio.open(path, "r+") as data:
        data.scales, data.offsets = (0.01,), (100.0,)
    values, _, _ = read_elevation(path, CRS, (WEST, NORTH - 40, WEST + 40, NORTH))
    want = raw * 0.01 + 100.0
    want[0, 0] = np.nan
    np.testing.assert_allclose(values, want, rtol=1e-6)


def test_model_in_another_system_and_window_equals_whole(tmp_path):
    to_32 = Transformer.from_crs(CRS, "EPSG:32632", always_xy=True)
    back = Transformer.from_crs("EPSG:32632", CRS, always_xy=True)
    x0, y0 = to_32.transform(WEST + 200, NORTH - 200)
    west, north = np.floor(x0) - 300, np.floor(y0) + 300
    cx, cy = np.meshgrid(west + np.arange(300) * 2 + 1, north - np.arange(300) * 2 - 1)
    gx, gy = back.transform(cx, cy)
    data = (50 + 0.05 * (gx - WEST) + 0.03 * (NORTH - gy)).astype(np.float32)
    path = write_tif(tmp_path / "e.tif", data, west=west, north=north, step=2.0, crs="EPSG:32632", nodata=-9999)
    box = (WEST + 100, NORTH - 300, WEST + 300, NORTH - 100)
    whole, transform, _ = read_elevation(path, CRS, box)
    rows, cols = np.mgrid[: whole.shape[0], : whole.shape[1]]
    x, y = transform * (cols + 0.5, rows + 0.5)
    assert np.abs(whole - (50 + 0.05 * (x - WEST) + 0.03 * (NORTH - y))).max() < 0.005
    part, near, _ = read_elevation(path, CRS, (WEST + 150, NORTH - 200, WEST + 190, NORTH - 160))
    r, c = round((transform.f - near.f) / near.a), round((near.c - transform.c) / near.a)
    np.testing.assert_array_equal(part, whole[r : r + part.shape[0], c : c + part.shape[1]])


def test_edges_and_refusals(tmp_path):
    path = write_tif(tmp_path / "e.tif", np.ones((10, 10), np.float32), step=2.0)
    assert read_elevation(path, CRS, (WEST - 99, NORTH - 9, WEST - 50, NORTH))[0].shape == (0, 0)
    assert read_elevation(path, CRS, (WEST - 99, NORTH - 9, WEST + 3, NORTH + 50))[0].shape == (5, 2)
    with pytest.raises(InputError, match=r"none.tif: cannot be read .*correct \[area\] elevation"):
        read_elevation(tmp_path / "none.tif", CRS, (0, 0, 1, 1))
    bare = write_tif(tmp_path / "bare.tif", np.ones((10, 10), np.float32), crs=None)
    with pytest.raises(InputError, match="has no georeference"):
        read_elevation(bare, CRS, (0, 0, 1, 1))
    with pytest.raises(InputError, match="west < east"):
        read_elevation(path, CRS, (1, 0, 0, 1))
