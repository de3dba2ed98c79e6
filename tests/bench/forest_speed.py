"""Fast forest against LightGBM's own predict, in one run, at equal threads.

    python -m tests.bench.forest_speed [--rows 262144] [--trees 250]

Images are smooth multi-band fields (features mix four fields of different grain), in row-major order; ``noise`` adds sensor noise
of 0.004 in reflectance; ``shuffled`` are the same pixels in random order; ``random`` draws every feature on its own.
Times are the best of several runs: processor time of all threads for one thread, wall time for two.
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Callable
from functools import partial

import lightgbm as lgb
import numpy as np
import psutil
from scipy import ndimage

from inundate.pixels.forest import FastForest, JointForest
from inundate.pixels.lanes import WIDE


def image(height: int, width: int, bands: int, seed: int) -> np.ndarray:
    """Smooth multi-band image, (pixel, band) float32, row-major pixels."""
    rng = np.random.default_rng(seed)
    fields = [ndimage.gaussian_filter(rng.normal(size=(height, width)), grain) for grain in (12, 6, 24, 4)]
    fields = [(f - f.mean()) / f.std() for f in fields]
    mixed = np.stack([sum(w * f for w, f in zip(rng.normal(size=4), fields, strict=True)) for _ in range(bands)], -1)
    return (0.2 + 0.1 * mixed / mixed.std(axis=(0, 1))).reshape(-1, bands).astype(np.float32)


def train(bands: int, trees: int) -> lgb.Booster:
    """Binary forest of 31 leaves on another image with noise."""
    x = image(200, 200, bands, 1)
    rng = np.random.default_rng(2)
    x = x + rng.normal(0, 0.005, x.shape).astype(np.float32)
    score = np.sin(20 * x[:, 0]) + 80 * x[:, 1] * x[:, 2] - 5 * x[:, 3] + rng.normal(0, 0.7, len(x))
    options = {"objective": "binary", "num_leaves": 31, "learning_rate": 0.05, "verbose": -1, "num_threads": 1}
    return lgb.train(options, lgb.Dataset(x, score > np.median(score)), trees)


def best(work: Callable[[], object], clock: Callable[[], float], runs: int) -> float:
    work()
    times = []
    for _ in range(runs):
        start = clock()
        work()
        times.append(clock() - start)
    return min(times)


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--rows", type=int, default=512 * 512)
    parser.add_argument("--trees", type=int, default=250)
    given = parser.parse_args()
    print(f"register look-up: {WIDE}; {given.trees} trees of 31 leaves, {given.rows} rows")
    for bands in (12, 20):
        booster = train(bands, given.trees)
        quick = FastForest.from_booster(booster)
        smooth = image(512, given.rows // 512, bands, 5)
        rng = np.random.default_rng(9)
        tiles = {
            "smooth": smooth,
            "noise": smooth + rng.normal(0, 0.004, smooth.shape).astype(np.float32),
            "shuffled": smooth[rng.permutation(len(smooth))],
            "random": np.stack([rng.permutation(smooth[:, k]) for k in range(bands)], 1),
        }
        for name, x in tiles.items():
            compare(f"{bands} features {name:9s}", booster, quick, np.ascontiguousarray(x))
    joint(booster, quick, tiles["noise"])


def compare(name: str, booster: lgb.Booster, quick: FastForest, x: np.ndarray) -> None:
    want = booster.predict(x, raw_score=True, num_threads=1)
    process = psutil.Process()
    before = process.memory_info().rss
    got = quick.predict_raw(x)
    grown = (process.memory_info().rss - before) / 2**20
    worst = float(np.abs(got - want).max())
    for threads in (1, 2):
        clock = time.process_time if threads == 1 else time.perf_counter
        theirs = best(partial(booster.predict, x, raw_score=True, num_threads=threads), clock, 2)
        ours = best(partial(quick.predict_raw, x, threads=threads), clock, 4)
        print(
            f"{name} {threads} thread: LightGBM {theirs / len(x) * 1e6:6.2f} us/row, fast {ours / len(x) * 1e6:6.3f} us/row, "
            f"ratio {theirs / ours:5.1f}; max difference {worst:.1e}; memory +{grown:.0f} MB"
        )


def joint(booster: lgb.Booster, quick: FastForest, x: np.ndarray) -> None:
    both = JointForest([quick, FastForest.from_booster(booster)])
    one = best(lambda: (quick.predict(x), quick.predict(x)), time.process_time, 3)
    two = best(lambda: both.predict(x), time.process_time, 3)
    print(f"two forests: one after the other {one / len(x) * 1e6:.3f} us/row, together {two / len(x) * 1e6:.3f} us/row")


if __name__ == "__main__":
    main()
