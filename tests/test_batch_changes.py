"""What changes between two runs is found, named by ``check --why``, and redone; nothing else is."""

import io
import json
import shutil
import subprocess
import sys
import time
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import rasterio
from click.testing import CliRunner

import inundate.scenes
from inundate.batch import extents
from inundate.batch.progress import Progress
from inundate.batch.run import run_month
from inundate.cli import main
from tests.test_batch_faults import cut_inputs

pytestmark = pytest.mark.xdist_group("changes")
PROFILE = Path(inundate.scenes.__file__).parent / "profiles" / "sentinel-2-l2a.toml"


@pytest.fixture(scope="module")
def standing(small_reserve, tmp_path_factory):
    """A delivery of a part of the reserve, read with a sensor profile of the user's own."""
    folder = tmp_path_factory.mktemp("standing")
    file = cut_inputs(small_reserve, folder)
    shutil.copy2(PROFILE, folder / "inputs" / "own.toml")
    file.write_text(file.read_text().replace('sensor = "sentinel-2-l2a"', 'sensor = "own.toml"'))
    run_month(file, month=None, progress=Progress(quiet=True))
    return folder


@pytest.fixture
def again(standing, tmp_path):
    """A copy of it that a test may change."""
    shutil.copytree(standing, tmp_path / "again", copy_function=shutil.copy2)
    return tmp_path / "again"


def used_scenes(folder: Path) -> list[str]:
    return sorted(p.stem for p in (folder / "out" / "maps").glob("*.tif"))


def why(folder: Path) -> list[str]:
    """The lines of ``check --why``, wherever the folder is."""
    done = CliRunner().invoke(main, ["check", str(folder / "inputs" / "pipeline.toml"), "--quiet", "--why", "--json"])
    assert done.exit_code in (0, 1), done.stderr
    return [line.replace(str(folder / "inputs") + "/", "") for line in json.loads(done.stdout)["why"]]


def run(folder: Path) -> tuple[dict, dict]:
    """Result and account of a run."""
    progress = Progress(quiet=True)
    result = run_month(folder / "inputs" / "pipeline.toml", month=None, progress=progress)
    return result, progress.account


def table(folder: Path, name: str) -> pd.DataFrame:
    (month,) = (folder / "out" / "products").glob("????-??")
    return pd.read_parquet(month / f"{name}.parquet")


def rewrite(path: Path, change) -> None:
    """Change the values of a raster; its type is that of what ``change`` returns."""
    with rasterio.open(path) as data:
        values, profile = data.read(), data.profile
    values = change(values)
    path.unlink()
    with rasterio.open(path, "w", **{**profile, "dtype": values.dtype}) as out:
        out.write(values)


def test_nothing_changed_is_said_so(again):
    """The standing delivery, moved to another folder, needs nothing."""
    assert why(again) == ["nothing changed: a run would leave the delivery as it stands"]
    assert run(again)[0]["done"] == "nothing new"


def test_a_replaced_scene_of_a_newer_baseline_is_read_alone(again):
    """Numbers moved by the newer baseline's offset, told by the item: one scene is read, and its extents stay."""
    scene = used_scenes(again)[2]
    before = table(again, "extent_observed")
    place = again / "inputs" / "scenes" / scene
    item = json.loads((place / f"{scene}.json").read_text())
    item["properties"]["s2:processing_baseline"] = item["properties"]["processing:version"] = "05.00"
    (place / f"{scene}.json").write_text(json.dumps(item))
    for band in place.glob("B*.tif"):
        rewrite(band, lambda v: np.where(v == 0, 0, v + 1000).astype(v.dtype))
    assert why(again) == [f"scene {scene}: its files, scaling or mask rules changed, to be read again"]
    _, account = run(again)
    assert account["reading scenes"]["items"] == 1
    assert "co-registration reference" not in account
    now = table(again, "extent_observed")
    one, other = (t[t["scene_id"] == scene].reset_index(drop=True) for t in (before, now))
    assert (one["used"] == other["used"]).all()
    np.testing.assert_allclose(one["clear_fraction"], other["clear_fraction"], atol=1e-6)
    np.testing.assert_allclose(one["area_m2"], other["area_m2"], rtol=1e-6)


def test_a_corrected_logger_file_touches_no_scene(again):
    """A record whose bad month is struck out moves stage and series; no scene is read or mapped, no view observed again."""
    file = next((again / "inputs" / "readings").glob("L01.csv"))
    readings = pd.read_csv(file)
    month = readings["time"].str.startswith("2032-05")
    assert month.sum() > 300
    readings[~month].to_csv(file, index=False)
    observed = again / "out" / "archive" / "tables" / "extent_observed.parquet"
    stamp, before = observed.stat().st_mtime_ns, table(again, "stage_daily")
    assert why(again) == [
        "logger file readings/L01.csv: changed; the stage record is built again; relations and series are made again"
    ]
    _, account = run(again)
    assert account["reading scenes"]["items"] == account["mapping water"]["items"] == 0
    assert observed.stat().st_mtime_ns == stamp
    lost = before.merge(table(again, "stage_daily"), on=["wetland_id", "date"], how="left", suffixes=("_before", ""))
    lost = lost[lost["stage_m"].isna() & lost["stage_m_before"].notna()]
    assert lost["wetland_id"].nunique() == 1
    assert set(lost["date"].dt.strftime("%Y-%m")) == {"2032-05"}
    reasons = set(table(again, "changes")["why"])
    assert reasons
    assert not {r for r in reasons if "view" in r}


def test_a_changed_profile_reads_again_what_it_changes(again):
    """A remark changes nothing that is read; another mask rule changes every scene."""
    own, scenes = again / "inputs" / "own.toml", used_scenes(again)
    own.write_text(own.read_text() + "\n# a remark\n")
    named = "scenes.sensor: changed; scenes whose scaling or mask rules differ by it are read again, each named here"
    assert why(again) == [named]
    assert run(again)[1]["reading scenes"]["items"] == 0
    text = own.read_text()
    own.write_text(
        text.replace("values = [8, 9, 10]", "values = [7, 8, 9, 10]").replace("[2, 4, 5, 6, 7]", "[2, 4, 5, 6]")
    )
    told = why(again)
    line = "scene {}: its files, scaling or mask rules changed, to be read again"
    assert {line.format(s) for s in scenes} <= set(told)
    assert named in told
    assert any(t.startswith("co-registration reference: ") and "changed or are gone" in t for t in told)
    assert run(again)[1]["reading scenes"]["items"] >= len(scenes)


def test_a_changed_elevation_reads_and_trains_nothing(again):
    """Ground turned upside down moves extents and relations; views, maps and models stay."""
    models = {p: p.stat().st_mtime_ns for p in (again / "out" / "models").iterdir()}
    before = table(again, "extent_observed")
    rewrite(again / "inputs" / "elevation.tif", lambda v: np.where(v > -1000, 2 * v.mean() - v, v).astype(v.dtype))
    assert why(again) == [
        "area.elevation: changed; no scene is read or mapped again; observed extents, relations and series are made again"
    ]
    _, account = run(again)
    assert account["reading scenes"]["items"] == account["mapping water"]["items"] == 0
    assert {p: p.stat().st_mtime_ns for p in (again / "out" / "models").iterdir()} == models
    assert not before["area_m2"].equals(table(again, "extent_observed")["area_m2"])


def test_scenes_without_a_band_or_full_of_nan(again):
    """A band missing and a band of NaN set their scenes aside by name; one half of NaN is used where it has numbers."""
    before = table(again, "extent_observed")
    half = before.groupby("scene_id")["clear_fraction"].sum().idxmax()
    bare, blank = [s for s in used_scenes(again) if s != half][:2]
    scenes = again / "inputs" / "scenes"
    item = json.loads((scenes / bare / f"{bare}.json").read_text())
    del item["assets"]["B04"]
    (scenes / bare / f"{bare}.json").write_text(json.dumps(item))
    rewrite(scenes / blank / "B08.tif", lambda v: np.full(v.shape, np.nan, np.float32))

    middle = gpd.read_file(again / "inputs" / "wetlands.gpkg").geometry.centroid.x.median()
    with rasterio.open(scenes / half / "B08.tif") as data:
        column = data.index(middle, data.bounds.top)[1]

    def without_west(values: np.ndarray) -> np.ndarray:
        out = values.astype(np.float32)
        out[..., :column] = np.nan
        return out

    rewrite(scenes / half / "B08.tif", without_west)
    done = CliRunner().invoke(main, ["run", str(again / "inputs" / "pipeline.toml"), "--quiet", "--json"])
    assert done.exit_code == 1, done.stderr
    refused = {r["name"]: r["reason"] for r in json.loads(done.stdout)["refused"] if r["kind"] == "scene"}
    assert set(refused) >= {bare, blank}
    assert "no asset for band red" in refused[bare]
    assert "holds fill or no number where the mask sees ground" in refused[blank]
    now = table(again, "extent_observed")
    assert not {bare, blank} & set(now["scene_id"])
    one, other = (t[t["scene_id"] == half].set_index("wetland_id")["clear_fraction"] for t in (before, now))
    assert (other <= one + 1e-6).all()
    assert 0 < other.sum() < one.sum()
    assert not now["area_m2"][now["used"]].isna().any()


@pytest.fixture
def server(standing):
    """The inputs behind a web server whose first answers for some files are errors; yields (address, lines it printed)."""
    scene = used_scenes(standing)[0]
    faulty = ["collection.json", f"{scene}.json", f"{scene}/B02.tif", f"{scene}/SCL.tif"]
    line = [sys.executable, str(Path(__file__).parent / "faulty_server.py"), str(standing / "inputs"), "1", *faulty]
    process = subprocess.Popen(line, stdout=subprocess.PIPE, text=True)
    try:
        yield f"http://127.0.0.1:{process.stdout.readline().strip()}", process
    finally:
        process.kill()
        process.wait()
        process.stdout.close()


def test_a_catalog_on_the_web_that_fails_at_first(standing, server, tmp_path):
    """A whole run over http, with errors at first for four files: retried, none refused, the same tables as from disk."""
    address, process = server
    shutil.copytree(standing / "inputs", tmp_path / "inputs", ignore=shutil.ignore_patterns("*.tif", "scenes"))
    shutil.copy2(standing / "inputs" / "elevation.tif", tmp_path / "inputs")
    file = tmp_path / "inputs" / "pipeline.toml"
    file.write_text(file.read_text().replace('"scenes/collection.json"', f'"{address}/scenes/collection.json"'))
    result, account = run(tmp_path)
    process.kill()
    answers = [line.split() for line in process.communicate()[0].splitlines()]
    assert sum(status == "503" for status, _ in answers) == 4
    assert not [r for r in result["refused"] if r["kind"] == "scene"]
    assert account["reading scenes"]["bytes"] > 0
    for name in ("extent_daily", "extent_observed", "relation_table", "stage_daily"):
        pd.testing.assert_frame_equal(table(tmp_path, name), table(standing, name), check_exact=True)


def test_groups_of_wetlands_leave_no_trace(again, monkeypatch):
    """Observed one wetland at a time, as with little memory, extents are the same to the last bit."""
    want = table(again, "extent_observed")
    (again / "out" / "archive" / "tables" / "extent_observed.parquet").unlink()
    shutil.rmtree(again / "out" / "products")
    monkeypatch.setattr(extents, "STACK_SHARE", 1e-9)
    monkeypatch.setattr(extents, "holds_all", lambda *_: False)
    groups, sizes = extents.wetland_groups, []
    spy = lambda *a: sizes.extend(g.rows.size for g in groups(*a)) or groups(*a)  # noqa: E731
    monkeypatch.setattr(extents, "wetland_groups", spy)
    run(again)
    assert sizes == [1] * want["wetland_id"].nunique()
    pd.testing.assert_frame_equal(table(again, "extent_observed"), want, check_exact=True)


def test_account_of_steps(standing):
    """run.json tells seconds, items and bytes of every step."""
    (file,) = (standing / "out" / "products").glob("????-??/run.json")
    steps = json.loads(file.read_text())["steps"]
    assert {"layout", "stage record", "leaf states", "classifier", "observed extent", "products", "report"} < set(steps)
    for name, step in steps.items():
        assert step["seconds"] > 0, name
        assert step["bytes"] > 0 or name in ("stage-area relations", "filling the series"), name
    assert steps["reading scenes"]["items"] == len(used_scenes(standing))


def test_progress_tells_the_time_left(monkeypatch):
    """Off a terminal a long step says, every few seconds, how much is done and about how long the rest takes."""
    clock, stream = [0.0], io.StringIO()
    monkeypatch.setattr(time, "perf_counter", lambda: clock[0])
    with Progress(stream).step("mapping water", 40) as advance:
        for _ in range(10):
            clock[0] += 2.0
            advance()
    lines = stream.getvalue().splitlines()
    assert lines[0] == "mapping water: 3 of 40, about 74 s left"
    assert lines[-1] == "mapping water: 20.0 s, 10 items"
