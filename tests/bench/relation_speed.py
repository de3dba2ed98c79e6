"""Speed of relation fits: ``python -m tests.bench.relation_speed [WETLANDS]`` (2,000 by default, 40 pairs each).

Power laws with bands by the part itself, against a loop of scipy's ``curve_fit`` with as many bootstrap refits as the part draws
curves, timed on a sample of wetlands in the same run and scaled up. Then all families with choice and bands. Prints how far
both ways' curves and bands lie apart, and the memory used.
"""

from __future__ import annotations

import resource
import sys
import time

import numpy as np
import pandas as pd
from scipy.optimize import curve_fit

from inundate.relation import RelationOptions, fit_relations

PAIRS, SAMPLE = 40, 12


def make_world(count: int, seed: int = 4) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Return pairs and wetlands of power-law bowls; extent with an sd of 4 % of the largest."""
    rng = np.random.default_rng(seed)
    names = np.array([f"w{i:05d}" for i in range(count)])
    size = np.exp(rng.uniform(np.log(500), np.log(50_000), count))
    full, power = rng.uniform(0.4, 1.2, count), np.exp(rng.normal(0.2, 0.3, count))
    stage = rng.uniform(0.03, 1.1, (count, PAIRS)) * full[:, None]
    share = np.minimum((stage / full[:, None]) ** power[:, None], 1.0)
    seen = np.clip(share + rng.normal(0, 0.04, share.shape), 0.0, 1.0)
    pairs = pd.DataFrame(
        {
            "wetland_id": np.repeat(names, PAIRS),
            "date": np.tile(pd.date_range("2031-01-01", periods=PAIRS, freq="17D").to_numpy(), count),
            "stage_m": stage.ravel(),
            "stage_sd_m": 0.005,
            "area_m2": (seen * size[:, None]).ravel(),
            "area_sd_m2": np.repeat(0.04 * size, PAIRS),
            "leaf_state": "leaf_off",
            "censored": False,
        }
    )
    return pairs, pd.DataFrame({"wetland_id": names, "area_max_m2": size, "cover": "deciduous"})


def law(stage: np.ndarray, full: float, power: float) -> np.ndarray:
    return np.minimum((np.maximum(stage, 0.0) / full) ** power, 1.0)


def plain_way(mine: pd.DataFrame, size: float, at: np.ndarray, draws: int, rng: np.random.Generator) -> np.ndarray:
    """Return the fitted curve and the 5 and 95 % quantiles of bootstrap refits at stages; (3, stage)."""
    h, y = mine["stage_m"].to_numpy(), mine["area_m2"].to_numpy() / size
    curves = []
    for draw in range(draws + 1):
        rows = rng.integers(0, h.size, h.size) if draw else np.arange(h.size)
        best, _ = curve_fit(law, h[rows], y[rows], p0=(h.max(), 1.2), bounds=([0.01, 0.05], [20, 20]))
        curves.append(law(at, *best))
    return np.vstack([curves[:1], np.quantile(curves[1:], [0.05, 0.95], axis=0)])


def main() -> None:
    count = int(sys.argv[1]) if len(sys.argv) > 1 else 2000
    pairs, wetlands = make_world(count)
    draws = RelationOptions().n_draws
    fit_relations(pairs[: PAIRS * 8], wetlands[:8])  # compiled before the clock starts
    start = time.perf_counter()
    one = fit_relations(pairs, wetlands, options=RelationOptions(families=("power",), pool=False))
    one.table()
    alone = time.perf_counter() - start
    start = time.perf_counter()
    fit_relations(pairs, wetlands).table()
    whole = time.perf_counter() - start
    rng, gaps, wide = np.random.default_rng(1), [], []
    start = time.perf_counter()
    for name in wetlands["wetland_id"].iloc[:: max(count // SAMPLE, 1)][:SAMPLE]:
        mine = pairs[pairs["wetland_id"] == name]
        size = float(wetlands.loc[wetlands["wetland_id"] == name, "area_max_m2"].iloc[0])
        at = np.linspace(mine["stage_m"].min(), mine["stage_m"].max(), 30)
        plain = plain_way(mine, size, at, draws, rng)
        got = one.predict(str(name), at)[["area_m2", "area_lo_m2", "area_hi_m2"]].to_numpy().T / size
        gaps.append(np.abs(got[0] - plain[0]).max())
        wide.append((got[2] - got[1]).mean() / (plain[2] - plain[1]).mean())
    slow = (time.perf_counter() - start) / SAMPLE * count
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"{count} wetlands x {PAIRS} pairs, {draws} draws")
    print(
        f"power law with bands and tables: {alone:.1f} s; curve_fit with as many refits: {slow:.0f} s; {slow / alone:.0f} times"
    )
    print(f"all families, choice by held-out blocks, pooling, bands, tables: {whole:.1f} s; {slow / whole:.0f} times")
    print(
        f"curves differ by at most {max(gaps):.3f} of the largest extent; bands are {np.median(wide):.2f} times as wide"
    )
    print(f"peak memory {peak:.0f} MB")


if __name__ == "__main__":
    main()
