"""Water-level loggers of the reserve: what they record, what goes wrong, and the field checks."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from inundate.common.seeds import rng_for
from inundate.reserve.plan import LATITUDE_DEG, Plan
from inundate.reserve.scenes import Landscape

FAULTS = (
    ("none",),
    ("move",),
    ("dry", "drift"),
    ("drift",),
    ("below_ground",),
    ("gap",),
    ("spikes",),
    ("dry",),
    ("drift", "spikes"),
    ("none",),
    ("gap", "spikes"),
)
"""Planted faults by logger; a longer network repeats them."""
SURVEY_SD_M = 0.01
"""Error (sd) of the registry's heights: levelling over soft ground. Common practice, no source."""
CHECK_SD_M = 0.01
"""Error (sd) of a field check: a staff read in rippled water. Common practice, no source."""


@dataclass(frozen=True, slots=True)
class LoggerSet:
    """All that is measured on the ground.

    Attributes
    ----------
    registry, barometer, checks, walked : DataFrame
        Tables of the inputs.
    readings : dict of str to DataFrame
        Logger readings by logger_id: time, value, temperature_c.
    truth : DataFrame
        logger_id, fault, start, end, size_m; ``survey`` is what the registry's height says too much.
    """

    registry: pd.DataFrame
    barometer: pd.DataFrame
    checks: pd.DataFrame
    walked: pd.DataFrame
    readings: dict[str, pd.DataFrame]
    truth: pd.DataFrame


def water_density(temperature_c: np.ndarray) -> np.ndarray:
    """Density of pure water, kg/m3 (Tanaka et al. 2001, Metrologia 38:301, eq. 1; constants typed from memory)."""
    t = np.asarray(temperature_c, float)
    return 999.97495 * (1 - (t - 3.983035) ** 2 * (t + 301.797) / (522528.9 * (t + 69.34881)))


def normal_gravity(latitude_deg: float) -> float:
    """Normal gravity at sea level, m/s2 (GRS80, Moritz 2000, J. Geodesy 74:128; constants typed from memory)."""
    s = np.sin(np.radians(latitude_deg)) ** 2
    return float(9.7803267715 * (1 + 0.001931851353 * s) / np.sqrt(1 - 0.00669438002290 * s))


def choose_wetlands(land: Landscape, n: int) -> list[int]:
    """Pick wetlands for loggers: spread over size and cover, and some that dry out."""
    area = np.array([b.polygon.area for b in land.bowls])
    order = np.argsort(area)
    rng = rng_for(land.plan.seed, "logger places", land.plan.size)
    groups = np.array_split(order, n)
    return [int(rng.choice(g)) for g in groups]


def _temperatures(land: Landscape, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """Hourly air and water temperature, degrees C."""
    plan = land.plan
    air_day = land.weather["air_temperature_c"].to_numpy()[-plan.n_days :]
    hours = np.arange(plan.n_days * 24)
    air = np.interp(hours / 24.0 - 0.5, np.arange(plan.n_days), air_day)
    air += 4.0 * np.sin(2 * np.pi * (hours % 24 - 9) / 24.0) + rng.normal(0, 0.3, hours.size)
    water = np.empty(hours.size)
    last = max(air_day[0], 1.0)
    for i, value in enumerate(np.clip(air, 0.5, None)):
        last += (value - last) / 60.0
        water[i] = last
    return air, water


def make_barometer(land: Landscape) -> tuple[np.ndarray, pd.DataFrame]:
    """Return true hourly air pressure (kPa) and the barometer's table: time (UTC, with Z), pressure_kpa; two holes."""
    plan = land.plan
    rng = rng_for(plan.seed, "barometer", plan.size)
    n = plan.n_days * 24
    slow = rng.standard_normal(n // 30 + 4)
    steps = np.empty(slow.size)
    last = 0.0
    for i, value in enumerate(slow):
        last = 0.93 * last + 0.33 * value
        steps[i] = last
    pressure = 99.4 + np.interp(np.arange(n), 30 * np.arange(slow.size), steps)
    pressure += 0.03 * np.sin(2 * np.pi * (np.arange(n) - 4) / 12.0)
    seen = np.round(pressure + rng.normal(0, 0.008, n), 2)
    keep = np.ones(n, bool)
    for length in (4, 30):
        start = int(rng.integers(24 * 20, n - 24 * 20))
        keep[start : start + length] = False
    time = plan.days[0] + pd.to_timedelta(np.arange(n), unit="h")
    table = pd.DataFrame({"time": time.strftime("%Y-%m-%dT%H:%M:%SZ"), "pressure_kpa": seen})[keep]
    return pressure, table


def _visits(plan: Plan, rng: np.random.Generator) -> list[int]:
    """Hours (from the start) of field visits, every two to four months, in daytime."""
    hours, day = [], int(rng.integers(3, 25))
    while day < plan.n_days - 2:
        hours.append(day * 24 + int(rng.integers(9, 16)))
        day += int(rng.integers(60, 121))
    return hours


def _height(faults: tuple[str, ...], stage: np.ndarray, rng: np.random.Generator) -> float:
    """Height of the sensor's zero above the lowest ground, m."""
    if "below_ground" in faults:
        return -round(float(rng.uniform(0.9, 1.2)), 3)
    if "dry" in faults:
        wet = stage[stage > 0.05]
        return round(float(np.quantile(wet, 0.2)) if wet.size else 0.1, 3)
    return round(float(rng.uniform(-0.30, 0.03)), 3)


def _spells(mask: np.ndarray, shortest: int) -> list[tuple[int, int]]:
    edges = np.flatnonzero(np.diff(np.concatenate([[0], mask.astype(np.int8), [0]])))
    return [(int(a), int(b)) for a, b in zip(edges[::2], edges[1::2], strict=True) if b - a >= shortest]


@dataclass(slots=True)
class _Log:
    """Working state of one logger: drift (m, in air as well), lowering by a move (m), hours lost, spikes, planted faults."""

    drift: np.ndarray
    moved: np.ndarray
    lost: np.ndarray
    spike_kpa: np.ndarray
    rows: list[dict]


def _plant(log: _Log, faults: tuple[str, ...], rng: np.random.Generator, visits: list[int]) -> None:
    """Plant drift, move, gap and spikes."""
    n = log.drift.size
    if "drift" in faults:
        size = float(rng.choice([-1, 1]) * rng.uniform(0.02, 0.05))
        log.drift += size * np.arange(n) / n
        log.rows.append({"fault": "drift", "start": 0, "end": n - 1, "size_m": size})
    if "move" in faults:
        at = int(rng.uniform(0.35, 0.65) * n)
        size = float(rng.choice([-1, 1]) * rng.uniform(0.05, 0.12))
        log.moved[at:] += size
        log.rows.append({"fault": "move", "start": at, "end": at, "size_m": size})
    if "gap" in faults:
        length = int(rng.integers(14, 45)) * 24
        at = int(rng.uniform(0.15, 0.8) * (n - length))
        log.lost[at : at + length] = True
        log.rows.append({"fault": "gap", "start": at, "end": at + length - 1, "size_m": np.nan})
    if "spikes" in faults:
        for _ in range(max(6, n // 1100)):
            at, length = int(rng.integers(10, n - 10)), int(rng.integers(1, 4))
            size = float(rng.choice([-1, 1]) * np.exp(rng.uniform(np.log(0.08), np.log(0.8))))
            log.spike_kpa[at : at + length] += size * 9.81
            log.rows.append({"fault": "spike", "start": at, "end": at + length - 1, "size_m": size})
    for hour in visits:
        log.rows.append({"fault": "download", "start": hour, "end": hour, "size_m": np.nan})


def _checks(plan: Plan, rng: np.random.Generator, name: str, stage: np.ndarray, hours: list[int]) -> pd.DataFrame:
    """Field readings of stage, 40 minutes before the sensor is lifted for download, with the error that they state."""
    rows = []
    for hour in hours:
        when = plan.days[0] + pd.Timedelta(hours=hour - 1, minutes=20)
        seen = 0.5 * (stage[max(hour - 1, 0)] + stage[hour]) + rng.normal(0, CHECK_SD_M)
        rows.append(
            {
                "logger_id": name,
                "time": f"{when:%Y-%m-%dT%H:%M:%SZ}",
                "stage_m": round(seen, 3),
                "sd_m": CHECK_SD_M,
            }
        )
    return pd.DataFrame(rows)


def _one_logger(
    land: Landscape, place: int, name: str, faults: tuple[str, ...], pressure: np.ndarray
) -> tuple[dict, pd.DataFrame, pd.DataFrame, pd.DataFrame]:
    """Registry row, readings, checks and truth of one logger."""
    plan = land.plan
    rng = rng_for(plan.seed, "logger", name)
    stage = land.water.hourly[place]
    n = stage.size
    height = _height(faults, land.water.daily[place], rng)
    visits = _visits(plan, rng)
    log = _Log(np.zeros(n), np.zeros(n), np.zeros(n, bool), np.zeros(n), [])
    _plant(log, faults, rng, visits)
    air, water = _temperatures(land, rng)
    column = np.maximum(stage - (height - log.moved), 0.0)
    out = np.zeros(n, bool)
    out[visits] = True
    column = np.where(out, 0.0, column)
    dry = column <= 0
    temperature = np.where(dry, air, water) + rng.normal(0, 0.05, n)
    offset_kpa = float(np.clip(rng.normal(0, 0.02), -0.04, 0.04))
    warm = 0.0008 * (temperature - 10.0)
    value = pressure + water_density(np.clip(water, 0, 40)) * normal_gravity(LATITUDE_DEG) * column / 1000.0
    value = value + offset_kpa + warm + rng.normal(0, 0.014, n) + log.spike_kpa + 9.81 * log.drift
    shift_h = int(rng.integers(0, 2))
    time = plan.days[0] + pd.to_timedelta(np.arange(n) + shift_h, unit="h")
    readings = pd.DataFrame(
        {
            "time": time.strftime("%Y-%m-%d %H:%M:%S"),
            "value": np.round(value, 2),
            "temperature_c": np.round(temperature, 1),
        }
    )[~log.lost]
    # a visitor reads the staff; below ground only a well tells
    checks = _checks(plan, rng, name, stage, [h for h in visits if stage[h] >= 0.0 or height < -0.5])
    for a, b in _spells(dry & ~out, 6):
        log.rows.append({"fault": "dry", "start": a, "end": b - 1, "size_m": np.nan})
    real = [r for r in log.rows if r["fault"] not in ("download", "dry")]
    if not real and "dry" not in faults:
        log.rows.append({"fault": "none", "start": 0, "end": n - 1, "size_m": np.nan})
    # a stream of its own, so that readings and checks do not depend on it
    told = round(height + float(rng_for(plan.seed, "survey", name).normal(0, SURVEY_SD_M)), 3)
    log.rows.append({"fault": "survey", "start": 0, "end": n - 1, "size_m": told - height})
    truth = pd.DataFrame(log.rows)
    truth.insert(0, "logger_id", name)
    for key in ("start", "end"):
        truth[key] = plan.days[0] + pd.to_timedelta(truth[key].to_numpy(), unit="h")
    registry = {
        "logger_id": name,
        "wetland_id": land.bowls[place].wetland_id,
        "file": f"readings/{name}.csv",
        "kind": "absolute",
        "unit": "kPa",
        "height_m": told,
        "height_sd_m": SURVEY_SD_M,
        "valid_from": f"{plan.days[0]:%Y-%m-%d}",
        "valid_to": "",
        "utc_offset": f"+0{shift_h}:00",
    }
    return registry, readings, checks, truth


def _walked(land: Landscape) -> pd.DataFrame:
    """Areas walked on the ground with a satellite receiver: a few wetlands, a few days each, error 4 %."""
    rng = rng_for(land.plan.seed, "walked", land.plan.size)
    area = np.array([b.polygon.area for b in land.bowls])
    fit = np.flatnonzero((area > 800) & (area < 20000))
    chosen = np.sort(rng.choice(fit, min(6 if land.plan.size == "default" else 2, fit.size), replace=False))
    rows = []
    for place in chosen:
        days = np.flatnonzero(land.water.area_daily[place] > 0.08 * area[place])
        if days.size == 0:
            continue
        for day in np.sort(rng.choice(days, min(4, days.size), replace=False)):
            true = land.water.area_daily[place, day]
            sd = 0.04 * true + 8.0
            rows.append(
                {
                    "wetland_id": land.bowls[place].wetland_id,
                    "date": f"{land.plan.days[day]:%Y-%m-%d}",
                    "area_m2": round(float(np.clip(true + rng.normal(0, sd), 0, area[place])), 1),
                    "sd_m2": round(float(sd), 1),
                }
            )
    return pd.DataFrame(rows, columns=["wetland_id", "date", "area_m2", "sd_m2"])


def make_loggers(land: Landscape) -> LoggerSet:
    """Make all loggers, the barometer, the field checks and the walked extents."""
    pressure, barometer = make_barometer(land)
    places = choose_wetlands(land, land.plan.n_loggers)
    turn = rng_for(land.plan.seed, "fault order", land.plan.size).permutation(len(places))
    registry, readings, checks, truth = [], {}, [], []
    for k, place in enumerate(places):
        name = f"L{k + 1:02d}"
        faults = FAULTS[int(turn[k]) % len(FAULTS)]
        row, table, check, fact = _one_logger(land, place, name, faults, pressure)
        registry.append(row)
        readings[name] = table
        checks.append(check)
        truth.append(fact)
    return LoggerSet(
        pd.DataFrame(registry),
        barometer,
        pd.concat([c for c in checks if not c.empty], ignore_index=True),
        _walked(land),
        readings,
        pd.concat(truth, ignore_index=True),
    )
