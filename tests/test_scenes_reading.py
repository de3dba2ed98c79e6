"""Windows of reflectance: geometry by rasters that encode their own coordinates, edges, other systems, bad files."""

from __future__ import annotations

import json
import pickle

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pyproj import Transformer
from scenes_files import CRS, NORTH, WEST, plane, write_item, write_scene, write_tif

from inundate.common.codes import ViewCode
from inundate.common.errors import InputError
from inundate.common.grid import Grid, Window
from inundate.common.site import make_site
from inundate.scenes import SceneError, SceneReader, area_grid, context_windows, load_profile, open_catalog, read_view
from inundate.scenes.planning import MAX_READ_PX, plan_reads

S2 = load_profile("sentinel-2-l2a")
GRID = Grid(CRS, WEST, NORTH, 10.0, 120, 120)
ROLES = ("blue", "green", "red", "nir", "swir16", "swir22")


@pytest.fixture(scope="module")
def scene(tmp_path_factory):
    return open_catalog(write_scene(tmp_path_factory.mktemp("scene")), S2).scenes[0]


def expected(grid: Grid, window: Window) -> np.ndarray:
    x, y = grid.centres(*np.mgrid[window.row0 : window.row1, window.col0 : window.col1])
    return (2000.0 + 0.5 * (x - WEST) + 0.3 * (NORTH - y)) * 1e-4


def test_blocks_show_the_ground_at_their_place(scene):
    windows = [Window(0, 7, 0, 9), Window(33, 81, 50, 119), Window(119, 120, 119, 120), Window(33, 81, 50, 119)]
    view = read_view(scene, S2, GRID, windows)
    assert view.bands == ROLES
    assert [block.window for block in view.blocks] == windows
    for block in view.blocks:
        assert block.reflectance.dtype == np.float32
        assert block.code.dtype == np.uint8
        assert block.reflectance.shape == (6, *block.window.shape)
        assert (block.code == ViewCode.CLEAR).all()
        want = expected(GRID, block.window)
        np.testing.assert_allclose(block.reflectance[:4], np.broadcast_to(want, (4, *want.shape)), atol=1.1e-4)
    # 20 m bands are straight lines again on 10 m, but for the outermost half pixel
    inner = read_view(scene, S2, GRID, [Window(2, 118, 2, 118)]).blocks[0]
    np.testing.assert_allclose(inner.reflectance[4], expected(GRID, inner.window), atol=1.1e-4)


def test_bands_asked_for_come_in_their_order(scene):
    view = read_view(scene, S2, GRID, [Window(0, 4, 0, 4)], bands=("swir16", "rededge071", "blue"))
    assert view.bands == ("swir16", "rededge071", "blue")
    block = view.blocks[0]
    assert np.isnan(block.reflectance[1]).all()  # a band that the scene lacks
    assert (block.code == ViewCode.CLEAR).all()
    with pytest.raises(InputError, match="band 'infra': must be one of blue"):
        read_view(scene, S2, GRID, [Window(0, 4, 0, 4)], bands=("infra",))


def test_windows_reaching_beyond_the_scene_are_fill(scene):
    grid = Grid(CRS, WEST - 100.0, NORTH + 50.0, 10.0, 200, 200)
    windows = [Window(0, 20, 0, 20), Window(0, 4, 0, 9), Window(60, 90, 120, 150), Window(180, 200, 180, 200)]
    view = read_view(scene, S2, grid, windows)
    for block in view.blocks:
        rows, cols = np.mgrid[block.window.row0 : block.window.row1, block.window.col0 : block.window.col1]
        inside = (rows >= 5) & (rows < 125) & (cols >= 10) & (cols < 130)
        np.testing.assert_array_equal(block.code, np.where(inside, 0, 255))
        np.testing.assert_array_equal(np.isfinite(block.reflectance), np.broadcast_to(inside, block.reflectance.shape))
        if inside.any():
            np.testing.assert_allclose(block.reflectance[0][inside], expected(grid, block.window)[inside], atol=1.1e-4)


def test_grid_off_by_part_of_a_pixel_is_interpolated_at_its_centres(scene):
    grid = Grid(CRS, WEST + 23.0, NORTH - 37.0, 10.0, 100, 100)
    block = read_view(scene, S2, grid, [Window(5, 90, 5, 90)]).blocks[0]
    for band in range(6):
        np.testing.assert_allclose(block.reflectance[band], expected(grid, block.window), atol=1.1e-4)


def test_mask_classes_come_to_their_pixels(tmp_path):
    classes = np.full((60, 60), 4, np.uint8)
    classes[10, 20], classes[11, 20], classes[0, 0], classes[59, 59] = 9, 3, 11, 0
    scene = open_catalog(write_scene(tmp_path, classes=classes), S2).scenes[0]
    code = read_view(scene, S2, GRID, [Window(0, 120, 0, 120)]).blocks[0].code
    want = np.zeros((120, 120), np.uint8)
    want[20:22, 40:42], want[22:24, 40:42], want[:2, :2], want[118:, 118:] = 1, 2, 3, 255
    np.testing.assert_array_equal(code, want)


def test_fill_in_a_band_is_fill_in_the_code_and_weighs_nothing(tmp_path):
    path = write_scene(tmp_path, **{"s2:processing_baseline": "05.00"})
    raw = plane(WEST, NORTH, 20.0, (60, 60)).astype(np.uint16)
    raw[30, 30] = 0
    write_tif(tmp_path / "A" / "B11.tif", raw, step=20.0)
    block = read_view(open_catalog(path, S2).scenes[0], S2, GRID, [Window(50, 70, 50, 70)]).blocks[0]
    bad = np.zeros((20, 20), bool)
    bad[10:12, 10:12] = True
    np.testing.assert_array_equal(block.code == ViewCode.FILL, bad)
    np.testing.assert_array_equal(np.isnan(block.reflectance[4]), bad)
    # beside the hole the value is that of its neighbours, not drawn to the fill
    near = expected(GRID, block.window)[9:13, 9:13] - 0.1
    assert np.nanmax(np.abs(block.reflectance[4][9:13, 9:13] - near)) < 0.002


def test_scene_in_another_zone_is_warped_to_its_place(tmp_path):
    to_32 = Transformer.from_crs(CRS, "EPSG:32632", always_xy=True)
    west, north = 921_000.0, 5_620_000.0  # around the same ground in zone 32
    x0, y0 = to_32.transform(WEST + 300, NORTH - 300)
    west, north = np.floor(x0 / 10) * 10 - 1000, np.floor(y0 / 10) * 10 + 1000
    back = Transformer.from_crs("EPSG:32632", CRS, always_xy=True)
    assets = {}
    for key, step in {"B02": 10, "B03": 10, "B04": 10, "B08": 10, "B11": 20, "B12": 20, "SCL": 20}.items():
        n = 2400 // step
        cx, cy = np.meshgrid(west + (np.arange(n) + 0.5) * step, north - (np.arange(n) + 0.5) * step)
        gx, gy = back.transform(cx, cy)
        raw = 2000.0 + 0.5 * (gx - WEST) + 0.3 * (NORTH - gy)
        data = np.full((n, n), 4, np.uint8) if key == "SCL" else raw.astype(np.uint16)
        if key == "SCL":
            data[gx < WEST + 300] = 9
        write_tif(tmp_path / f"{key}.tif", data, west=west, north=north, step=float(step), crs="EPSG:32632")
        assets[key] = {"href": f"{key}.tif"}
    scene = open_catalog(write_item(tmp_path / "s.json", "Z", assets), S2).scenes[0]
    window = Window(10, 50, 10, 50)
    block = read_view(scene, S2, GRID, [window], all_windows=True).blocks[0]
    for band in range(6):
        assert np.abs(block.reflectance[band] - expected(GRID, window)).max() < 2.5e-4  # 0.5 m
    x, _ = GRID.centres(*np.mgrid[10:50, 10:50])
    cloud = block.code == ViewCode.CLOUD
    assert cloud[x < WEST + 285].all()
    assert not cloud[x > WEST + 315].any()


def test_finer_scene_is_averaged(tmp_path):
    shape = (400, 400)
    data = np.stack([plane(WEST, NORTH, 2.5, shape).astype(np.uint16)] * 4)
    data[:, ::2] += 400
    data[:, 1::2] -= 400  # fine stripes that a single pixel would show
    write_tif(tmp_path / "i.tif", data, step=2.5)
    write_tif(tmp_path / "m.tif", np.ones(shape, np.uint8), step=2.5)
    names = ["blue", "green", "red", "nir"]
    assets = {"i": {"href": "i.tif", "bands": [{"eo:common_name": n} for n in names]}, "mask": {"href": "m.tif"}}
    profile = load_profile("visnir-4band")
    scene = open_catalog(write_item(tmp_path / "s.json", "F", assets, version="1.1.0"), profile).scenes[0]
    block = read_view(scene, profile, GRID, [Window(5, 60, 5, 60)]).blocks[0]
    np.testing.assert_allclose(block.reflectance[3], expected(GRID, block.window), atol=2.1e-4)
    assert (block.code == 0).all()


def test_cloudy_windows_are_not_decoded_unless_asked(tmp_path):
    classes = np.full((60, 60), 4, np.uint8)
    classes[:30, :30] = 9
    scene = open_catalog(write_scene(tmp_path, classes=classes), S2).scenes[0]
    windows = [Window(0, 20, 0, 20), Window(70, 90, 70, 90)]
    view = read_view(scene, S2, GRID, windows)
    assert np.isnan(view.blocks[0].reflectance).all()
    assert (view.blocks[0].code == ViewCode.CLOUD).all()
    assert np.isfinite(view.blocks[1].reflectance).all()
    both = read_view(scene, S2, GRID, windows, all_windows=True)
    assert np.isfinite(both.blocks[0].reflectance).all()
    np.testing.assert_array_equal(both.blocks[1].reflectance, view.blocks[1].reflectance)


def damage(tmp_path, what):  # noqa: PLR0912
    path = write_scene(tmp_path, "A")
    band = tmp_path / "A" / "B04.tif"
    raw = plane(WEST, NORTH, 10.0, (120, 120)).astype(np.uint16)
    if what == "truncated":
        band.write_bytes(band.read_bytes()[:-3000])
    elif what == "empty file":
        band.write_bytes(b"")
    elif what == "not a raster":
        band.write_bytes(b"hello" * 100)
    elif what == "no place":
        write_tif(band, raw, crs=None)
    elif what == "other zone":
        write_tif(band, raw, crs="EPSG:32634")
    elif what == "all fill":
        write_tif(band, np.zeros_like(raw))
    elif what == "all NaN":
        write_tif(band, np.full(raw.shape, np.nan, np.float32))
    elif what == "band count":
        item = json.loads(path.read_text())
        item["assets"]["B04"]["bands"] = [{"name": "x"}, {"name": "B04"}]
        path.write_text(json.dumps(item))
    elif what == "mask gone":
        (tmp_path / "A" / "SCL.tif").write_bytes(b"")
    elif what == "mask fill":
        write_tif(tmp_path / "A" / "SCL.tif", np.zeros((60, 60), np.uint8), step=20.0)
    elif what == "told zone":
        item = json.loads(path.read_text())
        item["properties"]["proj:code"] = "EPSG:32634"
        path.write_text(json.dumps(item))
    elif what == "elsewhere":
        for file in (tmp_path / "A").glob("*.tif"):
            n = 60 if file.stem in ("B11", "B12", "SCL") else 120
            write_tif(file, np.full((n, n), 4, np.uint16), west=WEST + 9e4, step=1200.0 / n)
    return open_catalog(path, S2).scenes[0]


@pytest.mark.parametrize(
    ("what", "kind", "message"),
    [
        ("truncated", "broken", "B04.tif cannot be decoded"),
        ("empty file", "broken", "B04.tif cannot be opened"),
        ("not a raster", "broken", "B04.tif cannot be opened"),
        ("no place", "broken", "B04.tif has no georeference"),
        ("other zone", "broken", "B04.tif is in EPSG:32634, not in EPSG:32633 as told"),
        ("all fill", "broken", "band red .* holds fill or no number where the mask sees ground"),
        ("all NaN", "broken", "band red .* holds fill or no number where the mask sees ground"),
        ("band count", "broken", r"B04.tif has 1 band\(s\), band 2 is wanted"),
        ("mask gone", "broken", "SCL.tif cannot be opened"),
        ("mask fill", "empty", "holds fill alone in all windows"),
        ("told zone", "broken", "is in EPSG:32633, not in EPSG:32634 as told"),
        ("elsewhere", "outside", "lies outside the area"),
    ],
)
def test_bad_scenes_are_named(tmp_path, what, kind, message):
    scene = damage(tmp_path, what)
    with pytest.raises(SceneError, match=message) as caught:
        read_view(scene, S2, GRID, [Window(0, 120, 0, 120)])
    assert caught.value.kind == kind
    assert caught.value.scene_id == "A"
    assert str(caught.value).startswith("scene A: ")
    caught.value.__cause__ = caught.value.__context__ = None  # the raster library's own errors may not be picklable
    again = pickle.loads(pickle.dumps(caught.value))  # crosses process borders
    assert (str(again), again.kind) == (str(caught.value), kind)


def test_file_lost_after_the_catalog_was_read(tmp_path):
    scene = open_catalog(write_scene(tmp_path), S2).scenes[0]
    (tmp_path / "A" / "B08.tif").unlink()
    with pytest.raises(SceneError, match=r"B08.tif cannot be opened .*restore the file"):
        read_view(scene, S2, GRID, [Window(0, 9, 0, 9)])


@pytest.mark.parametrize("window", [Window(-1, 5, 0, 5), Window(0, 5, 100, 121), Window(5, 5, 0, 5)])
def test_windows_must_lie_on_the_grid(scene, window):
    with pytest.raises(InputError, match="must lie inside the grid of 120 x 120"):
        read_view(scene, S2, GRID, [window])


def test_same_pixels_whatever_the_windows(scene):
    whole = read_view(scene, S2, GRID, [Window(0, 120, 0, 120)]).blocks[0]
    rng = np.random.default_rng(5)
    windows = []
    for _ in range(25):
        r, c = rng.integers(0, 110, 2)
        windows.append(
            Window(int(r), int(min(r + rng.integers(1, 40), 120)), int(c), int(min(c + rng.integers(1, 40), 120)))
        )
    for block in read_view(scene, S2, GRID, windows).blocks:
        np.testing.assert_array_equal(block.reflectance, whole.reflectance[:, *block.window.slices])
        np.testing.assert_array_equal(block.code, whole.code[block.window.slices])


def test_site_pixels_are_taken_from_their_own_windows(scene):
    rng = np.random.default_rng(1)
    site = make_site(GRID, rng.integers(0, 120, 60), rng.integers(0, 120, 60), margin=2, block=32)
    x, y = GRID.centres(site.rows, site.cols)
    want = (2000.0 + 0.5 * (x - WEST) + 0.3 * (NORTH - y)) * 1e-4
    assert len(site.windows) > 4
    np.testing.assert_array_equal(np.sort(site.order), np.arange(site.size))
    for windows in (site.windows, [w.grow(3, 120, 120) for w in site.windows]):
        got = np.full(site.size, np.nan)
        for number, block in enumerate(read_view(scene, S2, GRID, windows).blocks):
            got[site.place(number)] = site.pick(number, block.window, block.reflectance)[0]
        np.testing.assert_allclose(got, want, atol=1.1e-4)


def test_a_scene_read_in_parts_equals_one_read_at_once(scene):
    windows = [Window(5, 40, 60, 100), Window(38, 90, 3, 50), Window(0, 12, 0, 12)]
    whole = read_view(scene, S2, GRID, windows)
    with SceneReader(scene, S2, GRID) as reader:
        parts = [reader.read([w]).blocks[0] for w in windows]
        reader.check()
    for one, other in zip(whole.blocks, parts, strict=True):
        np.testing.assert_array_equal(one.reflectance, other.reflectance)
        np.testing.assert_array_equal(one.code, other.code)


def test_a_warped_scene_does_not_depend_on_how_its_windows_are_cut(tmp_path):
    rng = np.random.default_rng(3)
    assets = {}
    for key, step in {"B02": 10, "B03": 10, "B04": 10, "B08": 10, "B11": 20, "B12": 20, "SCL": 20}.items():
        n = 6000 // step
        data = np.full((n, n), 4, np.uint8) if key == "SCL" else rng.integers(500, 4000, (n, n)).astype(np.uint16)
        write_tif(tmp_path / f"{key}.tif", data, west=WEST - 2000, north=NORTH + 2000, step=float(step), nodata=0)
        assets[key] = {"href": f"{key}.tif"}
    warped = open_catalog(write_item(tmp_path / "s.json", "S", assets), S2).scenes[0]
    x, y = Transformer.from_crs(CRS, "EPSG:32632", always_xy=True).transform(WEST + 500, NORTH - 500)
    grid = Grid("EPSG:32632", round(x, -1), round(y, -1), 10.0, 150, 150)
    whole = read_view(warped, S2, grid, [Window(0, 150, 0, 150)]).blocks[0]
    cut = [Window(r, min(r + 37, 150), c, min(c + 53, 150)) for r in range(0, 150, 37) for c in range(0, 150, 53)]
    assert (whole.code == ViewCode.CLEAR).mean() > 0.5
    for one in cut:
        block = read_view(warped, S2, grid, [one]).blocks[0]
        np.testing.assert_array_equal(block.reflectance, whole.reflectance[:, *one.slices])
        np.testing.assert_array_equal(block.code, whole.code[one.slices])


boxes = st.lists(
    st.tuples(st.integers(0, 3000), st.integers(1, 300), st.integers(0, 3000), st.integers(1, 300)).map(
        lambda t: (t[0], t[0] + t[1], t[2], t[2] + t[3])
    ),
    min_size=1,
    max_size=60,
)


@settings(max_examples=60, deadline=None)
@given(boxes, st.sampled_from([(64, 64), (256, 256), (512, 512), (1, 3400), (16, 3400)]))
def test_every_box_is_read_once_and_wholly(wanted, tile):
    plan = plan_reads(tuple(wanted), tile, (3400, 3400))
    served = sorted(member for _, members in plan for member in members)
    assert served == list(range(len(wanted)))
    for box, members in plan:
        for member in members:
            one = wanted[member]
            assert box[0] <= one[0] < one[1] <= box[1]
            assert box[2] <= one[2] < one[3] <= box[3]
        if len(members) > 1:
            assert (box[1] - box[0]) * (box[3] - box[2]) <= MAX_READ_PX


def test_close_boxes_are_read_together_far_ones_apart():
    close = tuple((r, r + 20, c, c + 20) for r in (0, 40, 80) for c in (0, 40, 80))
    assert len(plan_reads(close, (256, 256), (10980, 10980))) == 1
    far = ((0, 20, 0, 20), (10000, 10020, 10000, 10020))
    assert len(plan_reads(far, (256, 256), (10980, 10980))) == 2


def test_area_grid_follows_the_first_scene(scene, tmp_path):
    grid = area_grid([scene], S2, CRS, (WEST + 43.0, NORTH - 151.0, WEST + 97.0, NORTH - 58.0), margin_m=10.0)
    assert (grid.west, grid.north, grid.step) == (WEST + 30.0, NORTH - 40.0, 10.0)
    assert grid.bounds == (WEST + 30.0, NORTH - 170.0, WEST + 110.0, NORTH - 40.0)
    # pixels of the scene at an odd origin stay whole pixels
    odd = write_scene(tmp_path, "O")
    for file in (tmp_path / "O").glob("*.tif"):
        n = 60 if file.stem in ("B11", "B12", "SCL") else 120
        write_tif(file, np.full((n, n), 4, np.uint16), west=WEST + 3.5, north=NORTH - 1.5, step=1200.0 / n)
    grid = area_grid(
        [open_catalog(odd, S2).scenes[0]], S2, CRS, (WEST + 43.0, NORTH - 151.0, WEST + 97.0, NORTH - 58.0)
    )
    assert ((grid.west - WEST - 3.5) % 10.0, (NORTH - 1.5 - grid.north) % 10.0) == (0.0, 0.0)
    # another system: multiples of the step
    grid = area_grid([scene], S2, "EPSG:32634", (3.0, 4.0, 55.0, 66.0))
    assert grid.bounds == (0.0, 0.0, 60.0, 70.0)


@pytest.mark.parametrize(
    ("crs", "bounds", "message"),
    [
        ("EPSG:4326", (0, 0, 1, 1), "must be projected with metres"),
        ("EPSG:2272", (0, 0, 1, 1), "must be projected with metres"),  # US survey feet
        ("EPSG:999999", (0, 0, 1, 1), "not a known reference system"),
        (CRS, (5, 0, 1, 1), "must be west < east"),
        (CRS, (np.nan, 0, 1, 1), "must be west < east"),
    ],
)
def test_area_grid_refuses(crs, bounds, message):
    with pytest.raises(InputError, match=message):
        area_grid([], S2, crs, bounds)


@settings(max_examples=50, deadline=None)
@given(st.integers(1, 2000), st.integers(1, 2000), st.integers(1, 16))
def test_context_windows_are_disjoint_and_inside(height, width, count):
    grid = Grid(CRS, 0.0, 0.0, 10.0, height, width)
    windows = context_windows(grid, count=count)
    assert windows
    seen = np.zeros((height, width), np.uint8)
    for w in windows:
        assert 0 <= w.row0 < w.row1 <= height
        assert 0 <= w.col0 < w.col1 <= width
        seen[w.slices] += 1
    assert seen.max() == 1
