"""A demo's delivery against its known truth, beside plain ways: ``python -m tests.bench.demo_skill DEMO [DEMO ...]``.

DEMO is a folder of ``inundate demo`` (inputs, truth, out). Observed extents are held beside the plain way on the delivered maps
(class above 50 %, share-weighted over clear pixels); the daily series beside linear interpolation of leaf-off views and the mean
by day of year. Errors are shares of each wetland's largest extent. Truth only scores.
"""

from __future__ import annotations

import sys
from dataclasses import dataclass
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import rasterio

from inundate.common.grid import Grid
from inundate.extent import pixel_weights

STATES = ("leaf_off", "green_up", "leaf_on", "leaf_fall")


@dataclass(frozen=True)
class Demo:
    """Tables of one demo; ``largest`` by wetland_id."""

    products: Path
    shapes: gpd.GeoDataFrame
    largest: pd.Series
    extent: pd.DataFrame  # wetland_id, date, true
    stage: pd.DataFrame  # wetland_id, date, true_stage_m


def load(folder: Path) -> Demo:
    shapes = gpd.read_file(folder / "inputs" / "wetlands.gpkg").sort_values("wetland_id", ignore_index=True)
    largest = pd.Series(shapes.geometry.area.to_numpy(), index=shapes["wetland_id"])
    tables = []
    for name, column, known in (("extent", "area_m2", "true"), ("stage", "stage_m", "true_stage_m")):
        table = pd.read_parquet(folder / "truth" / f"{name}_daily.parquet").rename(columns={column: known})
        tables.append(table.assign(date=pd.to_datetime(table["date"]).astype("datetime64[ns]")))
    tables[0]["true"] = tables[0]["true"] / tables[0]["wetland_id"].map(largest)
    return Demo(sorted((folder / "out" / "products").glob("????-??"))[-1], shapes, largest, *tables)


def rmse(gap: pd.Series | np.ndarray) -> float:
    values = np.asarray(gap, float)
    values = values[np.isfinite(values)]
    return float(np.sqrt(np.mean(values**2))) if values.size else float("nan")


def plain_extents(demo: Demo) -> pd.DataFrame:
    """Extent of every map by the plain way: wetland_id, scene_id, plain."""
    maps = sorted((demo.products.parents[1] / "maps").glob("*.tif"))
    with rasterio.open(maps[0]) as source:
        t, crs = source.transform, str(source.crs)
        grid = Grid(crs, t.c, t.f, t.a, source.height, source.width)
    weights = pixel_weights(demo.shapes.assign(area_max_m2=demo.largest.to_numpy()), grid)
    key = weights["wetland_id"].to_numpy()
    rows = []
    for path in maps:
        with rasterio.open(path) as source:
            seen = source.read(1)[weights["row"].to_numpy(), weights["col"].to_numpy()]
        heft = np.where(seen != 255, weights["share"].to_numpy(), 0.0)
        sums = pd.DataFrame({"wetland_id": key, "heft": heft, "wet": heft * (seen > 50)}).groupby("wetland_id").sum()
        part = (sums["wet"] / sums["heft"]).rename("plain").reset_index()
        rows.append(part.assign(scene_id=path.stem))
    return pd.concat(rows, ignore_index=True)


def score_observed(demo: Demo) -> dict[str, float]:
    seen = pd.read_parquet(demo.products / "extent_observed.parquet")
    seen["date"] = pd.to_datetime(seen["datetime"]).dt.tz_localize(None).dt.normalize().astype("datetime64[ns]")
    seen = seen[seen["used"]].merge(demo.extent, on=["wetland_id", "date"])
    seen = seen.merge(plain_extents(demo), on=["wetland_id", "scene_id"], how="left")
    size = seen["wetland_id"].map(demo.largest)
    gap, sd, plain = seen["area_m2"] / size - seen["true"], seen["area_sd_m2"] / size, seen["plain"] - seen["true"]
    inside = gap.abs() <= 1.645 * sd
    clear = (seen["leaf_state"] == "leaf_off") & (seen["clear_fraction"] >= 0.9)
    out = {}
    for name, rows in (("clear", clear), ("clear small", clear & (size < 3000))):
        out[f"{name}: n"] = int(rows.sum())
        out[f"{name}: RMSE"], out[f"{name}: bias"] = rmse(gap[rows]), float(gap[rows].mean())
        out[f"{name}: median error"] = float(gap[rows].abs().median())
        out[f"{name}: plain RMSE"] = rmse(plain[rows])
        out[f"{name}: RMSE lower by"] = 1 - rmse(gap[rows]) / rmse(plain[rows])
        out[f"{name}: covered"] = float(inside[rows].mean())
    bare = seen["leaf_state"] == "leaf_off"
    cloud = bare & seen["clear_fraction"].between(0.3, 0.9)
    out["30-90 % clear, leaf-off: RMSE over clear"] = rmse(gap[cloud]) / rmse(gap[clear])
    for low, high in ((0.3, 0.5), (0.5, 0.7), (0.7, 0.9), (0.9, 1.01)):
        rows = seen["clear_fraction"].between(low, high, inclusive="left") & bare
        out[f"covered, leaf-off, {low:.0%} clear and more"] = float(inside[rows].mean())
    out["leaves out: RMSE"], out["leaves out: covered"] = rmse(gap[~bare]), float(inside[~bare].mean())
    return out


def score_relations(demo: Demo) -> dict[str, float]:
    fits = pd.read_parquet(demo.products / "relations.parquet")
    table = pd.read_parquet(demo.products / "relation_table.parquet")
    logged = set(pd.read_parquet(demo.products / "stage_daily.parquet")["wetland_id"])
    both = demo.stage.merge(demo.extent, on=["wetland_id", "date"])
    errors, within, beyond = [], [], []
    for name, rows in fits[fits["wetland_id"].isin(logged)].groupby("wetland_id"):
        days, curve = (
            both[(both["wetland_id"] == name) & (both["true_stage_m"] > 0)],
            table[table["wetland_id"] == name],
        )
        stage = days["true_stage_m"].to_numpy()
        area, low, high = (
            np.interp(stage, curve["stage_m"], curve[c] / demo.largest[name])
            for c in ("area_m2", "area_lo_m2", "area_hi_m2")
        )
        tested = (stage >= rows["stage_min_m"].min()) & (stage <= rows["stage_max_m"].max())
        truth = days["true"].to_numpy()
        inside = (truth >= low - 1e-6) & (truth <= high + 1e-6)
        errors.append(rmse((area - truth)[tested]))
        within.extend(inside[tested])
        beyond.extend(inside[~tested])
    return {
        "median RMSE": float(np.nanmedian(errors)),
        "worst RMSE": float(np.nanmax(errors)),
        "covered inside the seen range": float(np.mean(within)),
        "covered outside it": float(np.mean(beyond)) if beyond else float("nan"),
    }


def plain_series(demo: Demo, daily: pd.DataFrame) -> pd.DataFrame:
    """Add two plain ways to the daily rows: ``interpolated`` and ``by_day``."""
    seen = pd.read_parquet(demo.products / "extent_observed.parquet")
    seen = seen[seen["used"]].assign(time=lambda t: pd.to_datetime(t["datetime"]).dt.tz_localize(None))
    seen["share"] = seen["area_m2"] / seen["wetland_id"].map(demo.largest)
    parts = []
    for name, rows in daily.groupby("wetland_id", sort=False):
        own = seen[seen["wetland_id"] == name].sort_values("time")
        bare = own[own["leaf_state"] == "leaf_off"]
        out = rows.assign(interpolated=np.nan, by_day=np.nan)
        if len(bare):
            x = rows["date"].to_numpy("datetime64[D]").astype(float)
            out["interpolated"] = np.interp(x, bare["time"].to_numpy("datetime64[D]").astype(float), bare["share"])
        if len(own):
            away = own["time"].dt.day_of_year.to_numpy()[:, None] - np.arange(1, 367)[None, :]
            near = np.abs((away + 183) % 366 - 183) <= 15
            total = (near * own["share"].to_numpy()[:, None]).sum(axis=0)
            mean = np.where(near.any(axis=0), total / np.maximum(near.sum(axis=0), 1), own["share"].mean())
            out["by_day"] = mean[rows["date"].dt.day_of_year.to_numpy() - 1]
        parts.append(out)
    return pd.concat(parts, ignore_index=True)


def score_series(demo: Demo) -> dict[str, float]:
    daily = pd.read_parquet(demo.products / "extent_daily.parquet")
    daily["date"] = pd.to_datetime(daily["date"]).astype("datetime64[ns]")
    daily = plain_series(demo, daily.merge(demo.extent, on=["wetland_id", "date"]))
    size = daily["wetland_id"].map(demo.largest)
    for c in ("area_m2", "area_lo_m2", "area_hi_m2"):
        daily[c] = daily[c] / size
    logged = daily["wetland_id"].isin(set(pd.read_parquet(demo.products / "stage_daily.parquet")["wetland_id"]))
    gap, truth = daily["area_m2"] - daily["true"], daily["true"]
    low, high = daily["area_lo_m2"], daily["area_hi_m2"]
    inside = (truth >= low - 1e-6) & (truth <= high + 1e-6)
    out: dict[str, float] = {}
    for state in ("leaf_on", "leaf_off"):
        for name, whose in (("logged", logged), ("not logged", ~logged)):
            rows = (daily["leaf_state"] == state) & whose
            out[f"{state} {name}: RMSE"] = rmse(gap[rows])
            for way in ("interpolated", "by_day"):
                out[f"{state} {name}: {way} RMSE"] = rmse((daily[way] - truth)[rows])
    sums = daily.assign(a=daily["area_m2"] * size, t=truth * size).groupby("date")[["a", "t"]].sum()
    out["landscape total: RMSE"] = rmse(sums["a"] - sums["t"]) / sums["t"].mean()
    years = daily["date"].nunique() / 365.25
    wet = daily.assign(a=daily["area_m2"] > 0.05, t=truth > 0.05).groupby("wetland_id")[["a", "t"]].sum()
    out["days inundated a year: median error"] = float(((wet["a"] - wet["t"]).abs() / years).median())
    miss = np.maximum(low - truth, 0) + np.maximum(truth - high, 0)
    out["interval score (90 %)"] = float((high - low + 20 * miss).mean())
    out["covered"] = float(inside.mean())
    third = (demo.largest.rank(method="first") - 1) * 3 // len(demo.largest)
    cells = inside.groupby(
        [daily["leaf_state"], np.where(logged, "logged", "not logged"), daily["wetland_id"].map(third)]
    )
    for (state, name, part), share in cells.mean().items():
        out[f"covered {state} {name} {('small', 'middle', 'large')[int(part)]}"] = float(share)
    return out


def main() -> None:
    folders = [Path(p) for p in sys.argv[1:]]
    demos = {str(p): load(p) for p in folders}
    for title, score in (
        ("observed extent", score_observed),
        ("stage-area relations of logged wetlands", score_relations),
        ("daily series", score_series),
    ):
        table = pd.DataFrame({name: score(demo) for name, demo in demos.items()})
        print(f"\n{title}\n{table.assign(mean=table.mean(axis=1)).round(3).to_string()}")


if __name__ == "__main__":
    main()
