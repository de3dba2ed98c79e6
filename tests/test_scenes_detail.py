"""Detail of fine bands lent to coarse ones: nearer to the truth, nothing invented, the same whatever the windows."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import ndimage

from inundate.common.errors import InputError
from inundate.common.grid import Window
from inundate.scenes import Block, Detail, View, add_detail, fit_detail

BANDS = ("blue", "green", "red", "nir", "swir16", "swir22")
SIDE = 96


def landscape(name: str, seed: int, noise: float = 0.002) -> tuple[View, np.ndarray]:
    """Ponds and fields: coarse bands are means of 2 x 2 pixels, interpolated; also the true fine ones."""
    rng = np.random.default_rng(seed)
    kind = np.digitize(ndimage.gaussian_filter(rng.standard_normal((SIDE, SIDE)), 2.5) * 9, [-0.9, 0.4])
    table = np.array(
        [
            [0.05, 0.06, 0.08],
            [0.05, 0.08, 0.1],
            [0.04, 0.06, 0.13],
            [0.03, 0.3, 0.22],
            [0.02, 0.18, 0.3],
            [0.01, 0.1, 0.24],
        ]
    )
    truth = table[:, kind] * (1 + 0.05 * rng.standard_normal((SIDE, SIDE)))
    seen = truth + noise * rng.standard_normal(truth.shape)
    low = seen[4:].reshape(2, SIDE // 2, 2, SIDE // 2, 2).mean(axis=(2, 4))
    seen[4:] = np.stack([ndimage.zoom(one, 2, order=1, mode="nearest", grid_mode=True) for one in low])
    block = Block(Window(0, SIDE, 0, SIDE), seen.astype(np.float32), np.zeros((SIDE, SIDE), np.uint8))
    return View(name, BANDS, (block,)), truth


def test_coarse_bands_come_nearer_to_the_truth_on_ground_not_fitted():
    detail = fit_detail([landscape(f"f{k}", k)[0] for k in range(3)])
    view, truth = landscape("new", 99)
    sharp = add_detail(view, detail).blocks[0].reflectance
    inner = (slice(4, None), slice(2, -2), slice(2, -2))
    before = np.sqrt(np.mean((view.blocks[0].reflectance[inner] - truth[inner]) ** 2))
    after = np.sqrt(np.mean((sharp[inner] - truth[inner]) ** 2))
    assert after < 0.75 * before
    np.testing.assert_array_equal(sharp[:4], view.blocks[0].reflectance[:4])
    assert abs(float(np.mean(sharp[inner] - view.blocks[0].reflectance[inner]))) < 2e-4  # level is kept


def test_even_ground_stays_and_edges_and_clouds_are_left_alone():
    view, _ = landscape("a", 1)
    code = view.blocks[0].code.copy()
    code[40, 40] = 1
    spotted = View("a", BANDS, (Block(view.blocks[0].window, view.blocks[0].reflectance, code),))
    detail = fit_detail([view])
    moved = add_detail(spotted, detail).blocks[0].reflectance != view.blocks[0].reflectance
    assert not moved[:, 38:43, 38:43].any()
    assert not moved[:, :2].any()
    assert not moved[:, :, -2:].any()
    assert moved[4:, 50:60, 50:60].mean() > 0.9
    flat = View(
        "b", BANDS, (Block(Window(0, 20, 0, 20), np.full((6, 20, 20), 0.1, np.float32), np.zeros((20, 20), np.uint8)),)
    )
    np.testing.assert_allclose(add_detail(flat, detail).blocks[0].reflectance, 0.1, atol=1e-7)


def test_same_pixels_whatever_the_windows_and_the_order():
    views = [landscape(f"f{k}", k)[0] for k in range(3)]
    detail, again = fit_detail(views), fit_detail(views[::-1])
    np.testing.assert_array_equal(detail.slopes, again.slopes)
    whole = add_detail(views[0], detail).blocks[0].reflectance
    part = Block(
        Window(10, 50, 20, 70), views[0].blocks[0].reflectance[:, 10:50, 20:70].copy(), np.zeros((40, 50), np.uint8)
    )
    cut = add_detail(View("f0", BANDS, (part,)), detail).blocks[0].reflectance
    np.testing.assert_allclose(cut[:, 2:-2, 2:-2], whole[:, 12:48, 22:68], atol=1e-7)
    back = Detail.from_arrays(detail.to_arrays())
    assert (back.fine, back.coarse) == (detail.fine, detail.coarse)
    np.testing.assert_array_equal(back.slopes, detail.slopes)


def test_refusals():
    view, _ = landscape("a", 1)
    four = View("v", BANDS[:4], (Block(view.blocks[0].window, view.blocks[0].reflectance[:4], view.blocks[0].code),))
    detail = fit_detail([view])
    assert add_detail(four, detail) is four
    with pytest.raises(InputError, match="scene v: band swir16 is needed to fit detail"):
        fit_detail([four])
    dull = View(
        "d", BANDS, (Block(view.blocks[0].window, view.blocks[0].reflectance, np.ones((SIDE, SIDE), np.uint8)),)
    )
    with pytest.raises(InputError, match="detail: 0 clear pixels in all views, 500 are needed"):
        fit_detail([dull])
