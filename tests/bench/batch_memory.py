"""Peak memory of whole runs: a full tile of 10,980 x 10,980 px with 2,000 wetlands, and curves over scene size and archive.

Run: ``python -m tests.bench.batch_memory [--tile] [--sizes] [--lengths] [--scratch FOLDER] [--workers 2]`` (all three where none
is named). Memory is the resident memory of the run's process and of all its children together, looked at every 20 ms, so
that the processes of a pool count as well; the kernel's own high-water mark of the main process stands beside it.
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

import psutil

from tests.bench.batch_world import World, told

RUN = """
import json, sys
from pathlib import Path
from inundate.batch.run import run_month
from inundate.batch.progress import Progress
result = run_month(sys.argv[1], month=None, progress=Progress(quiet=True))
text = Path("/proc/self/status").read_text()
mark = int(next(line.split()[1] for line in text.splitlines() if line.startswith("VmHWM")))
print(json.dumps({"done": result["done"], "wetlands": result["wetlands"], "days": result["days"], "mark_mb": mark / 1024}))
"""
IMPORTS = """
from pathlib import Path
import inundate.batch.run, inundate.batch.reporting, inundate.pixels, inundate.extent, inundate.relation, inundate.series
import inundate.stage, inundate.scenes, inundate.leaves, inundate.skill, inundate.products.report, dask, lightgbm, geopandas
text = Path("/proc/self/status").read_text()
print(int(next(line.split()[1] for line in text.splitlines() if line.startswith("VmHWM"))) / 1024)
"""
LIMIT_MB = 1500


def resident(process: psutil.Process) -> int:
    """Resident bytes of a process and all its children."""
    total = 0
    try:
        for one in (process, *process.children(recursive=True)):
            try:
                total += one.memory_info().rss
            except psutil.Error:
                continue
    except psutil.Error:
        pass
    return total


def watch(pipeline: Path) -> dict:
    """Run a pipeline in a process of its own; return its account and the peak of the whole family, MB."""
    start = time.perf_counter()
    run = subprocess.Popen([sys.executable, "-c", RUN, str(pipeline)], stdout=subprocess.PIPE, text=True)
    family, peak, at = psutil.Process(run.pid), 0, 0.0
    while run.poll() is None:
        now = resident(family)
        if now > peak:
            peak, at = now, time.perf_counter() - start
        time.sleep(0.02)
    text = run.stdout.read()
    if run.returncode:
        message = f"the run ended with status {run.returncode}"
        raise RuntimeError(message)
    out = json.loads(text.splitlines()[-1])
    peak_mb = max(peak / 2**20, out["mark_mb"])
    return {**out, "peak_mb": peak_mb, "peak_at_s": at, "seconds": time.perf_counter() - start}


def base_mb() -> float:
    """Peak of a process that has only loaded the libraries, MB."""
    return float(subprocess.run([sys.executable, "-c", IMPORTS], capture_output=True, text=True, check=True).stdout)


def measure(scratch: Path, label: str, world: World) -> float:
    """Print one line of a curve; return the peak, MB."""
    out = watch(world.pipeline)
    steps = told(world.folder.parent)["steps"]
    slowest = ", ".join(f"{k} {v['seconds']:.0f}" for k, v in sorted(steps.items(), key=lambda i: -i[1]["seconds"])[:4])
    print(
        f"  {label:<34} {out['wetlands']:6d} wetlands {out['days']:5d} days  peak {out['peak_mb']:6.0f} MB"
        f" (main process {out['mark_mb']:.0f})  {out['seconds']:6.1f} s  [s: {slowest}]",
        flush=True,
    )
    return float(out["peak_mb"])


def main() -> None:
    """Measure what is asked for."""
    parser = argparse.ArgumentParser(description=__doc__)
    for name in ("tile", "sizes", "lengths"):
        parser.add_argument(f"--{name}", action="store_true")
    parser.add_argument("--scratch", type=Path)
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--scheduler", default="threads")
    parser.add_argument("--keep", action="store_true")
    asked = parser.parse_args()
    every = not (asked.tile or asked.sizes or asked.lengths)
    scratch = Path(tempfile.mkdtemp(dir=asked.scratch))
    settings = f'[classifier]\ntrees = 60\n[compute]\nworkers = {asked.workers}\nscheduler = "{asked.scheduler}"\n'
    peaks: dict[str, list[float]] = {}
    try:
        print(f"libraries alone: {base_mb():.0f} MB; [compute] workers = {asked.workers}, memory_mb = 1000")
        watch(_small(scratch / "warm", settings).pipeline)  # compiles what is compiled once a machine
        if asked.sizes or every:
            print("scene size (60 wetlands, 4 scenes)")
            for side in (1000, 3000, 10980):
                world = World(scratch / f"size{side}", side, 60, settings=settings)
                world.grow(4)
                peaks.setdefault("scene size", []).append(measure(scratch, f"{side:,} x {side:,} px", world))
                shutil.rmtree(scratch / f"size{side}")
        if asked.lengths or every:
            print("archive length (400 x 400 px, 100 wetlands)")
            for scenes in (5, 20, 60):
                world = World(scratch / f"length{scenes}", 400, 100, settings=settings)
                world.grow(scenes)
                peaks.setdefault("archive length", []).append(measure(scratch, f"{scenes} scenes", world))
        if asked.tile or every:
            print("full tile (4 scenes)")
            world = World(scratch / "tile", 10_980, 2000, settings=settings)
            world.grow(4)
            peak = measure(scratch, "10,980 x 10,980 px", world)
            print(f"  full tile under {LIMIT_MB} MB: {'yes' if peak < LIMIT_MB else 'NO'}")
        for name, values in peaks.items():
            print(f"{name}: largest / smallest peak = {max(values) / min(values):.2f}")
    finally:
        if not asked.keep:
            shutil.rmtree(scratch)


def _small(folder: Path, settings: str) -> World:
    world = World(folder, 300, 20, settings=settings)
    world.grow(6)
    return world


if __name__ == "__main__":
    main()
