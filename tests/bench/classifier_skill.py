"""Skill of the pixel models on reserves whose truth is known.

    python -m tests.bench.classifier_skill RESERVE [RESERVE ...] [--cache DIR]

Each RESERVE is a folder with ``inputs`` and ``truth`` (``inundate.reserve.make_reserve``). Every scored pixel is predicted by
models trained without its wetland and without its date block; truth only scores. Plain way, in the same folds: LightGBM at its
defaults on the bands, called water at 1/2, its probability taken as the water fraction.
"""

from __future__ import annotations

import argparse
import time
from pathlib import Path

import lightgbm as lgb
import numpy as np
import pandas as pd

from inundate.common.codes import BAND_ROLES, LeafCode, ViewCode
from inundate.pixels import features, train_models
from inundate.pixels.calibration import reliability
from inundate.pixels.folds import date_blocks, deal
from tests.bench.classifier_world import World, load_world

WETLAND_FOLDS, DATE_FOLDS, BLOCK_DAYS = 4, 3, 30
VISIBLE = 50  # percent of the ground that must be seen for a pixel to be scored


def cells(world: World, seed: int) -> list[tuple[np.ndarray, np.ndarray, np.ndarray]]:
    """Return (scene rows, pixel rows, training examples) of every cell of wetland fold by date fold."""
    n = len(world.wetlands)
    by_wetland = deal(world.wetlands["wetland_id"].to_numpy(), np.zeros(n, int), WETLAND_FOLDS, seed)
    date = pd.to_datetime(world.scenes["datetime"]).dt.tz_localize(None).to_numpy("datetime64[D]")
    block = date_blocks(date, BLOCK_DAYS)
    by_scene = deal(block, np.zeros(date.size, int), DATE_FOLDS, seed + 1)
    table = world.examples.table
    scene = pd.Index(world.scenes["scene_id"]).get_indexer(table["scene_id"])
    near = pd.Index(world.wetlands["wetland_id"]).get_indexer(table["wetland_id"])
    own = np.where(near >= 0, by_wetland[near], -1)
    return [
        (
            np.flatnonzero(by_scene == d),
            np.flatnonzero((by_wetland[world.owner] == w) & (world.inside > 0.5)),
            np.flatnonzero((own != w) & (by_scene[scene] != d)),
        )
        for w in range(by_wetland.max() + 1)
        for d in range(by_scene.max() + 1)
    ]


def score_cell(
    world: World, scenes: np.ndarray, pixels: np.ndarray, rows: np.ndarray, seed: int, thin: int
) -> pd.DataFrame:
    """Train without the cell, predict its clear pixels."""
    examples = world.examples.take(rows)
    models = train_models(examples, seed=seed, num_threads=1)
    plain = lgb.LGBMClassifier(num_threads=1, verbosity=-1, seed=seed, deterministic=True)
    plain.fit(examples.reflectance.T, examples.y)
    parts = []
    for s in scenes:
        ok = pixels[(world.code[s, pixels] == ViewCode.CLEAR) & (world.true_code[s, pixels] != 255)]
        ok = ok[:: max(1, thin)]
        if ok.size == 0:
            continue
        reflectance, share = world.reflectance[s][:, ok], world.share[s, ok]
        X = features(reflectance, BAND_ROLES, share, float(world.scenes["sun"].iloc[s]), world.context[s])
        state = world.state[s, ok]
        parts.append(
            pd.DataFrame(
                {
                    "scene": s,
                    "pixel": ok,
                    "state": state,
                    "sun": float(world.scenes["sun"].iloc[s]),
                    "water": world.water[s, ok],
                    "seen": world.seen[s, ok],
                    "true_code": world.true_code[s, ok],
                    "p": models.classifier.predict_proba(X, state)[:, 1],
                    "fraction": models.fraction.predict(X),
                    "plain": plain.predict_proba(np.ascontiguousarray(reflectance.T))[:, 1],
                    "unlike": models.classifier.unlike(X),
                }
            )
        )
    return pd.concat(parts, ignore_index=True)


def predict_all(world: World, seed: int = 0, thin: int = 1) -> pd.DataFrame:
    """Predict every clear wetland pixel out of fold; columns of truth beside."""
    parts = [score_cell(world, s, p, r, seed, thin) for s, p, r in cells(world, seed) if s.size and p.size]
    out = pd.concat(parts, ignore_index=True)
    owner = world.owner[out["pixel"]]
    out["cover"] = world.wetlands["cover"].to_numpy()[owner]
    out["area"] = world.wetlands["area_max_m2"].to_numpy()[owner]
    out["inside"] = world.inside[out["pixel"]]
    return out


def groups(t: pd.DataFrame) -> dict[str, np.ndarray]:
    """Return the masks by which scores are told apart."""
    off = (t["state"] == LeafCode.LEAF_OFF).to_numpy()
    seen = (t["seen"] >= VISIBLE).to_numpy()
    pure = ((t["water"] >= 98) | (t["water"] <= 2)).to_numpy()
    clear = (t["true_code"] == ViewCode.CLEAR).to_numpy()
    wood = t["cover"].isin(["deciduous", "evergreen"]).to_numpy()
    base = off & seen
    return {
        "leaf-off, pure": base & pure & clear,
        "leaf-off, all": base & clear,
        "leaf-off, all, mask's misses too": base,
        "leaf-off, mixed 2..98 %": base & ~pure & clear,
        "leaf-off, under 0.3 ha": base & clear & (t["area"] < 3000).to_numpy(),
        "leaf-off, low sun, wooded": base & clear & wood & (t["sun"] < 25).to_numpy(),
        "leaf-off, open cover": base & clear & ~wood,
        "green-up": (t["state"] == LeafCode.GREEN_UP).to_numpy() & seen & clear,
        "leaf-on openings": (t["state"] == LeafCode.LEAF_ON).to_numpy() & seen & clear,
        "leaf fall": (t["state"] == LeafCode.LEAF_FALL).to_numpy() & seen & clear,
    }


def rates(t: pd.DataFrame, column: str) -> tuple[float, float]:
    """Return omission and commission at 1/2 against the majority of the pixel."""
    called, truth = t[column] > 0.5, t["water"] > 50
    return float((~called & truth).sum() / max(truth.sum(), 1)), float((called & ~truth).sum() / max(called.sum(), 1))


def rmse(t: pd.DataFrame, column: str) -> float:
    """Return the root mean square error of a fraction."""
    return float(np.sqrt(np.mean((t[column] - t["water"] / 100) ** 2)))


def report(t: pd.DataFrame) -> pd.DataFrame:
    """Return the table of scores, in percent."""
    rows = []
    for name, mask in groups(t).items():
        part = t[mask]
        if part.empty:
            continue
        o, c = rates(part, "p")
        fo, fc = rates(part, "fraction")
        po, pc = rates(part, "plain")
        rows.append(
            {
                "group": name,
                "n": len(part),
                "water": round(100 * (part["water"] > 50).mean(), 1),
                "omission": 100 * o,
                "commission": 100 * c,
                "om.frac": 100 * fo,
                "com.frac": 100 * fc,
                "plain.om": 100 * po,
                "plain.com": 100 * pc,
                "rmse.fraction": rmse(part, "fraction"),
                "rmse.p": rmse(part, "p"),
                "rmse.plain": rmse(part, "plain"),
                "bias": float((part["fraction"] - part["water"] / 100).mean()),
            }
        )
    return pd.DataFrame(rows)


def main() -> None:
    """Print the tables."""
    parser = argparse.ArgumentParser()
    parser.add_argument("reserve", nargs="+", type=Path)
    parser.add_argument("--cache", type=Path)
    parser.add_argument("--seed", type=int, default=0)
    parser.add_argument("--thin", type=int, default=1, help="score one pixel in so many")
    given = parser.parse_args()
    tables = []
    for folder in given.reserve:
        start = time.perf_counter()
        world = load_world(folder, cache=given.cache)
        t = predict_all(world, given.seed, given.thin)
        t["reserve"] = folder.name
        if given.cache is not None:
            t.to_parquet(given.cache / f"pred_{folder.name}.parquet")
        tables.append(t)
        print(
            f"{folder.name}: {len(world.examples.table)} examples, {len(t)} pixels scored, {time.perf_counter() - start:.0f} s"
        )
        print(report(t).round(3).to_string(index=False))
    if len(tables) > 1:
        print("all reserves")
        print(report(pd.concat(tables)).round(3).to_string(index=False))
    t = pd.concat(tables)
    part = t[groups(t)["leaf-off, all"]]
    print("reliability, leaf-off, all")
    print(
        pd.DataFrame(reliability(part["p"].to_numpy(), (part["water"] > 50).to_numpy(int)))
        .round(3)
        .to_string(index=False)
    )


if __name__ == "__main__":
    main()
