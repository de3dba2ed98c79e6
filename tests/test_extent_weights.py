"""Pixel weights and elevation cells against exactextract, analytic shapes and hand-done cases."""

from __future__ import annotations

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import shapely
from affine import Affine
from exactextract import exact_extract
from exactextract.raster import NumPyRasterSource
from hypothesis import given, settings
from hypothesis import strategies as st
from shapely import affinity

from inundate.common.errors import InputError
from inundate.common.grid import Grid
from inundate.common.site import make_site
from inundate.extent import (
    cell_coverage,
    elevation_cells,
    hypsometry,
    lowest_elevation,
    pixel_weights,
    weights_on_site,
)

GRID = Grid("EPSG:32633", 1000.0, 2000.0, 10.0, 40, 50)


def layer(*shapes: shapely.Geometry) -> gpd.GeoDataFrame:
    names = [f"w{i}" for i in range(len(shapes))]
    return gpd.GeoDataFrame({"wetland_id": names}, geometry=list(shapes), crs=GRID.crs)


def star(seed: int, x: float, y: float, radius: float) -> shapely.Polygon:
    rng = np.random.default_rng(seed)
    angle = np.sort(rng.uniform(0, 2 * np.pi, 25))
    r = radius * rng.uniform(0.3, 1.0, angle.size)
    return shapely.Polygon(np.column_stack([x + r * np.cos(angle), y + r * np.sin(angle)]))


def test_rectangle_by_hand() -> None:
    weights = pixel_weights(layer(shapely.box(1005, 1975, 1022, 1995)), GRID)
    got = {(r, c): s for r, c, s in zip(weights["row"], weights["col"], weights["share"], strict=True)}
    expected = {(0, 0): 0.25, (0, 1): 0.5, (0, 2): 0.1, (1, 0): 0.5, (1, 1): 1.0, (1, 2): 0.2}
    expected |= {(2, 0): 0.25, (2, 1): 0.5, (2, 2): 0.1}
    assert got.keys() == expected.keys()
    assert all(got[k] == pytest.approx(expected[k], abs=1e-12) for k in expected)


@pytest.mark.parametrize("radius", [2.0, 15.0, 80.0])
def test_circle_total_and_centre(radius: float) -> None:
    circle = shapely.Point(1203.3, 1777.7).buffer(radius, quad_segs=2000)
    share = pixel_weights(layer(circle), GRID)["share"]
    assert share.sum() * 100 == pytest.approx(np.pi * radius**2, rel=1e-6)
    assert share.between(0, 1).all()


def test_half_disc_pixel_is_a_circular_segment() -> None:
    # Circle of radius 10 about a pixel corner: each of the four pixels holds a quarter disc, pi / 4 of it.
    circle = shapely.Point(1200, 1800).buffer(10, quad_segs=4000)
    weights = pixel_weights(layer(circle), GRID)
    assert len(weights) == 4
    np.testing.assert_allclose(weights["share"], np.pi / 4, rtol=1e-6)


@given(st.integers(0, 10**6), st.floats(1, 120), st.floats(0, 10), st.floats(0, 10))
@settings(max_examples=40, deadline=None)
def test_shares_equal_exactextract(seed: int, radius: float, dx: float, dy: float) -> None:
    shape = star(seed, 1230 + dx, 1790 + dy, radius)
    if not shape.is_valid:
        shape = shapely.Polygon(shapely.convex_hull(shape).exterior)
    weights = pixel_weights(layer(shape), GRID)
    west, south, east, north = GRID.bounds
    raster = NumPyRasterSource(np.zeros((40, 50)), xmin=west, ymin=south, xmax=east, ymax=north)
    other = exact_extract(raster, layer(shape), ["cell_id", "coverage"], output="pandas")
    cover = np.zeros(40 * 50)
    cover[np.asarray(other["cell_id"][0], int)] = other["coverage"][0]
    mine = np.zeros(40 * 50)
    mine[weights["row"] * 50 + weights["col"]] = weights["share"]
    np.testing.assert_allclose(mine, cover, atol=2e-6)  # exactextract gives float32 coverage
    assert mine.sum() * 100 == pytest.approx(shape.area, rel=1e-9)


def test_hole_two_parts_and_smaller_than_a_pixel() -> None:
    ring = shapely.Polygon(
        shapely.box(1100, 1700, 1160, 1760).exterior.coords, [shapely.box(1110, 1710, 1130, 1730).exterior.coords]
    )
    parts = shapely.MultiPolygon([shapely.box(1300, 1700, 1307, 1712), shapely.box(1340, 1650, 1365, 1660)])
    dot = shapely.box(1412, 1652, 1414, 1655)
    weights = pixel_weights(layer(ring, parts, dot), GRID)
    total = weights.groupby("wetland_id")["share"].sum() * 100
    assert total.tolist() == pytest.approx([60 * 60 - 400, 84 + 250, 6], rel=1e-12)
    inside_hole = weights[(weights.wetland_id == "w0") & weights["row"].isin([27, 28]) & weights["col"].isin([11, 12])]
    assert inside_hole.empty
    assert (weights.wetland_id == "w2").sum() == 1


def test_orientation_of_rings_does_not_matter() -> None:
    shape = star(3, 1200, 1800, 90)
    turned = shapely.Polygon(list(shape.exterior.coords)[::-1])
    pd.testing.assert_frame_equal(pixel_weights(layer(shape), GRID), pixel_weights(layer(turned), GRID))


def test_outside_and_at_the_edge_of_the_grid() -> None:
    beyond = shapely.box(0, 0, 50, 50)
    edge = shapely.box(990, 1890, 1012, 1910)
    weights = pixel_weights(layer(beyond, edge), GRID)
    assert set(weights["wetland_id"]) == {"w1"}
    assert weights["share"].sum() * 100 == pytest.approx(12 * 20)
    assert weights["col"].min() == 0


def test_shared_pixels_know_each_other() -> None:
    weights = pixel_weights(layer(shapely.box(1000, 1990, 1004, 2000), shapely.box(1004, 1990, 1020, 2000)), GRID)
    first = weights[(weights["row"] == 0) & (weights["col"] == 0)].set_index("wetland_id")
    assert first.loc["w0", "share"] == pytest.approx(0.4)
    assert first.loc["w0", "other_share"] == pytest.approx(0.6)
    assert first.loc["w1", "other_share"] == pytest.approx(0.4)


def test_touching_pixels_join_with_share_zero() -> None:
    weights = pixel_weights(layer(shapely.box(1100, 1900, 1110, 1910), shapely.box(1110, 1900, 1115, 1910)), GRID)
    site = make_site(GRID, weights["row"].to_numpy(), weights["col"].to_numpy(), margin=2)
    full = weights_on_site(weights, site)
    mine = full[full["wetland_id"] == "w0"]
    assert len(mine) == 9
    assert (mine["share"] > 0).sum() == 1
    assert mine["other_share"].max() == pytest.approx(0.5)
    assert (site.rows[mine["pixel"]] == mine["row"]).all()


@pytest.mark.parametrize(
    ("wetlands", "words"),
    [
        (gpd.GeoDataFrame({"name": ["a"]}, geometry=[shapely.box(0, 0, 1, 1)]), "'wetland_id' is needed"),
        (
            gpd.GeoDataFrame({"wetland_id": ["a", "a"]}, geometry=[shapely.box(0, 0, 1, 1)] * 2),
            "'a' occurs more than once",
        ),
        (layer(shapely.Polygon([(0, 0), (1, 1), (1, 0), (0, 1)])), "'w0' is not a valid polygon"),
        (layer(shapely.Point(0, 0)), "'w0' is Point"),
    ],
)
def test_bad_layers_are_named(wetlands: gpd.GeoDataFrame, words: str) -> None:
    with pytest.raises(InputError, match=words):
        pixel_weights(wetlands, GRID)


def cone(step: float) -> tuple[np.ndarray, Affine]:
    n = int(200 / step)
    at = (np.arange(n) + 0.5) * step
    x, y = np.meshgrid(1100 + at, 1900 - at)
    return np.hypot(x - 1200, y - 1800).astype(np.float32) / 50, Affine(step, 0, 1100, 0, -step, 1900)


@pytest.mark.parametrize("step", [1.0, 2.5, 4.0, 10.0, 15.0])
def test_cells_add_up_to_the_polygon_in_every_pixel(step: float) -> None:
    elevation, transform = cone(step)
    wetlands = layer(shapely.Point(1200, 1800).buffer(60))
    cells = elevation_cells(elevation, transform, wetlands, GRID)
    weights = pixel_weights(wetlands, GRID).set_index(["row", "col"])["share"] * 100
    area = cells.groupby(["row", "col"])["area_m2"].sum()
    assert area.sum() == pytest.approx(wetlands.area[0], rel=1e-9)
    if step in (1.0, 2.5, 10.0):
        np.testing.assert_allclose(area.reindex(weights.index).fillna(0), weights, atol=1e-6)
    else:  # a cell that spans pixels is cut by area, which only blurs the outline within the cell
        assert (area.reindex(weights.index).fillna(0) - weights).abs().max() < step**2 / 2


def test_missing_cells_are_dropped_and_told() -> None:
    elevation, transform = cone(2.0)
    elevation[:, :50] = np.nan
    wetlands = layer(shapely.Point(1200, 1800).buffer(60), shapely.box(1400, 1700, 1410, 1710))
    cells = elevation_cells(elevation, transform, wetlands, GRID)
    told = cell_coverage(cells, wetlands).set_index("wetland_id")
    assert told.loc["w0", "covered_share"] == pytest.approx(0.5, abs=1e-3)
    assert told.loc["w1", "covered_share"] == 0
    assert np.isfinite(cells["elevation_m"]).all()


def test_rotated_elevation_is_refused() -> None:
    with pytest.raises(InputError, match="not north-up"):
        elevation_cells(np.zeros((2, 2)), Affine(1, 0.1, 0, 0, -1, 0), layer(shapely.box(0, 0, 1, 1)), GRID)


def test_hypsometry_of_a_cone_is_a_square_law() -> None:
    elevation, transform = cone(1.0)
    wetlands = layer(shapely.Point(1200, 1800).buffer(60, quad_segs=200))
    table = hypsometry(elevation_cells(elevation, transform, wetlands, GRID), wetlands)
    assert table["area_m2"].is_monotonic_increasing
    assert table["area_m2"].iloc[0] == 0
    assert table["area_m2"].iloc[-1] == pytest.approx(wetlands.area[0])
    np.testing.assert_allclose(np.diff(table["stage_m"]), 0.01, atol=1e-9)
    low = 60 * np.sqrt(0.01) / 50  # elevation below which one hundredth of the area lies
    stage = table["stage_m"].to_numpy() + low
    middle = (stage > 0.3) & (stage < 1.1)
    expected = np.pi * (50 * stage[middle]) ** 2
    np.testing.assert_allclose(table["area_m2"].to_numpy()[middle], expected, rtol=0.03)


def test_flat_water_surface_and_missing_part_still_reach_the_full_area() -> None:
    elevation, transform = cone(2.0)
    elevation = np.maximum(elevation, 0.5)
    elevation[:20] = np.nan
    wetlands = layer(shapely.Point(1200, 1800).buffer(70))
    table = hypsometry(elevation_cells(elevation, transform, wetlands, GRID), wetlands)
    assert table["area_m2"].iloc[-1] == pytest.approx(wetlands.area[0])
    assert (np.diff(table["area_m2"]) >= 0).all()


def test_lowest_ground_is_not_a_single_pit() -> None:
    z = np.r_[-5.0, np.linspace(0, 1, 999)]
    assert 0 <= lowest_elevation(z, np.ones(1000)) < 0.02
    assert lowest_elevation(np.array([1.0, 2.0]), np.array([1.0, 1.0])) == 1.0


@given(st.integers(0, 1000), st.floats(-0.4, 0.4), st.floats(-0.4, 0.4))
@settings(max_examples=20, deadline=None)
def test_whole_pixel_moves_shift_the_table(seed: int, dx: float, dy: float) -> None:
    shape = star(seed, 1200 + dx, 1800 + dy, 50)
    if not shape.is_valid:
        return
    here = pixel_weights(layer(shape), GRID)
    there = pixel_weights(layer(affinity.translate(shape, 30, -20)), GRID)
    np.testing.assert_array_equal(there["row"] - 2, here["row"])
    np.testing.assert_array_equal(there["col"] - 3, here["col"])
    np.testing.assert_allclose(there["share"], here["share"], atol=1e-9)
