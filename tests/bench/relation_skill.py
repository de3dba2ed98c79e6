"""Relations against the demo's truth: ``python -m tests.bench.relation_skill FOLDER [FOLDER ...]`` (demo folders).

Pairs are made from the truth at the clear scenes' dates: extent with an sd of 5 % of the largest extent and 3 % outliers,
stage with an sd of 1.5 cm and the planted moves left in. With ``--record`` stage comes from the stage part's own record; with
``--observed NAME`` extents come from that Parquet table beside the folder's inputs. Relations see no truth but these pairs.
Printed: error and coverage against the true curve inside and outside the stages seen, shifts, and three-pair fits.
"""

from __future__ import annotations

import sys
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
from scipy.optimize import curve_fit

from inundate.common.grid import Grid
from inundate.extent import elevation_cells, hypsometry
from inundate.relation import RelationSet, fit_relations, make_pairs
from inundate.scenes import read_elevation


def ground(folder: Path) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Return wetlands and hypsometry from a demo's inputs."""
    shapes = gpd.read_file(folder / "inputs/wetlands.gpkg")
    west, south, east, north = shapes.total_bounds
    model, transform, _ = read_elevation(
        folder / "inputs/elevation.tif", shapes.crs.to_string(), (west, south, east, north)
    )
    west, north = 10 * np.floor(west / 10) - 50, 10 * np.ceil(north / 10) + 50
    grid = Grid(shapes.crs.to_string(), west, north, 10.0, int((north - south) / 10) + 12, int((east - west) / 10) + 12)
    sites = shapes[["wetland_id", "cover"]].assign(area_max_m2=shapes.area)
    return sites, hypsometry(elevation_cells(model, transform, shapes, grid), shapes)


def simulated(folder: Path, sites: pd.DataFrame, seed: int) -> pd.DataFrame:
    """Return pairs at the dates of clear scenes from the truth, with errors."""
    rng = np.random.default_rng(seed)
    scenes = pd.read_parquet(folder / "truth/scenes.parquet")
    days = pd.to_datetime(
        scenes.loc[(scenes["cloud_share"] < 0.6) & ~scenes["ice"].astype(bool), "date"]
    ).dt.normalize()
    stage = pd.read_parquet(folder / "truth/stage_daily.parquet")
    extent = pd.read_parquet(folder / "truth/extent_daily.parquet")
    both = stage.merge(extent, on=["wetland_id", "date"]).assign(date=lambda t: pd.to_datetime(t["date"]))
    registry = pd.read_csv(folder / "inputs/loggers.csv")
    both = both[both["date"].isin(set(days)) & both["wetland_id"].isin(registry["wetland_id"])]
    both = both[rng.random(len(both)) < 0.7].merge(sites, on="wetland_id")
    n, size = len(both), both["area_max_m2"].to_numpy()
    error = np.where(rng.random(n) < 0.03, 0.25, 0.05) * rng.standard_normal(n)
    area = np.clip(both["area_m2"] + error * size, 0, size)
    record = both["stage_m"] + 0.015 * rng.standard_normal(n) + moves(folder, registry, both)
    return pd.DataFrame(
        {
            "wetland_id": both["wetland_id"],
            "date": both["date"],
            "stage_m": record,
            "stage_sd_m": 0.015,
            "censored": False,
            "area_m2": area,
            "area_sd_m2": 0.05 * size,
            "leaf_state": "leaf_off",
            "view_fraction": 1.0,
            "period": "1",
        }
    ).reset_index(drop=True)


def moves(folder: Path, registry: pd.DataFrame, rows: pd.DataFrame) -> np.ndarray:
    """Return the planted moves of loggers as errors of recorded stage, m."""
    faults = pd.read_parquet(folder / "truth/loggers.parquet").query("fault == 'move'").merge(registry, on="logger_id")
    out = np.zeros(len(rows))
    for move in faults.to_dict("records"):
        late = (rows["wetland_id"] == move["wetland_id"]) & (rows["date"] >= pd.Timestamp(move["start"]).normalize())
        out[late.to_numpy()] += move["size_m"]
    return out


def score(found: RelationSet, folder: Path, pairs: pd.DataFrame, sites: pd.DataFrame) -> pd.DataFrame:
    """Return error and coverage of each wetland against the true curve, as shares of the largest extent."""
    truth = pd.read_parquet(folder / "truth/relations.parquet")
    span = pairs.groupby("wetland_id")["stage_m"].agg(["min", "max"])
    rows = []
    for key, whole in truth.groupby("wetland_id"):
        if key not in found.wetland_ids:
            continue
        curve = whole[whole["stage_m"] > 0]
        size = float(sites.set_index("wetland_id")["area_max_m2"][key])
        got = found.predict(key, curve["stage_m"].to_numpy())
        true = curve["area_m2"].to_numpy()
        true = true * size / max(true.max(), 1e-9)
        error = (got["area_m2"].to_numpy() - true) / size
        held = (true >= got["area_lo_m2"].to_numpy() - 1e-6) & (true <= got["area_hi_m2"].to_numpy() + 1e-6)
        low, high = span.loc[key] if key in span.index else (np.inf, -np.inf)
        seen = ((curve["stage_m"] >= low) & (curve["stage_m"] <= high)).to_numpy()
        wide = (got["area_hi_m2"] - got["area_lo_m2"]).to_numpy() / size
        rows.append(
            {
                "wetland_id": key,
                "logger": key in span.index,
                "family": found.relations.set_index("wetland_id")["family"][key],
                "n_in": int(seen.sum()),
                "n_out": int((~seen).sum()),
                "rmse_in": np.sqrt(np.mean(error[seen] ** 2)) if seen.any() else np.nan,
                "rmse_out": np.sqrt(np.mean(error[~seen] ** 2)) if (~seen).any() else np.nan,
                "held_in": held[seen].mean() if seen.any() else np.nan,
                "held_out": held[~seen].mean() if (~seen).any() else np.nan,
                "width_in": wide[seen].mean() if seen.any() else np.nan,
            }
        )
    return pd.DataFrame(rows)


def unpooled(pairs: pd.DataFrame, size: float, stage: np.ndarray) -> np.ndarray:
    """Return the power law fitted by plain least squares to one wetland's pairs alone, capped."""
    h, a = pairs["stage_m"].to_numpy(), pairs["area_m2"].to_numpy()

    def law(x: np.ndarray, s: float, b: float) -> np.ndarray:
        return np.minimum(s * np.maximum(x, 0) ** b, size)

    try:
        best, _ = curve_fit(law, h, a, p0=(size / 0.7, 1.16), bounds=([1e-3, 0.05], [1e9, 20]), max_nfev=2000)
    except RuntimeError:
        best = (size / 0.7, 1.16)
    return law(stage, *best)


def three_pairs(
    folder: Path, pairs: pd.DataFrame, sites: pd.DataFrame, heights: pd.DataFrame | None, everywhere: bool
) -> tuple[float, float]:
    """Return the median RMSE (share) of pooled and unpooled fits with three pairs, over the stages all pairs show.

    ``everywhere``: all wetlands have but three pairs; otherwise each in turn while the others keep theirs.
    """
    truth = pd.read_parquet(folder / "truth/relations.parquet")
    sizes = sites.set_index("wetland_id")["area_max_m2"]
    few = pairs.groupby("wetland_id").sample(3, random_state=5)
    whole = fit_relations(few, sites, heights, seed=1) if everywhere else None
    errors = []
    for key, mine in few.groupby("wetland_id"):
        found = whole or fit_relations(pd.concat([pairs[pairs["wetland_id"] != key], mine]), sites, heights, seed=1)
        span = pairs.loc[pairs["wetland_id"] == key, "stage_m"]
        curve = truth[(truth["wetland_id"] == key) & truth["stage_m"].between(max(span.min(), 1e-6), span.max())]
        if len(curve) < 5:
            continue
        stage, true = curve["stage_m"].to_numpy(), curve["area_m2"].to_numpy()
        pooled = found.predict(key, stage)["area_m2"].to_numpy()
        plain = unpooled(mine, sizes[key], stage)
        errors.append([np.sqrt(np.mean((x - true) ** 2)) / sizes[key] for x in (pooled, plain)])
    middle = np.median(np.array(errors), axis=0)
    return float(middle[0]), float(middle[1])


def main(arguments: list[str]) -> None:
    folders = [Path(a) for a in arguments if not a.startswith("--") and (Path(a) / "inputs").exists()]
    observed = arguments[arguments.index("--observed") + 1] if "--observed" in arguments else None
    for folder in folders:
        sites, heights = ground(folder)
        pairs = simulated(folder, sites, seed=11)
        if "--record" in arguments or observed:
            from inundate.stage import wetland_daily
            from tests.bench.stage_skill import run

            daily = wetland_daily(run(folder))
            pairs["datetime"], pairs["used"] = pairs["date"], True
            seen = pd.read_parquet(folder / observed) if observed else pairs
            pairs = make_pairs(seen, daily)
        report(folder, pairs, sites, heights, "--few" in arguments)


def report(
    folder: Path, pairs: pd.DataFrame, sites: pd.DataFrame, heights: pd.DataFrame | None, few: bool
) -> pd.DataFrame:
    """Print the figures of one demo folder, with and without elevation."""
    out = pd.DataFrame()
    for name, high in (("with elevation", heights), ("without elevation", None)):
        found = fit_relations(pairs, sites, high, seed=1)
        table = score(found, folder, pairs, sites)
        mine, rest = table[table["logger"]], table[~table["logger"]]
        held = {c: np.average(mine[f"held_{c}"].fillna(0), weights=mine[f"n_{c}"]) for c in ("in", "out")}
        print(
            f"{folder.name} {name}: {len(mine)} loggers, {len(pairs)} pairs; seen range: median rmse "
            f"{100 * mine['rmse_in'].median():.2f} %, worst {100 * mine['rmse_in'].max():.2f} %, band holds {100 * held['in']:.1f} %"
            f" (width {100 * mine['width_in'].median():.1f} %); outside: rmse {100 * mine['rmse_out'].median():.1f} %, band holds "
            f"{100 * held['out']:.1f} %; scale {np.round(found.band_scale, 2)}"
        )
        if "--all" in sys.argv:
            print(table.round(3).to_string())
        if len(rest):
            print(
                f"   without logger: {len(rest)}, median rmse {100 * rest['rmse_out'].median():.1f} %, worst "
                f"{100 * rest['rmse_out'].max():.1f} %, band holds {100 * np.average(rest['held_out'], weights=rest['n_out']):.1f} %"
            )
        print("   families:", dict(mine["family"].value_counts()))
        for row in found.shifts.to_dict("records"):
            print(f"   shift {row['wetland_id']}: {row['words']}")
        if few:
            for everywhere in (False, True):
                a, b = three_pairs(folder, pairs, sites, high, everywhere)
                kind = "all wetlands" if everywhere else "one wetland at a time"
                print(f"   three pairs, {kind}: pooled {100 * a:.1f} %, unpooled {100 * b:.1f} %, ratio {a / b:.2f}")
        out = table if name == "with elevation" else out
    return out


if __name__ == "__main__":
    main(sys.argv[1:])
