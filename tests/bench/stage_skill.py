"""Stage against the demo's truth: ``python -m tests.bench.stage_skill FOLDER [FOLDER ...]`` (demo folders).

Without a folder a reserve is made in a scratch folder. Nothing of the truth is used in making the record.
"""

from __future__ import annotations

import sys
import tempfile
import time
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd

from inundate.stage import LoggerFiles, daily_stage, read_barometer, read_checks, read_registry


def run(folder: Path):
    """Make the record of one demo folder."""
    inputs = folder / "inputs"
    registry = read_registry(inputs / "loggers.csv")
    barometer = read_barometer(inputs / "barometer.csv")
    checks, refused = read_checks(inputs / "checks.csv", registry)
    weather = pd.read_csv(inputs / "weather.csv", parse_dates=["date"])
    shapes = gpd.read_file(inputs / "wetlands.gpkg")
    places = shapes.geometry.representative_point().to_crs(4326).y
    latitudes = dict(zip(shapes["wetland_id"], places, strict=True))
    result = daily_stage(registry, LoggerFiles(registry), barometer, checks, latitudes, weather=weather)
    result.refused[:0] = refused
    return result


def dry_days(faults: pd.DataFrame, dates: pd.Series) -> np.ndarray:
    """Whether the water stood at or below the sensor for at least half of each day, by the truth's dry hours."""
    hours = [
        pd.date_range(row["start"], row["end"], freq="h") for row in faults[faults["fault"] == "dry"].to_dict("records")
    ]
    if not hours:
        return np.zeros(len(dates), bool)
    count = pd.Series(np.concatenate([h.floor("D").to_numpy() for h in hours])).value_counts()
    return count.reindex(pd.DatetimeIndex(dates)).fillna(0).to_numpy() >= 12


def score(folder: Path, daily: pd.DataFrame) -> pd.DataFrame:
    """One row a logger: error, coverage and dry agreement."""
    stage = pd.read_parquet(folder / "truth/stage_daily.parquet")
    stage["date"] = pd.to_datetime(stage["date"])
    faults = pd.read_parquet(folder / "truth/loggers.parquet")
    rows = []
    for name, mine in daily.groupby("logger_id"):
        both = mine.merge(stage.rename(columns={"stage_m": "true_m"}), on=["wetland_id", "date"])
        own = faults[faults["logger_id"] == name]
        low_true = pd.Series(dry_days(own, both["date"]), both.index)
        wet = ~both["censored"] & ~low_true
        error = (both["stage_m"] - both["true_m"])[wet].to_numpy()
        z = np.abs(error) / both["stage_sd_m"][wet].to_numpy()
        rows.append(
            {
                "logger": name,
                "faults": ",".join(sorted(set(own["fault"].dropna()) - {"none"})),
                "days": int(wet.sum()),
                "rmse_cm": 100 * np.sqrt(np.mean(error**2)) if wet.any() else np.nan,
                "bias_cm": 100 * error.mean() if wet.any() else np.nan,
                "sd_cm": 100 * both["stage_sd_m"][wet].mean(),
                "in_1sd": (z < 1).mean(),
                "in_2sd": (z < 2).mean(),
                "dry_true": int(low_true.sum()),
                "dry_right": float((both["censored"] == low_true).mean()),
                "right": int((both["censored"] == low_true).sum()),
                "all": len(both),
                "hit": int((z < 1).sum()),
                "hit2": int((z < 2).sum()),
                "sum2": float((error**2).sum()),
            }
        )
    return pd.DataFrame(rows)


def main() -> None:
    """Print one table a folder and the sums over all."""
    folders = [Path(a) for a in sys.argv[1:]]
    if not folders:
        from inundate.reserve import make_reserve

        folders = [Path(tempfile.mkdtemp()) / "reserve"]
        make_reserve(folders[0], seed=1, size="small")
    pd.set_option("display.width", 200, "display.max_columns", 30, "display.max_colwidth", 140)
    tables = []
    for folder in folders:
        began = time.perf_counter()
        result = run(folder)
        table = score(folder, result.daily)
        print(f"== {folder}: {time.perf_counter() - began:.1f} s")
        print(table.drop(columns=["hit", "hit2", "sum2", "right", "all"]).round(3).to_string(index=False))
        faults = pd.read_parquet(folder / "truth/loggers.parquet")
        print(faults[faults["fault"].str.contains("move")].to_string(index=False))
        steps = result.corrections[result.corrections["kind"].isin(["step", "clock"])]
        print(steps[["logger_id", "kind", "start", "value_m", "sd_m", "why"]].to_string(index=False))
        for item in result.refused:
            print("refused:", item.reason)
        tables.append(table.assign(folder=folder.name))
    every = pd.concat(tables)
    # every logger falls dry or is taken out for download at times; that is its daily work, not a fault
    wear = every["faults"].str.contains("drift|spike|gap|move")
    clean = ~wear
    for name, part in (("without faults", every[clean]), ("faulted", every[wear]), ("all", every)):
        days = max(part["days"].sum(), 1)
        print(
            f"{name}: {len(part)} loggers, {days} days, RMSE {100 * np.sqrt(part['sum2'].sum() / days):.2f} cm, "
            f"within 1 sd {100 * part['hit'].sum() / days:.1f} %, within 2 sd {100 * part['hit2'].sum() / days:.1f} %, "
            f"dry or not right {100 * part['right'].sum() / part['all'].sum():.2f} % of {part['all'].sum()} days"
        )


if __name__ == "__main__":
    main()
