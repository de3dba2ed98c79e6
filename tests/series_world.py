"""A small invented landscape for tests of the filled series: bowls that fill and dry by a balance of volumes.

It is made by other rules than the package's predictor: storage is a volume, catchments have a soil store, wetlands
exchange water with a regional reservoir through their wetted area, and each has its own rain.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from inundate.series import SeriesInputs


@dataclass(frozen=True)
class World:
    """Truth and the tables made from it."""

    wetlands: pd.DataFrame
    dates: pd.DatetimeIndex
    share: np.ndarray
    stage: np.ndarray
    logged: np.ndarray
    leaf: np.ndarray
    inputs: SeriesInputs


class TableRelations:
    """Relations read from curves (stage, area), with an error of their own."""

    def __init__(self, curves: dict[str, tuple[np.ndarray, np.ndarray, float]]):
        self.curves = curves

    def predict(self, wetland_id: str, stage_m: np.ndarray) -> pd.DataFrame:
        stage, area, sd = self.curves[wetland_id]
        got = np.interp(stage_m, stage, area)
        wide = np.where(np.asarray(stage_m) > 0, sd, 0.0)
        return pd.DataFrame(
            {
                "stage_m": stage_m,
                "area_m2": got,
                "area_lo_m2": got - 1.645 * wide,
                "area_hi_m2": got + 1.645 * wide,
                "area_sd_m2": wide,
            }
        )


def weather_table(dates: pd.DatetimeIndex, rng: np.random.Generator) -> pd.DataFrame:
    turn = 2 * np.pi * (dates.day_of_year.to_numpy() - 15) / 365.25
    wet = rng.random(len(dates)) < 0.33 + 0.06 * np.cos(turn)
    rain = np.where(wet, rng.gamma(0.75, 9.0, len(dates)), 0.0)
    pet = np.clip(2.2 - 2.0 * np.cos(turn), 0.1, None) * rng.uniform(0.6, 1.3, len(dates))
    return pd.DataFrame({"date": dates, "precipitation_mm": rain, "pet_mm": pet})


def _balance(weather: pd.DataFrame, own: dict[str, float], rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    rain = weather["precipitation_mm"].to_numpy() / 1000 * rng.gamma(30, 1 / 30, len(weather))
    pet = weather["pet_mm"].to_numpy() / 1000
    depth, shape, area = own["depth"], own["shape"], own["area"]
    soil, region, stage = 0.05, 0.0, 0.3 * depth
    out = np.empty(len(weather))
    for t in range(len(weather)):
        soil += rain[t] - 0.8 * pet[t] * np.clip(soil / 0.15, 0, 1)
        runoff = max(soil - 0.15, 0) * 0.5 + 0.03 * rain[t]
        soil = np.clip(soil - runoff, 0, None)
        region += 0.02 * (8.0 * runoff - 0.10 * (region + 0.5))
        wetted = np.clip(stage / depth, 0, 1) ** (2 / shape) if stage > 0 else 0.0
        store = max(wetted, 0.12) * area
        gain = (
            rain[t] * max(wetted, 0.2) * area
            + runoff * own["catchment"] * area
            - own["shade"] * pet[t] * max(wetted, 0.1 if stage > -0.6 else 0) * area
        )
        gain += own["seep"] * (region + own["offset"] - stage) * max(wetted, 0.12) * area
        stage = np.clip(stage + gain / store, -1.2, depth * 1.02)
        out[t] = stage
    return out, np.where(out > 0, np.clip(out / depth, 0, 1) ** (2 / shape), 0.0)


def _views(world: dict, rng: np.random.Generator) -> pd.DataFrame:
    rows = []
    dates, share, leaf, wetlands = world["dates"], world["share"], world["leaf"], world["wetlands"]
    for t in range(2, len(dates), 5):
        if rng.random() < 0.3:
            continue
        for i, w in enumerate(wetlands.itertuples()):
            if rng.random() < 0.35:
                continue
            sd = (0.09 if w.area_max_m2 < 3000 else 0.05) * w.area_max_m2
            state = leaf[i, t]
            claimed = sd if state == 0 else (2 if state in (1, 3) else 4) * sd
            seen = share[i, t] * w.area_max_m2
            if state == 2 and w.cover != "open":
                seen *= 0.3
            value = np.clip(seen + claimed * rng.standard_normal(), 0, w.area_max_m2)
            name = ("leaf_off", "green_up", "leaf_on", "leaf_fall")[state]
            rows.append(
                (
                    w.wetland_id,
                    f"s{t}",
                    dates[t] + pd.Timedelta(hours=10),
                    value,
                    claimed,
                    0.95,
                    0.9,
                    name,
                    True,
                    "",
                )
            )
    columns = [
        "wetland_id",
        "scene_id",
        "datetime",
        "area_m2",
        "area_sd_m2",
        "clear_fraction",
        "view_fraction",
        "leaf_state",
        "used",
        "reason",
    ]
    return pd.DataFrame(rows, columns=columns)


def make_world(seed: int = 0, wetlands: int = 12, years: int = 3, logged: int = 3) -> World:
    rng = np.random.default_rng(seed)
    spin = pd.date_range("2029-01-01", "2030-08-31")
    dates = pd.date_range("2030-09-01", periods=int(365.25 * years))
    weather = weather_table(spin.append(dates), rng)
    area = np.exp(rng.uniform(np.log(600), np.log(40000), wetlands))
    table = pd.DataFrame({"wetland_id": [f"w{i:04d}" for i in range(wetlands)], "area_max_m2": area})
    table["cover"] = np.array(["deciduous", "deciduous", "deciduous", "open", "evergreen"])[np.arange(wetlands) % 5]
    share, stage, curves, hyps = np.empty((wetlands, len(dates))), np.empty((wetlands, len(dates))), {}, []
    is_logged = np.zeros(wetlands, bool)
    is_logged[rng.permutation(wetlands)[:logged]] = True
    for i in range(wetlands):
        own = {"area": area[i], "depth": 0.5 * (area[i] / 5000) ** 0.25 * np.exp(0.25 * rng.standard_normal()), "shape": rng.uniform(1.0, 4.0),
               "catchment": np.exp(rng.normal(1.2, 0.5)), "seep": np.exp(rng.normal(-3.8, 0.5)), "offset": rng.normal(0.35, 0.2), "shade": rng.uniform(0.6, 1.0)}  # fmt: skip
        level, part = _balance(weather, own, rng)
        stage[i], share[i] = level[len(spin) :], part[len(spin) :]
        grid = np.arange(0, own["depth"] + 0.005, 0.01)
        truth = np.clip(grid / own["depth"], 0, 1) ** (2 / own["shape"]) * area[i]
        wrong = np.clip(truth * (1 + 0.06 * rng.standard_normal()), 0, area[i])
        if is_logged[i]:
            curves[f"w{i:04d}"] = (grid, wrong, 0.04 * area[i])
        bent = np.clip(grid / own["depth"], 0, 1) ** (2 / own["shape"] * np.exp(0.15 * rng.standard_normal())) * area[i]
        hyps.append(pd.DataFrame({"wetland_id": f"w{i:04d}", "stage_m": grid, "area_m2": np.r_[bent[:-1], area[i]]}))
    day = dates.day_of_year.to_numpy()
    state = np.select([(day >= 95) & (day < 125), (day >= 125) & (day < 285), (day >= 285) & (day < 320)], [1, 2, 3], 0)
    leaf = np.repeat(state[None, :], wetlands, axis=0)
    leaf[table["cover"] == "open"] = 0
    leaf_daily = pd.DataFrame(
        {
            "wetland_id": np.repeat(table["wetland_id"].to_numpy(), len(dates)),
            "date": np.tile(dates, wetlands),
        }
    )
    leaf_daily["leaf_state"] = np.array(["leaf_off", "green_up", "leaf_on", "leaf_fall"])[leaf.ravel()]
    stage_rows = []
    for i in np.flatnonzero(is_logged):
        frame = pd.DataFrame(
            {
                "wetland_id": f"w{i:04d}",
                "logger_id": f"L{i}",
                "date": dates,
                "stage_m": stage[i] + 0.015 * rng.standard_normal(len(dates)),
                "stage_sd_m": 0.015,
            }
        )
        frame["censored"] = frame["stage_m"] < -0.4
        frame.loc[frame["censored"], "stage_m"] = -0.4
        stage_rows.append(frame)
    views = _views({"dates": dates, "share": share, "leaf": leaf, "wetlands": table}, rng)
    inputs = SeriesInputs(
        table,
        views,
        pd.concat(stage_rows, ignore_index=True) if stage_rows else None,
        TableRelations(curves),
        pd.concat(hyps, ignore_index=True),
        weather,
        leaf_daily,
        dates[0],
        dates[-1],
    )
    return World(table, dates, share, stage, is_logged, leaf, inputs)
