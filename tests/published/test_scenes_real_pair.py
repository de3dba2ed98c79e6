"""Co-registration on two real Landsat 7 views, 1999-11-18 and 2002-04-16 (path 22, row 49), with cloud in the second.

Open data (CC BY-SA 3.0 tutorial chips; Landsat is public domain), read from a folder beside the project where it is there.
The true shift between the views is not known, but moving one by whole pixels must move the result by just that.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import rasterio

from inundate.common.grid import Window
from inundate.scenes import Block, Reference, View

FOLDER = Path(__file__).parents[3] / "shared" / "realdata" / "l7_river_two_dates"
BANDS = ("blue", "green", "red", "nir", "swir16", "swir22")
SIDE = 200

pytestmark = pytest.mark.skipif(not FOLDER.is_dir(), reason=f"real data not at {FOLDER}")


def chip(name: str, row: int = 20, col: int = 20) -> View:
    with rasterio.open(FOLDER / name) as data:
        raw = data.read()[:, row : row + SIDE, col : col + SIDE]
    code = np.select([raw[7] == 0, raw[7] == 2, raw[7] == 4], [0, 2, 1], 255).astype(np.uint8)
    values = (raw[[0, 1, 2, 3, 4, 5]] * 1e-4).astype(np.float32)
    return View(f"{name}{row}{col}", BANDS, (Block(Window(0, SIDE, 0, SIDE), values, code),))


def test_whole_pixel_moves_are_found_on_real_ground():
    first, second = "LE70220491999322EDC01_stack.tif", "LE70220492002106EDC00_stack.tif"
    reference = Reference.from_views([chip(first)])
    base = reference.shift(chip(second))
    assert base.confident
    assert np.hypot(base.dx_px, base.dy_px) < 1.0  # both are terrain-corrected to well below a pixel
    for dy, dx in ((1, 0), (0, -2), (-1, 1)):
        # a chip cut dy, dx pixels earlier shows the same ground that much further down and right
        moved = reference.shift(chip(second, 20 - dy, 20 - dx))
        assert moved.confident
        assert moved.dx_px - base.dx_px == pytest.approx(dx, abs=0.06)
        assert moved.dy_px - base.dy_px == pytest.approx(dy, abs=0.06)


def test_both_ways_agree_on_real_ground():
    first, second = "LE70220491999322EDC01_stack.tif", "LE70220492002106EDC00_stack.tif"
    there = Reference.from_views([chip(first)]).shift(chip(second))
    back = Reference.from_views([chip(second)]).shift(chip(first))
    assert there.confident
    assert back.confident
    assert there.dx_px == pytest.approx(-back.dx_px, abs=0.12)
    assert there.dy_px == pytest.approx(-back.dy_px, abs=0.12)


def test_gain_of_a_real_view_is_found_again():
    reference = Reference.from_views([chip("LE70220491999322EDC01_stack.tif")])
    view = chip("LE70220492002106EDC00_stack.tif")
    block = view.blocks[0]
    dull = View(
        view.scene_id, view.bands, (Block(block.window, 0.9 * block.reflectance + np.float32(0.01), block.code),)
    )
    a, b = reference.gain(view), reference.gain(dull)
    np.testing.assert_allclose(np.array(b.gain) / np.array(a.gain), 0.9, atol=0.005)
    np.testing.assert_allclose(np.array(b.offset) - 0.9 * np.array(a.offset), 0.01, atol=0.001)
