"""Labels to examples: checks, places, scenes, starter examples, mixtures."""

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import shapely

from inundate.common.codes import BAND_ROLES
from inundate.common.errors import InputError
from inundate.common.grid import Grid
from inundate.pixels import (
    MixOptions,
    ViewState,
    check_labels,
    label_pixels,
    make_examples,
    match_scenes,
    mix_examples,
    starter_examples,
)
from inundate.pixels.mixing import shoreline_fractions

GRID = Grid("EPSG:32633", 500000.0, 5000000.0, 10.0, 40, 50)
SCENES = pd.DataFrame({"scene_id": ["a", "b"], "datetime": pd.to_datetime(["2031-03-04T10:00", "2031-04-01T10:00"])})


def labels(**columns):
    base = {"label": ["water", "Dry"], "date": ["2031-03-04", "2031-04-02"]}
    return pd.DataFrame({**base, **columns})


def layer(shapes, **columns):
    return gpd.GeoDataFrame(labels(**columns), geometry=shapes, crs=GRID.crs)


@pytest.mark.parametrize(
    ("table", "words"),
    [
        (labels(label=["water", "wet"]), "row 1 has label 'wet'.*water or dry"),
        (labels(label=["dry", "dry"]), "one class only, all 2 rows are dry"),
        (labels().iloc[:0], "one class only, there is no row"),
        (labels().drop(columns="label"), "needs label"),
        (labels().drop(columns="date"), "needs label .* and date or scene_id"),
        (labels(date=["2031-03-04", "spring"]), "row 1 has date 'spring'"),
    ],
)
def test_bad_labels_say_what_is_wrong(table, words):
    with pytest.raises(InputError, match=words):
        check_labels(table)


def test_points_and_polygons_land_on_their_pixels():
    square = shapely.box(500100, 4999865, 500120, 4999900)  # 2 columns, 3.5 rows
    out, refused = label_pixels(gpd.GeoDataFrame(check_labels(layer([shapely.Point(500015, 4999995), square]))), GRID)
    assert refused == []
    point = out[out["label"] == 1]
    assert (point["grid_row"].item(), point["grid_col"].item()) == (0, 1)
    assert np.isnan(point["purity"].item())
    block = out[out["label"] == 0].sort_values(["grid_row", "grid_col"])
    assert block["grid_col"].unique().tolist() == [10, 11]
    assert set(block["grid_row"]) <= {10, 11, 12, 13}
    assert block[block["grid_row"] < 13]["purity"].tolist() == [1.0] * 6
    assert out["wetland_id"].str.startswith("square").all()


def test_large_polygons_are_thinned_and_tiny_ones_kept():
    big, tiny = shapely.box(500000, 4999700, 500300, 5000000), shapely.box(500401, 4999901, 500403, 4999903)
    out, _ = label_pixels(gpd.GeoDataFrame(check_labels(layer([big, tiny]))), GRID, max_per_polygon=30)
    assert (out["label"] == 1).sum() == 30
    small = out[out["label"] == 0]
    assert small["purity"].tolist() == pytest.approx([0.04])


def test_labels_outside_the_area_are_refused_one_by_one():
    out, refused = label_pixels(
        gpd.GeoDataFrame(check_labels(layer([shapely.Point(0, 0), shapely.Point(500015, 4999995)]))), GRID
    )
    assert [r.name for r in refused] == ["0"]
    assert "lies outside the area" in refused[0].reason
    assert out["row"].tolist() == [1]


def test_labels_meet_scenes_by_day_or_by_name():
    table = check_labels(
        pd.DataFrame(
            {
                "label": ["water", "dry", "dry"],
                "date": ["2031-03-05", "2031-03-20", None],
                "scene_id": [None, None, "b"],
            }
        )
    )
    out, refused = match_scenes(table, SCENES, max_days=1)
    assert out["scene_id"].tolist() == ["a", "b"]
    assert out["date"].dt.strftime("%Y-%m-%d").tolist() == ["2031-03-04", "2031-04-01"]
    assert [r.name for r in refused] == ["1"]
    assert "no scene within 1 days" in refused[0].reason


def test_labels_without_any_scene_are_an_error():
    table = check_labels(labels(date=["1999-01-01", "1999-01-02"]))
    with pytest.raises(InputError, match=r"none of 2 labels meets a scene \(scenes: 2031-03-04 to 2031-04-01"):
        match_scenes(table, SCENES)


def pixels(n):
    half = np.arange(n) % 2
    return pd.DataFrame(
        {"row": np.arange(n), "label": half, "wetland_id": "w", "scene_id": "a", "date": pd.Timestamp("2031-03-04")}
    )


def view(n):
    return ViewState(np.zeros(n), np.zeros(n, int), np.full(n, 30.0))


def test_few_own_examples_bring_the_starter_examples_and_say_so():
    n = 40
    values = np.full((2, n), 0.1, "f4")
    clear = np.arange(n) != 3
    out = make_examples(pixels(n), values, ("green", "nir"), view(n), clear=clear)
    assert (out.table["source"] == "own").sum() == n - 1
    assert (out.table["source"] == "starter").sum() == len(starter_examples().table)
    assert "own examples: 20 water" not in out.notes[0]
    assert "19 water and 20 dry" in out.notes[0]
    assert [r.name for r in out.refused] == ["3"]
    assert out.X.shape[0] == out.y.size == len(out.table)


def test_enough_own_examples_stand_alone():
    n = 400
    out = make_examples(pixels(n), np.full((2, n), 0.1, "f4"), ("green", "nir"), view(n))
    assert set(out.table["source"]) == {"own"}
    assert out.notes == ()


def test_no_clear_label_and_one_class_are_errors():
    with pytest.raises(InputError, match="none of 4 labelled pixels is clear"):
        make_examples(pixels(4), np.full((1, 4), np.nan, "f4"), ("green",), view(4))
    one = pixels(4).assign(label=1)
    with pytest.raises(InputError, match="one class only"):
        make_examples(one, np.full((1, 4), 0.1, "f4"), ("green",), view(4), starter="never")
    with pytest.raises(InputError, match="'maybe'; use auto, always or never"):
        make_examples(pixels(4), np.full((1, 4), 0.1, "f4"), ("green",), view(4), starter="maybe")


def test_shoreline_fractions_agree_with_the_geometry():
    fine, coarse = shoreline_fractions(4000, np.random.default_rng(0), 0.0)
    assert abs(fine.mean() - 0.5) < 0.02
    # the fine pixel is a quarter of a coarse one that has 9/16 of the weight: 9/64 of the coarse value at least
    assert np.abs(fine - coarse).max() <= 1 - 9 / 64 + 1e-9
    assert (coarse[fine == 1] >= 9 / 64 - 1e-9).all()
    assert np.corrcoef(fine, coarse)[0, 1] > 0.8
    assert ((fine > 0.02) & (fine < 0.98)).mean() > 0.3


def test_mixtures_lie_between_their_ends():
    n = 60
    values = np.zeros((10, n), "f4")
    values[:, 1::2] = 0.02
    values[:, 0::2] = 0.30
    own = make_examples(pixels(n), values, BAND_ROLES, view(n), starter="never")
    mixed = mix_examples(own, options=MixOptions(n=500, seed=3))
    new = (mixed.table["source"] == "mixed").to_numpy()
    assert new.sum() == 500
    fraction = mixed.table["fraction"].to_numpy()[new]
    np.testing.assert_allclose(mixed.reflectance[0, new], 0.30 - 0.28 * fraction, atol=1e-6)
    assert np.corrcoef(mixed.reflectance[9, new], fraction)[0, 1] < -0.7
    again = mix_examples(own, options=MixOptions(n=500, seed=3))
    np.testing.assert_array_equal(mixed.reflectance, again.reflectance)
