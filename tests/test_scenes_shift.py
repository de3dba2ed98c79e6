"""Co-registration: known shifts are found whatever clouds, leaves and water do; refusals; resampling."""

from __future__ import annotations

import numpy as np
import pytest
from scenes_world import SIDE, WINDOW, World
from skimage.registration import phase_cross_correlation

from inundate.common.errors import InputError
from inundate.common.grid import Window
from inundate.scenes import NO_SHIFT, Block, Reference, Shift, ShiftOptions, View, apply_shift
from inundate.scenes.structure import structure_stack

N = 9


@pytest.fixture(scope="module")
def world():
    return World(1)


@pytest.fixture(scope="module")
def archive(world):
    """Views with known shifts, half of them leafy, and the reference made of them."""
    rng = np.random.default_rng(7)
    shifts = {f"s{i:02d}": rng.uniform(-1.2, 1.2, 2) for i in range(2 * N)}
    leafy = {name: i % 2 == 1 for i, name in enumerate(shifts)}
    views = [world.view(name, *shift, leafy=leafy[name]) for name, shift in shifts.items()]
    return views, shifts, leafy, Reference.from_views(views, groups=leafy)


def errors(reference, views, shifts):
    found = [reference.shift(view) for view in views]
    assert all(one.confident for one in found)
    got = np.array([(one.dx_px, one.dy_px) for one in found])
    return got - np.array([shifts[view.scene_id] for view in views])


def test_shifts_are_found_in_every_season(archive):
    views, shifts, leafy, reference = archive
    error = errors(reference, views, shifts)
    on = np.array(list(leafy.values()))
    # the anchor is the mean place of all views
    assert np.abs(error.mean(axis=0) + np.mean(list(shifts.values()), axis=0)).max() < 0.05
    assert reference.anchor_sd_px == pytest.approx(np.std(list(shifts.values())) / np.sqrt(2 * N), rel=0.35)
    assert np.abs(error[on].mean(axis=0) - error[~on].mean(axis=0)).max() < 0.08
    rest = error - error.mean(axis=0)
    assert np.sqrt((rest**2).mean()) < 0.06
    assert np.abs(rest).max() < 0.2


def test_new_views_that_the_reference_has_not_seen(world, archive):
    _, _, _, reference = archive
    cases = {"n1": (0.3, -0.45), "n2": (-1.6, 0.9), "n3": (2.2, 1.4), "n4": (0.0, 0.0)}
    shift = errors(reference, [world.view(k, *v, leafy=k in ("n2", "n4"), cloud=0.5) for k, v in cases.items()], cases)
    assert np.abs(shift - shift.mean(axis=0)).max() < 0.15


def test_leaf_off_reference_alone_serves_leafy_views(world, archive):
    views, shifts, leafy, _ = archive
    bare = Reference.from_views([view for view in views if not leafy[view.scene_id]])
    error = errors(bare, [view for view in views if leafy[view.scene_id]], shifts)
    assert np.abs(error - error.mean(axis=0)).max() < 0.2


def test_second_opinion_by_phase_correlation(world):
    """scikit-image's phase correlation on structure images of cloudless views (Guizar-Sicairos et al. 2008, Opt. Lett. 33:156)."""
    base, other = world.view("p", cloud=0.0), world.view("q", 0.62, -0.38, cloud=0.0)
    reference = Reference.from_views([base])
    found = reference.shift(other)
    images = [structure_stack(view, (WINDOW,), ("nir",))[0, 0] for view in (base, other)]
    drawn, _, _ = phase_cross_correlation(images[1], images[0], upsample_factor=50)
    assert found.dx_px == pytest.approx(drawn[1], abs=0.12)
    assert found.dy_px == pytest.approx(drawn[0], abs=0.12)
    assert (found.dx_px, found.dy_px) == pytest.approx((0.62, -0.38), abs=0.08)


def test_gain_and_haze_do_not_move_the_shift(world, archive):
    _, _, _, reference = archive
    plain = reference.shift(world.view("g", 0.4, 0.1))
    dull = reference.shift(world.view("g", 0.4, 0.1, gain=0.7, haze=0.05))
    assert (dull.dx_px, dull.dy_px) == pytest.approx((plain.dx_px, plain.dy_px), abs=0.02)


def test_deviation_is_honest(world, archive):
    views, shifts, _, reference = archive
    found = [reference.shift(view) for view in views]
    error = np.array([(f.dx_px, f.dy_px) - shifts[v.scene_id] for f, v in zip(found, views, strict=True)])
    z = (error - error.mean(axis=0)) / np.array([f.sd_px for f in found])[:, None]
    assert 0.3 < np.sqrt((z**2).mean()) < 1.8


def test_too_little_seen_is_unsure(world, archive):
    _, _, _, reference = archive
    found = reference.shift(world.view("c", 0.5, 0.5, cloud=0.97, missed=0.0))
    assert (found.outcome, found.confident) == ("unsure", False)
    view = world.view("c", 0.5, 0.5, cloud=0.97, missed=0.0)
    assert apply_shift(view, found) is view
    block = Block(WINDOW, np.full((4, SIDE, SIDE), np.nan, np.float32), np.full((SIDE, SIDE), 255, np.uint8))
    assert reference.shift(View("e", view.bands, (block,))) == NO_SHIFT
    elsewhere = View(
        "o", view.bands, (Block(Window(0, 5, 0, 5), np.zeros((4, 5, 5), np.float32), np.zeros((5, 5), np.uint8)),)
    )
    assert reference.shift(elsewhere) == NO_SHIFT
    assert NO_SHIFT.as_dict()["sd_px"] is None


def test_other_ground_is_not_confident(archive):
    _, _, _, reference = archive
    for seed in (50, 60, 70):
        found = reference.shift(World(seed).view("w", cloud=0.0))
        assert found.outcome == "unsure"


def test_far_off_is_beyond(world, archive):
    _, _, _, reference = archive
    found = reference.shift(world.view("far", 3.6, -0.5, cloud=0.0))
    assert (found.outcome, found.confident) == ("beyond", False)
    near = Reference(reference.windows, reference.channels, reference.looks, options=ShiftOptions(limit_px=1.0))
    assert near.shift(world.view("x", 1.7, 0.0, cloud=0.0)).outcome == "beyond"


def test_order_of_views_does_not_matter_and_arrays_bring_it_back(world, archive):
    views, _, leafy, reference = archive
    again = Reference.from_views(views[::-1], groups=leafy)
    first, second = reference.to_arrays(), again.to_arrays()
    assert first.keys() == second.keys()
    for key in first:
        np.testing.assert_array_equal(first[key], second[key])
    back = Reference.from_arrays(first)
    view = world.view("k", 0.7, 0.2)
    assert back.shift(view) == reference.shift(view)
    assert back.gain(view) == reference.gain(view)
    assert all(value.dtype != object for value in first.values())  # can be stored without pickle


def test_moved_anchor(world, archive):
    _, _, _, reference = archive
    view = world.view("k", 0.7, 0.2)
    a, b = reference.shift(view), reference.moved(0.1, -0.2).shift(view)
    assert (b.dx_px, b.dy_px) == pytest.approx((a.dx_px - 0.1, a.dy_px + 0.2))


def test_reference_refuses(world):
    with pytest.raises(InputError, match="no view with a clear pixel"):
        Reference.from_views([])
    odd = View(
        "o", ("green",), (Block(Window(0, 5, 0, 5), np.zeros((1, 5, 5), np.float32), np.zeros((5, 5), np.uint8)),)
    )
    with pytest.raises(InputError, match="scene o: read with other windows or bands than the first view"):
        Reference.from_views([world.view("a"), odd])


def shift_of(dx, dy, sure=True):
    return Shift(dx, dy, 0.05, sure, 20, "confident" if sure else "unsure", 0.9)


def test_whole_pixel_shift_copies():
    rng = np.random.default_rng(0)
    values = rng.random((2, 20, 30)).astype(np.float32)
    code = rng.integers(0, 4, (20, 30)).astype(np.uint8)
    view = View("a", ("red", "nir"), (Block(Window(0, 20, 0, 30), values, code),))
    out = apply_shift(view, shift_of(2.0, -1.0)).blocks[0]
    np.testing.assert_array_equal(out.reflectance[:, 1:, :28], values[:, :-1, 2:])
    np.testing.assert_array_equal(out.code[1:, :28], code[:-1, 2:])
    assert (out.code[0] == 255).all()
    assert (out.code[:, 28:] == 255).all()
    assert np.isnan(out.reflectance[:, 0]).all()
    assert apply_shift(view, shift_of(2.0, -1.0, sure=False)) is view


def test_resampling_blur_is_as_told():
    """Contrast left at half a pixel: 99 % of waves 8 pixels long, 88 % of those 4 long (weights at the middle: 9/16, -1/16)."""
    cols = np.arange(64)
    for length, left in ((8.0, 0.9915), (4.0, 0.884)):
        wave = (0.2 + 0.1 * np.cos(2 * np.pi * cols / length)).astype(np.float32)
        values = np.broadcast_to(wave, (1, 16, 64)).copy()
        view = View("a", ("red",), (Block(Window(0, 16, 0, 64), values, np.zeros((16, 64), np.uint8)),))
        out = apply_shift(view, shift_of(0.5, 0.0)).blocks[0].reflectance[0, 8, 8:56]
        want = 0.1 * np.cos(2 * np.pi * (cols[8:56] + 0.5) / length)
        assert np.dot(out - 0.2, want) / np.dot(want, want) == pytest.approx(left, abs=0.01)


def test_clear_only_where_all_that_it_lies_on_is_clear():
    code = np.zeros((9, 9), np.uint8)
    code[4, 4] = 1
    view = View("a", ("red",), (Block(Window(0, 9, 0, 9), np.ones((1, 9, 9), np.float32), code),))
    out = apply_shift(view, shift_of(0.5, 0.5)).blocks[0].code
    want = np.zeros((9, 9), np.uint8)
    want[3:5, 3:5] = 1
    want[8], want[:, 8] = 255, 255
    np.testing.assert_array_equal(out, want)


def test_correction_brings_a_view_back(world, archive):
    _, _, _, reference = archive
    still, moved = world.view("m", cloud=0.0, noise=0.0), world.view("m", 0.6, -0.7, cloud=0.0, noise=0.0)
    found, rest = reference.shift(moved), reference.shift(still)
    back = apply_shift(moved, shift_of(found.dx_px - rest.dx_px, found.dy_px - rest.dy_px)).blocks[0]
    inner = (slice(None), slice(4, -4), slice(4, -4))
    before = np.abs(moved.blocks[0].reflectance - still.blocks[0].reflectance)[inner].mean()
    after = np.abs(back.reflectance - still.blocks[0].reflectance)[inner].mean()
    assert after < 0.35 * before
