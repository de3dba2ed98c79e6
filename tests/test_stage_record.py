"""From readings to days: known faults are found, sized, dated and told; bad input is said clearly."""

import dataclasses

import numpy as np
import pandas as pd
import pytest

from inundate.common.errors import InputError
from inundate.stage import Barometer, Readings, StageOptions, build_record, daily_stage, wetland_daily
from inundate.stage.physics import gravity, water_density
from tests.stage_scenario import LATITUDE, make, row, score

HOUR = np.timedelta64(3600, "s")
FAULTS = {"L2": ("drift", "spikes"), "L3": ("move", "gap"), "L4": ("drift", "move", "spikes", "gap", "offset")}


def run(made, **options):
    return daily_stage(
        made.registry,
        made.readings,
        made.barometer,
        made.checks,
        made.latitudes,
        StageOptions(**options),
        weather=made.weather,
    )


@pytest.fixture(scope="module")
def made():
    return make(0, faults=FAULTS)


@pytest.fixture(scope="module")
def result(made):
    return run(made)


def still(depth_m, *, hours=24 * 40, kind="absolute", noise=0.0, seed=0, warmth=4.0):
    """A sensor under water of given depth (scalar or hourly) and a wandering barometer."""
    rng = np.random.default_rng(seed)
    time = np.datetime64("2024-01-01T00:00", "ns") + np.arange(hours) * HOUR
    air = 100.0 + np.cumsum(rng.normal(0, 0.04, hours))
    gauge = np.broadcast_to(depth_m, hours) * water_density(warmth) * gravity(LATITUDE) / 1000
    value = gauge + rng.normal(0, noise * 9.8, hours) + (air if kind == "absolute" else 0.0)
    readings = Readings("L1.csv", time, value, np.full(hours, warmth, np.float32), n_rows=hours)
    return readings, Barometer("barometer.csv", time, air)


def one(readings, barometer, checks=None, height=0.1, **more):
    return build_record(pd.DataFrame([row("L1", height, **more)]), readings, barometer, checks, LATITUDE)


def test_daily_stage_is_right_and_its_sd_is_no_boast(made, result):
    """Daily error under 1.5 cm without faults and 2.5 cm with them, and within two stated sd on nearly every day."""
    table = score(made, result.daily).set_index("logger_id")
    assert table.loc["L1", "rmse_cm"] < 1.5
    assert (table.loc[["L2", "L3", "L4"], "rmse_cm"] < 2.5).all()
    # two years of four loggers: errors of one logger are alike all through, so the bound is loose
    assert table["within2"].min() > 0.85
    assert table["sd_cm"].max() < 1.0


def test_the_moves_are_dated_and_sized_and_none_is_invented(made, result):
    """Both planted moves (7 cm up) are found within a day and half a centimetre, nothing else is taken for one."""
    steps = result.corrections[result.corrections["kind"] == "step"]
    assert sorted(steps["logger_id"]) == ["L3", "L4"]
    for name, step in steps.set_index("logger_id").iterrows():
        true = made.truth[name]
        at = true.index[int(len(true) * 0.62) - 24 * 60 : int(len(true) * 0.62) + 1]
        assert at[0] <= step["start"] <= at[-1]
        assert step["value_m"] == pytest.approx(0.07, abs=0.005)
        assert step["sd_m"] < 0.01
        assert "bridged" in step["why"]
    assert sum("taken as a moved sensor" in n for n in result.notes) == 2


def test_drift_is_taken_off_and_listed(result):
    """5 cm over two years: the drift rows of the table add up to it (16 checks of 5 mm tell it to 5 mm sd)."""
    rows = result.corrections
    drift = rows[(rows["logger_id"] == "L2") & (rows["kind"] == "drift")]["value_m"].sum()
    assert drift == pytest.approx(-0.05, abs=0.0125)
    steady = rows[(rows["logger_id"] == "L1") & (rows["kind"] == "drift")]["value_m"].sum()
    assert abs(steady) < 0.005


def test_every_reading_keeps_raw_value_stage_and_flag(made, result):
    """Raw values are untouched; stage is given exactly where the flag is good or dry."""
    for name, frame in result.flagged.items():
        np.testing.assert_array_equal(frame["raw_value"], made.readings[name].value)
        told = frame["flag"].isin(["good", "at_or_below_sensor"])
        np.testing.assert_array_equal(frame["stage_m"].notna(), told)
    spikes = result.flagged["L2"]["flag"] == "spike"
    assert 45 <= spikes.sum() <= 62
    assert not (result.flagged["L1"]["flag"] == "spike").any()
    refused = result.corrections[result.corrections["kind"] == "refused"]
    counted = refused[refused["logger_id"] == "L2"]["why"].str.extract(r"^(\d+)")[0].astype(int).sum()
    assert counted == (~result.flagged["L2"]["flag"].isin(["good", "at_or_below_sensor"])).sum()


def test_the_gap_has_no_days(made, result):
    """Nothing is invented across a gap of 19 days."""
    days = result.daily[result.daily["logger_id"] == "L3"]["date"]
    start = made.truth["L3"].index[int(len(made.truth["L3"]) * 0.4)].normalize() + pd.Timedelta(days=1)
    assert not days.between(start, start + pd.Timedelta(days=17)).any()


def test_daily_columns_and_order(result):
    """As in the contract, sorted by wetland, date and logger."""
    assert list(result.daily.columns) == [
        "wetland_id", "logger_id", "date", "stage_m", "stage_sd_m", "stage_min_m", "stage_max_m", "n", "quality",
        "censored", "period",
    ]  # fmt: skip
    assert (result.daily["stage_min_m"] <= result.daily["stage_m"] + 1e-9).all()
    assert (result.daily["stage_m"] <= result.daily["stage_max_m"] + 1e-9).all()
    assert result.daily[["wetland_id", "date"]].apply(tuple, axis=1).is_monotonic_increasing
    assert (result.daily["period"] == 1).all()


def test_result_does_not_depend_on_the_order_of_inputs(made, result):
    """Shuffled registry, checks and mapping: the same bytes, also of readings whose flags are made when asked for."""
    other = daily_stage(
        made.registry.iloc[::-1],
        dict(reversed(made.readings.items())),
        made.barometer,
        made.checks.sample(frac=1, random_state=1),
        made.latitudes,
        weather=made.weather,
    )
    pd.testing.assert_frame_equal(result.daily, other.daily, check_exact=True)
    pd.testing.assert_frame_equal(result.corrections, other.corrections, check_exact=True)
    assert sorted(other.flagged) == ["L1", "L2", "L3", "L4"]
    for name, frame in other.flagged.items():
        pd.testing.assert_frame_equal(frame, result.flagged[name], check_exact=True)
    assert "L9" not in other.flagged


def test_stage_worked_by_hand():
    """1 m of water at 4 C over a sensor at -0.3 m is a stage of 0.7 m, whatever the air does."""
    readings, barometer = still(1.0)
    got = one(readings, barometer, height=-0.3)
    np.testing.assert_allclose(got.daily["stage_m"], 0.7, atol=1e-9)
    assert (got.daily["n"] == 24).all()
    assert (got.daily["quality"] == "good").all()
    # without a check the survey (1 cm) and the sensor (5 mm) stay unsure
    assert got.daily["stage_sd_m"].between(0.008, 0.03).all()


@pytest.mark.parametrize(
    ("kind", "unit", "factor"), [("vented", "psi", 6.894757293168361), ("vented", "cmH2O", 0.0980665)]
)
def test_vented_loggers_need_no_barometer(kind, unit, factor):
    """Gauge pressure in any unit."""
    readings, _ = still(0.5, kind="vented")
    readings = dataclasses.replace(readings, value=readings.value / factor)
    got = one(readings, None, kind=kind, unit=unit)
    np.testing.assert_allclose(got.daily["stage_m"], 0.6, atol=1e-6)


def test_level_loggers():
    """Level in feet above the sensor's zero."""
    readings, _ = still(0.0)
    readings = dataclasses.replace(readings, value=np.linspace(1.0, 2.0, readings.value.size))
    got = one(readings, None, kind="level", unit="ft", height=0.0)
    assert got.daily["stage_m"].iloc[0] == pytest.approx(0.3048 * (1 + 11.5 / 959), abs=1e-6)


def test_elevation_between_barometer_and_logger_is_taken_off():
    """A barometer 30 m above the logger: 3.7 cm of water at the standard atmosphere's 12 Pa a metre."""
    readings, barometer = still(0.5)
    high = dataclasses.replace(barometer, pressure_kpa=barometer.pressure_kpa * (1 - 30 * 1.1856e-4))
    table = pd.DataFrame([row("L1", 0.0, elevation_m=0.0)])
    plain = build_record(table, readings, high, None, LATITUDE)
    options = StageOptions(barometer_elevation_m=30.0)
    fixed = build_record(table, readings, high, None, LATITUDE, options=options)
    assert plain.daily["stage_m"].mean() == pytest.approx(0.5 + 0.0363, abs=1e-3)
    np.testing.assert_allclose(fixed.daily["stage_m"], 0.5, atol=3e-4)


def test_barometer_is_bridged_over_short_holes_only():
    """A hole of two hours is interpolated, one of two days leaves readings without depth, and says so."""
    readings, barometer = still(0.5)
    keep = np.ones(barometer.time.size, bool)
    keep[100] = False
    keep[300:348] = False
    holed = dataclasses.replace(barometer, time=barometer.time[keep], pressure_kpa=barometer.pressure_kpa[keep])
    got = one(readings, holed)
    flags = got.flagged["flag"].to_numpy().astype(str)
    assert flags[100] == "good"
    assert (flags[300:348] == "no_barometer").all()
    assert (flags != "good").sum() == 48
    assert any("48 readings have no air pressure within reach" in n for n in got.notes)


def test_dry_sensor_is_censored_not_a_number():
    """A month dry of three: those days read at or below the sensor's height, and the zero of the sensor is learnt."""
    level = np.r_[np.linspace(0.4, 0.0, 720), np.zeros(720), np.linspace(0.0, 0.3, 720)]
    readings, barometer = still(level + 0.004, hours=2160, noise=0.002)
    got = one(readings, barometer, height=0.25)
    censored = got.daily["censored"].to_numpy()
    expected = np.r_[np.zeros(30, bool), np.ones(30, bool), np.zeros(30, bool)]
    assert (censored == expected).mean() >= 0.96
    # the height's own error can't be known here, the zero can: the dry level is the registry's height
    np.testing.assert_allclose(got.daily["stage_m"][censored], 0.25, atol=0.004)
    assert (got.daily["quality"][censored] == "at_or_below_sensor").all()
    row_ = got.corrections[got.corrections["kind"] == "at_or_below_sensor"].iloc[0]
    assert "reads +0.4 cm" in row_["why"]


def test_a_shallow_pool_that_moves_is_not_dry():
    """Two to four centimetres of water that rise and fall are water."""
    level = 0.03 + 0.012 * np.sin(np.arange(2160) / 40)
    readings, barometer = still(level, hours=2160, noise=0.002)
    got = one(readings, barometer)
    assert got.daily["censored"].mean() < 0.05


def test_out_of_water_for_download_is_flagged_by_name():
    """Two hours in air in mid-record."""
    level = np.full(960, 0.6)
    level[500:502] = 0.0
    readings, barometer = still(level, noise=0.002)
    got = one(readings, barometer)
    assert np.flatnonzero(got.flagged["flag"] == "out_of_water").tolist() == [500, 501]
    np.testing.assert_allclose(got.daily["stage_m"], 0.7, atol=0.003)


def test_a_long_visit_in_dense_readings_is_flagged_whole():
    """Forty minutes in air among readings a minute: longer than the running median reaches, found by hours."""
    rng = np.random.default_rng(4)
    time = np.datetime64("2024-01-01", "ns") + np.arange(5 * 1440) * np.timedelta64(60, "s")
    depth = np.full(time.size, 0.6)
    depth[3000:3040] = 0.0
    value = depth * 9.81 + rng.normal(0, 0.02, time.size)
    got = one(Readings("L1.csv", time, value), None, kind="vented")
    flags = got.flagged["flag"].to_numpy().astype(str)
    assert (flags[3000:3040] == "out_of_water").all()
    assert (flags != "good").sum() <= 45


def test_a_day_of_wild_scatter_is_refused_as_noise():
    """Five centimetres of scatter for a day where 2 mm are usual."""
    readings, barometer = still(0.6, noise=0.002)
    value = readings.value.copy()
    value[480:504] += np.random.default_rng(8).normal(0, 0.5, 24)
    got = one(dataclasses.replace(readings, value=value), barometer)
    flags = got.flagged["flag"].to_numpy().astype(str)
    assert np.isin(flags[480:504], ["noise", "spike"]).mean() > 0.8
    assert np.abs(got.daily["stage_m"] - 0.7).max() < 0.02


def test_stuck_sensor_is_flagged_flat():
    """Total pressure that stays while the air moves can't be."""
    readings, barometer = still(0.6, noise=0.002)
    value = readings.value.copy()
    value[400:440] = value[400]
    got = one(dataclasses.replace(readings, value=value), barometer)
    flat = np.flatnonzero(got.flagged["flag"] == "flat")
    assert flat[0] == 400
    assert flat[-1] == 439


def test_frozen_sensor_is_flagged_ice():
    """Under -0.3 C there is no liquid water about the sensor."""
    readings, barometer = still(0.6, noise=0.002)
    warmth = readings.temperature_c.copy()
    warmth[200:300] = -1.5
    got = one(dataclasses.replace(readings, temperature_c=warmth), barometer)
    assert np.flatnonzero(got.flagged["flag"] == "ice").tolist() == list(range(200, 300))
    assert (got.daily["quality"] == "ice").sum() >= 1


def test_clock_an_hour_off_is_found_against_the_barometer():
    """Summer time kept by mistake from mid-record on: found, dated within a day, taken off, reported."""
    readings, barometer = still(0.5, hours=4000, noise=0.002)
    time = readings.time.copy()
    time[2000:] += HOUR
    got = one(dataclasses.replace(readings, time=time), barometer)
    clock = got.corrections[got.corrections["kind"] == "clock"]
    assert len(clock) == 1
    assert abs(clock["start"].iloc[0] - time[2000]) < pd.Timedelta(days=1)
    assert "-1 h added" in clock["why"].iloc[0]
    assert any("the clock is +1 h off the barometer's" in n for n in got.notes)
    np.testing.assert_allclose(got.daily["stage_m"], 0.6, atol=0.003)
    right = one(readings, barometer)
    assert not (right.corrections["kind"] == "clock").any()


def test_a_move_seen_by_checks_alone_begins_a_new_period():
    """Moved by 12 cm inside a gap: dated to the gap, sized by the checks, and split where the size is unsure."""
    level = 0.6 + 0.1 * np.sin(np.arange(4800) / 300)
    readings, barometer = still(level - np.where(np.arange(4800) >= 2500, 0.12, 0.0), hours=4800, noise=0.002)
    keep = (np.arange(4800) < 2300) | (np.arange(4800) >= 2500)
    readings = dataclasses.replace(
        readings, time=readings.time[keep], value=readings.value[keep], temperature_c=readings.temperature_c[keep]
    )
    at = np.array([100, 700, 1300, 1900, 2700, 3300, 3900, 4500])
    wobble = np.random.default_rng(2).normal(0, 0.01, at.size)
    checks = pd.DataFrame(
        {"logger_id": "L1", "time": barometer.time[at], "stage_m": level[at] + 0.1 + wobble, "sd_m": 0.01}
    )
    got = one(readings, barometer, checks)
    step = got.corrections[got.corrections["kind"] == "step"].iloc[0]
    assert step["start"] == barometer.time[2500]
    assert step["value_m"] == pytest.approx(0.12, abs=0.02)
    late = got.daily["date"] >= barometer.time[2520]
    true = pd.Series(level + 0.1, barometer.time).resample("D").mean().reindex(got.daily["date"]).to_numpy()
    assert np.abs(got.daily["stage_m"] - true).max() < 0.015
    if step["sd_m"] > 0.015:
        assert got.daily["period"][late].eq(2).all()


def test_a_storm_rise_shared_by_others_is_no_move():
    """Six centimetres within the hour at every logger and rain on the day: left as it is."""
    rise = np.where(np.arange(2000) >= 1200, 0.06, 0.0)
    readings, table = {}, []
    for k in range(3):
        readings[f"L{k}"], barometer = still(0.5 + rise * (0.8 + 0.2 * k), hours=2000, noise=0.002)
        table.append(row(f"L{k}", 0.1))
    weather = pd.DataFrame({"date": pd.date_range("2024-01-01", periods=84), "precipitation_mm": 0.0})
    weather.loc[50, "precipitation_mm"] = 30.0
    places = {f"W{k}": LATITUDE for k in range(3)}
    got = daily_stage(pd.DataFrame(table), readings, barometer, None, places, weather=weather)
    assert not (got.corrections["kind"] == "step").any()


def test_one_wild_check_is_set_aside_and_told():
    """A misread staff (20 cm) among good checks changes nothing."""
    readings, barometer = still(0.5, hours=4800, noise=0.002)
    at = np.arange(300, 4800, 500)
    stage = np.full(at.size, 0.6)
    stage[4] += 0.2
    checks = pd.DataFrame({"logger_id": "L1", "time": barometer.time[at], "stage_m": stage, "sd_m": 0.01, "line": 2})
    got = one(readings, barometer, checks)
    assert len(got.refused) == 1
    assert "contradicted by the checks about it" in got.refused[0].reason
    np.testing.assert_allclose(got.daily["stage_m"], 0.6, atol=0.006)


def test_check_outside_the_record_is_refused_in_words():
    """The record's ends are named."""
    readings, barometer = still(0.5)
    checks = pd.DataFrame({"logger_id": ["L1"], "time": [pd.Timestamp("2025-01-01")], "stage_m": [0.6], "line": [7]})
    got = one(readings, barometer, checks)
    assert got.refused[0].kind == "check"
    assert "line 7 of logger L1 at 2025-01-01 00:00:00: it lies outside" in got.refused[0].reason
    assert "2024-01-01T00:00 to 2024-02-09T23:00" in got.refused[0].reason


@pytest.mark.parametrize(
    ("value", "more", "message"),
    [
        (0.8, {}, r"0\.8\d* kPa .* total pressure of 0\.8\d* kPa, outside 45\.\.600 kPa; .*fit m as level"),
        (1021.0, {}, r"1021 kPa .* total pressure of 1021 kPa, .*hPa as absolute"),
        (102.1, {"unit": "psi"}, r"102\.1 psi .* kPa as absolute"),
        (60.0, {"kind": "level", "unit": "m"}, r"60 m .* depth of 60 m, outside -15\.0\.\.40\.0 m; .*cm as level"),
        (
            101.0,
            {"kind": "vented"},
            r"101 kPa read as kind vented is a gauge pressure of 101 kPa that follows the air's; .*kPa as absolute",
        ),
    ],
)
def test_wrong_unit_by_the_physics(value, more, message):
    """A file that can't be in the unit told is refused, with the units that would fit."""
    readings, barometer = still(0.5)
    wobble = np.cumsum(np.random.default_rng(1).normal(0, 1e-4, readings.value.size)) + 0.005
    barometer = dataclasses.replace(barometer, pressure_kpa=100.0 + wobble)
    wrong = dataclasses.replace(readings, value=value + wobble)
    with pytest.raises(InputError, match=r"logger L1 \(L1\.csv\): the middle value " + message):
        one(wrong, barometer, **more)


def test_absolute_logger_without_barometer():
    """Said in one sentence; in the whole area it is a refusal while others go on."""
    readings, barometer = still(0.5)
    with pytest.raises(InputError, match=r"logger L1 \(L1\.csv\): kind absolute needs air pressure"):
        one(readings, None)
    late = dataclasses.replace(barometer, time=barometer.time + np.timedelta64(400, "D"))
    with pytest.raises(
        InputError, match=r"the barometer barometer\.csv \(2025-02-04 to .*\) covers none of its readings"
    ):
        one(readings, late)
    level = dataclasses.replace(
        readings, value=np.full(readings.value.size, 0.5) + np.arange(readings.value.size) * 1e-5
    )
    table = pd.DataFrame([row("L1", 0.1), row("L2", 0.1, kind="level", unit="m")])
    got = daily_stage(table, {"L1": readings, "L2": level}, None, None, {"W1": 52.0, "W2": 52.0})
    assert [r.name for r in got.refused] == ["L1"]
    assert set(got.daily["logger_id"]) == {"L2"}
    with pytest.raises(InputError, match="none of 1 loggers can be used; the first: logger L1"):
        daily_stage(table.iloc[:1], {"L1": readings}, None, None, {"W1": 52.0})


def test_unknown_wetland_and_empty_period():
    """Both are named."""
    readings, barometer = still(0.5)
    with pytest.raises(InputError, match=r"its wetland 'W1' is not among the wetlands"):
        daily_stage(pd.DataFrame([row("L1", 0.0)]), {"L1": readings}, barometer, None, {"W9": 52.0})
    with pytest.raises(InputError, match="no reading between valid_from and valid_to"):
        one(readings, barometer, valid_from=pd.Timestamp("2030-01-01"))


def test_height_periods():
    """The sensor was set 20 cm lower on a known day: two rows, one seamless record."""
    hours = np.arange(2000)
    readings, barometer = still(0.5 + np.where(hours >= 1000, 0.2, 0.0), hours=2000)
    day = pd.Timestamp(barometer.time[1000])
    table = pd.DataFrame([row("L1", 0.3, valid_to=day), row("L1", 0.1, valid_from=day)])
    got = build_record(table, readings, barometer, None, LATITUDE)
    np.testing.assert_allclose(got.daily["stage_m"], 0.8, atol=1e-6)
    assert not (got.corrections["kind"] == "step").any()
    assert got.daily["date"].is_unique


def test_several_loggers_give_one_row_a_wetland_and_day():
    """One after another with an overlap, one of them dry: weighed, never doubled."""
    early, barometer = still(0.5, hours=2000, noise=0.002)
    late = dataclasses.replace(early, time=early.time[1000:], value=early.value[1000:], temperature_c=None)
    early = dataclasses.replace(early, time=early.time[:1200], value=early.value[:1200], temperature_c=None)
    dry, _ = still(0.0, hours=2000, noise=0.002)
    air = np.interp(np.arange(2000), np.arange(2000), barometer.pressure_kpa)
    dry = dataclasses.replace(dry, value=air + np.random.default_rng(5).normal(0, 0.02, 2000))
    table = pd.DataFrame([row("A", 0.1), row("B", 0.1), row("C", 0.9)]).assign(wetland_id="W")
    got = daily_stage(table, {"A": early, "B": late, "C": dry}, barometer, None, {"W": LATITUDE})
    daily = wetland_daily(got)
    assert daily["date"].is_unique
    assert len(daily) == 84
    assert not daily["censored"].any()
    np.testing.assert_allclose(daily["stage_m"], 0.6, atol=0.01)
    assert (daily["logger_id"].iloc[[0, 45, -1]] == ["A", "A+B", "B"]).all()
    assert daily["period"].tolist() == sorted(daily["period"])
    assert list(daily.columns) == list(got.daily.columns)


def test_stated_sd_is_calibrated_where_errors_are_as_told():
    """Heights off by 1 cm and zeros by 5 mm (sd): about the right share of loggers within one and two sd."""
    shares = []
    for seed in (11, 12):
        many = make(seed, years=0.8, n=10, survey_sd_m=0.01, zero_sd_m=0.005)
        table = score(many, run(many).daily)
        shares.append(table[["within1", "within2"]].mean())
    within1, within2 = pd.concat(shares, axis=1).mean(axis=1)
    # 20 loggers, each wrong by nearly one constant: two standard errors of a share of 0.68 are 0.21
    assert 0.47 <= within1 <= 0.95
    assert within2 >= 0.88


def test_a_good_sensor_says_nothing_of_the_survey():
    """A dry sensor that reads its zero to a millimetre leaves the height as unsure as the survey says.

    Here the height is 2 cm wrong (two sd) and three checks of 1 cm see it: the record goes most of the way to them, and
    its sd is that of survey and checks, not of the zero.
    """
    hours = 24 * 200
    depth = np.where(np.arange(hours) < 24 * 60, 0.0, 0.3)
    readings, barometer = still(depth, hours=hours, noise=0.002)
    at = readings.time[24 * np.array([80, 120, 160])]
    checks = pd.DataFrame({"logger_id": "L1", "time": at, "stage_m": 0.3 + 0.1 - 0.02, "sd_m": 0.01})
    got = one(readings, barometer, checks).daily
    wet = got[~got["censored"]].iloc[5:]
    # by hand: variances 1 cm2 of the survey and 1/3 cm2 of the checks, so three quarters of the 2 cm are taken
    assert wet["stage_m"].mean() == pytest.approx(0.4 - 0.75 * 0.02, abs=0.003)
    # 5 mm where nothing is worse than told and nothing drifts; both are allowed for
    assert 0.005 < wet["stage_sd_m"].mean() < 0.009


def test_ice_lasts_until_the_thaw_lets_go():
    """Ice presses by 10 cm from freezing to thaw: every hour in between is flagged, none before or after."""
    hours = 24 * 60
    depth = np.full(hours, 0.5)
    frozen = slice(24 * 20, 24 * 35)
    depth[frozen] += np.repeat([0.10, -0.06, 0.12], 24 * 5)
    warmth = np.full(hours, 3.0)
    warmth[24 * 18 : 24 * 35] = 0.0
    readings, barometer = still(depth, hours=hours, noise=0.001)
    readings = dataclasses.replace(readings, temperature_c=warmth.astype(np.float32))
    flag = one(readings, barometer).flagged["flag"]
    assert (flag[frozen] == "ice").all()
    assert not (flag.iloc[: 24 * 20 - 1] == "ice").any()
    assert not (flag.iloc[24 * 35 + 2 :] == "ice").any()
