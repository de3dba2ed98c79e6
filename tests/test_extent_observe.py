"""Observed extent: veils that masks missed, levels told by visible pixels, and the plain reasons for what is not used."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from inundate.common.codes import ViewCode
from inundate.extent import (
    ExtentObserver,
    SceneStack,
    apply_decisions,
    combine_same_day,
    darkness,
    haze_index,
    other_shares,
    shaded,
    veiled,
)

SIZE = 13


def bowl(levels, noise=0.03, seed=0):
    """Return (weights, wetlands, cells, stack) of one round bowl of 13 x 13 pixels filled to the levels (share of area)."""
    rng = np.random.default_rng(seed)
    rows, cols = (v.ravel() for v in np.mgrid[0:SIZE, 0:SIZE])
    fine = (np.arange(SIZE * 4) + 0.5) / 4 - 0.5
    y, x = (v.ravel() for v in np.meshgrid(fine, fine, indexing="ij"))
    radius = np.hypot(x - 6, y - 6)
    inside = radius <= 6.0
    pixel = (np.round(y).astype(int) * SIZE + np.round(x).astype(int))[inside]
    height = radius[inside] ** 2 / 36.0
    share = np.bincount(pixel, minlength=SIZE * SIZE) / 16.0
    keep = share > 0
    weights = pd.DataFrame(
        {"wetland_id": "a", "row": rows[keep], "col": cols[keep], "pixel": np.flatnonzero(keep), "share": share[keep]}
    )
    weights["other_share"] = other_shares(weights["pixel"].to_numpy(), weights["share"].to_numpy())
    cells = pd.DataFrame(
        {
            "wetland_id": "a",
            "row": rows[pixel],
            "col": cols[pixel],
            "pixel": pixel,
            "elevation_m": height,
            "area_m2": 6.25,
        }
    )
    area = 100.0 * share.sum()
    wetlands = pd.DataFrame({"wetland_id": ["a"], "area_max_m2": [area]})
    truth = np.array([np.bincount(pixel[height <= f], minlength=SIZE * SIZE) / 16.0 for f in levels])
    fraction = np.clip(truth + rng.normal(0, noise, truth.shape), 0, 1).astype(np.float32)
    stack = SceneStack(
        scene_id=np.array([f"s{i:03d}" for i in range(len(levels))], object),
        datetime=pd.date_range("2033-01-01", periods=len(levels), freq="5D").to_numpy(),
        fraction=fraction,
        code=np.zeros(fraction.shape, np.uint8),
        wetland_id=np.array(["a"], object),
        leaf_state=np.zeros((len(levels), 1), np.uint8),
    )
    return weights, wetlands, cells, stack, truth.sum(axis=1) * 100.0


LEVELS = np.clip(0.5 + 0.5 * np.sin(np.arange(30) / 3), 0, 1)


@pytest.mark.parametrize("with_cells", [True, False])
def test_levels_are_recovered(with_cells):
    """A bowl seen whole: area within 5 % of the largest extent, with elevation or from the views' own order."""
    weights, wetlands, cells, stack, truth = bowl(LEVELS)
    observer = ExtentObserver(weights, wetlands, 100.0, cells=cells if with_cells else None).fit(stack)
    out = observer.observe(stack)
    assert out["used"].all()
    error = (out["area_m2"].to_numpy() - truth) / wetlands["area_max_m2"][0]
    assert np.sqrt((error**2).mean()) < 0.05


def test_half_hidden_views_still_tell_and_know_less():
    """With half of the bowl under cloud the area is still told; its sd is larger than that of the whole view."""
    weights, wetlands, cells, stack, truth = bowl(LEVELS)
    observer = ExtentObserver(weights, wetlands, 100.0, cells=cells).fit(stack)
    whole = observer.observe(stack)
    code = stack.code.copy()
    code.reshape(-1, SIZE, SIZE)[:, :, : SIZE // 2] = ViewCode.CLOUD
    part = observer.observe(
        SceneStack(
            stack.scene_id,
            stack.datetime,
            np.where(code == 0, stack.fraction, np.nan),
            code,
            stack.wetland_id,
            stack.leaf_state,
        )
    )
    error = (part["area_m2"].to_numpy() - truth) / wetlands["area_max_m2"][0]
    assert np.sqrt((error**2).mean()) < 0.08
    assert part["area_sd_m2"].mean() > whole["area_sd_m2"].mean()
    assert part["clear_fraction"].between(0.3, 0.7).all()


def test_reasons_are_told():
    """Nothing seen, ice, and another reason for the scene as a whole."""
    weights, wetlands, cells, stack, _ = bowl(LEVELS)
    code = stack.code.copy()
    code[0], code[1] = ViewCode.CLOUD, ViewCode.SNOW_ICE
    fraction = np.where(code == 0, stack.fraction, np.nan)
    changed = SceneStack(stack.scene_id, stack.datetime, fraction, code, stack.wetland_id, stack.leaf_state)
    out = ExtentObserver(weights, wetlands, 100.0, cells=cells).fit(changed).observe(changed).set_index("scene_id")
    assert out.loc["s000", "reason"] == "nothing seen"
    assert out.loc["s001", "reason"] == "ice or snow"
    assert not out.loc[["s000", "s001"], "used"].any()


def test_decisions_outrank():
    """An analyst's word for one wetland outranks that for all, and is shown."""
    observed = pd.DataFrame(
        {"wetland_id": ["a", "b"], "scene_id": "s", "area_m2": [1.0, 2.0], "used": True, "reason": ""}
    )
    said = pd.DataFrame(
        {"scene_id": ["s", "s"], "wetland_id": ["", "b"], "use": [False, True], "reason": ["smoke", ""]}
    )
    out = apply_decisions(observed, said)
    assert out["used"].tolist() == [False, True]
    assert out["reason"].tolist() == ["analyst: smoke", ""]


def test_same_day_views_join_by_precision():
    """Two views of a day: the mean leans to the surer one, worked by hand."""
    when = pd.to_datetime(["2033-01-01T10:00", "2033-01-01T10:20"])
    observed = pd.DataFrame(
        {
            "wetland_id": "a",
            "scene_id": ["s1", "s2"],
            "datetime": when,
            "area_m2": [100.0, 110.0],
            "area_sd_m2": [10.0, 20.0],
            "clear_fraction": 1.0,
            "view_fraction": 1.0,
            "leaf_state": "leaf_off",
            "used": True,
            "reason": "",
        }
    )
    out = combine_same_day(observed)
    assert len(out) == 1
    assert out["area_m2"].iloc[0] == pytest.approx((100 * 4 + 110) / 5)
    assert out["scene_id"].iloc[0] == "s1+s2"


def test_haze_index_by_hand():
    """Blue less half of red."""
    assert haze_index(np.array([0.06]), np.array([0.04]))[0] == pytest.approx(0.04)


@given(st.integers(0, 1000), st.integers(0, 19))
@settings(max_examples=25, deadline=None)
def test_a_veil_over_one_scene_is_found_and_no_other(seed, scene):
    """Haze lifts one scene by ten spreads: its pixels are veiled, hardly any other, and clouded ones never count."""
    rng = np.random.default_rng(seed)
    haze = rng.normal(0.0, 0.003, (20, 40)).astype(np.float32)
    haze[scene] += 0.04
    code = np.zeros(haze.shape, np.uint8)
    code[(scene + 1) % 20, :5] = ViewCode.CLOUD
    out = veiled(haze, code, np.zeros(40, int))
    assert out[scene].all()
    assert np.delete(out, scene, axis=0).mean() < 0.01
    assert not out[code != 0].any()


def test_too_few_views_tell_no_veil():
    """With seven views nothing is called a veil."""
    haze = np.zeros((7, 4), np.float32)
    haze[0] = 1.0
    assert not veiled(haze, np.zeros(haze.shape, np.uint8), np.zeros(4, int)).any()


def test_darkness_by_hand():
    """Mean of the logarithms of both ratios; one band serves alone, none gives NaN, and so does unknown ground."""
    nir, swir = np.array([0.1, 0.2, np.nan], "f4"), np.array([0.1, np.nan, np.nan], "f4")
    out = darkness(nir, swir, (0.2, 0.4))
    assert out[:2] == pytest.approx([(np.log(0.5) + np.log(0.25)) / 2, 0.0], abs=1e-6)
    assert np.isnan(out[2])
    assert np.isnan(darkness(nir, swir, (np.nan, np.nan))).all()


def _pond(rng, scenes=20, side=9):
    """Return darkness of a pond of 5 x 5 pixels in a block of 9 x 9, and the arguments of ``shaded`` beside it."""
    rows, cols = (v.ravel() for v in np.mgrid[0:side, 0:side])
    ring = (np.abs(rows - 4) > 2) | (np.abs(cols - 4) > 2)
    dark = rng.normal(0.0, 0.05, (scenes, side * side)).astype(np.float32)
    place = np.column_stack([rows, cols]).astype(float)
    return dark, np.zeros(dark.shape, np.uint8), np.zeros(side * side, int), ring, place, np.zeros(dark.shape, bool)


@given(st.integers(0, 1000), st.integers(0, 19))
@settings(max_examples=25, deadline=None)
def test_a_missed_shadow_is_told_by_the_ground_around(seed, scene):
    """A scene whose ground lies in shadow is masked; a scene in which only the pond is dark (water) is not."""
    dark, code, *rest = _pond(np.random.default_rng(seed))
    ring = rest[1]
    dark[scene] -= 1.2
    dark[(scene + 7) % 20, ~ring] -= 2.0
    out = shaded(dark, code, *rest)
    assert out[scene].all()
    assert not np.delete(out, scene, axis=0).any()


def test_half_a_shadow_takes_its_side_only():
    """Shadow over the eastern third of the ring: pixels there are masked, those in the west are not."""
    dark, code, owner, ring, place, leafy = _pond(np.random.default_rng(1))
    dark[3, place[:, 1] >= 6] -= 1.2
    out = shaded(dark, code, owner, ring, place, leafy)[3]
    assert out[place[:, 1] >= 7].all()
    assert not out[place[:, 1] <= 3].any()


def test_plants_that_hide_water_do_not_shrink_a_full_bowl():
    """Half of the pixels in the deep middle show half of their water: the area of full views is told within 5 %."""
    levels = np.clip(0.7 + 0.5 * np.sin(np.arange(40) / 3), 0, 1)
    weights, wetlands, cells, stack, truth = bowl(levels)
    rows, cols = (v.ravel() for v in np.mgrid[0:SIZE, 0:SIZE])
    grown = (np.hypot(rows - 6, cols - 6) < 4) & ((rows + cols) % 2 == 0)
    hidden = np.where(grown[None, :], 0.5 * stack.fraction, stack.fraction).astype(np.float32)
    changed = SceneStack(stack.scene_id, stack.datetime, hidden, stack.code, stack.wetland_id, stack.leaf_state)
    observer = ExtentObserver(weights, wetlands, 100.0, cells=cells).fit(changed)
    error = (observer.observe(changed)["area_m2"].to_numpy() - truth) / wetlands["area_max_m2"][0]
    gain = observer.shapes_["a"].gain
    inside = pd.Series(gain, index=observer.pixels_["a"].pixel)
    assert inside[np.flatnonzero(grown)].mean() < 0.75
    assert inside.drop(np.flatnonzero(grown)).mean() > 0.9
    assert np.abs(error[levels > 0.95]).max() < 0.05
