"""A made water year of loggers with known faults, for the tests of the stage part."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from inundate.stage import Barometer, Readings
from inundate.stage.physics import gravity, water_density

LATITUDE = 52.0


@dataclass
class Made:
    """Inputs of ``daily_stage`` and the truth behind them."""

    registry: pd.DataFrame
    readings: dict[str, Readings]
    barometer: Barometer
    checks: pd.DataFrame
    weather: pd.DataFrame
    truth: dict[str, pd.Series] = field(default_factory=dict)  # hourly stage by logger
    height: dict[str, float] = field(default_factory=dict)

    @property
    def latitudes(self) -> dict[str, float]:
        return dict.fromkeys(self.registry["wetland_id"], LATITUDE)


def row(logger_id: str, height_m: float, **more: object) -> dict:
    """One registry row with defaults."""
    out = {
        "logger_id": logger_id,
        "wetland_id": logger_id.replace("L", "W"),
        "file": "",
        "kind": "absolute",
        "unit": "kPa",
        "height_m": height_m,
        "valid_from": pd.NaT,
        "valid_to": pd.NaT,
        "utc_offset": "",
    }
    return {**out, **more}


def air(rng: np.random.Generator, hours: int) -> np.ndarray:
    """Hourly air pressure, kPa: weather of days, a tide of half a day, and noise."""
    steps = rng.normal(0, 0.06, hours)
    out = np.zeros(hours)
    for i in range(1, hours):
        out[i] = 0.99 * out[i - 1] + steps[i]
    out = np.convolve(out, np.ones(5) / 5, "same")
    return 100.5 + out * 1.2 + 0.05 * np.sin(np.arange(hours) * 2 * np.pi / 12)


def pool(rng: np.random.Generator, rain_mm: np.ndarray, season: np.ndarray) -> np.ndarray:
    """Hourly stage of a small pool: rain with catchment gain, evaporation, seepage, spill."""
    gain, leak, sill = rng.uniform(2, 4), rng.uniform(0.002, 0.006), rng.uniform(0.6, 1.0)
    level, out = 0.4, np.empty(rain_mm.size)
    for i in range(rain_mm.size):
        loss = (0.001 + 0.006 * season[i]) / 24 * gain * 0.6 + leak / 24 * max(level + 0.3, 0)
        level = min(level + rain_mm[i] / 1000 * gain - loss, sill)
        level = max(level, -0.8)
        out[i] = level
    return out


def make(
    seed: int = 0,
    *,
    years: float = 2.0,
    n: int = 4,
    faults: dict[str, tuple[str, ...]] | None = None,
    noise_m: float = 0.003,
    survey_sd_m: float = 0.0,
    zero_sd_m: float = 0.0,
) -> Made:
    """Make ``n`` loggers L1..Ln; ``faults`` gives each any of drift, move, spikes, gap, offset.

    ``survey_sd_m`` and ``zero_sd_m``: errors of the registry's heights and of the sensors' zeros.
    """
    rng = np.random.default_rng(seed)
    faults = faults or {}
    hours = int(years * 8766)
    time = np.datetime64("2021-10-01T00:00", "ns") + np.arange(hours) * np.timedelta64(3600, "s")
    doy = np.arange(hours) / 24
    season = np.clip(np.sin(2 * np.pi * (doy - 150) / 365.25), 0, 1)
    wet_day = rng.random(hours // 24 + 2) < 0.35
    rain = np.where(wet_day[(np.arange(hours) // 24)], rng.gamma(0.15, 3.0, hours), 0.0) * 1.1
    warmth = 10 - 9 * np.cos(2 * np.pi * (doy - 110 + 365) / 365.25)
    pressure = air(rng, hours)
    registry, readings, checks, truth, height = [], {}, [], {}, {}
    for k in range(n):
        name = f"L{k + 1}"
        own = np.random.default_rng([seed, k])
        level = pool(own, rain * own.uniform(0.8, 1.2), season)
        h = float(np.round(own.uniform(-0.1, 0.15), 3))
        depth = np.maximum(level - h, 0.0)
        bad = faults.get(name, ())
        if "move" in bad:
            at = int(hours * 0.62)
            while level[at] - h < 0.25:
                at -= 24
            depth = np.maximum(level - h - np.where(np.arange(hours) >= at, 0.07, 0.0), 0)
        if "offset" in bad:
            depth = depth + 0.01
        if "drift" in bad:
            depth = depth + 0.05 * np.arange(hours) / 8766 / years
        total = pressure * 1000 + depth * water_density(warmth) * gravity(LATITUDE)
        total += own.normal(0, noise_m * 9800, hours)
        total = np.round(total / 1000, 3)
        keep = np.ones(hours, bool)
        if "spikes" in bad:
            total[own.choice(hours, 60, replace=False)] += own.normal(0, 4, 60)
        if "gap" in bad:
            at = int(hours * 0.4)
            keep[at : at + 24 * 19] = False
        # drawn from another stream, so that the same seed makes the same water with and without these errors
        error = np.random.default_rng([seed, k, 1])
        told = h + error.normal(0, survey_sd_m) if survey_sd_m else h
        total += error.normal(0, zero_sd_m) * 9.8 if zero_sd_m else 0.0
        registry.append(row(name, told))
        readings[name] = Readings(
            f"{name}.csv", time[keep], total[keep], np.round(warmth, 1).astype(np.float32)[keep], n_rows=int(keep.sum())
        )
        for i in np.arange(200, hours - 100, 24 * 45):
            checks.append((name, time[i], level[i] + own.normal(0, 0.005), 0.005))
        truth[name], height[name] = pd.Series(level, time), h
    table = pd.DataFrame(checks, columns=["logger_id", "time", "stage_m", "sd_m"])
    daily_rain = pd.Series(rain, time).resample("D").sum()
    weather = pd.DataFrame({"date": daily_rain.index, "precipitation_mm": daily_rain.to_numpy()})
    baro = Barometer("barometer.csv", time, np.round(pressure, 3))
    return Made(pd.DataFrame(registry), readings, baro, table, weather, truth, height)


def score(made: Made, daily: pd.DataFrame) -> pd.DataFrame:
    """Daily error, coverage and dry agreement of every logger."""
    rows = []
    for name, hourly in made.truth.items():
        true = hourly.resample("D").mean()
        mine = daily[daily["logger_id"] == name].set_index("date")
        true = true.reindex(mine.index)
        dry_true = (true <= made.height[name]).to_numpy()
        dry = mine["censored"].to_numpy()
        both = ~dry & ~dry_true
        error = (mine["stage_m"] - true).to_numpy()[both]
        z = np.abs(error) / mine["stage_sd_m"].to_numpy()[both]
        rows.append(
            {
                "logger_id": name,
                "rmse_cm": 100 * np.sqrt(np.mean(error**2)),
                "bias_cm": 100 * error.mean(),
                "sd_cm": 100 * mine["stage_sd_m"][both].mean(),
                "within1": (z < 1).mean(),
                "within2": (z < 2).mean(),
                "dry_right": (dry == dry_true).mean(),
                "dry_share": dry_true.mean(),
                "days": both.sum(),
            }
        )
    return pd.DataFrame(rows)
