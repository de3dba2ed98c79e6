"""Records not like the demo's: other intervals, lengths, swings, always dry, frozen all winter, stuck, nearly empty."""

from __future__ import annotations

import dataclasses

import numpy as np
import pandas as pd
import pytest

from inundate.common.errors import InputError
from inundate.stage import daily_stage
from tests.stage_scenario import Made, make, score

TOLD = {"survey_sd_m": 0.01, "zero_sd_m": 0.005}


def run(made: Made):
    """The stage record."""
    return daily_stage(made.registry, made.readings, made.barometer, made.checks, made.latitudes, weather=made.weather)


def every(made: Made, seconds: int) -> Made:
    """The same records, read at another interval (between hours, with noise of 2 mm)."""
    out = {}
    for k, (name, got) in enumerate(made.readings.items()):
        time = np.arange(got.time[0], got.time[-1], np.timedelta64(seconds, "s"))
        # the value stays till the next reading of the hour, so that a move stays sudden
        at = np.searchsorted(got.time, time, side="right") - 1
        air = np.interp(time.astype(float), made.barometer.time.astype(float), made.barometer.pressure_kpa)
        own = np.interp(got.time.astype(float), made.barometer.time.astype(float), made.barometer.pressure_kpa)
        noise = np.random.default_rng(k).normal(0, 0.02, time.size) if seconds < 3600 else 0.0
        value = np.round((got.value - own)[at] + air + noise, 3)
        out[name] = dataclasses.replace(got, time=time, value=value, temperature_c=got.temperature_c[at])
    return dataclasses.replace(made, readings=out)


def lifted(made: Made, lift_m) -> Made:
    """The same ponds with something added to their level, a function of hours since the start."""
    start = next(iter(made.truth.values())).index[0]
    out, truth = {}, {}
    for name, got in made.readings.items():
        hours = (got.time - start.to_datetime64()) / np.timedelta64(1, "h")
        out[name] = dataclasses.replace(got, value=np.round(got.value + 9.8 * lift_m(hours), 3))
        truth[name] = made.truth[name] + lift_m(np.arange(len(made.truth[name])))
    hours = (made.checks["time"] - start) / pd.Timedelta(hours=1)
    checks = made.checks.assign(stage_m=made.checks["stage_m"] + lift_m(hours.to_numpy()))
    return dataclasses.replace(made, readings=out, truth=truth, checks=checks)


def melt(hours):
    """Half a year dry of snow, then 35 cm within six days, gone within two months."""
    season = hours % 8766
    return 0.35 * np.clip((season - 4000) / 150, 0, 1) * np.clip(1 - (season - 4500) / 1500, 0, 1)


MOVED = {"L2": ("drift", "spikes"), "L3": ("move",)}


@pytest.mark.parametrize(
    ("sort", "worst_cm", "steps"),
    [
        (lambda: every(make(1, faults=MOVED, **TOLD), 900), 0.6, 1),
        (lambda: every(make(1, faults=MOVED, **TOLD), 3 * 3600), 1.0, 1),
        (lambda: every(make(1, faults=MOVED, **TOLD), 86400), 1.6, 1),
        (lambda: make(1, years=0.17, **TOLD), 1.0, 0),
        (lambda: make(1, years=10, faults=MOVED, **TOLD), 0.6, 1),
        (lambda: lifted(make(1, **TOLD), lambda h: 0.10 * np.sin(2 * np.pi * h / 12.42)), 0.6, 0),
        (lambda: lifted(make(1, **TOLD), lambda h: 0.05 * np.sin(2 * np.pi * h / 24)), 0.6, 0),
        (lambda: lifted(make(1, **TOLD), melt), 0.6, 0),
        (lambda: make(1, noise_m=0.03, **TOLD), 2.0, 0),
        (lambda: dataclasses.replace(make(1, faults=MOVED, **TOLD), weather=None), 0.6, 1),
    ],
    ids=[
        "15 minutes", "3 hours", "daily", "two months", "ten years", "tide", "daily swing", "snowmelt", "noisy", "no weather"
    ],
)  # fmt: skip
def test_other_sorts_of_record(sort, worst_cm, steps):
    """Errors stay small and within two stated sd, only the planted move is found, and little is left out."""
    made = sort()
    got = run(made)
    table = score(made, got.daily)
    assert table["rmse_cm"].max() < worst_cm
    # four loggers whose errors are nearly one draw each: three of them within two sd
    assert (table["within2"] > 0.8).sum() >= 3
    found = got.corrections[got.corrections["kind"] == "step"]
    assert found["logger_id"].tolist() == ["L3"] * steps
    for row in found.itertuples():
        hours = made.truth["L3"].index
        planted = hours[int(len(hours) * 0.62)]
        # the scenario takes the last time before this at which the sensor is 25 cm under water
        assert planted - pd.Timedelta(days=60) <= row.start <= planted + pd.Timedelta(days=1)
        assert row.value_m == pytest.approx(0.07, abs=0.012)
    flags = pd.concat([frame["flag"] for frame in got.flagged.values()])
    assert flags.isin(["good", "at_or_below_sensor"]).mean() > 0.98


def test_a_sensor_that_is_always_dry_is_censored_throughout():
    made = make(1, n=2, years=0.5)
    air = dict(zip(made.barometer.time, made.barometer.pressure_kpa, strict=True))
    rng = np.random.default_rng(5)
    out = {
        name: dataclasses.replace(got, value=np.array([air[t] for t in got.time]) + rng.normal(0.03, 0.02, got.time.size))
        for name, got in made.readings.items()
    }  # fmt: skip
    got = run(dataclasses.replace(made, readings=out, checks=made.checks.iloc[:0]))
    assert got.daily["censored"].all()
    assert (got.daily["quality"] == "at_or_below_sensor").all()
    for name, rows in got.daily.groupby("logger_id"):
        np.testing.assert_allclose(rows["stage_m"], made.height[name], atol=1e-6)


def test_ice_all_winter_that_presses_slowly_is_left_out():
    """No sudden change anywhere, but the level moves far more at freezing point than ever else: no stage is made of it."""
    made = make(1, n=2, **TOLD)
    out = {}
    for name, got in made.readings.items():
        rng = np.random.default_rng(6)
        winter = np.isin(pd.DatetimeIndex(got.time).month, [12, 1, 2, 3])
        warmth, value = got.temperature_c.copy(), got.value.copy()
        warmth[winter] = np.round(rng.normal(0.1, 0.1, winter.sum()), 1)
        value[winter] += np.convolve(rng.normal(0, 0.1, got.time.size), np.ones(72), "same")[winter]
        out[name] = dataclasses.replace(got, value=value, temperature_c=warmth)
    got = run(dataclasses.replace(made, readings=out))
    assert not got.daily["date"].dt.month.isin([12, 1, 2]).any()
    assert score(made, got.daily)["rmse_cm"].max() < 0.6
    # the same cold without pressing is calm water under ice, and stays
    calm = {name: dataclasses.replace(made.readings[name], temperature_c=out[name].temperature_c) for name in out}
    kept = run(dataclasses.replace(made, readings=calm)).daily
    assert kept["date"].dt.month.isin([12, 1, 2]).mean() > 0.2


def test_coarse_readings_are_not_called_stuck():
    """A sensor that tells a tenth of a kPa stays on one value for hours while the air moves by half as much."""
    made = make(1, n=2, **TOLD)
    out = {k: dataclasses.replace(r, value=np.round(r.value, 1)) for k, r in made.readings.items()}
    got = run(dataclasses.replace(made, readings=out))
    for frame in got.flagged.values():
        assert not (frame["flag"] == "flat").any()
    assert score(made, got.daily)["rmse_cm"].max() < 0.6


def test_a_handful_of_readings_gives_days_and_no_crash():
    made = make(1, **TOLD)
    cut = dict(zip(made.readings, (1, 2, 5, 30), strict=True))
    out = {
        k: dataclasses.replace(
            r, time=r.time[: cut[k]], value=r.value[: cut[k]], temperature_c=r.temperature_c[: cut[k]]
        )
        for k, r in made.readings.items()
    }
    got = run(dataclasses.replace(made, readings=out, checks=made.checks.iloc[:0]))
    assert got.daily["n"].tolist() == [1, 2, 5, 24, 6]
    # nothing but the survey and the sensor's accuracy speaks: 1 cm and 5 mm, or worse
    assert got.daily["stage_sd_m"].between(0.011, 0.03).all()


def test_nothing_but_stuck_loggers_is_told():
    made = make(1, n=2, years=0.5)
    out = {k: dataclasses.replace(r, value=np.full(r.time.size, 103.0)) for k, r in made.readings.items()}
    with pytest.raises(
        InputError, match=r"none of 2 loggers can be used; the first: logger L1: no usable reading is left"
    ):
        run(dataclasses.replace(made, readings=out))
