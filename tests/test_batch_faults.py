"""Faults: killed at any moment, two runs at once, a full disk; the archive stays sound and the next run finishes."""

import hashlib
import json
import os
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner

from inundate.batch.ledger import hold
from inundate.batch.progress import Progress
from inundate.batch.run import run_month
from inundate.cli import main

pytestmark = pytest.mark.xdist_group("faults")
KILLS = 30
LOOP = """
import signal, sys, time
from inundate.batch import run as batch
from inundate.batch.progress import Progress
import inundate.pixels, inundate.extent, inundate.relation, inundate.series, inundate.stage, inundate.scenes, inundate.leaves
print("ready", flush=True)
sys.stdin.readline()
batch.run_month(sys.argv[1], month=None, progress=Progress(quiet=True))
print("done", flush=True)
"""


def cut_inputs(reserve: Path, folder: Path, scenes: int = 10, wetlands: int = 4) -> Path:
    """Copy a part of a reserve's inputs: few scenes and wetlands, quick settings; return the pipeline file."""
    shutil.copytree(reserve / "inputs", folder / "inputs")
    layer_file = folder / "inputs" / "wetlands.gpkg"
    layer = gpd.read_file(layer_file)
    logged = {line.split(",")[1] for line in (folder / "inputs" / "loggers.csv").read_text().splitlines()[1:]}
    order = sorted(layer["wetland_id"], key=lambda w: (w not in logged, w))
    layer_file.unlink()
    layer[layer["wetland_id"].isin(order[: max(wetlands, len(logged))])].to_file(layer_file, driver="GPKG")
    path = folder / "inputs" / "scenes" / "collection.json"
    whole = json.loads(path.read_text())
    items = sorted((k for k in whole["links"] if k["rel"] == "item"), key=lambda k: k["href"])
    rest = [k for k in whole["links"] if k["rel"] != "item"]
    path.write_text(json.dumps({**whole, "links": rest + items[:: max(len(items) // scenes, 1)]}))
    file = folder / "inputs" / "pipeline.toml"
    text = file.read_text()
    file.write_text(text + '\n[classifier]\ntrees = 15\nstarter_examples = "never"\n[compute]\nworkers = 1\n')
    return file


def digests(folder: Path) -> dict[str, str]:
    """Hash every file but run.json."""
    return {
        str(p.relative_to(folder)): hashlib.sha256(p.read_bytes()).hexdigest()
        for p in sorted(folder.rglob("*"))
        if p.is_file() and p.name != "run.json"
    }


@pytest.fixture(scope="module")
def whole(small_reserve, tmp_path_factory):
    """An undisturbed delivery of the part, and how long it takes once all is loaded."""
    folder = tmp_path_factory.mktemp("whole")
    file = cut_inputs(small_reserve, folder)
    run_month(file, month=None, progress=Progress(quiet=True))
    shutil.rmtree(folder / "out")
    start = time.perf_counter()
    result = run_month(file, month=None, progress=Progress(quiet=True))
    return folder, file, Path(result["products"]), time.perf_counter() - start


def start_run(file: Path) -> subprocess.Popen:
    """Start a process that has loaded everything and waits for a line to run."""
    run = subprocess.Popen(
        [sys.executable, "-c", LOOP, str(file)], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    )
    assert run.stdout.readline() == "ready\n"
    return run


def test_killed_at_thirty_moments_then_resumed(whole, tmp_path):
    """Kill -9 at 30 moments spread over a run, resuming each time from where the last kill left it or from nothing.

    Products, maps and models of the finished run equal an undisturbed one's to the byte, and no scratch file is left.
    """
    folder, _, products, seconds = whole
    shutil.copytree(folder / "inputs", tmp_path / "inputs")
    file = tmp_path / "inputs" / "pipeline.toml"
    rng = np.random.default_rng(5)
    moments = np.sort(rng.uniform(0.0, 1.0, KILLS)) * seconds
    killed = 0
    for number, moment in enumerate(moments):
        if number % 6 == 0:
            shutil.rmtree(tmp_path / "out", ignore_errors=True)
        run = start_run(file)
        run.stdin.write("\n")
        run.stdin.flush()
        time.sleep(float(moment))
        alive = run.poll() is None
        run.send_signal(signal.SIGKILL)
        run.communicate()
        killed += alive
    assert killed >= KILLS // 2
    result = run_month(file, month=None, progress=Progress(quiet=True))
    assert digests(Path(result["products"])) == digests(products)
    for part in ("maps", "models"):
        assert digests(tmp_path / "out" / part) == digests(folder / "out" / part)
    left = [p for p in (tmp_path / "out").rglob(".*") if p.name != ".probe"]
    assert not left


def test_killed_while_a_standing_delivery_is_replaced(whole, tmp_path):
    """Kill -9 at moments of a run that adds a scene: what stands under the month's name is the old delivery or the new.

    Each time every byte of one of the two is there, and the last run's delivery equals that of an undisturbed one.
    """
    folder, _, _, _ = whole
    for name in ("calm", "killed"):
        shutil.copytree(folder, tmp_path / name, copy_function=shutil.copy2)
        path = tmp_path / name / "inputs" / "scenes" / "collection.json"
        told = json.loads(path.read_text())
        have = {link["href"] for link in told["links"]}
        fresh = sorted(f"./{p.parent.name}/{p.name}" for p in path.parent.glob("*/*.json"))
        more = next(h for h in fresh if h not in have)
        path.write_text(json.dumps({**told, "links": [*told["links"], {"rel": "item", "href": more}]}))
    start = time.perf_counter()
    calm = run_month(tmp_path / "calm" / "inputs" / "pipeline.toml", month=None, progress=Progress(quiet=True))
    seconds = time.perf_counter() - start
    old, new = digests(folder / "out" / "products"), digests(tmp_path / "calm" / "out" / "products")
    assert old.keys() == new.keys()
    assert old != new
    file = tmp_path / "killed" / "inputs" / "pipeline.toml"
    stood = []
    for moment in np.linspace(0.15, 0.97, 5) * seconds:
        run = start_run(file)
        run.stdin.write("\n")
        run.stdin.flush()
        time.sleep(float(moment))
        run.send_signal(signal.SIGKILL)
        run.communicate()
        names = sorted(p for p in (tmp_path / "killed" / "out" / "products").iterdir() if not p.name.startswith("."))
        here = {f"{n.name}/{k}": v for n in names for k, v in digests(n).items()}
        assert here in (old, new)
        stood.append(here == old)
    assert stood[0]
    last = run_month(file, month=None, progress=Progress(quiet=True))
    assert digests(Path(last["products"]).parent) == new
    assert last["month"] == calm["month"]


def test_second_run_names_the_first(whole):
    """While one run holds the archive a second ends with status 2 and says who holds it."""
    folder, file, _, _ = whole
    with hold(folder / "out" / "archive"):
        done = CliRunner().invoke(main, ["run", str(file), "--quiet"])
    assert done.exit_code == 2
    assert f"held by another run (process {os.getpid()} on " in done.stderr


def test_lock_text_of_a_dead_run_is_no_lock(whole):
    """The file that a dead run left does not hold the archive."""
    folder, file, _, _ = whole
    (folder / "out" / "archive" / "running.lock").write_text("process 1 on elsewhere since 2001-01-01T00:00:00+00:00\n")
    assert run_month(file, month=None, progress=Progress(quiet=True))["done"] == "nothing new"


@pytest.mark.parametrize("kind", ["other zone", "all fill", "not a raster"])
def test_bad_scene_is_set_aside_and_tried_again_when_its_file_changes(whole, tmp_path, kind):
    """The rest is delivered, the scene named; mended, it is read again, and nothing else is."""
    import rasterio

    folder, _, products, _ = whole
    shutil.copytree(folder, tmp_path / "again")
    file = tmp_path / "again" / "inputs" / "pipeline.toml"
    used = sorted(p.stem for p in (tmp_path / "again" / "out" / "maps").glob("*.tif"))[3]
    band = tmp_path / "again" / "inputs" / "scenes" / used / "B08.tif"
    good = band.read_bytes()
    with rasterio.open(band) as data:
        values, profile = data.read(), data.profile
    if kind == "not a raster":
        band.write_bytes(b"x" * 500)
    else:
        band.unlink()
        if kind == "other zone":
            profile["crs"] = "EPSG:32634"
        else:
            values = np.zeros_like(values)
        with rasterio.open(band, "w", **profile) as out:
            out.write(values)
    done = CliRunner().invoke(main, ["run", str(file), "--quiet", "--json"])
    assert done.exit_code == 1, done.output
    assert f"refused scene {used}: " in done.stderr
    band.write_bytes(good)
    progress = Progress(quiet=True)
    result = run_month(file, month=None, progress=progress)
    assert progress.account["reading scenes"]["items"] == 1
    assert not [r for r in result["refused"] if r["kind"] == "scene"]
    views = [pd.read_parquet(p / "extent_observed.parquet") for p in (Path(result["products"]), products)]
    assert set(views[0]["scene_id"]) == set(views[1]["scene_id"])


@contextmanager
def own_file_system(disk: Path, *options: str) -> Iterator[None]:
    """Mount a small file system in memory; skips the test where this may not be done."""
    if os.geteuid() != 0:
        pytest.skip("mounting a small file system needs root")
    disk.mkdir()
    if subprocess.run(
        ["mount", "-t", "tmpfs", *options, "tmpfs", str(disk)], capture_output=True, check=False
    ).returncode:
        pytest.skip("this machine does not let a test mount a file system")
    try:
        yield
    finally:
        subprocess.run(["umount", "-l", str(disk)], check=False)


def test_full_disk_is_told_and_costs_nothing(whole, tmp_path):
    """On a small file system that fills: one sentence, status 2, the old delivery whole; with room again it goes on."""
    folder, _, products, _ = whole
    disk = tmp_path / "disk"
    with own_file_system(disk, "-o", "size=700k"):
        shutil.copytree(folder / "inputs", tmp_path / "inputs")
        file = tmp_path / "inputs" / "pipeline.toml"
        file.write_text(file.read_text().replace('folder = "../out"', f'folder = "{disk}/out"'))
        done = CliRunner().invoke(main, ["run", str(file), "--quiet"])
        assert done.exit_code == 2, done.stderr
        assert "no space left" in done.stderr
        assert "Traceback" not in done.stderr
        subprocess.run(["mount", "-o", "remount,size=200m", str(disk)], check=True)
        result = run_month(file, month=None, progress=Progress(quiet=True))
        name = "extent_daily.parquet"
        assert digests(Path(result["products"]))[name] == digests(products)[name]


def test_output_that_cannot_be_written(whole, tmp_path):
    """An output folder under a file cannot be made: one sentence with the key, status 2."""
    folder, _, _, _ = whole
    shutil.copytree(folder / "inputs", tmp_path / "inputs")
    (tmp_path / "blocked").write_text("a file where a folder should be")
    file = tmp_path / "inputs" / "pipeline.toml"
    file.write_text(file.read_text().replace('folder = "../out"', 'folder = "../blocked/out"'))
    done = CliRunner().invoke(main, ["run", str(file), "--quiet"])
    assert done.exit_code == 2
    assert "key 'output.folder' is" in done.stderr


def test_output_on_a_read_only_file_system(whole, tmp_path):
    """Nothing can be written where a delivery stands: one sentence with the key, status 2, every byte as it was."""
    folder, _, _, _ = whole
    disk = tmp_path / "disk"
    with own_file_system(disk):
        shutil.copytree(folder / "out", disk / "out", copy_function=shutil.copy2)
        shutil.copytree(folder / "inputs", tmp_path / "inputs")
        file = tmp_path / "inputs" / "pipeline.toml"
        file.write_text(file.read_text().replace('folder = "../out"', f'folder = "{disk}/out"'))
        before = digests(disk / "out")
        if subprocess.run(["mount", "-o", "remount,ro", str(disk)], capture_output=True, check=False).returncode:
            pytest.skip("this machine does not let a test mount a file system read-only")
        done = CliRunner().invoke(main, ["run", str(file), "--quiet"])
        assert done.exit_code == 2, done.stderr
        assert "key 'output.folder' is" in done.stderr
        assert "Read-only file system" in done.stderr
        assert digests(disk / "out") == before
