"""How honest the stated sd of stage is, over many loggers.

``python -m tests.bench.stage_honesty [SEEDS [demo|made|clock]]``; ``clock`` measures how well wrong clocks are found.

Two sorts of records. *demo*: the loggers of the invented reserve without its scenes, of many seeds (11 loggers each).
*made*: records of ``tests/stage_scenario.py`` with a survey error of 1 cm and a sensor zero of 5 mm (sd, as the tool takes
them where nothing is told), changed in one way each: checks left out or many, drift, a wrong clock, other kinds of logger,
frost, long holes. The error of a logger is mostly one draw, so the shares tell something only over many loggers: with
``n`` of them the standard error of a share of 68 % is ``47 / sqrt(n)`` percent.
"""

from __future__ import annotations

import dataclasses
import sys
import tempfile
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd

from inundate.stage import LoggerFiles, daily_stage, read_barometer, read_registry
from inundate.stage.clock import clock_spells
from inundate.stage.physics import gravity, water_density
from inundate.stage.signals import HOUR_NS
from tests.bench import stage_skill
from tests.stage_reserve import write_ground_data
from tests.stage_scenario import LATITUDE, Made, make, score

TOLD = {"survey_sd_m": 0.01, "zero_sd_m": 0.005}


def with_checks(made: Made, seed: int, every_d: float, sd_m: float = 0.01) -> Made:
    """Checks at another interval, with the error that they state."""
    rng = np.random.default_rng([seed, 99])
    rows = []
    for name, level in made.truth.items():
        for i in np.arange(100 + int(rng.integers(0, 24 * every_d)), len(level) - 50, int(24 * every_d)):
            rows.append((name, level.index[i], level.iloc[i] + rng.normal(0, sd_m), sd_m))
    return dataclasses.replace(made, checks=pd.DataFrame(rows, columns=["logger_id", "time", "stage_m", "sd_m"]))


def as_kind(made: Made, kind: str) -> Made:
    """The same water told by vented sensors (kPa) or as level (cm)."""
    out = {}
    for name, got in made.readings.items():
        air = np.interp(got.time.astype(float), made.barometer.time.astype(float), made.barometer.pressure_kpa)
        gauge = got.value - air
        if kind == "level":
            value = np.round(gauge * 1000 / (water_density(got.temperature_c) * gravity(LATITUDE)) * 100, 1)
        else:
            value = np.round(gauge, 3)
        out[name] = dataclasses.replace(got, value=value)
    unit = {"vented": "kPa", "level": "cm"}[kind]
    return dataclasses.replace(made, registry=made.registry.assign(kind=kind, unit=unit), readings=out)


def wrong_clock(made: Made, seed: int) -> Made:
    """Clocks one to five hours off, half of them only in summer."""
    rng = np.random.default_rng([seed, 98])
    out = {}
    for k, (name, got) in enumerate(made.readings.items()):
        off = np.timedelta64(int(rng.integers(1, 6)), "h") * int(rng.choice([-1, 1]))
        month = pd.DatetimeIndex(got.time).month
        wrong = np.isin(month, range(4, 11)) if k % 2 else np.ones(got.time.size, bool)
        time = np.where(wrong, got.time + off, got.time)
        order = np.argsort(time, kind="stable")
        once = np.r_[True, np.diff(time[order]) > np.timedelta64(0)]
        pick = order[once]
        out[name] = dataclasses.replace(
            got, time=time[pick], value=got.value[pick], temperature_c=got.temperature_c[pick]
        )
    return dataclasses.replace(made, readings=out)


def drifting(made: Made, seed: int, sd_m: float = 0.01) -> Made:
    """A linear drift of each logger, drawn with an sd of so much a year."""
    rng = np.random.default_rng([seed, 95])
    out = {}
    for name, got in made.readings.items():
        years = (got.time - got.time[0]) / np.timedelta64(1, "D") / 365.25
        out[name] = dataclasses.replace(got, value=np.round(got.value + 9.8 * rng.normal(0, sd_m) * years, 3))
    return dataclasses.replace(made, readings=out)


def frozen(made: Made, seed: int) -> Made:
    """Three weeks of ice each winter that presses and lifts, sensors at freezing point."""
    rng = np.random.default_rng([seed, 97])
    out = {}
    for name, got in made.readings.items():
        stamps = pd.DatetimeIndex(got.time)
        value, warmth = got.value.copy(), got.temperature_c.copy()
        for year in sorted(set(stamps.year)):
            first = pd.Timestamp(year, 1, int(rng.integers(5, 20)))
            icy = np.asarray((stamps >= first) & (stamps < first + pd.Timedelta(days=21)))
            warmth[icy] = np.round(rng.normal(-0.05, 0.08, int(icy.sum())), 1)
            press = np.repeat(rng.normal(0, 1.0, icy.sum() // 30 + 1), 30)[: icy.sum()]
            value[icy] += np.where(np.arange(icy.sum()) < 24, 0.0, press)
        out[name] = dataclasses.replace(got, value=value, temperature_c=warmth)
    return dataclasses.replace(made, readings=out)


def holed(made: Made, seed: int) -> Made:
    """Half of every record missing, in holes of one to four months."""
    rng = np.random.default_rng([seed, 96])
    out = {}
    for name, got in made.readings.items():
        keep = np.ones(got.time.size, bool)
        while keep.mean() > 0.5:
            at = int(rng.integers(0, got.time.size))
            keep[at : at + 24 * int(rng.integers(30, 120))] = False
        out[name] = dataclasses.replace(
            got, time=got.time[keep], value=got.value[keep], temperature_c=got.temperature_c[keep]
        )
    return dataclasses.replace(made, readings=out)


def everywhere(*faults: str) -> dict[str, tuple[str, ...]]:
    """The same faults in every logger."""
    return {f"L{k}": faults for k in range(1, 11)}


VARIANTS: dict[str, Callable[[int], Made]] = {
    "a check every 45 days": lambda s: make(s, n=10, **TOLD),
    "no checks": lambda s: with_checks(make(s, n=10, **TOLD), s, 1e4),
    "two checks": lambda s: with_checks(make(s, n=10, **TOLD), s, 360),
    "a check every 5 days": lambda s: with_checks(make(s, n=10, **TOLD), s, 5),
    "checks of 3 cm": lambda s: with_checks(make(s, n=10, **TOLD), s, 45, 0.03),
    "drift 2.5 cm a year": lambda s: make(s, n=10, faults=everywhere("drift"), **TOLD),
    "drift 1 cm a year (sd)": lambda s: drifting(make(s, n=10, **TOLD), s),
    "the same, no checks": lambda s: drifting(with_checks(make(s, n=10, **TOLD), s, 1e4), s),
    "moved 7 cm": lambda s: make(s, n=10, faults=everywhere("move"), **TOLD),
    "moved, spikes, drift": lambda s: make(s, n=10, faults=everywhere("move", "spikes", "drift"), **TOLD),
    "wrong clocks": lambda s: wrong_clock(make(s, n=10, **TOLD), s),
    "vented": lambda s: as_kind(make(s, n=10, **TOLD), "vented"),
    "level": lambda s: as_kind(make(s, n=10, **TOLD), "level"),
    "frost": lambda s: frozen(make(s, n=10, **TOLD), s),
    "half in holes": lambda s: holed(make(s, n=10, **TOLD), s),
    "noise of 2 cm": lambda s: make(s, n=10, noise_m=0.02, **TOLD),
    "a short year": lambda s: make(s, n=10, years=0.4, **TOLD),
}


def pool(tables: list[pd.DataFrame]) -> str:
    """One line: loggers, days, RMSE, stated sd, shares within one and two sd weighted by days."""
    every = pd.concat(tables)
    every = every[every["days"] > 0]
    w = every["days"].to_numpy(float)

    def mean(x: pd.Series) -> float:
        return float(np.average(x, weights=w))

    return (
        f"{len(every):4d} loggers {int(w.sum()):6d} days  RMSE {np.sqrt(mean(every['rmse_cm'] ** 2)):.2f} cm  "
        f"sd {mean(every['sd_cm']):.2f} cm  within 1 sd {100 * mean(every['in_1sd']):5.1f} %  "
        f"2 sd {100 * mean(every['in_2sd']):5.1f} %  (a logger's middle day: {100 * (every['in_1sd'] > 0.5).mean():.0f} %, "
        f"{100 * (every['in_2sd'] > 0.5).mean():.0f} %)"
    )


def demo(seeds: int) -> None:
    """Loggers of the reserve, by planted fault."""
    tables = []
    with tempfile.TemporaryDirectory() as name:
        for seed in range(1, seeds + 1):
            folder = Path(name) / str(seed)
            write_ground_data(folder, seed)
            tables.append(stage_skill.score(folder, stage_skill.run(folder).daily))
    every = pd.concat(tables, ignore_index=True)
    print(f"{'demo, all':24s} {pool([every])}", flush=True)
    worn = every["faults"].str.contains("drift|spike|gap|move")
    for word, part in (("no fault", ~worn), *((k, every["faults"].str.contains(k)) for k in ("drift", "move", "gap"))):
        print(f"{'demo, ' + word:24s} {pool([every[part]])}", flush=True)


def clock(seeds: int) -> None:
    """How well summer time left in a clock is found in the reserve's loggers, and how often a right clock is changed."""
    right, false, number = [], 0, 0
    with tempfile.TemporaryDirectory() as name:
        for seed in range(1, seeds + 1):
            folder = Path(name) / str(seed)
            write_ground_data(folder, seed)
            registry = read_registry(folder / "inputs/loggers.csv")
            barometer = read_barometer(folder / "inputs/barometer.csv")
            air = (barometer.time.view(np.int64), barometer.pressure_kpa * 1000)
            for got in LoggerFiles(registry).values():
                number += 1
                time, pascal = got.time.view(np.int64), got.value * 1000
                false += len(clock_spells(time, pascal, *air))
                summer = np.isin(pd.DatetimeIndex(got.time).month, range(4, 11))
                told = time + np.where(summer, HOUR_NS, 0)
                order = np.argsort(told, kind="stable")
                order = order[np.r_[True, np.diff(told[order]) > 0]]
                added = np.zeros(order.size)
                for spell in clock_spells(told[order], pascal[order], *air):
                    added[(told[order] >= spell.start) & (told[order] <= spell.end)] = spell.hours
                right.append(float(((added == -1) == summer[order]).mean()))
    print(
        f"demo, clock: {number} loggers; right clocks changed: {false} spells; summer time: {100 * np.mean(right):.1f} % of hours "
        f"right, {100 * min(right):.1f} % in the worst"
    )


def main() -> None:
    """Print a line for each sort of record."""
    seeds = int(sys.argv[1]) if len(sys.argv) > 1 else 8
    which = sys.argv[2] if len(sys.argv) > 2 else ""
    if which in ("", "clock"):
        clock(seeds)
    if which in ("", "demo"):
        demo(seeds)
    for word, variant in VARIANTS.items():
        if which in ("demo", "clock") or (which not in ("", "made") and which not in word):
            continue
        tables = []
        for seed in range(seeds):
            made = variant(100 + seed)
            result = daily_stage(
                made.registry,
                made.readings,
                made.barometer,
                made.checks,
                made.latitudes,
                weather=made.weather,
            )
            table = score(made, result.daily)
            tables.append(table.rename(columns={"within1": "in_1sd", "within2": "in_2sd"}))
        print(f"{word:24s} {pool(tables)}", flush=True)


if __name__ == "__main__":
    main()
