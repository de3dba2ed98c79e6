"""Skill of the filled series against truth, beside two plain ways: ``python -m tests.bench.series_skill SOURCE ...``.

SOURCE is ``world:SEED`` (the tests' own landscape) or ``truth:FOLDER`` (a reserve's folder; views, stage and relations are
simulated from its truth). What the real steps make of a demo is scored by ``tests.bench.demo_skill``.
"""

from __future__ import annotations

import sys
import time
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from inundate.series import FillOptions, SeriesInputs, fill_series


@dataclass(frozen=True)
class Case:
    """Inputs beside truth (share of the largest extent, wetland by day)."""

    name: str
    inputs: SeriesInputs
    share: np.ndarray
    logged: np.ndarray


def world_case(seed: int) -> Case:
    from tests.series_world import make_world

    w = make_world(seed, wetlands=40, years=3, logged=10)
    return Case(f"world {seed}", w.inputs, w.share, w.logged)


def load(source: str) -> Case:
    kind, _, rest = source.partition(":")
    if kind == "world":
        return world_case(int(rest))
    from tests.bench import series_sources

    return series_sources.truth_case(Path(rest))


def interpolated(inputs: SeriesInputs, dates: np.ndarray, area_max: pd.Series) -> np.ndarray:
    """Linear interpolation of leaf-off views (plain way 1)."""
    out = np.full((len(area_max), len(dates)), np.nan)
    x = dates.astype("datetime64[D]").astype(float)
    seen = inputs.observed[(inputs.observed["used"]) & (inputs.observed["leaf_state"] == "leaf_off")]
    for i, (w, largest) in enumerate(area_max.items()):
        own = seen[seen["wetland_id"] == w].sort_values("datetime")
        if len(own):
            at = (
                pd.to_datetime(own["datetime"], utc=True)
                .dt.tz_localize(None)
                .to_numpy()
                .astype("datetime64[D]")
                .astype(float)
            )
            out[i] = np.interp(x, at, own["area_m2"].to_numpy() / largest)
    return out


def day_of_year_mean(inputs: SeriesInputs, dates: np.ndarray, area_max: pd.Series) -> np.ndarray:
    """Mean of views within 15 days of the day of year (plain way 2)."""
    out = np.full((len(area_max), len(dates)), np.nan)
    day = pd.DatetimeIndex(dates).day_of_year.to_numpy()
    seen = inputs.observed[inputs.observed["used"]]
    for i, (w, largest) in enumerate(area_max.items()):
        own = seen[seen["wetland_id"] == w]
        if len(own):
            at = pd.to_datetime(own["datetime"], utc=True).dt.day_of_year.to_numpy()
            near = np.abs((at[:, None] - np.arange(1, 367)[None, :] + 183) % 366 - 183) <= 15
            total = (near * (own["area_m2"].to_numpy() / largest)[:, None]).sum(axis=0)
            mean = np.where(
                near.any(axis=0), total / np.maximum(near.sum(axis=0), 1), (own["area_m2"] / largest).mean()
            )
            out[i] = mean[day - 1]
    return out


def rmse(gap: np.ndarray) -> float:
    return float(np.sqrt(np.nanmean(gap**2))) if np.isfinite(gap).any() else float("nan")


def score(case: Case, options: FillOptions) -> dict[str, float]:
    begin = time.perf_counter()
    got = fill_series(case.inputs, options=options, seed=1)
    took = time.perf_counter() - begin
    daily = got.daily
    count, days = case.share.shape
    largest = case.inputs.wetlands.set_index("wetland_id")["area_max_m2"].sort_index()
    wide = {
        c: daily[c].to_numpy(float).reshape(count, days) / largest.to_numpy()[:, None]
        for c in ("area_m2", "area_lo_m2", "area_hi_m2")
    }
    leaf = daily["leaf_state"].to_numpy().reshape(count, days)
    on, off = leaf == "leaf_on", leaf == "leaf_off"
    gap = wide["area_m2"] - case.share
    plain = interpolated(case.inputs, got.dates, largest) - case.share
    typical = day_of_year_mean(case.inputs, got.dates, largest) - case.share
    log = np.repeat(case.logged[:, None], days, axis=1)
    inside = (wide["area_lo_m2"] - 1e-6 <= case.share) & (case.share <= wide["area_hi_m2"] + 1e-6)
    miss = np.maximum(wide["area_lo_m2"] - case.share, 0) + np.maximum(case.share - wide["area_hi_m2"], 0)
    interval = wide["area_hi_m2"] - wide["area_lo_m2"] + 20 * miss
    total, truth_total = (x * largest.to_numpy()[:, None] for x in (wide["area_m2"], case.share))
    wet, wet_truth = wide["area_m2"] > 0.05, case.share > 0.05
    per_year = np.abs(wet.sum(axis=1) - wet_truth.sum(axis=1)) / (days / 365.25)
    out = {
        "logged on": rmse(gap[on & log]), "unlogged on": rmse(gap[on & ~log]), "interp on": rmse(plain[on & ~log]), "doy on": rmse(typical[on & ~log]),
        "logged off": rmse(gap[off & log]), "unlogged off": rmse(gap[off & ~log]), "interp off": rmse(plain[off]),
        "total %": 100 * rmse(total.sum(axis=0) - truth_total.sum(axis=0)) / truth_total.sum(axis=0).mean(),
        "interp total %": 100 * rmse(np.nansum((plain + case.share) * largest.to_numpy()[:, None], axis=0) - truth_total.sum(axis=0)) / truth_total.sum(axis=0).mean(),
        "days/yr": float(np.median(per_year)), "cover %": 100 * inside.mean(), "interval score": float(interval.mean()), "seconds": took,
    }  # fmt: skip
    third = np.repeat(((np.argsort(np.argsort(largest.to_numpy())) * 3) // count)[:, None], days, axis=1)
    for state in ("leaf_off", "green_up", "leaf_on", "leaf_fall"):
        for is_log in (True, False):
            for size in range(3):
                cell = (leaf == state) & (log == is_log) & (third == size)
                if cell.any():
                    out[f"cover {state} {'logged' if is_log else 'unlogged'} {size}"] = 100 * inside[cell].mean()
                    out[f"n {state} {'logged' if is_log else 'unlogged'} {size}"] = int(cell.sum())
    out["_result"] = got  # type: ignore[assignment]
    return out


def show(rows: dict[str, dict[str, float]]) -> None:
    table = pd.DataFrame(rows).drop(index="_result", errors="ignore").astype(float)
    cells = [r for r in table.index if r.startswith("cover ") and r != "cover %"]
    main = table.drop(index=[r for r in table.index if r.startswith("n ") or r in cells])
    main["mean"] = main.mean(axis=1)
    print(main.round(3).to_string())
    pooled = {r[6:]: (table.loc[r] * table.loc["n" + r[5:]]).sum() / table.loc["n" + r[5:]].sum() for r in cells}
    print("coverage by cell (all seeds):")
    print(pd.Series(pooled).round(1).unstack() if False else pd.Series(pooled).round(1).to_string())


def main() -> None:
    sources = sys.argv[1:] or [f"world:{s}" for s in range(1, 4)]
    show({s: score(load(s), FillOptions()) for s in sources})


if __name__ == "__main__":
    main()
