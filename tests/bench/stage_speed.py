"""Speed and memory of the stage part: ``python -m tests.bench.stage_speed [LOGGERS] [READINGS]`` (24 and 1 000 000).

Files are written first (not timed), then read and made into days in a fresh process, whose peak memory is printed: first
the days alone, then as the batch does it, with every flagged reading looked at and thinned for the report. The plain way beside it: pandas' default reader and a running median by ``rolling`` on one logger.
"""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import pandas as pd

from tests.stage_scenario import air

LATITUDE = 52.0


def write(folder: Path, loggers: int, readings: int) -> None:
    """Write a registry, readings every five minutes, a barometer and checks."""
    rng = np.random.default_rng(7)
    start = np.datetime64("2015-01-01T00:00:00", "s")
    stamps = start + np.arange(readings) * np.timedelta64(300, "s")
    text = np.char.replace(np.datetime_as_string(stamps, unit="s"), "T", " ")
    hours = readings // 12 + 2
    pressure = air(rng, hours)
    baro_time = start + np.arange(hours) * np.timedelta64(3600, "s")
    pd.DataFrame({"time": np.datetime_as_string(baro_time), "pressure_kpa": pressure.round(3)}).to_csv(
        folder / "barometer.csv", index=False
    )
    fine = np.interp(np.arange(readings) / 12, np.arange(hours), pressure)
    day = np.arange(readings) / 288
    rows, checks = [], []
    for k in range(loggers):
        depth = np.maximum(0.4 + 0.5 * np.sin(2 * np.pi * (day + 20 * k) / 365.25), 0.0)
        total = fine + 9.8 * depth + rng.normal(0, 0.02, readings)
        spikes = rng.choice(readings, 200, replace=False)
        total[spikes] += rng.normal(0, 5, 200)
        frame = pd.DataFrame(
            {"time": text, "value": total.round(3), "temperature_c": (10 + 8 * np.sin(day / 58)).round(1)}
        )
        frame.to_csv(folder / f"L{k:02d}.csv", index=False)
        rows.append((f"L{k:02d}", f"W{k:02d}", f"L{k:02d}.csv", "absolute", "kPa", 0.0, "+00:00"))
        for i in range(20_000, readings, 30_000):
            checks.append((f"L{k:02d}", str(stamps[i]), depth[i] + rng.normal(0, 0.01), 0.01))
    columns = ["logger_id", "wetland_id", "file", "kind", "unit", "height_m", "utc_offset"]
    pd.DataFrame(rows, columns=columns).to_csv(folder / "loggers.csv", index=False)
    pd.DataFrame(checks, columns=["logger_id", "time", "stage_m", "sd_m"]).to_csv(folder / "checks.csv", index=False)


def work(folder: Path, flags: bool) -> None:
    """Read and make days; print seconds and peak memory."""
    from inundate.batch.report_sources import thin_record
    from inundate.stage import LoggerFiles, daily_stage, read_barometer, read_checks, read_registry

    began, worked = time.perf_counter(), time.process_time()
    registry = read_registry(folder / "loggers.csv")
    files = LoggerFiles(registry)
    barometer = read_barometer(folder / "barometer.csv")
    checks, _ = read_checks(folder / "checks.csv", registry)
    latitudes = dict.fromkeys(registry["wetland_id"], LATITUDE)
    result = daily_stage(registry, files, barometer, checks, latitudes)
    thinned = [thin_record(result.flagged[name], 0.0) for name in result.flagged] if flags else []
    took = time.perf_counter() - began
    # not ru_maxrss: that of a child starts at its parent's
    status = Path("/proc/self/status").read_text(encoding="ascii")
    peak = int(status.split("VmHWM:")[1].split()[0]) / 1024
    print(
        f"{f'days and {sum(map(len, thinned))} points for the report' if flags else 'days'}: "
        f"{len(registry)} loggers, {len(result.daily)} days, {took:.1f} s "
        f"({time.process_time() - worked:.1f} s of processor), peak {peak:.0f} MB, {len(result.refused)} refused"
    )


def plain(folder: Path) -> None:
    """Time the plain way on one logger: default reader, rolling median and deviation, daily mean."""
    began = time.perf_counter()
    frame = pd.read_csv(folder / "L00.csv", parse_dates=["time"])
    middle = frame["value"].rolling(11, center=True, min_periods=4).median()
    off = (frame["value"] - middle).abs()
    scale = off.rolling(11, center=True, min_periods=4).median()
    good = frame[~(off > 6 * 1.4826 * scale)]
    good.set_index("time")["value"].resample("D").agg(["mean", "min", "max", "count"])
    print(f"plain way, one logger (no physics, datum, drift, dry or clock): {time.perf_counter() - began:.1f} s")


def main() -> None:
    """Write the files, then measure in fresh processes (compiled code is cached by a small run before)."""
    if len(sys.argv) > 1 and sys.argv[1] == "work":
        work(Path(sys.argv[2]), sys.argv[3] == "flags")
        return
    loggers = int(sys.argv[1]) if len(sys.argv) > 1 else 24
    readings = int(sys.argv[2]) if len(sys.argv) > 2 else 1_000_000
    with tempfile.TemporaryDirectory() as name:
        small, large = Path(name) / "small", Path(name) / "large"
        for folder, n, m in ((small, 2, 60_000), (large, loggers, readings)):
            folder.mkdir()
            write(folder, n, m)
        base = [sys.executable, "-m", "tests.bench.stage_speed", "work"]
        for folder in (small, large):
            for what in ("days", "flags"):
                subprocess.run([*base, str(folder), what], check=True, env=os.environ)
        plain(large)


if __name__ == "__main__":
    main()
