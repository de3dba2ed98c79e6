"""The main job on the small reserve: products whole and exact, repeatable, incremental, and bad input refused cleanly."""

import hashlib
import json
import re
import shutil
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import xarray as xr
from click.testing import CliRunner

from inundate.batch.progress import Progress
from inundate.batch.run import run_month
from inundate.cli import main
from inundate.common.codes import BASES, LEAF_STATES
from inundate.common.errors import InputError
from inundate.products import COLUMNS

pytestmark = pytest.mark.xdist_group("run")
QUIET = Progress(quiet=True)


def copy_inputs(reserve: Path, folder: Path, extra: str = "") -> Path:
    """Copy a reserve's inputs; return the pipeline file, trained quickly and with one worker."""
    shutil.copytree(reserve / "inputs", folder / "inputs")
    file = folder / "inputs" / "pipeline.toml"
    file.write_text(file.read_text() + '\n[classifier]\ntrees = 40\nstarter_examples = "never"\n' + extra)
    return file


def digests(folder: Path) -> dict[str, str]:
    """Hash every product file but run.json, which alone may hold times."""
    return {
        str(p.relative_to(folder)): hashlib.sha256(p.read_bytes()).hexdigest()
        for p in sorted(folder.rglob("*"))
        if p.is_file() and p.name != "run.json"
    }


@pytest.fixture(scope="session")
def delivered(small_reserve, tmp_path_factory):
    """A delivery of the small reserve: its folder, the pipeline file and the result."""
    folder = tmp_path_factory.mktemp("delivered")
    file = copy_inputs(small_reserve, folder, "[compute]\nworkers = 1\n")
    return folder, file, run_month(file, month=None, progress=Progress(quiet=True))


def test_every_product_is_there_with_exactly_its_columns(delivered):
    """All product files of the contract, each with its columns."""
    products = Path(delivered[2]["products"])
    for name, columns in COLUMNS.items():
        assert tuple(pd.read_parquet(products / f"{name}.parquet").columns) == columns, name
    for name in ("hydroperiod.parquet", "extent_daily.nc", "skill.json", "wetlands.gpkg", "report.html", "run.json"):
        assert (products / name).stat().st_size > 0, name


def test_every_wetland_has_every_day_within_bounds(delivered):
    """0 <= lo <= area <= hi <= largest extent, on every day from the first to the last."""
    products = Path(delivered[2]["products"])
    daily = pd.read_parquet(products / "extent_daily.parquet")
    shapes = gpd.read_file(products / "wetlands.gpkg")
    largest = daily["wetland_id"].map(dict(zip(shapes["wetland_id"], shapes.geometry.area, strict=True)))
    days = pd.date_range(daily["date"].min(), daily["date"].max())
    assert (daily.groupby("wetland_id").size() == len(days)).all()
    assert daily["wetland_id"].nunique() == len(shapes)
    assert not daily.isna().any().any()
    assert (daily["area_lo_m2"] >= 0).all()
    assert (daily["area_lo_m2"] <= daily["area_m2"]).all()
    assert (daily["area_m2"] <= daily["area_hi_m2"]).all()
    assert (daily["area_hi_m2"] <= largest * (1 + 1e-6)).all()
    assert set(daily["basis"]) <= set(BASES)
    assert set(daily["leaf_state"]) <= set(LEAF_STATES)
    assert {"observed", "stage", "neighbours"} <= set(daily["basis"])


def test_observed_basis_rests_on_a_used_view_that_day(delivered):
    """A day is called observed exactly where a view of that wetland was used."""
    products = Path(delivered[2]["products"])
    daily = pd.read_parquet(products / "extent_daily.parquet")
    seen = pd.read_parquet(products / "extent_observed.parquet")
    used = seen[seen["used"]]
    keys = set(zip(used["wetland_id"], used["datetime"].dt.tz_localize(None).dt.normalize(), strict=True))
    marked = daily[daily["basis"] == "observed"]
    assert set(zip(marked["wetland_id"], pd.to_datetime(marked["date"]), strict=True)) <= keys


def test_netcdf_equals_the_table(delivered):
    """The NetCDF holds the same numbers as the Parquet table."""
    products = Path(delivered[2]["products"])
    daily = pd.read_parquet(products / "extent_daily.parquet")
    with xr.open_dataset(products / "extent_daily.nc") as data:
        np.testing.assert_allclose(data["area"].values.ravel(), daily["area_m2"], rtol=1e-6)
        assert pd.Timestamp(data["time"].values[-1]) == daily["date"].max()


def test_stac_items_of_the_reserve_are_read_whole(delivered, small_reserve):
    """Every item of the collection is a row of extent_observed for every wetland, or is named as refused."""
    products = Path(delivered[2]["products"])
    items = {p.parent.name for p in (small_reserve / "inputs" / "scenes").glob("*/*.json")}
    seen = pd.read_parquet(products / "extent_observed.parquet")
    refused = {r["name"] for r in json.loads((products / "run.json").read_text())["refused"] if r["kind"] == "scene"}
    assert set(seen["scene_id"]) | refused == items
    assert not set(seen["scene_id"]) & refused


def test_nothing_new_does_nothing(delivered):
    """A second run reads no scene, writes no product, and says so."""
    folder, file, _ = delivered
    before = {p: p.stat().st_mtime_ns for p in (folder / "out").rglob("*.parquet")}
    progress = Progress(quiet=True)
    assert run_month(file, month=None, progress=progress)["done"] == "nothing new"
    assert progress.account == {}
    assert {p: p.stat().st_mtime_ns for p in (folder / "out").rglob("*.parquet")} == before


def test_same_bytes_with_other_workers(delivered, small_reserve, tmp_path):
    """Two worker threads leave the same product, map and model bytes as one."""
    file = copy_inputs(small_reserve, tmp_path, "[compute]\nworkers = 2\n")
    result = run_month(file, month=None, progress=QUIET)
    assert digests(Path(result["products"])) == digests(Path(delivered[2]["products"]))
    for part in ("maps", "models"):
        assert digests(tmp_path / "out" / part) == digests(delivered[0] / "out" / part)


def test_an_earlier_month_refuses_nothing_that_came_later(small_reserve, tmp_path):
    """Labels and scenes after the month are left out in silence; nothing else is refused, and the series ends with the month."""
    file = copy_inputs(small_reserve, tmp_path, "[compute]\nworkers = 1\n")
    result = run_month(file, month="2032-06", progress=QUIET)
    assert result["refused"] == []
    daily = pd.read_parquet(Path(result["products"]) / "extent_daily.parquet")
    assert str(daily["date"].max())[:10] == "2032-06-30"


@pytest.fixture
def again(delivered, tmp_path):
    """A copy of the delivery that a test may change."""
    shutil.copytree(delivered[0], tmp_path / "again", copy_function=shutil.copy2)
    return tmp_path / "again"


def test_bad_scenes_are_set_aside_and_named(again):
    """Truncated, empty and missing files cost their scene alone; the run ends with status 1 and names each."""
    scenes = again / "inputs" / "scenes"
    ids = sorted(p.name for p in scenes.iterdir() if p.is_dir())[:3]
    first, second, third = (scenes / i / "B04.tif" for i in ids)
    first.write_bytes(first.read_bytes()[:200])
    second.write_bytes(b"")
    third.unlink()
    done = CliRunner().invoke(main, ["run", str(again / "inputs" / "pipeline.toml"), "--quiet", "--json"])
    assert done.exit_code == 1, done.output
    for scene_id in ids:
        assert f"refused scene {scene_id}: " in done.stderr
    result = json.loads(done.stdout)
    seen = pd.read_parquet(Path(result["products"]) / "extent_observed.parquet")
    assert not set(ids) & set(seen["scene_id"])
    assert (again / "out" / "archive" / "ledger.sqlite").exists()


def test_changed_label_redoes_only_what_depends_on_it(again):
    """Labels that turn round train and map anew, but read no scene again for its view."""
    labels = again / "inputs" / "labels.gpkg"
    table = gpd.read_file(labels)
    turned = table["label"][:20].map({"water": "dry", "dry": "water"})
    table.loc[turned.index, "label"] = turned
    labels.unlink()
    table.to_file(labels, driver="GPKG")
    progress = Progress(quiet=True)
    assert run_month(again / "inputs" / "pipeline.toml", month=None, progress=progress)["done"] == "delivered"
    assert progress.account["reading scenes"]["items"] == 0
    assert progress.account["mapping water"]["items"] > 0


@pytest.mark.parametrize(
    ("harm", "words"),
    [
        (
            lambda d: gpd.read_file(d / "wetlands.gpkg").rename(columns={"wetland_id": "id"}),
            "column 'wetland_id' is missing",
        ),
        (lambda d: gpd.read_file(d / "wetlands.gpkg").assign(wetland_id="w"), "'w' stands more than once"),
    ],
)
def test_bad_wetlands_touch_no_product(again, harm, words):
    """A wrong layer gives one clear sentence, status 2, and leaves every product byte as it was."""
    before = digests(again / "out" / "products")
    layer = harm(again / "inputs")
    (again / "inputs" / "wetlands.gpkg").unlink()
    layer.to_file(again / "inputs" / "wetlands.gpkg", driver="GPKG")
    done = CliRunner().invoke(main, ["run", str(again / "inputs" / "pipeline.toml"), "--quiet"])
    assert done.exit_code == 2
    assert words in done.stderr
    assert "Traceback" not in done.stderr
    assert digests(again / "out" / "products") == before


def test_self_crossing_polygon(again):
    """A bow-tie is refused by name."""
    from shapely.geometry import Polygon

    file = again / "inputs" / "wetlands.gpkg"
    layer = gpd.read_file(file)
    x, y = layer.geometry[0].centroid.coords[0]
    layer.loc[0, "geometry"] = Polygon([(x, y), (x + 50, y + 50), (x + 50, y), (x, y + 50)])
    name = layer["wetland_id"][0]
    file.unlink()
    layer.to_file(file, driver="GPKG")
    done = CliRunner().invoke(main, ["check", str(again / "inputs" / "pipeline.toml"), "--quiet"])
    assert done.exit_code == 2
    assert f"wetland '{name}' has an invalid polygon (Self-intersection" in done.stderr


def test_logger_of_an_unknown_wetland_and_unknown_unit(again):
    """Both name the registry and the value."""
    file = again / "inputs" / "loggers.csv"
    text = file.read_text()
    table = pd.read_csv(file, dtype=str)
    first = table["wetland_id"][0]
    for change, words in (
        (text.replace(first, "nowhere"), "wetland 'nowhere', which"),
        (text.replace("kPa", "furlong"), "furlong"),
    ):
        file.write_text(change)
        done = CliRunner().invoke(main, ["run", str(again / "inputs" / "pipeline.toml"), "--quiet"])
        assert done.exit_code == 2, done.stderr
        assert "loggers.csv" in done.stderr
        assert words in done.stderr


def test_polygons_and_scenes_alone_make_a_delivery(small_reserve, tmp_path):
    """No labels, loggers, elevation or weather: every product is there, and what was lacking is said."""
    file = copy_inputs(small_reserve, tmp_path)
    text = file.read_text().replace('elevation = "elevation.tif"', "").replace('starter_examples = "never"', "")
    for section in ("labels", "loggers", "weather", "stage"):
        text = re.sub(rf"(?ms)^\[{section}\]\n.*?(?=^\[|\Z)", "", text)
    file.write_text(text)
    done = CliRunner().invoke(main, ["run", str(file), "--quiet", "--json"])
    assert done.exit_code in (0, 1), done.stderr
    products = Path(json.loads(done.stdout)["products"])
    for name, columns in COLUMNS.items():
        assert tuple(pd.read_parquet(products / f"{name}.parquet").columns) == columns, name
    assert pd.read_parquet(products / "stage_daily.parquet").empty
    assert (products / "report.html").stat().st_size > 0
    said = " ".join(json.loads((products / "run.json").read_text())["notes"])
    for word in ("no logger", "no weather", "no elevation"):
        assert word in said


def test_catalog_with_no_scenes(again):
    """An empty collection is told, with what to do."""
    path = again / "inputs" / "scenes" / "collection.json"
    whole = json.loads(path.read_text())
    path.write_text(json.dumps({**whole, "links": [k for k in whole["links"] if k["rel"] != "item"]}))
    done = CliRunner().invoke(main, ["run", str(again / "inputs" / "pipeline.toml"), "--quiet"])
    assert done.exit_code == 2
    assert "collection.json" in done.stderr


def test_month_before_the_first_scene_and_bad_month(delivered):
    """A month that cannot be delivered is refused in words."""
    with pytest.raises(InputError, match="write a month as YYYY-MM"):
        run_month(delivered[1], month="33-1", progress=QUIET)
    with pytest.raises(InputError, match="before the first scene"):
        run_month(delivered[1], month="1999-01", progress=QUIET)


def test_check_tells_what_is_there_and_changes_nothing(delivered):
    """``inundate check`` lists inputs, ends with status 0 and writes nothing."""
    folder, file, _ = delivered
    before = {p: p.stat().st_mtime_ns for p in folder.rglob("*") if p.is_file()}
    done = CliRunner().invoke(main, ["check", str(file), "--quiet", "--why"])
    assert done.exit_code in (0, 1), done.stderr
    for word in ("wetlands", "scenes", "elevation", "labels", "loggers", "barometer", "weather"):
        assert word in done.stdout
    after = {p: p.stat().st_mtime_ns for p in folder.rglob("*") if p.is_file()}
    assert {k: v for k, v in after.items() if "ledger" not in k.name} == {
        k: v for k, v in before.items() if "ledger" not in k.name
    }
