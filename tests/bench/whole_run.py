"""Whole run, mapping, one new scene and nothing new, against the plain way in the same run.

Run: ``python -m tests.bench.whole_run DEMO_FOLDER [--threads 2]`` with a folder that ``inundate demo`` made (its inputs are
read, its output is left alone). Prints seconds, ratios and peak memory.
"""

from __future__ import annotations

import argparse
import json
import shutil
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from tests.bench.plain_way import map_plainly

RUN = """
import json, sys, time, resource
from inundate.batch.run import run_month
from inundate.batch.progress import Progress
start = time.perf_counter()
progress = Progress(quiet=True)
result = run_month(sys.argv[1], month=None, progress=progress)
peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
print(json.dumps({"seconds": time.perf_counter() - start, "peak_mb": peak, "steps": progress.account, "done": result["done"]}))
"""


def run(pipeline: Path) -> dict:
    """Run the pipeline in a process of its own and return seconds, peak memory and the account of steps."""
    done = subprocess.run([sys.executable, "-c", RUN, str(pipeline)], capture_output=True, text=True, check=True)
    return json.loads(done.stdout.splitlines()[-1])


def copy_inputs(demo: Path, folder: Path, threads: int) -> Path:
    """Copy the demo's small inputs and link its scenes; return the pipeline file."""
    folder.mkdir(parents=True)
    for item in (demo / "inputs").iterdir():
        if item.name == "scenes":
            shutil.copytree(item, folder / "scenes", copy_function=lambda a, b: Path(b).symlink_to(Path(a).resolve()))
            collection = folder / "scenes" / "collection.json"
            text = collection.read_text()
            collection.unlink()
            collection.write_text(text)
        elif item.is_dir():
            shutil.copytree(item, folder / item.name)
        else:
            shutil.copy2(item, folder / item.name)
    file = folder / "pipeline.toml"
    text = file.read_text().replace('folder = "../out"', 'folder = "out"')
    file.write_text(text + f"\n[compute]\nworkers = {threads}\n")
    return file


def hold_back_last(folder: Path) -> dict:
    """Take the last item out of the collection; return the whole collection."""
    path = folder / "scenes" / "collection.json"
    whole = json.loads(path.read_text())
    items = [k for k in whole["links"] if k["rel"] == "item"]
    last = sorted(items, key=lambda k: k["href"])[-1]
    path.write_text(json.dumps({**whole, "links": [k for k in whole["links"] if k is not last]}))
    return whole


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("demo", type=Path)
    parser.add_argument("--threads", type=int, default=2)
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as scratch:
        folder = Path(scratch) / "inputs"
        pipeline = copy_inputs(options.demo, folder, options.threads)
        run(pipeline)  # compiles what is compiled once a machine; its output is thrown away
        shutil.rmtree(folder / "out")
        whole = hold_back_last(folder)
        first = run(pipeline)
        (folder / "scenes" / "collection.json").write_text(json.dumps(whole))
        second = run(pipeline)
        third = run(pipeline)
        models = folder / "out" / "models"
        start = time.perf_counter()
        map_plainly(pipeline, models, Path(scratch) / "plain", options.threads)
        plain = time.perf_counter() - start
    mapping = ("co-registration reference", "reading scenes", "mapping water")
    ours = sum(first["steps"].get(k, {"seconds": 0})["seconds"] for k in mapping)
    new = sum(second["steps"].get(k, {"seconds": 0})["seconds"] for k in mapping)
    print(f"plain way: {plain:.1f} s to map the archive ({options.threads} threads)")
    for name, entry in first["steps"].items():
        print(f"  {name:<28}{entry['seconds']:8.2f} s  {entry['items']:6d} items")
    print(
        f"whole run: {first['seconds']:.1f} s, peak {first['peak_mb']:.0f} MB; plain mapping / whole run = {plain / first['seconds']:.1f}"
    )
    print(f"mapping alone: {ours:.2f} s; plain / ours = {plain / ours:.1f}")
    print(
        f"one new scene: mapping {new:.2f} s = 1/{ours / max(new, 1e-9):.0f} of the full mapping; whole run {second['seconds']:.1f} s"
    )
    print(f"nothing new: {third['seconds']:.2f} s after start-up ({third['done']})")


if __name__ == "__main__":
    main()
