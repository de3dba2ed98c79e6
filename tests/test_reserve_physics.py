"""The reserve's physics: water balance, bowls, spectra, canopies, blur, clouds."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from inundate.reserve import canopy, clouds, hydrology, light, render, spectra, terrain, weather
from inundate.reserve.fields import rough_field, smooth_field
from inundate.reserve.plan import make_plan


@pytest.fixture(scope="module")
def land():
    """Bowls, ground, hypsometry and water of a small reserve."""
    plan = make_plan(3, "small")
    bowls = terrain.make_bowls(plan)
    ground = terrain.make_ground(plan, bowls)
    tables = terrain.hypsometry(plan, bowls, ground)
    sky = weather.make_weather(plan, hydrology.LEAD_DAYS)
    sill = ground.sill_m - ground.lowest_m
    water, _ = hydrology.run_water(plan, sky, [b.wetland_id for b in bowls], tables, sill)
    return plan, bowls, ground, tables, sky, water


def test_the_mass_balance_closes(land):
    *_, water = land
    flux = water.balance
    parts = flux.rain_m3 + flux.inflow_m3 - flux.et_m3 - flux.seepage_m3 + flux.exchange_m3 - flux.spill_m3
    np.testing.assert_allclose(parts, flux.storage_change_m3, atol=1e-6 * flux.rain_m3.max())
    assert (flux[["rain_m3", "et_m3", "seepage_m3"]] > 0).all().all()
    assert (flux.spill_m3 >= 0).all()


def test_water_stands_high_in_late_winter_low_in_late_summer_and_spills_at_the_sill(land):
    plan, bowls, ground, _, _, water = land
    share = water.area_daily / np.array([[b.polygon.area] for b in bowls])
    month = plan.days.month
    wet = share[:, np.isin(month, (2, 3, 4))].mean()
    dry = share[:, np.isin(month, (8, 9, 10))].mean()
    assert wet > 1.3 * dry
    assert (water.daily.max(axis=1) < ground.sill_m - ground.lowest_m + 0.10).all()
    assert (water.daily < 0).any()


def test_small_wetlands_are_flashier():
    """Over several seeds, the day-to-day change of extent (share of the largest) is larger in small wetlands."""
    small, large = [], []
    for seed in range(1, 5):
        plan = make_plan(seed, "default")
        bowls = terrain.make_bowls(plan)
        ground = terrain.make_ground(plan, bowls)
        tables = terrain.hypsometry(plan, bowls, ground)
        sky = weather.make_weather(plan, hydrology.LEAD_DAYS)
        water, _ = hydrology.run_water(
            plan, sky, [b.wetland_id for b in bowls], tables, ground.sill_m - ground.lowest_m
        )
        area = np.array([b.polygon.area for b in bowls])
        swing = np.abs(np.diff(water.area_daily / area[:, None])).mean(axis=1)
        small.append(swing[area < 3000].mean())
        large.append(swing[area > 10000].mean())
        assert len(bowls) >= 40
        assert (area < 3000).mean() > 0.3
        assert area.min() >= 480
        assert area.max() <= 50000
    assert np.mean(small) > 1.25 * np.mean(large)


def test_hypsometry_rises_from_nothing_to_the_polygon(land):
    _, bowls, _, tables, _, _ = land
    for bowl, table in zip(bowls, tables, strict=True):
        assert table[0] == 0
        assert (np.diff(table) >= 0).all()
        assert table[-1] == pytest.approx(bowl.polygon.area)
    stages = np.array([-0.5, 0.0, 50.0])
    np.testing.assert_allclose(hydrology.area_at(tables[0], stages), [0, 0, bowls[0].polygon.area])


def test_no_two_relations_are_alike(land):
    _, _, _, tables, _, _ = land
    shapes = [np.interp(np.linspace(0, 1, 21), np.linspace(0, 1, t.size), t / t[-1]) for t in tables]
    for i, one in enumerate(shapes):
        for other in shapes[:i]:
            assert np.abs(one - other).max() > 0.02


def test_a_layer_table_is_the_canopy_model_itself():
    """c + t r / (1 - s r) equals the library's reflectance over a Lambertian ground, within 0.004 at any leaf area."""
    from prosail.FourSAIL import foursail

    rho, tau = spectra.leaf_optics("green")
    zenith = 40.0
    table = spectra.layer_table("green", zenith)
    sky = spectra.sky_share(zenith)
    for step in (0, 5, 20, 45):
        for ground in (0.02, 0.15, 0.4):
            c, t, s = table[step]
            ours = c + t * ground / (1 - s * ground)
            if step == 0:
                np.testing.assert_allclose(ours, ground, rtol=1e-6)
                continue
            soil = np.full(10, ground)
            terms = foursail(rho, tau, 45, 0.0, 2, step * spectra.LAI_STEP, 0.05, zenith, 3.0, 90.0, soil)
            theirs = (1 - sky) * terms[17] + sky * terms[14]
            np.testing.assert_allclose(ours, theirs, atol=0.004)


def test_leaves_hide_the_water():
    """The contrast between water and wet ground falls with leaf area, in every band, to nearly nothing at full leaf."""
    table = spectra.layer_table("green", 36.0)
    water = spectra.water_table(4.0, 0.02, 0.8, 36.0)[10].astype(float)
    ground = spectra.ground_table()[0, 3, 10].astype(float)

    def over(step: int, below: np.ndarray) -> np.ndarray:
        c, t, s = table[step].astype(float)
        return c + t * below / (1 - s * below)

    contrast = np.array([np.abs(over(k, ground) - over(k, water)) for k in (0, 5, 10, 20, 30, 45)])
    total = contrast.sum(axis=1)
    assert (np.diff(total) < 0).all()
    assert total[-1] < 0.12 * total[0]
    assert (contrast[-1] <= contrast[0] + 1e-9).all()


def test_water_darkens_with_depth_and_stain_and_starts_as_wet_ground():
    clear, stained = spectra.water_table(1.0, 0.01, 0.5, 40.0), spectra.water_table(12.0, 0.01, 0.5, 40.0)
    for table in (clear, stained):
        assert (np.diff(table.astype(float), axis=0)[:, 3:] <= 1e-7).all()
    assert (stained[10, :2] < clear[10, :2]).all()
    np.testing.assert_allclose(stained[10, 6:], clear[10, 6:], atol=2e-3)
    floor = spectra.ground_table()[0, 5, 0].astype(float)
    wet = spectra.through_water(floor, 1e-9, 4.0, 0.02)
    np.testing.assert_allclose(wet, 0.54 * floor / (1 - 0.48 * floor), rtol=1e-5)
    # water swallows the short-wave infrared; wet dark mud does not quite
    mud = spectra.ground_table()[0, 10, 10]
    assert clear[5, 8] < 0.02 < mud[8]


def test_leaf_calendar_is_what_the_truth_says():
    plan = make_plan(5, "small")
    years = canopy.make_leaf_years(plan, 8)
    year = plan.days[0].year + 1
    days = pd.date_range(f"{year}-01-01", f"{year}-12-31")
    share = np.array([canopy.leaf_share(years, d, np.array([0.0]))[0][0] for d in days])
    for level, away in ((0.1, -canopy.UP_WIDTH_D / 2), (0.5, 0), (0.9, canopy.UP_WIDTH_D / 2)):
        first = days[np.argmax(share > level)].day_of_year
        assert abs(first - (years.up[year] + away)) <= 2.5
    bare = share[days.day_of_year.isin(range(15, 60))]
    assert bare.max() < 0.01
    assert share.max() > 0.95


@settings(max_examples=40, deadline=None)
@given(st.floats(-9.5, 9.5), st.floats(0.5, 8.0))
def test_blur_keeps_the_mean_and_moves_the_content(shift, blur):
    """Rows of weights add to 1; a bright line moves by the shift, to a tenth of a metre."""
    weights = render.blur_weights(160, 4, blur, shift, 2.5)
    np.testing.assert_allclose(np.asarray(weights.sum(axis=1)).ravel(), 1.0, atol=1e-12)
    line = np.zeros(160)
    line[78:82] = 1.0
    seen = weights @ line
    place = (np.arange(40) + 0.5) * 10.0
    centre = (seen * place).sum() / seen.sum()
    assert centre - 200.0 == pytest.approx(shift, abs=0.1 + 0.05 * abs(shift))


def test_low_sun_shades_the_clearing_on_the_far_side_of_a_wood():
    height = np.zeros((60, 60), np.float32)
    height[30:40] = 18.0
    leaf = np.where(height > 0, np.float32(4.0), np.float32(0.0))
    grain = np.zeros_like(height)
    low = light.beam_map(height, leaf, grain, 20.0, 180.0)
    high = light.beam_map(height, leaf, grain, 65.0, 180.0)
    # the sun stands in the south: shade falls north, to lower rows
    assert low[25, 30] < 0.3
    assert low[45, 30] == pytest.approx(1.0)
    assert (low < 0.5).sum() > 2 * (high < 0.5).sum()
    bare = light.beam_map(height, leaf * np.float32(0.12), grain, 20.0, 180.0)
    assert low[25, 30] < bare[25, 30] < 1.0


def test_sun_stands_where_astronomy_says():
    """Noon height is 90 - latitude +- 23.45 degrees at the solstices; the morning sun stands east of south."""
    up, azimuth = light.sun_position(pd.Timestamp("2032-06-21"), 12.0)
    assert up == pytest.approx(90 - light.LATITUDE_DEG + 23.45, abs=0.1)
    up, _ = light.sun_position(pd.Timestamp("2032-12-21"), 12.0)
    assert up == pytest.approx(90 - light.LATITUDE_DEG - 23.45, abs=0.1)
    _, azimuth = light.sun_position(pd.Timestamp("2032-03-20"))
    assert 130 < azimuth < 180


def test_clouds_cover_what_they_should_and_the_mask_misses_their_edges():
    rng = np.random.default_rng(4)
    skies = [clouds.draw_sky(rng, 120, 0.4, (40.0, 160.0), swath_edge=False) for _ in range(8)]
    codes = np.array([clouds.true_codes(s, np.zeros((120, 120), np.float32)) for s in skies])
    assert 0.25 < (codes == 1).mean() < 0.5
    assert 0.05 < (codes == 2).mean() < 0.4
    sky = skies[0]
    ten = np.full((4, 120, 120), 0.08, np.float32)
    twenty = np.full((6, 60, 60), 0.12, np.float32)
    ten = clouds.through_air(ten, render.BANDS_10M, sky)
    twenty = clouds.through_air(twenty, render.BANDS_20M, sky)
    classes = clouds.classify_scene(rng, ten, twenty, sky)
    flagged = np.kron(np.isin(classes, (8, 9, 10)), np.ones((2, 2), bool))
    thick = sky.cloud > 0.7
    assert flagged[thick].mean() > 0.97
    thin = (sky.cloud > 0.10) & (sky.cloud < 0.2)
    assert 0.05 < flagged[thin].mean() < 0.8
    none = clouds.draw_sky(rng, 120, 0.0, (40.0, 160.0), swath_edge=True)
    assert none.cloud.max() == 0
    assert 0 < none.fill.mean() < 1


@settings(max_examples=15, deadline=None)
@given(st.integers(8, 60), st.integers(8, 60), st.floats(1.5, 12.0))
def test_random_fields_are_standard(rows, cols, scale):
    rng = np.random.default_rng(1)
    for field in (smooth_field(rng, (rows, cols), scale), rough_field(rng, (rows, cols), (scale, 2.0))):
        assert field.shape == (rows, cols)
        assert field.dtype == np.float32
        assert np.isfinite(field).all()
        assert field.std() == pytest.approx(1.0, rel=1e-3)


@pytest.mark.parametrize("kind", range(len(canopy.HERB_KINDS)))
def test_herbs_grow_and_die_without_a_jump_at_new_year(kind):
    """Leaf area (share of peak) stays within 0..1 and moves by less than 5 % from one winter day to the next."""
    days = pd.date_range("2031-12-20", "2032-01-12")
    share = np.array([canopy.herb_state(kind, d, 119.0) for d in days])
    assert (np.abs(np.diff(share[:, 0])) < 0.05).all()
    assert ((share >= 0) & (share <= 1)).all()
