"""Speed and memory of the filled series: ``python -m tests.bench.series_speed [WETLANDS YEARS]`` (default 2000 10)."""

from __future__ import annotations

import resource
import sys
import time

import numpy as np
import pandas as pd

from inundate.series import FillOptions, SeriesInputs, fill_series, local_level
from tests.series_world import make_world


def many(wetlands: int, years: int) -> SeriesInputs:
    """Tile a small landscape: every copy has its own views."""
    base = make_world(5, wetlands=40, years=years, logged=10).inputs
    rng, copies = np.random.default_rng(0), -(-wetlands // 40)
    tables: dict[str, list[pd.DataFrame]] = {
        "wetlands": [],
        "observed": [],
        "hypsometry": [],
        "leaf_daily": [],
    }
    for c in range(copies):
        for name, parts in tables.items():
            frame = getattr(base, name).copy()
            frame["wetland_id"] = [f"c{c:03d}{w}" for w in frame["wetland_id"]]
            if name == "observed":
                frame["area_m2"] = np.maximum(
                    frame["area_m2"] + frame["area_sd_m2"] * 0.5 * rng.standard_normal(len(frame)), 0
                )
                frame = frame[(rng.random(len(frame)) < 0.7)]
            parts.append(frame)
    joined = {name: pd.concat(parts, ignore_index=True) for name, parts in tables.items()}
    stage = base.stage_daily.assign(wetland_id="c000" + base.stage_daily["wetland_id"])  # type: ignore[union-attr,operator]
    return SeriesInputs(**joined, stage_daily=stage, relations=_Prefixed(base.relations), weather=base.weather)


class _Prefixed:
    def __init__(self, inner: object):
        self.inner = inner

    def predict(self, wetland_id: str, stage_m: np.ndarray) -> pd.DataFrame:
        if not wetland_id.startswith("c000"):
            raise KeyError(wetland_id)
        return self.inner.predict(wetland_id[4:], stage_m)  # type: ignore[attr-defined]


def smoother_ratio(days: int = 3653) -> tuple[float, float]:
    """Seconds a series of our smoother and of statsmodels' local-level smoother, same series, one thread."""
    from statsmodels.tsa.statespace.structural import UnobservedComponents

    rng = np.random.default_rng(1)
    y = np.cumsum(rng.standard_normal(days)) + 3 * rng.standard_normal(days)
    y[rng.random(days) < 0.9] = np.nan
    local_level(y, 9.0, 1.0)
    begin = time.perf_counter()
    for _ in range(200):
        got = local_level(y, 9.0, 1.0)
    ours = (time.perf_counter() - begin) / 200
    begin = time.perf_counter()
    for _ in range(5):
        ref = UnobservedComponents(y, "llevel", use_exact_diffuse=True).smooth([9.0, 1.0])
    theirs = (time.perf_counter() - begin) / 5
    print(f"largest difference of smoothed states {np.abs(got.smoothed - ref.smoothed_state[0]).max():.2e}")
    return ours, theirs


def main() -> None:
    wetlands, years = (int(a) for a in sys.argv[1:3]) if len(sys.argv) > 2 else (2000, 10)
    ours, theirs = smoother_ratio()
    print(
        f"smoother: {1e3 * ours:.3f} ms a series, statsmodels {1e3 * theirs:.2f} ms: {theirs / ours:.0f} times faster"
    )
    fill_series(make_world(0, wetlands=3, years=1, logged=1).inputs, options=FillOptions(workers=2))
    inputs = many(wetlands, years)
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    begin, cpu = time.perf_counter(), time.process_time()
    got = fill_series(inputs, options=FillOptions(workers=2))
    print(
        f"{wetlands} wetlands x {years} years: {time.perf_counter() - begin:.1f} s ({time.process_time() - cpu:.1f} s of processor), {len(got.daily)} rows"
    )
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"peak memory {peak:.0f} MB, of which inputs and libraries {before:.0f} MB")


if __name__ == "__main__":
    main()
