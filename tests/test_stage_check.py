"""Logger files as users hand them in, through ``inundate check``: what is used, what is refused, and in which words."""

from __future__ import annotations

import re
import shutil
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner

from inundate.batch.field import latitudes_of, make_stage
from inundate.batch.inputs import read_wetlands
from inundate.batch.pipeline import load_pipeline
from inundate.cli import main
from inundate.stage import UNUSED_CHECK, StageResult, wetland_daily


@pytest.fixture
def inputs(small_reserve, tmp_path):
    """A copy of the small reserve's inputs (scenes linked), to be spoiled."""
    folder = tmp_path / "inputs"
    folder.mkdir()
    for path in (small_reserve / "inputs").iterdir():
        if path.name == "scenes":
            (folder / path.name).symlink_to(path)
        elif path.is_dir():
            shutil.copytree(path, folder / path.name)
        else:
            shutil.copy(path, folder / path.name)
    return folder


def table(path: Path) -> pd.DataFrame:
    """A CSV as text."""
    return pd.read_csv(path, dtype=str, keep_default_na=False)


def register(inputs: Path, **values: str) -> None:
    """Change the registry's row of logger L02."""
    rows = table(inputs / "loggers.csv")
    for name, value in values.items():
        if name not in rows:
            rows[name] = ""
        rows.loc[rows["logger_id"] == "L02", name] = value
    rows.to_csv(inputs / "loggers.csv", index=False)


def readings(inputs: Path, change: Callable[[pd.DataFrame], pd.DataFrame], **options: object) -> None:
    """Change the readings of logger L02."""
    path = inputs / "readings" / "L02.csv"
    change(pd.read_csv(path)).to_csv(path, index=False, **options)


def check(inputs: Path) -> tuple[int, str]:
    """Exit status and all that is printed."""
    done = CliRunner().invoke(main, ["check", str(inputs / "pipeline.toml"), "--quiet"])
    return done.exit_code, done.output + done.stderr


def stage(inputs: Path) -> StageResult:
    """The stage record as the batch makes it."""
    pipeline = load_pipeline(inputs / "pipeline.toml")
    shapes = read_wetlands(pipeline.input_files()["area.wetlands"], pipeline.area.crs)
    return make_stage(pipeline, latitudes_of(shapes), None)


def daily(inputs: Path) -> pd.DataFrame:
    """Daily stage of L02."""
    got = stage(inputs).daily
    return got[got["logger_id"] == "L02"].set_index("date")


def decimal_comma(inputs):
    readings(inputs, lambda t: t, sep=";", decimal=",")


def header_lines(inputs):
    path = inputs / "readings" / "L02.csv"
    text = path.read_text().replace("time,value,temperature_c", "Date Time,Pressure,Warmth", 1)
    path.write_text('Export of a logger\nSerial; 12,3\n\nSite: "pond"\n' + text)
    register(inputs, time_column="Date Time", value_column="Pressure", temperature_column="Warmth")


def unsorted_with_repeats(inputs):
    readings(inputs, lambda t: pd.concat([t, t.iloc[100:400]]).sample(frac=1, random_state=1))


def overlapping_files(inputs):
    rows = pd.read_csv(inputs / "readings" / "L02.csv")
    rows.iloc[5000:].to_csv(inputs / "readings" / "part2.csv", index=False)
    rows.iloc[:6000].to_csv(inputs / "readings" / "part1.csv", index=False)
    register(inputs, file="readings/part2.csv; readings/part1.csv")


def own_time_format(inputs):
    readings(inputs, lambda t: t.assign(time=pd.to_datetime(t["time"]).dt.strftime("%d.%m.%Y %H:%M")))
    register(inputs, time_format="%d.%m.%Y %H:%M")


def unclosed_quote(inputs):
    path = inputs / "readings" / "L02.csv"
    lines = path.read_text().splitlines()
    lines[0] += ",remark"
    lines[50] += ',"opened and never closed'
    path.write_text("\n".join(f"{line}," if line.count(",") == 2 else line for line in lines) + "\n")


def zone_by_name(inputs):
    offset = table(inputs / "loggers.csv").set_index("logger_id").loc["L02", "utc_offset"]

    def local(t: pd.DataFrame) -> pd.DataFrame:
        utc = pd.to_datetime(t["time"] + offset, utc=True)
        return t.assign(time=utc.dt.tz_convert("Europe/Berlin").dt.strftime("%Y-%m-%d %H:%M:%S"))

    readings(inputs, local)
    register(inputs, utc_offset="Europe/Berlin")


@pytest.mark.parametrize(
    "change",
    [
        decimal_comma,
        header_lines,
        unsorted_with_repeats,
        overlapping_files,
        own_time_format,
        unclosed_quote,
        zone_by_name,
    ],
    ids=lambda f: f.__name__,
)
def test_the_same_readings_in_another_form_give_the_same_stage(inputs, change):
    before = daily(inputs)
    change(inputs)
    pd.testing.assert_frame_equal(daily(inputs), before, check_exact=True)
    status, words = check(inputs)
    assert status == 0, words
    assert "could not be read" not in words


def spoil_rows(inputs):
    path = inputs / "readings" / "L02.csv"
    lines = path.read_text().splitlines()
    bad = [
        "2031-13-40 00:00:00,1,2",
        "not a row",
        "2031-10-01 05:00:00,abc,2",
        "#ERROR,,",
        "1,2,3,4,5",
        '"x',
        "24:00,9,3",
    ]
    for i, text in enumerate(bad):
        lines[10 * (i + 1)] = text
    path.write_text("\n".join(lines) + "\n")


def clock(inputs, hours):
    readings(inputs, lambda t: t.assign(time=pd.to_datetime(t["time"]) + pd.Timedelta(hours=hours)))


def summer_clock(inputs):
    def jump(t: pd.DataFrame) -> pd.DataFrame:
        time = pd.to_datetime(t["time"])
        return t.assign(time=time + pd.to_timedelta(np.where(time.dt.month.between(4, 10), 1, 0), unit="h"))

    readings(inputs, jump)


def sentinel(inputs):
    readings(inputs, lambda t: t.assign(value=t["value"].where(t.index > 200, -9999)))


def far_checks(inputs):
    rows = table(inputs / "checks.csv")
    rows.loc[0, "time"], rows.loc[1, "stage_m"], rows.loc[2, "logger_id"] = "2040-01-01T10:00:00Z", "abc", "L77"
    rows.to_csv(inputs / "checks.csv", index=False)


def checks_in_cm(inputs):
    rows = table(inputs / "checks.csv")
    rows["stage_m"] = np.where(
        rows["logger_id"] == "L02", (rows["stage_m"].astype(float) * 100).astype(str), rows["stage_m"]
    )
    rows.to_csv(inputs / "checks.csv", index=False)


def barometer(inputs, change):
    path = inputs / "barometer.csv"
    change(pd.read_csv(path)).to_csv(path, index=False)


def no_barometer(inputs):
    path = inputs / "pipeline.toml"
    path.write_text(path.read_text().replace('barometer = "barometer.csv"\n', ""))


@pytest.mark.parametrize(
    ("change", "status", "words"),
    [
        (spoil_rows, 0, r"7 of \d+ rows could not be read \(L02\.csv line 11: .*line 21: 'not a row'.*line 31: .*line 41: .*line 51: "),
        (lambda i: clock(i, 3), 0, r"the clock is \+3 h off the barometer's; -3 h added"),
        (summer_clock, 0, r"from 2032-0[34]-\d\dT\d\d:\d\d to 2032-1[01].* the clock is \+1 h off the barometer's; -1 h added"),
        (sentinel, 0, r"201 readings can't be water and were left out \(the first -9999 kPa"),
        (lambda i: readings(i, lambda t: t.assign(value=t["value"] + 1.8)), 0, r"L02: -1\d\.\d cm are added .*barometer's elevation"),
        (lambda i: barometer(i, lambda t: t.assign(pressure_kpa=t["pressure_kpa"].where(t.index > 9, 2.0))), 0, r"10 readings are no air pressure"),
        (far_checks, 1, r"(?s)line 3: stage_m 'abc'.*line 4: logger_id 'L77' is not in the registry.*2040.*outside the logger's usable record"),
        (checks_in_cm, 1, r"refused logger L02: .*field check.* stands \+\d+\.\d\d m off the record .* correct height_m"),
        (lambda i: register(i, height_m="-218"), 1, r"refused logger L02: .* off the record with height_m -218"),
        (lambda i: readings(i, lambda t: t.assign(value=(t["value"] - 99) / 9.8)), 1, r"refused logger L02: .* total pressure .* would fit m as level"),
        (lambda i: readings(i, lambda t: t.assign(value=t["value"] * 10)), 1, r"refused logger L02: .* would fit hPa as absolute"),
        (lambda i: register(i, kind="vented"), 1, r"refused logger L02: .* gauge pressure .* follows the air's; .*kPa as absolute"),
        (lambda i: (i / "readings" / "L02.csv").write_text("time,value\nfoo,bar\nx,y\n"), 1, r"none of its 2 rows can be read \(line 2: 'foo bar'"),
        (lambda i: (i / "readings" / "L02.csv").write_text(""), 1, r"refused logger L02: .* the file is empty"),
        (lambda i: (i / "readings" / "L02.csv").unlink(), 1, r"refused logger L02: .* can't be opened"),
        (no_barometer, 2, r"loggers L01, L02, L03 measure absolute pressure, and the pipeline names no barometer"),
        (lambda i: barometer(i, lambda t: t.assign(pressure_kpa=t["pressure_kpa"] * 10)), 2, r"it looks like hPa: divide by 10"),
        (lambda i: barometer(i, lambda t: t.assign(time=t["time"].str.replace("203", "202"))), 2, r"covers none of its readings"),
        (lambda i: register(i, unit="PSI"), 2, r"line 3: unit 'PSI' is not known; use one of kPa"),
        (lambda i: register(i, height_m=""), 2, r"line 3: height_m '' is not a number"),
        (lambda i: register(i, height_sd_m="0"), 2, r"line 3: height_sd_m 0 is not above 0"),
    ],
)  # fmt: skip
def test_what_is_wrong_is_told_in_one_sentence(inputs, change, status, words):
    change(inputs)
    got, printed = check(inputs)
    assert got == status, printed
    assert re.search(words, printed), printed
    assert "Traceback" not in printed


def test_loggers_one_after_another_give_one_record_of_their_wetland(inputs):
    """A sensor that is replaced by another: each keeps its datum and checks, the wetland has one row a day."""
    rows = pd.read_csv(inputs / "readings" / "L02.csv")
    rows.iloc[:6000].to_csv(inputs / "readings" / "L02.csv", index=False)
    # the second hangs 10 cm higher, so it reads 10 cm of water (0.981 kPa) less
    later = rows.iloc[6100:]
    later.assign(value=(later["value"] - 0.981).round(2)).to_csv(inputs / "readings" / "L04.csv", index=False)
    registry = table(inputs / "loggers.csv")
    second = registry[registry["logger_id"] == "L02"].assign(logger_id="L04", file="readings/L04.csv")
    second["height_m"] = (second["height_m"].astype(float) + 0.1).map("{:.3f}".format)
    before = daily(inputs)
    pd.concat([registry, second]).to_csv(inputs / "loggers.csv", index=False)
    checks = table(inputs / "checks.csv")
    checks.loc[(checks["logger_id"] == "L02") & (checks["time"] > later["time"].iloc[0]), "logger_id"] = "L04"
    checks.to_csv(inputs / "checks.csv", index=False)
    result = stage(inputs)
    assert not [r for r in result.refused if r.kind != UNUSED_CHECK]
    got = wetland_daily(result)
    got = got[got["wetland_id"] == second["wetland_id"].iloc[0]]
    assert got["date"].is_unique
    assert got["logger_id"].drop_duplicates().tolist() == ["L02", "L04"]
    assert got["period"].is_monotonic_increasing
    assert got.groupby("period")["logger_id"].nunique().max() == 1
    first = got[got["logger_id"] == "L02"].set_index("date")["stage_m"]
    np.testing.assert_allclose(first, before["stage_m"].reindex(first.index), atol=0.005)


def test_settings_of_the_pipeline_reach_the_record(inputs):
    """A worse survey, told in [stage], widens the sd of a logger whose registry tells none."""
    register(inputs, height_sd_m="")
    narrow = daily(inputs)["stage_sd_m"].median()
    path = inputs / "pipeline.toml"
    path.write_text(path.read_text() + "\n[stage]\nheight_sd_m = 0.05\ncheck_sd_m = 0.05\n")
    checks = table(inputs / "checks.csv").assign(sd_m="")
    checks.to_csv(inputs / "checks.csv", index=False)
    assert daily(inputs)["stage_sd_m"].median() > 2 * narrow
    path.write_text(path.read_text() + "barometer_elevation_m = 310.0\n")
    plain = stage(inputs).flagged["L02"]["depth_m"]
    register(inputs, elevation_m="300")
    # by hand: 10 m of air of 99.4 kPa and 286.2 K (287.05 J/kg/K) weigh 118.7 Pa, which is 1.21 cm of water less
    assert (stage(inputs).flagged["L02"]["depth_m"] - plain).median() == pytest.approx(-0.0121, abs=0.0003)
