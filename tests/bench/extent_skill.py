"""Skill of observed extent: python -m tests.bench.extent_skill [world|FOLDER ...].

``world`` uses the invented wetlands of extent_world (three seeds); a FOLDER holds a real stack written by the pipeline's
parts (stack.npz, weights.parquet, wetlands.parquet, cells.parquet, truth.parquet). The plain way, in the same run: class
water where the fraction exceeds 0.5, area-weighted over the clear pixels, scaled to the wetland.
"""

from __future__ import annotations

import sys
import time
from dataclasses import replace

import numpy as np
import pandas as pd

from inundate.extent import ExtentObserver, SceneStack, elevation_cells
from inundate.extent.stack import as_fraction
from tests.bench.extent_world import make_world


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


def run_world(seed: int, with_cells: bool) -> pd.DataFrame:
    """One invented world."""
    world = make_world(seed)
    cells = elevation_cells(world.elevation, world.transform, world.wetlands, world.grid) if with_cells else None
    start = time.perf_counter()
    observer = ExtentObserver(world.weights, world.wetlands, world.grid.pixel_area_m2, cells=cells).fit(world.stack)
    observed = observer.observe(world.stack)
    print(f"seed {seed} cells {with_cells}: {time.perf_counter() - start:.1f} s")
    n = observer.noise_
    print(
        "  rho",
        round(n.rho, 3),
        "temper",
        round(n.temper, 2),
        "shape",
        {k: round(v, 3) for k, v in n.shape_var.items()},
        "scale",
        np.round(n.scale, 2),
        "blur",
        round(n.blur, 3),
        "shift",
        round(n.shift_px, 3),
        "drift sd",
        round(n.drift_var**0.5, 4),
    )
    print("  noise (leaf-off, view >= 0.9):", np.round(n.table[8], 3), "near cloud", np.round(n.table[9], 3))
    print("  noise leaf-on by view:", np.round(n.table[[20, 22, 24, 26, 28]], 3).tolist())
    largest = world.wetlands.set_index("wetland_id")["area_max_m2"]
    return report(observed, world.truth, plain_way(world.stack, world.weights), largest)


def main() -> None:
    """Print scores."""
    pd.set_option("display.width", 160)
    for seed in (1, 2, 3):
        for with_cells in (True, False):
            print(run_world(seed, with_cells).round(4).to_string())


if __name__ == "__main__":
    main()
