"""Skill of observed extent: python -m tests.bench.extent_skill [STACK_FOLDER RESERVE_FOLDER ...].

Without arguments: the invented wetlands of extent_world, three seeds. With: fractions of the demo's scenes as the
pipeline's own parts made them (stack.npz: fields of SceneStack, rows, cols; grid.json) against the demo's truth. The
plain way, in the same run: class water where the fraction exceeds 0.5, area-weighted over the clear pixels.
"""

from __future__ import annotations

import json
import sys
import time
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import rasterio

from inundate.common.grid import Grid
from inundate.common.site import Site
from inundate.extent import ExtentObserver, SceneStack, elevation_cells, pixel_weights, weights_on_site
from inundate.extent.stack import as_fraction
from tests.bench.extent_world import World, make_world


def plain_way(stack: SceneStack, weights: pd.DataFrame) -> pd.DataFrame:
    """Area-weighted mean of class > 0.5 over clear pixels, as a share of the largest extent."""
    rows = []
    for name, group in weights.groupby("wetland_id"):
        pixel, share = group["pixel"].to_numpy(), group["share"].to_numpy()
        f, clear = as_fraction(stack.fraction[:, pixel]), stack.code[:, pixel] == 0
        w = share * clear
        with np.errstate(invalid="ignore"):
            value = ((f > 0.5) * w).sum(axis=1) / w.sum(axis=1)
        rows.append(pd.DataFrame({"wetland_id": name, "scene_id": stack.scene_id, "plain": value}))
    return pd.concat(rows, ignore_index=True)


def score(table: pd.DataFrame) -> dict[str, float]:
    """Scores of rows with area, sd, plain, true as shares of the largest extent."""
    if table.empty:
        return {"n": 0}
    d = table["area"] - table["true"]
    p = table["plain"] - table["true"]
    rmse, plain = float(np.sqrt((d**2).mean())), float(np.sqrt((p**2).mean()))
    return {
        "n": len(table),
        "rmse": rmse,
        "bias": float(d.mean()),
        "plain": plain,
        "lower": 1 - rmse / plain,
        "cover90": float((d.abs() <= 1.645 * table["sd"]).mean()),
        "sd": float(np.sqrt((table["sd"] ** 2).mean())),
    }


def report(observed: pd.DataFrame, truth: pd.DataFrame, plain: pd.DataFrame, largest: pd.Series) -> pd.DataFrame:
    """Scores by view and leaf state."""
    t = observed.merge(truth, on=["wetland_id", "scene_id"]).merge(plain, on=["wetland_id", "scene_id"])
    most = t["wetland_id"].map(largest)
    t = t.assign(area=t["area_m2"] / most, sd=t["area_sd_m2"] / most, true=t["true_m2"] / most, most=most)
    t = t[t["used"]]
    off, small = t["leaf_state"] == "leaf_off", t["most"] < 3000
    clear = t["clear_fraction"] >= 0.9
    rows = {"leaf-off clear": t[off & clear], "leaf-off clear, small": t[off & clear & small]}
    v = t["view_fraction"]
    rows["any state, view >= 0.9"] = t[v >= 0.9]
    for low, high in ((0.05, 0.3), (0.3, 0.5), (0.5, 0.7), (0.7, 0.9)):
        rows[f"view {low}-{high}"] = t[(v >= low) & (v < high)]
    rows["view 0.3-0.9"] = t[(v >= 0.3) & (v < 0.9)]
    rows["view 0.3-0.9 leaf-off"] = t[(v >= 0.3) & (v < 0.9) & off]
    rows["view 0.3-0.9 leaves"] = t[(v >= 0.3) & (v < 0.9) & ~off]
    return pd.DataFrame({k: score(x) for k, x in rows.items()}).T


def _observe(name: str, world: World, with_cells: bool) -> pd.DataFrame:
    """Fit, observe and score one world."""
    cells = elevation_cells(world.elevation, world.transform, world.wetlands, world.grid) if with_cells else None
    start = time.perf_counter()
    observer = ExtentObserver(world.weights, world.wetlands, world.grid.pixel_area_m2, cells=cells)
    observed = observer.fit(world.stack).observe(world.stack)
    print(f"{name}, elevation {with_cells}: {time.perf_counter() - start:.1f} s")
    n = observer.noise_
    shape = {k: round(v, 3) for k, v in n.shape_var.items()}
    print(
        f"  rho {n.rho:.3f} temper {n.temper:.2f} shape {shape} scale {np.round(n.scale, 2)} blur {n.blur:.2f} steep {n.steep:.2f} bend {n.bend:.2f}"
    )
    print(f"  shift {n.shift_px:.3f} drift sd {n.drift_var**0.5:.4f} steady sd {n.steady_var**0.5:.4f}")
    print("  noise (leaf-off, view >= 0.9):", np.round(n.table[8], 3), "near cloud", np.round(n.table[9], 3))
    print("  noise leaf-on by view:", np.round(n.table[[20, 22, 24, 26, 28]], 3).tolist())
    largest = world.wetlands.set_index("wetland_id")["area_max_m2"]
    return report(observed, world.truth, plain_way(world.stack, world.weights), largest)


def load_reserve(stack_folder: Path, reserve_folder: Path) -> World:
    """Real fractions of the demo: stack.npz and grid.json of the pipeline's own parts, truth of the demo."""
    held = np.load(stack_folder / "stack.npz")
    grid = Grid(**json.loads((stack_folder / "grid.json").read_text()))
    site = Site(grid, held["rows"], held["cols"], ())
    names = [n for n in SceneStack.__slots__ if n in held.files]
    stack = SceneStack(**{n: held[n] for n in names})
    wetlands = gpd.read_file(reserve_folder / "inputs" / "wetlands.gpkg").sort_values("wetland_id")
    wetlands["area_max_m2"] = wetlands.geometry.area
    weights = weights_on_site(pixel_weights(wetlands, grid), site)
    with rasterio.open(reserve_folder / "inputs" / "elevation.tif") as source:
        elevation = np.where(source.read(1) == source.nodata, np.nan, source.read(1))
        transform = source.transform
    daily = pd.read_parquet(reserve_folder / "truth" / "extent_daily.parquet")
    scenes = pd.DataFrame({"scene_id": stack.scene_id, "date": pd.to_datetime(stack.datetime).normalize()})
    daily["date"] = pd.to_datetime(daily["date"]).astype(scenes["date"].dtype)
    truth = scenes.merge(daily, on="date").rename(columns={"area_m2": "true_m2"})
    table = truth[["wetland_id", "scene_id", "true_m2"]]
    return World(grid, site, wetlands, weights, elevation, transform, stack, table)


def run_world(seed: int, with_cells: bool) -> pd.DataFrame:
    """One invented world."""
    return _observe(f"seed {seed}", make_world(seed), with_cells)


def main(arguments: list[str]) -> None:
    """Print scores."""
    pd.set_option("display.width", 160)
    if arguments:
        for stack, reserve in zip(arguments[::2], arguments[1::2], strict=True):
            world = load_reserve(Path(stack), Path(reserve))
            for with_cells in (True, False):
                print(_observe(stack, world, with_cells).round(4).to_string(), flush=True)
        return
    for seed in (1, 2, 3):
        for with_cells in (True, False):
            print(run_world(seed, with_cells).round(4).to_string(), flush=True)


if __name__ == "__main__":
    main(sys.argv[1:])
