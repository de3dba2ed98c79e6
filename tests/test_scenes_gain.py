"""Relative normalisation: known gain and haze are found; refusals."""

from __future__ import annotations

import numpy as np
import pytest
from scenes_world import SIDE, WINDOW, World

from inundate.scenes import Block, Gain, Reference, View, apply_gain


@pytest.fixture(scope="module")
def world():
    return World(3)


@pytest.fixture(scope="module")
def reference(world):
    views = [world.view(f"r{i:02d}", leafy=i % 2 == 1) for i in range(16)]
    return Reference.from_views(views, groups={view.scene_id: i % 2 == 1 for i, view in enumerate(views)})


@pytest.mark.parametrize("leafy", [False, True])
@pytest.mark.parametrize(("gain", "haze"), [(1.0, 0.0), (0.93, 0.012), (1.08, -0.006)])
def test_known_gain_and_haze_are_found(world, reference, leafy, gain, haze):
    view = world.view("g", 0.2, 0.1, leafy=leafy, gain=gain, haze=haze, cloud=0.3)
    found = reference.gain(view)
    assert found.confident
    assert found.look == str(leafy)
    assert found.gain == pytest.approx([gain] * 4, abs=0.1)  # green spans 0.02 under leaves
    assert found.gain[2:] == pytest.approx([gain] * 2, abs=0.025)
    back = apply_gain(view, found).blocks[0].reflectance
    plain = world.view("g", 0.2, 0.1, leafy=leafy, cloud=0.3).blocks[0]
    clear = plain.code == 0
    off = (back - plain.reflectance)[:, clear]
    assert np.abs(np.median(off, axis=1)).max() < 0.003
    if gain != 1.0:
        raw = (view.blocks[0].reflectance - plain.reflectance)[:, clear]
        assert np.abs(off).mean() < 0.35 * np.abs(raw).mean()


def test_little_seen_is_not_confident_and_changes_nothing(world, reference):
    view = world.view("c", gain=0.8, cloud=0.97, missed=0.0)
    found = reference.gain(view)
    assert not found.confident
    assert apply_gain(view, found) is view
    block = Block(WINDOW, np.full((4, SIDE, SIDE), np.nan, np.float32), np.full((SIDE, SIDE), 255, np.uint8))
    none = reference.gain(View("e", view.bands, (block,)))
    assert (none.confident, none.n, none.gain) == (False, 0, (1.0,) * 4)
    assert none.as_dict()["gain_sd"] == [None] * 4


def test_gain_is_undone_band_by_band():
    values = np.array([[[0.2]], [[0.3]], [[0.5]]], np.float32)
    view = View("a", ("red", "nir", "swir16"), (Block(WINDOW, values, np.zeros((1, 1), np.uint8)),))
    gain = Gain(("nir", "red"), (1.5, 2.0), (0.0, 0.1), (0.0, 0.0), (0.0, 0.0), True, 9)
    out = apply_gain(view, gain).blocks[0].reflectance
    np.testing.assert_allclose(out[:, 0, 0], [0.05, 0.2, 0.5], rtol=1e-6)
    np.testing.assert_allclose(values[:, 0, 0], [0.2, 0.3, 0.5], rtol=1e-6)  # the view given is untouched
