"""The reserve's files: same bytes for a seed, the input contract kept, truth that holds together."""

import hashlib
import json
import tomllib
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pystac
import pytest
import rasterio
from pystac.validation.stac_validator import JsonSchemaSTACValidator

from inundate.common.codes import BAND_ROLES, ViewCode
from inundate.common.errors import InputError
from inundate.reserve import loggers, make_reserve
from tests.stage_reserve import bare_land, write_ground_data


def _digests(folder: Path) -> dict[str, str]:
    files = sorted(p for p in folder.rglob("*") if p.is_file())
    return {str(p.relative_to(folder)): hashlib.sha256(p.read_bytes()).hexdigest() for p in files}


def test_same_seed_same_bytes_whatever_the_workers(small_reserve, tmp_path):
    make_reserve(tmp_path, seed=7, size="small", workers=1)
    assert _digests(tmp_path) == _digests(small_reserve)


def test_another_seed_is_another_reserve(small_reserve, tmp_path):
    make_reserve(tmp_path, seed=8, size="small")
    one, two = _digests(small_reserve), _digests(tmp_path)
    for name in ("inputs/wetlands.gpkg", "inputs/weather.csv", "inputs/labels.gpkg", "truth/stage_daily.parquet"):
        assert one[name] != two[name], name
    a, b = (gpd.read_file(f / "inputs" / "wetlands.gpkg") for f in (small_reserve, tmp_path))
    assert not np.allclose(a.area, b.area)


@pytest.mark.parametrize(
    ("seed", "size", "message"),
    [
        (1, "huge", "size: got 'huge'; .*'default' and 'small'"),
        (-3, "small", "seed: got -3; .*whole number of 0 or more"),
    ],
)
def test_bad_arguments_say_what_to_give(tmp_path, seed, size, message):
    with pytest.raises(InputError, match=message):
        make_reserve(tmp_path, seed=seed, size=size)
    assert not any(tmp_path.iterdir())


def test_every_input_that_the_pipeline_names_is_there(small_reserve):
    inputs = small_reserve / "inputs"
    pipeline = tomllib.loads((inputs / "pipeline.toml").read_text())
    assert pipeline["output"]["folder"] == "../out"
    named = [v for section, part in pipeline.items() if section != "output" for v in part.values()]
    files = [v for v in named if isinstance(v, str) and Path(v).suffix in (".gpkg", ".tif", ".json", ".csv")]
    assert len(files) == 9
    for name in files:
        assert (inputs / name).is_file(), name


def test_tables_have_the_columns_of_the_contract(small_reserve):
    inputs = small_reserve / "inputs"
    registry = pd.read_csv(inputs / "loggers.csv")
    need = ["logger_id", "wetland_id", "file", "kind", "unit", "height_m", "height_sd_m"]
    need += ["valid_from", "valid_to", "utc_offset"]
    assert list(registry.columns) == need
    wetlands = gpd.read_file(inputs / "wetlands.gpkg")
    assert wetlands.crs.to_epsg() == 32633
    assert wetlands.wetland_id.is_unique
    assert wetlands.is_valid.all()
    assert set(registry.wetland_id) <= set(wetlands.wetland_id)
    assert len(registry) >= 3
    for name in registry.file:
        readings = pd.read_csv(inputs / name)
        assert list(readings.columns) == ["time", "value", "temperature_c"]
        assert readings["value"].between(90, 130).mean() > 0.99
    assert list(pd.read_csv(inputs / "barometer.csv").columns) == ["time", "pressure_kpa"]
    assert list(pd.read_csv(inputs / "checks.csv").columns) == ["logger_id", "time", "stage_m", "sd_m"]
    weather = pd.read_csv(inputs / "weather.csv")
    assert list(weather.columns) == ["date", "precipitation_mm", "pet_mm", "air_temperature_c"]
    assert pd.to_datetime(weather.date).diff().dropna().eq(pd.Timedelta(days=1)).all()
    assert list(pd.read_csv(inputs / "walked_extents.csv").columns) == ["wetland_id", "date", "area_m2", "sd_m2"]
    labels = gpd.read_file(inputs / "labels.gpkg")
    assert list(labels.columns[:5]) == ["wetland_id", "date", "scene_id", "label", "source"]
    assert set(labels.label) == {"water", "dry"}
    truth = pd.read_parquet(small_reserve / "truth" / "labels.parquet")
    assert len(truth) == len(labels)
    assert 0.005 < 1 - truth.correct.mean() < 0.07


def test_catalog_is_valid_stac_and_the_table_says_the_same(small_reserve):
    inputs = small_reserve / "inputs"
    collection = pystac.Collection.from_file(str(inputs / "scenes" / "collection.json"))
    assert collection.id == "sallow-reserve"
    items = list(collection.get_items())
    table = pd.read_csv(inputs / "scenes.csv")
    assert [i.id for i in items] == list(table.scene_id)
    for item in items:
        props = item.properties
        assert {"view:sun_elevation", "view:sun_azimuth", "processing:version", "s2:processing_baseline"} <= set(props)
        assert len(item.assets) == len(BAND_ROLES) + 1
        assert all(Path(a.get_absolute_href()).is_file() for a in item.assets.values())
    # the core schema comes with pystac; extension schemas would need a network
    core = JsonSchemaSTACValidator()
    assert core.validate_core(items[0].to_dict(), pystac.STACObjectType.ITEM, "1.1.0")
    assert core.validate_core(collection.to_dict(), pystac.STACObjectType.COLLECTION, "1.1.0")
    raw = json.loads((inputs / "scenes" / items[0].id / f"{items[0].id}.json").read_text())
    del raw["properties"]["datetime"]
    with pytest.raises(pystac.errors.STACValidationError):
        core.validate_core(raw, pystac.STACObjectType.ITEM, "1.1.0")
    assert set(table.baseline.astype(str)) == {"3.01", "5.1"}


def test_bands_lie_on_one_grid_and_keep_zero_for_fill(small_reserve):
    scenes = small_reserve / "inputs" / "scenes"
    truth = small_reserve / "truth" / "pixels"
    for folder in sorted(p for p in scenes.iterdir() if p.is_dir())[::6]:
        item = json.loads((folder / f"{folder.name}.json").read_text())
        with rasterio.open(truth / f"{folder.name}.tif") as source:
            facts, bounds = source.read(), source.bounds
        fill = facts[2] == ViewCode.FILL
        for key, asset in item["assets"].items():
            with rasterio.open(folder / asset["href"]) as source:
                values = source.read(1)
                assert source.bounds == bounds
                assert source.profile["tiled"]
                assert source.dtypes[0] == ("uint8" if key == "SCL" else "uint16")
            if values.shape == fill.shape:
                np.testing.assert_array_equal(values == 0, fill)
        assert facts[0].max() <= 100
        assert facts[1].max() <= 100
        assert set(np.unique(facts[2])) <= set(ViewCode)


def test_truth_of_extent_and_stage_holds_together(small_reserve):
    truth = small_reserve / "truth"
    extent, stage = (pd.read_parquet(truth / f"{n}_daily.parquet") for n in ("extent", "stage"))
    wetlands = pd.read_parquet(truth / "wetlands.parquet").set_index("wetland_id")
    polygons = gpd.read_file(small_reserve / "inputs" / "wetlands.gpkg").set_index("wetland_id")
    np.testing.assert_allclose(wetlands.area_max_m2, polygons.area.loc[wetlands.index])
    both = extent.merge(stage, on=["wetland_id", "date"], validate="1:1")
    assert len(both) == len(wetlands) * both.date.nunique()
    top = wetlands.area_max_m2.loc[both.wetland_id].to_numpy()
    assert (both.area_m2 >= 0).all()
    assert (both.area_m2 <= top * (1 + 1e-12)).all()
    assert (both.area_m2[both.stage_m <= 0] == 0).all()
    relations = pd.read_parquet(truth / "relations.parquet")
    for name, part in relations.groupby("wetland_id"):
        assert (part.area_m2.diff().dropna() >= 0).all()
        assert part.area_m2.iloc[0] == 0
        assert part.area_m2.iloc[-1] == pytest.approx(wetlands.area_max_m2[name])
        mine = both[both.wetland_id == name]
        again = np.interp(mine.stage_m, part.stage_m, part.area_m2)
        np.testing.assert_allclose(mine.area_m2, again, atol=1e-6)


def test_pixels_under_water_add_up_to_the_daily_extent(small_reserve):
    """Water shares of 10 m pixels, summed over the view, are the wetlands' extents, but for rounding and the hour."""
    truth = small_reserve / "truth"
    extent = pd.read_parquet(truth / "extent_daily.parquet").groupby("date").area_m2.sum()
    scenes = pd.read_parquet(truth / "scenes.parquet").set_index("scene_id")
    off = []
    for name, row in scenes.iterrows():
        with rasterio.open(truth / "pixels" / f"{name}.tif") as source:
            share = source.read(1)
        off.append(share.sum() - extent[row.date])
    assert np.abs(off).max() < 0.04 * gpd.read_file(small_reserve / "inputs" / "wetlands.gpkg").area.sum()


def test_scenes_hold_what_makes_the_job_hard(small_reserve):
    """Mixed pixels, canopies that hide, openings in full leaf, clouds with missed edges, shifts, both baselines."""
    truth = small_reserve / "truth"
    scenes = pd.read_parquet(truth / "scenes.parquet")
    assert 36 <= len(scenes) <= 44
    assert 0.3 < (scenes.cloud_share > 0.01).mean() < 0.8
    assert scenes[["dx_m", "dy_m"]].abs().max().max() <= 10
    assert 2.0 < scenes[["dx_m", "dy_m"]].stack().std() < 5.0
    assert set(scenes.baseline) == {"03.01", "05.10"}
    mixed, gaps, missed = 0, 0, 0
    hidden = {"summer": [], "winter": []}
    for row in scenes.itertuples():
        with rasterio.open(truth / "pixels" / f"{row.scene_id}.tif") as source:
            water, seen, code = source.read()
        mixed += int(((water > 5) & (water < 95)).sum())
        if row.date.month in (6, 7, 8):
            hidden["summer"].append(float((seen < 10).mean()))
            gaps += int((seen > 40).sum())
        elif row.date.month in (1, 2, 3):
            hidden["winter"].append(float((seen < 10).mean()))
        with rasterio.open(small_reserve / "inputs" / "scenes" / row.scene_id / "SCL.tif") as source:
            classes = np.kron(source.read(1), np.ones((2, 2), int))
        missed += int(((code == ViewCode.CLOUD) & np.isin(classes, (2, 4, 5, 6, 7))).sum())
    assert mixed > 2000
    assert min(hidden["summer"]) > 0.4
    assert max(hidden["winter"]) < 0.5 * min(hidden["summer"])
    assert gaps > 1000
    assert missed > 500


def test_loggers_measure_the_true_stage_where_nothing_is_wrong(small_reserve):
    """By hand: (absolute - barometer) / (density x gravity) + height is the true stage to about a centimetre."""
    inputs, truth = small_reserve / "inputs", small_reserve / "truth"
    registry = pd.read_csv(inputs / "loggers.csv").set_index("logger_id")
    faults = pd.read_parquet(truth / "loggers.parquet")
    stage = pd.read_parquet(truth / "stage_daily.parquet").set_index(["wetland_id", "date"]).stage_m
    air = pd.read_csv(inputs / "barometer.csv")
    air = pd.Series(air.pressure_kpa.to_numpy(), pd.to_datetime(air.time).dt.tz_localize(None))
    assert set(faults.logger_id) == set(registry.index)
    tried = 0
    for name, row in registry.iterrows():
        mine = faults[faults.logger_id == name]
        if set(mine.fault) & {"drift", "move", "spike"}:
            continue
        hours = float(row.utc_offset[1:3])
        values = pd.read_csv(inputs / row.file)
        time = pd.to_datetime(values.time) - pd.Timedelta(hours=hours)
        level = pd.Series(values["value"].to_numpy(), time) - air
        survey = float(mine.loc[mine.fault == "survey", "size_m"].iloc[0])
        level = level[level.abs() > 0.35] * 1000 / (999.7 * 9.8045) + row.height_m - survey
        daily = level.groupby(level.index.floor("D")).agg(["median", "size"])
        daily = daily[daily["size"] >= 20]["median"]
        error = daily - stage.loc[row.wetland_id].reindex(daily.index)
        assert error.std() < 0.015
        assert abs(error.mean()) < 0.012
        tried += 1
    assert tried >= 1


def test_faults_of_the_loggers_are_all_in_the_truth(small_reserve):
    faults = pd.read_parquet(small_reserve / "truth" / "loggers.parquet")
    assert list(faults.columns) == ["logger_id", "fault", "start", "end", "size_m"]
    assert (faults.end >= faults.start).all()
    move = faults[faults.fault == "move"]
    assert move.size_m.abs().between(0.05, 0.12).all()
    assert faults[faults.fault == "drift"].size_m.abs().between(0.02, 0.05).all()
    assert (faults.fault == "download").sum() >= 6


def test_heights_and_checks_carry_the_errors_that_they_state():
    """Over 20 seeds: survey errors have mean 0 and the stated sd, checks too, within what chance allows (4 sd)."""
    survey, check = [], []
    for seed in range(20):
        land = bare_land(seed, "small")
        stages = dict(zip([b.wetland_id for b in land.bowls], land.water.hourly, strict=True))
        made = loggers.make_loggers(land)
        truth = made.truth
        survey += truth.loc[truth.fault == "survey", "size_m"].tolist()
        assert (made.registry.height_sd_m == loggers.SURVEY_SD_M).all()
        for row in made.checks.merge(made.registry[["logger_id", "wetland_id"]], on="logger_id").itertuples():
            at = (pd.Timestamp(row.time).tz_localize(None) - land.plan.days[0]) / pd.Timedelta(hours=1)
            own = stages[row.wetland_id]
            check.append((row.stage_m - np.interp(at, np.arange(own.size), own)) / row.sd_m)
    for errors, sd in ((survey, loggers.SURVEY_SD_M), (check, 1.0)):
        n = len(errors)
        assert abs(np.mean(errors)) < 4 * sd / np.sqrt(n)
        assert abs(np.std(errors) / sd - 1) < 4 / np.sqrt(2 * n)


def test_ground_data_alone_are_those_of_the_whole_reserve(small_reserve, tmp_path):
    """The bench that tries many seeds without scenes reads the very same files."""
    seed = json.loads((small_reserve / "truth" / "about.json").read_text())["seed"]
    write_ground_data(tmp_path, seed, "small")
    mine = _digests(tmp_path / "inputs")
    whole = _digests(small_reserve / "inputs")
    assert "loggers.csv" in mine
    assert {k: whole[k] for k in mine} == mine
