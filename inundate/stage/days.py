"""Days, correction rows and flagged readings of a settled record."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from inundate.stage.datum import Offset
from inundate.stage.dry import Dryness
from inundate.stage.options import FLAG, FLAGS
from inundate.stage.prepare import Span
from inundate.stage.signals import DAY_NS, HOUR_NS, Hours, spread

CORRECTION_COLUMNS = ("logger_id", "kind", "start", "end", "value_m", "sd_m", "why")
DAILY_COLUMNS = (
    "wetland_id",
    "logger_id",
    "date",
    "stage_m",
    "stage_sd_m",
    "stage_min_m",
    "stage_max_m",
    "n",
    "quality",
    "censored",
    "period",
)
#: Greatest sd (m) of a step's size at which the record is taken on across it; beyond, a new period begins.
BRIDGE_SD_M = 0.015
SLOW_SD_M = 0.002


@dataclass(slots=True)
class Settled:
    """A logger's hours with all that was found about them.

    Attributes
    ----------
    logger_id : str
    spans : list of Span
    hours : Hours
    span : ndarray of int64, shape (hour,)
    height_m : ndarray of float64, shape (hour,)
    offset : Offset
    dryness : Dryness
    noise : float
        sd of a reading, m.
    slow_m : float
        sd of errors that a day does not average out, m.
    """

    logger_id: str
    spans: list[Span]
    hours: Hours
    span: np.ndarray
    height_m: np.ndarray
    offset: Offset
    dryness: Dryness
    noise: float
    slow_m: float = SLOW_SD_M


def _period_starts(settled: Settled) -> np.ndarray:
    """Times (ns) at which a step too unsure to be bridged begins a new period."""
    unsure = [
        step.time
        for step, (_, sd) in zip(settled.offset.steps, settled.offset.sizes(), strict=True)
        if sd > BRIDGE_SD_M
    ]
    return np.array(sorted(unsure), np.int64)


def daily_rows(settled: Settled) -> pd.DataFrame:
    """Make daily means with honest standard deviations.

    The variance of a day is that of the offset (survey, sensor zero, drift, steps, checks), of slow errors that a day
    does not average out, of reading noise over n, of the
    hours that are not seen (by how much the level changes from day to day then), and 0.15 % of depth where density had no temperature.

    Parameters
    ----------
    settled : Settled

    Returns
    -------
    DataFrame
        ``DAILY_COLUMNS``; a day without a usable reading has no row.
    """
    hours, dry = settled.hours, settled.dryness.dry
    day = hours.time // DAY_NS
    start = np.flatnonzero(np.r_[True, (day[1:] != day[:-1]) | (settled.span[1:] != settled.span[:-1])])
    count = np.diff(np.r_[start, day.size])
    grid = np.r_[hours.time[start], hours.time[-1] + 1]
    shift, _ = settled.offset.at(hours.time[start], settled.span[start])
    _, sd = settled.offset.at(hours.time[start] + HOUR_NS * 12, settled.span[start])
    tall, tall_sd = settled.offset.at(hours.time[start], settled.span[start], part="height")
    shift = _hourly_shift(settled, start, count, shift)
    floor = np.repeat(tall, count) + settled.height_m
    stage = np.where(dry, floor, np.maximum(settled.height_m + hours.mean + shift, floor))
    low = np.where(dry, floor, np.maximum(settled.height_m + hours.low + shift, floor))
    high = np.where(dry, floor, settled.height_m + hours.high + shift)
    mean = np.add.reduceat(stage, start) / count
    n = np.add.reduceat(hours.n, start)
    share = np.add.reduceat(dry.astype(float), start) / count
    censored = share >= 0.5
    usual = max(float(np.median(count)), 1.0)
    missing = np.clip(1.0 - count / usual, 0.0, 1.0)
    swing = _day_swing(mean)
    slow = settled.slow_m
    cold = np.array([not s.warm for s in settled.spans])[settled.span[start]]
    warm = 0.0015 * cold * np.maximum(np.add.reduceat(hours.mean, start) / count, 0.0)
    # a day is seen but for its missing hours, and a few readings a day lie up to half their distance off its middle
    unseen = np.maximum(missing, 0.5 / count)
    var = sd**2 + slow**2 + settled.noise**2 / n + (unseen * swing) ** 2 + warm**2
    var = np.where(censored, tall_sd**2 + slow**2, var)
    period = 1 + np.searchsorted(_period_starts(settled), grid[:-1], side="right")
    wetland = np.array([s.row["wetland_id"] for s in settled.spans], object)[settled.span[start]]
    return pd.DataFrame(
        {
            "wetland_id": wetland,
            "logger_id": settled.logger_id,
            "date": (day[start] * DAY_NS).astype("datetime64[ns]"),
            "stage_m": np.where(censored, (floor)[start], mean),
            "stage_sd_m": np.sqrt(var),
            "stage_min_m": np.minimum.reduceat(low, start),
            "stage_max_m": np.maximum.reduceat(high, start),
            "n": n,
            "quality": _quality(settled, start, (share, sd)),
            "censored": censored,
            "period": period,
        }
    ).drop_duplicates("date", keep="last", ignore_index=True)


def _day_swing(mean: np.ndarray) -> np.ndarray:
    """How much the level changes within each day: its neighbours' half difference, at least the usual day's change."""
    if mean.size < 3:
        return np.zeros(mean.size)
    change = np.abs(np.diff(mean))
    return np.maximum(np.maximum(np.r_[change[:1], change], np.r_[change, change[-1:]]) / 2, spread(change))


def _hourly_shift(settled: Settled, start: np.ndarray, count: np.ndarray, shift: np.ndarray) -> np.ndarray:
    """Offset by hours: daily values, and exact ones on days with a step."""
    out = np.repeat(shift, count)
    for step in settled.offset.steps:
        i = int(np.searchsorted(settled.hours.time[start], step.time, side="right")) - 1
        if i >= 0:
            part = slice(start[i], start[i] + count[i])
            out[part] = settled.offset.at(settled.hours.time[part], settled.span[part])[0]
    return out


def _quality(settled: Settled, start: np.ndarray, made: tuple[np.ndarray, np.ndarray]) -> np.ndarray:
    share, sd = made
    time = settled.hours.time[start]
    out = np.full(time.size, "good", object)
    shift, shift_sd = settled.offset.at(time, settled.span[start])
    out[np.abs(shift) > np.maximum(0.005, shift_sd)] = "corrected"
    e = settled.offset.evidence
    checks = np.sort(e.time[~e.zero])
    for step in settled.offset.steps:
        after = checks[checks > step.time]
        stop = after[0] if after.size else np.iinfo(np.int64).max
        out[(time >= step.time - DAY_NS) & (time < stop)] = "bridged"
        if step.kind in ("checks", "gap", "dry"):
            before = checks[checks < step.time]
            lo = before[-1] if before.size and step.kind == "checks" else step.time
            out[(time >= lo) & (time < stop)] = "suspect"
    out[sd > 0.05] = "suspect"
    noisy, icy = _flag_days(settled, "noise"), _flag_days(settled, "ice")
    day = time // DAY_NS
    out[np.isin(day, noisy)] = "suspect"
    out[np.isin(day, icy)] = "ice"
    out[share >= 0.5] = "at_or_below_sensor"
    return out


def _flag_days(settled: Settled, name: str) -> np.ndarray:
    return np.concatenate([np.unique(s.time[s.flag == FLAG[name]] // DAY_NS) for s in settled.spans])


def correction_rows(settled: Settled) -> pd.DataFrame:
    """List what was changed and what was refused, and why.

    Parameters
    ----------
    settled : Settled

    Returns
    -------
    DataFrame
        ``CORRECTION_COLUMNS``. kind ``datum`` (added from the start of a period of the registry), ``drift`` (further
        change of what is added between two checks), ``step`` (added from a moment on), ``clock`` (value_m is NaN, the
        hours stand in why), ``refused`` (readings left out; value_m is NaN), ``at_or_below_sensor``.
    """
    rows: list[tuple] = []
    name, hours, offset = settled.logger_id, settled.hours, settled.offset
    for span in settled.spans:
        for spell in span.clock:
            why = f"{spell.hours:+d} h added to its clock: agrees with the barometer so"
            rows.append((name, "clock", spell.start, spell.end, np.nan, np.nan, why))
    checks = np.sort(offset.evidence.time[~offset.evidence.zero])
    for k in range(len(settled.spans)):
        mine = np.flatnonzero(settled.span == k)
        if mine.size:
            rows += _datum_rows(settled, k, (int(hours.time[mine[0]]), int(hours.time[mine[-1]])), checks)
    for step, (size, sd) in zip(offset.steps, offset.sizes(), strict=True):
        how = "bridged" if sd <= BRIDGE_SD_M else "too unsure to bridge: a new period begins"
        rows.append(
            (name, "step", step.time, int(hours.time[-1]), size, sd, f"moved sensor, {step.kind}: {step.why}; {how}")
        )
    for a, b, zero, sd in settled.dryness.spells:
        why = f"water at or below the sensor, which reads {zero * 100:+.1f} cm then; stage is censored"
        rows.append((name, "at_or_below_sensor", a, b, np.nan, sd, why))
    for span in settled.spans:
        rows += _refused_rows(name, span)
    out = pd.DataFrame(rows, columns=list(CORRECTION_COLUMNS))
    for column in ("start", "end"):
        out[column] = out[column].to_numpy(np.int64).astype("datetime64[ns]")
    out = out.astype({"value_m": float, "sd_m": float})
    return out.sort_values(["start", "kind"], kind="stable", ignore_index=True)


def _datum_rows(settled: Settled, k: int, ends: tuple[int, int], checks: np.ndarray) -> list[tuple]:
    offset, name = settled.offset, settled.logger_id
    knots = np.unique(np.r_[ends[0], checks[(checks > ends[0]) & (checks < ends[1])], ends[1]])
    value, sd = offset.at(knots, np.full(knots.size, k))
    sizes = offset.sizes()
    drift = value.copy()
    for step, (size, _) in zip(offset.steps, sizes, strict=True):
        drift -= np.where(knots >= step.time, size, 0.0)
    rows: list[tuple] = []
    if abs(drift[0]) >= 5e-4:
        why = "survey and sensor zero, by checks and dry spells"
        rows.append((name, "datum", ends[0], ends[1], float(drift[0]), float(sd[0]), why))
    for i in range(knots.size - 1):
        change = float(drift[i + 1] - drift[i])
        if abs(change) >= 5e-4:
            why = "drift, linear in between"
            rows.append((name, "drift", int(knots[i]), int(knots[i + 1]), change, float(sd[i + 1]), why))
    return rows


def _refused_rows(name: str, span: Span) -> list[tuple]:
    rows: list[tuple] = []
    for code, word in enumerate(FLAGS):
        if word in ("good", "at_or_below_sensor", "outside_validity"):
            continue
        at = span.time[span.flag == code]
        if not at.size:
            continue
        cut = np.flatnonzero(np.diff(at) > DAY_NS) + 1
        for part in np.split(at, cut):
            what = f"{part.size} reading{'s' if part.size > 1 else ''} left out: {word.replace('_', ' ')}"
            rows.append((name, "refused", int(part[0]), int(part[-1]), np.nan, np.nan, what))
    return rows


def flagged_frame(settled: Settled, spans: list[Span]) -> pd.DataFrame:
    """Return every reading with its raw value, depth, corrected stage and flag.

    Parameters
    ----------
    settled : Settled
    spans : list of Span
        With every reading; their flags are filled in where the sensor is dry.

    Returns
    -------
    DataFrame
        time (UTC), raw_value (registry's unit), depth_m, stage_m (float32; NaN for readings left out; the sensor's
        elevation where dry), flag (categorical).
    """
    frames = []
    for k, span in enumerate(spans):
        time = span.time
        days = np.unique(np.r_[time[:1], np.arange(time[0], time[-1], DAY_NS), time[-1:]])
        grid = np.unique(
            np.r_[days, [s.time for s in settled.offset.steps], [s.time - 1 for s in settled.offset.steps]]
        )
        grid = grid.astype(np.int64)
        here = np.full(grid.size, k)
        shift = np.interp(time, grid, settled.offset.at(grid, here)[0]).astype(np.float32)
        tall = np.interp(time, grid, settled.offset.at(grid, here, part="height")[0]).astype(np.float32)
        flag = span.flag
        mine = settled.span == k
        dry_hours = settled.hours.hour[mine & settled.dryness.dry]
        if dry_hours.size:
            hour = time // HOUR_NS
            flag[np.isin(hour, dry_hours) & (flag == FLAG["good"])] = FLAG["at_or_below_sensor"]
        height = np.float32(span.row["height_m"])
        stage = span.depth + height + shift
        dry = flag == FLAG["at_or_below_sensor"]
        stage[dry] = (tall + height)[dry]
        stage[~dry & (flag != FLAG["good"])] = np.nan
        frames.append(
            pd.DataFrame(
                {
                    "time": time.view("datetime64[ns]"),
                    "raw_value": span.raw,
                    "depth_m": span.depth,
                    "stage_m": stage,
                    "flag": pd.Categorical.from_codes(flag.view(np.int8), dtype=pd.CategoricalDtype(list(FLAGS))),
                },
                copy=False,
            )
        )
    return frames[0] if len(frames) == 1 else pd.concat(frames, ignore_index=True)
