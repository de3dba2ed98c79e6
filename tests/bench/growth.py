"""How the batch grows: whole runs and monthly re-runs over wetlands, scenes and workers.

Run: ``python -m tests.bench.growth [--quick] [--long] [--case W S K] [--scheduler NAME] [--scratch FOLDER]``. Prints, for each archive, seconds of the first whole run, of a
re-run with one new scene and of one with nothing new, peak memory, bytes of the archive and products, and seconds by step.
Pixel sizes are scaled down: scenes are just large enough to hold their wetlands. Every run is a process of its own; seconds
are of its work, without loading the libraries. A run before the first compiles what is compiled once a machine.
"""

from __future__ import annotations

import argparse
import json
import shutil
import subprocess
import sys
import tempfile
from pathlib import Path

import pandas as pd

from tests.bench.batch_world import World, told

RUN = """
import json, sys, time
from pathlib import Path
from inundate.batch import run as batch
from inundate.batch.progress import Progress
import inundate.batch.reporting, inundate.pixels, inundate.extent, inundate.relation, inundate.series
import inundate.stage, inundate.scenes, inundate.leaves, inundate.skill, dask
start, used = time.perf_counter(), time.process_time()
result = batch.run_month(sys.argv[1], month=None, progress=Progress(quiet=True))
text = Path("/proc/self/status").read_text()
mark = int(next(line.split()[1] for line in text.splitlines() if line.startswith("VmHWM")))
spent = {"seconds": time.perf_counter() - start, "cpu": time.process_time() - used, "peak_mb": mark / 1024}
print(json.dumps({**spent, "done": result["done"], "days": result["days"]}))
"""
PARTS = {
    "read": ("co-registration reference", "reading scenes"),
    "leaves": ("leaf states",),
    "map": ("classifier", "mapping water"),
    "extent": ("observed extent",),
    "relation": ("stage-area relations",),
    "series": ("filling the series",),
    "write": ("products", "archive tables"),
    "report": ("skill", "report"),
}
CASES = ((10, 30), (100, 30), (1000, 30), (10, 300), (100, 300))


def run(world: World) -> dict:
    """Run a world's pipeline in a process of its own."""
    line = [sys.executable, "-c", RUN, str(world.pipeline)]
    done = subprocess.run(line, capture_output=True, text=True, check=False)
    if done.returncode:
        raise RuntimeError(done.stderr[-2000:])
    out = json.loads(done.stdout.splitlines()[-1])
    steps = told(world.folder.parent)["steps"]
    out["parts"] = {p: sum(steps.get(s, {"seconds": 0.0})["seconds"] for s in names) for p, names in PARTS.items()}
    return out


def size_mb(folder: Path) -> float:
    """Bytes of all files below a folder, MB."""
    return sum(p.stat().st_size for p in folder.rglob("*") if p.is_file()) / 1e6


def row_bytes(out: Path, wetlands: int, scenes: int) -> str:
    """Bytes of a row, in memory and in its file, of the tables that hold the whole area; bytes of a wetland in a scene."""
    (product,) = (out / "products").glob("????-??")
    words = []
    for file in (
        *(product / f"{name}.parquet" for name in ("extent_daily", "extent_observed", "relation_table")),
        out / "archive" / "tables" / "greenness.parquet",
    ):
        table = pd.read_parquet(file)
        held, kept = table.memory_usage(deep=True, index=False).sum(), file.stat().st_size
        words.append(f"{file.stem} {held / len(table):.0f} / {kept / len(table):.0f} B a row")
    pixels = size_mb(out / "archive" / "views") + size_mb(out / "archive" / "scores")
    return ", ".join(words) + f"; views and scores {1e3 * pixels / wetlands / scenes:.2f} kB a wetland and scene"


def settings(workers: int, scheduler: str = "threads") -> str:
    return f'[classifier]\ntrees = 60\n[compute]\nworkers = {workers}\nscheduler = "{scheduler}"\n'


def one_case(scratch: Path, case: tuple[int, int, int], scheduler: str, *, again: bool = True) -> None:
    """Measure one archive: first run, one new scene, nothing new; print its line."""
    wetlands, scenes, workers = case
    side = max(int(-(-(wetlands**0.5) * 24 // 8) * 8), 160)
    folder = scratch / f"{wetlands}x{scenes}x{workers}"
    world = World(folder, side, wetlands, step_days=10, loggers=min(4, wetlands), settings=settings(workers, scheduler))
    world.grow(scenes - 1)
    first, out = run(world), folder / "out"
    parts = "".join(f"{first['parts'][p]:9.1f}" for p in PARTS)
    head = f"{wetlands:9d}{scenes:8d}{workers:9d}"
    print(
        f"{head}  first     {first['seconds']:8.1f}{first['cpu']:8.1f}{first['peak_mb']:8.0f}"
        f"{size_mb(out / 'archive'):9.1f}{size_mb(out / 'products'):9.1f}{parts}",
        flush=True,
    )
    print(f"{'':28}  in memory / on disk: {row_bytes(out, wetlands, scenes - 1)}", flush=True)
    if again:
        world.grow(scenes)
        more = run(world)
        parts = "".join(f"{more['parts'][p]:9.1f}" for p in PARTS)
        print(
            f"{head}  one more  {more['seconds']:8.1f}{more['cpu']:8.1f}{more['peak_mb']:8.0f}{'':18}{parts}",
            flush=True,
        )
        none = run(world)
        print(f"{head}  nothing   {none['seconds']:8.2f}{none['cpu']:8.2f}{none['peak_mb']:8.0f}", flush=True)
    shutil.rmtree(folder)


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--quick", action="store_true", help="10 and 100 wetlands, 30 scenes only")
    parser.add_argument("--long", action="store_true", help="also 1,000 wetlands x 300 scenes, two workers, first run")
    parser.add_argument("--case", type=int, nargs=3, metavar=("WETLANDS", "SCENES", "WORKERS"), help="one case only")
    parser.add_argument("--scheduler", default="threads")
    parser.add_argument("--scratch", type=Path)
    asked = parser.parse_args()
    scratch = Path(tempfile.mkdtemp(dir=asked.scratch))
    try:
        warm = World(scratch / "warm", 160, 10, settings=settings(2))
        warm.grow(12)
        run(warm)
        names = "".join(f"{p:>9}" for p in PARTS)
        print(
            f"{'wetlands':>9}{'scenes':>8}{'workers':>9}  {'run':<10}{'s':>8}{'cpu s':>8}{'peakMB':>8}{'archMB':>9}{'prodMB':>9}{names}"
        )
        cases = [(w, s, k) for w, s in (CASES[:2] if asked.quick else CASES) for k in (1, 2)]
        for case in [tuple(asked.case)] if asked.case else cases:
            one_case(scratch, case, asked.scheduler)
        if asked.long:
            one_case(scratch, (1000, 300, 2), asked.scheduler, again=False)
    finally:
        shutil.rmtree(scratch)


if __name__ == "__main__":
    main()
