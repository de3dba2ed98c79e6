"""Reading: cost of windows of reflectance against bare raster reads, memory against scene size, catalog and shift cost.

Run: ``OMP_NUM_THREADS=1 python -m tests.bench.reading [--tile]`` (``--tile`` writes and reads full 10,980 x 10,980 px bands: about
600 MB of scratch files).
"""

from __future__ import annotations

import argparse
import json
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import rasterio

from inundate.common.grid import Window
from inundate.common.site import make_site
from inundate.scenes import Reference, apply_shift, area_grid, load_profile, open_catalog, read_view
from inundate.scenes.scene import Scene

sys.path.insert(0, str(Path(__file__).parents[1]))
from scenes_files import NORTH, S2_BANDS, WEST, write_collection, write_item, write_tif
from scenes_world import World

PROFILE = load_profile("sentinel-2-l2a")


def cpu_ms(action: Callable[[], object], times: int = 10) -> float:
    """Processor time of one call, ms, after one to warm up; the least of three rounds."""
    action()
    rounds = []
    for _ in range(3):
        start = time.process_time()
        for _ in range(times):
            action()
        rounds.append((time.process_time() - start) / times * 1e3)
    return min(rounds)


def peak_kb() -> int:
    """Greatest resident memory of this process so far, kB (Linux)."""
    text = Path("/proc/self/status").read_text()
    return int(next(line.split()[1] for line in text.splitlines() if line.startswith("VmHWM")))


def make_files(folder: Path, size: int, seed: int = 0, block: int = 128) -> Scene:
    """Write a scene of natural roughness (deflate does not squeeze it to nothing)."""
    rng = np.random.default_rng(seed)
    assets = {}
    for key, step in {**S2_BANDS, "SCL": 20}.items():
        n = size * 10 // step
        if key == "SCL":
            data = np.full((n, n), 4, np.uint8)
        else:
            rough = rng.normal(0, 60, (min(n, 1024), min(n, 1024)))
            data = (2000 + np.tile(rough, (-(-n // 1024), -(-n // 1024)))[:n, :n]).astype(np.uint16)
        write_tif(folder / f"{key}.tif", data, step=float(step), nodata=0, blockxsize=block, blockysize=block)
        assets[key] = {"href": f"{key}.tif"}
    return open_catalog(write_item(folder / "s.json", "S", assets), PROFILE).scenes[0]


def scattered(scene: Scene, count: int, seed: int = 1) -> tuple[object, tuple[Window, ...], object]:
    """A site of scattered wetlands over a scene."""
    with rasterio.open(scene.bands["red"].href) as data:
        side = data.width * 10.0
    grid = area_grid([scene], PROFILE, "EPSG:32633", (WEST, NORTH - side, WEST + side, NORTH))
    rng = np.random.default_rng(seed)
    rows, cols = rng.integers(8, grid.height - 8, (2, count))
    site = make_site(grid, rows, cols, margin=6)
    return grid, site.windows, site


def reading(folder: Path) -> None:
    """Whole small area, and scattered windows, against bare reads of the same parts."""
    scene = make_files(folder / "small", 360)
    grid, windows, _ = scattered(scene, 40)
    whole = [Window(0, 360, 0, 360)]
    hrefs = [*(band.href for band in scene.bands.values()), scene.mask.href]

    def bare_whole() -> None:
        for href in hrefs:
            with rasterio.open(href) as data:
                data.read(1)

    def bare_windows() -> None:
        for href in hrefs:
            with rasterio.open(href) as data:
                k = 10.0 / data.transform.a
                for w in windows:
                    data.read(
                        1, window=((int(w.row0 * k), int(w.row1 * k) + 1), (int(w.col0 * k), int(w.col1 * k) + 1))
                    )

    def plain() -> np.ndarray:
        """The plain way: read whole, repeat 20 m pixels, scale in float64, mask."""
        out = []
        with rasterio.open(scene.mask.href) as data:
            good = np.isin(np.kron(data.read(1), np.ones((2, 2), np.uint8)), (2, 4, 5, 6, 7))
        for band in scene.bands.values():
            with rasterio.open(band.href) as data:
                raw = data.read(1)
                raw = np.kron(raw, np.ones((2, 2), raw.dtype)) if data.transform.a == 20 else raw
                out.append(np.where((raw != 0) & good, raw * band.scale + band.offset, np.nan))
        return np.stack(out)

    base = cpu_ms(bare_whole)
    for name, action in {
        "bare reads, whole files": bare_whole,
        "plain way, whole files": plain,
        "read_view, whole area": lambda: read_view(scene, PROFILE, grid, whole),
        f"bare reads, {len(windows)} windows": bare_windows,
        f"read_view, {len(windows)} windows": lambda: read_view(scene, PROFILE, grid, windows),
    }.items():
        one = cpu_ms(action)
        print(f"  {name:32s} {one:8.1f} ms  x{one / base:.2f} of bare whole reads")


def tile(folder: Path) -> None:
    """A full tile with 2,000 wetlands, and an eighth of it with 31: time and memory, each in a process of its own."""
    for size, count in ((1372, 31), (10980, 2000)):
        place = folder / f"tile{size}"
        make_files(place, size - size % 2, block=512)
        subprocess.run(
            [sys.executable, "-m", "tests.bench.reading", "--one", str(place), "--count", str(count)], check=True
        )


def one_tile(place: Path, count: int) -> None:
    """Read one tile; print time and peak memory."""
    scene = open_catalog(place / "s.json", PROFILE).scenes[0]
    grid, windows, site = scattered(scene, count)
    read_view(scene, PROFILE, grid, windows[:1])
    before = peak_kb()
    start = time.process_time()
    view = read_view(scene, PROFILE, grid, windows)
    spent = time.process_time() - start
    taken = np.full((len(view.bands), site.size), np.nan, np.float32)
    for number, block in enumerate(view.blocks):
        taken[:, site.place(number)] = site.pick(number, block.window, block.reflectance)
    after = peak_kb()
    held = sum(block.reflectance.nbytes + block.code.nbytes for block in view.blocks)
    print(f"  {grid.width} px wide, {len(windows)} windows, blocks hold {held / 1e6:.0f} MB: {spent:.2f} s", end="")
    print(f", peak rose {(after - before) / 1024:.0f} to {after / 1024:.0f} MB")
    start = time.process_time()
    for href in [*(band.href for band in scene.bands.values()), scene.mask.href]:
        with rasterio.open(href) as data:
            data.read(1)
    print(f"  bare whole reads of the same files: {time.process_time() - start:.2f} s")


def catalog(folder: Path) -> None:
    """A catalog of 3,000 items."""
    template = json.loads((folder / "small" / "s.json").read_text())
    for asset in template["assets"].values():
        asset["href"] = "../small/" + asset["href"]
    many = folder / "many"
    many.mkdir()
    links = []
    for k in range(3000):
        (many / f"{k}.json").write_text(json.dumps(template | {"id": f"S{k:04d}"}))
        links.append(("item", f"./{k}.json"))
    path = write_collection(many / "collection.json", links)
    print(f"  3,000 items: {cpu_ms(lambda: open_catalog(path, PROFILE), 1) / 1e3:.2f} s")


def shifts() -> None:
    """Building a reference and finding shifts."""
    world = World(1)
    rng = np.random.default_rng(0)
    moves = rng.uniform(-1, 1, (16, 2))
    views = [world.view(f"s{k:02d}", *moves[k], leafy=k % 2 == 1) for k in range(16)]
    groups = {view.scene_id: k % 2 for k, view in enumerate(views)}
    print(
        f"  reference of 16 views of 120 x 120 px: {cpu_ms(lambda: Reference.from_views(views, groups=groups), 1):.0f} ms"
    )
    reference = Reference.from_views(views, groups=groups)
    found = reference.shift(views[0])
    print(
        f"  shift {cpu_ms(lambda: reference.shift(views[0])):.1f} ms, gain {cpu_ms(lambda: reference.gain(views[0], found)):.1f} ms",
        end="",
    )
    print(f", resampling {cpu_ms(lambda: apply_shift(views[0], found)):.1f} ms")
    got = np.array([(s.dx_px, s.dy_px) for s in map(reference.shift, views)]) - moves
    print(f"  error of shifts against one another: {np.sqrt(np.mean((got - got.mean(axis=0)) ** 2)):.3f} px")


def main() -> None:
    """Run all."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--tile", action="store_true")
    parser.add_argument("--one", type=Path, help=argparse.SUPPRESS)
    parser.add_argument("--count", type=int, default=0, help=argparse.SUPPRESS)
    told = parser.parse_args()
    if told.one is not None:
        one_tile(told.one, told.count)
        return
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        print("reading (6 bands and mask)")
        reading(folder)
        print("catalog")
        catalog(folder)
        print("co-registration")
        shifts()
        if told.tile:
            print("full tile")
            tile(folder)


if __name__ == "__main__":
    main()
