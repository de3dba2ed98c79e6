"""One logger's record: its spans set on the wetland's datum, dry times found, corrections listed, days made."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np
import pandas as pd

from inundate.common.errors import InputError, Refusal
from inundate.stage.checks import doubtful_check, gather_checks, own_checks, refuse_gross, told_sd
from inundate.stage.choosing import choose_steps, doubtful_evidence, false_zeros
from inundate.stage.datum import Evidence, Offset, Priors, Step, fit_offset
from inundate.stage.days import Settled, correction_rows, daily_rows, flagged_frame
from inundate.stage.dry import Dryness, find_dry, first_zero
from inundate.stage.options import StageOptions
from inundate.stage.prepare import Span, prepare_span
from inundate.stage.readings import Barometer, Readings
from inundate.stage.signals import DAY_NS, Hours, stamp
from inundate.stage.steps import Surroundings, hidden_candidates, jump_candidates, sky_table


@dataclass(slots=True)
class LoggerRecord:
    """One logger's result.

    Attributes
    ----------
    daily, corrections : DataFrame
        Rows of ``StageResult.daily`` and ``StageResult.corrections``.
    notes : list of str
    refused : list of Refusal
    flagged : DataFrame
        Every reading: time, raw_value, depth_m, stage_m, flag; without rows where ``make_record`` made the record.
    """

    daily: pd.DataFrame
    corrections: pd.DataFrame
    notes: list[str] = field(default_factory=list)
    refused: list[Refusal] = field(default_factory=list)
    flagged: pd.DataFrame = field(default_factory=pd.DataFrame)


@dataclass(slots=True)
class Prepared:
    """One logger's spans, joined by hours, before it is set on its datum.

    Attributes
    ----------
    logger_id : str
    spans : list of Span
    hours : Hours
        Depth above the sensor by hours, all spans one after another.
    span : ndarray of int64, shape (hour,)
        Position of each hour's span.
    height_m : ndarray of float64, shape (hour,)
    """

    logger_id: str
    spans: list[Span]
    hours: Hours
    span: np.ndarray
    height_m: np.ndarray


def prepare_logger(
    rows: pd.DataFrame,
    readings: Readings,
    barometer: Barometer | None,
    latitudes: Mapping[str, float],
    options: StageOptions,
    *,
    frost: np.ndarray | None = None,
    whole: bool = False,
    before: list[Span] | None = None,
) -> Prepared:
    """Prepare every registry row of one logger and join them.

    Parameters
    ----------
    rows : DataFrame
        The logger's rows of the registry, sorted by valid_from.
    readings : Readings
    barometer : Barometer or None
    latitudes : mapping of wetland_id to degrees
    options : StageOptions
    frost : ndarray of int64, optional
    whole : bool
        Whether spans keep every reading. Otherwise only those refused: hours hold what the days need of the good ones.
    before : list of Span, optional
        The same spans prepared before, whose clock holds.

    Returns
    -------
    Prepared

    Raises
    ------
    InputError
        See ``prepare.prepare_span``; also where a wetland's latitude is not given.
    """
    spans = []
    for k, row in enumerate(rows.to_dict("records")):
        if row["wetland_id"] not in latitudes:
            message = (
                f"logger {row['logger_id']}: its wetland {row['wetland_id']!r} is not among the wetlands; "
                "correct wetland_id in the registry"
            )
            raise InputError(message)
        clock = None if before is None else before[k].clock
        latitude = latitudes[row["wetland_id"]]
        spans.append(prepare_span(row, readings, barometer, latitude, options, frost=frost, clock=clock))
        if not whole:
            _forget_good(spans[-1])
    parts = [s.hours for s in spans]
    hours = Hours(
        *(np.concatenate([getattr(p, k) for p in parts]) for k in ("hour", "time", "n", "mean", "low", "high"))
    )
    size = [p.hour.size for p in parts]
    height = np.repeat([float(s.row["height_m"]) for s in spans], size)
    return Prepared(str(rows["logger_id"].iloc[0]), spans, hours, np.repeat(np.arange(len(spans)), size), height)


def _forget_good(span: Span) -> None:
    """Keep the time and flag of refused readings only."""
    odd = np.flatnonzero(span.flag)
    span.time, span.flag = span.time[odd], span.flag[odd]
    span.raw = span.depth = np.empty(0)


def _evidence(
    made: Prepared, checks: pd.DataFrame, dryness: Dryness, options: StageOptions, zero_sd_m: float
) -> tuple[Evidence, np.ndarray]:
    """Offsets told by checks on wet times and by the zero of dry spells; and which checks (positions) were used."""
    time = checks["ns"].to_numpy(np.int64)
    near = np.clip(np.searchsorted(made.hours.time, time), 0, made.hours.time.size - 1)
    dry = dryness.dry[near] | dryness.dry[np.maximum(near - 1, 0)]
    used = np.flatnonzero(~dry)
    sd = checks["sd_m"].fillna(options.check_sd_m).to_numpy(float)
    sd = np.hypot(sd, dryness.spread_m)
    spells = dryness.spells
    row = made.spans[0].row
    zero_at = np.array([(a + b) // 2 for a, b, _, _ in spells], np.int64)
    zero_span = made.span[np.clip(np.searchsorted(made.hours.time, zero_at), 0, made.span.size - 1)]
    return Evidence(
        np.r_[time[used], zero_at],
        np.r_[(checks["stage_m"] - checks["raw_m"]).to_numpy(float)[used], [-z for *_, z, _ in spells]],
        np.r_[sd[used], [np.hypot(s, zero_sd_m) for *_, s in spells]],
        np.r_[np.zeros(used.size, bool), np.ones(len(spells), bool)],
        np.r_[checks["span"].to_numpy(np.int64)[used], zero_span],
        int(made.hours.time[0]),
        tuple(told_sd(s.row, "height_sd_m", options.height_sd_m) for s in made.spans),
        told_sd(row, "sensor_sd_m", options.sensor_sd_m),
        np.r_[np.zeros(used.size), [min((b - a) / (5 * DAY_NS) - 1.0, 4.0) for a, b, *_ in spells]],
    ), used


def _dry_by(offset: Offset, made: Prepared, noise: float) -> Dryness:
    return find_dry(made.hours, *_zero_by(offset, made), noise)


def _zero_by(offset: Offset, made: Prepared) -> tuple[np.ndarray, np.ndarray]:
    """Expected reading of a dry sensor and its sd at every hour, drawn through five-day knots."""
    time = made.hours.time
    knots = np.r_[np.arange(time[0], time[-1], 5 * DAY_NS), time[-1]]
    zero, sd = offset.at(knots, np.zeros(knots.size, np.int64), part="zero")
    return np.interp(time, knots, -zero), np.interp(time, knots, sd)


@dataclass(slots=True)
class Found:
    """A logger set on its datum, before its tables are made.

    Attributes
    ----------
    settled : Settled
    candidates : list of Step
        Steps that were weighed.
    refused : list of Refusal
        Checks set aside.
    """

    settled: Settled
    candidates: list[Step]
    refused: list[Refusal]


def find_datum(
    made: Prepared,
    checks: pd.DataFrame,
    around: Surroundings,
    options: StageOptions,
    priors: Priors | None = None,
    *,
    start: Dryness | None = None,
) -> Found:
    """Find a prepared logger's offset, drift and steps, and its dry times, each by the help of the other.

    Parameters
    ----------
    made : Prepared
    checks : DataFrame
        The logger's checks: time, stage_m, sd_m (NaN where not told) and optionally line.
    around : Surroundings
        Rain and the other loggers.
    options : StageOptions
    priors : Priors, optional
    start : Dryness, optional
        Dry times to start from (of an earlier round); found from the record alone where None.

    Returns
    -------
    Found

    Raises
    ------
    InputError
        When no reading is left, or when the checks stand farther off than any survey can be wrong.
    """
    if not made.hours.time.size:
        message = f"logger {made.logger_id}: no usable reading is left after quality control; look at its file"
        raise InputError(message)
    noise = max(s.noise for s in made.spans)
    matched, refused = gather_checks(made, checks, options)
    refuse_gross(made, matched, options)
    priors = priors or Priors()
    dryness = start or _first_dry(made, matched, options, priors)
    candidates: list[Step] = []
    doubtful: list[int] = []
    for _ in range(4):
        evidence, used = _evidence(made, matched, dryness, options, priors.zero_sd_m)
        candidates = _candidates(made, matched, dryness, around, options)
        offset = choose_steps(evidence, candidates, priors)
        odd = np.r_[doubtful_evidence(offset), false_zeros(offset, priors)]
        if odd.size:
            offset = choose_steps(evidence.take(np.delete(np.arange(evidence.time.size), odd)), candidates, priors)
        doubtful = [int(used[i]) for i in odd if i < used.size]
        before, dryness = dryness, _dry_by(offset, made, noise)
        if (before.dry == dryness.dry).all():
            break
    refused += [doubtful_check(made.logger_id, matched.iloc[i]) for i in doubtful]
    settled = Settled(made.logger_id, made.spans, made.hours, made.span, made.height_m, offset, dryness, noise)
    return Found(settled, candidates, refused)


def _first_dry(made: Prepared, checks: pd.DataFrame, options: StageOptions, priors: Priors) -> Dryness:
    """Dry times by the record alone, before checks are weighed."""
    noise = max(s.noise for s in made.spans)
    unseen = Dryness(np.zeros(made.span.size, bool), made.height_m, noise, [])
    prior = fit_offset(_evidence(made, checks.iloc[:0], unseen, options, priors.zero_sd_m)[0], (), priors)
    return find_dry(made.hours, *first_zero(made.hours, *_zero_by(prior, made), noise), noise)


def make_record(found: Found) -> LoggerRecord:
    """Make the tables of a logger that is set on its datum.

    Parameters
    ----------
    found : Found

    Returns
    -------
    LoggerRecord
    """
    settled = found.settled
    notes = [n for s in settled.spans for n in s.notes] + _datum_note(settled)
    notes += _step_notes(settled, found.candidates)
    return LoggerRecord(
        daily_rows(settled),
        correction_rows(settled),
        notes,
        found.refused,
    )


def _candidates(
    made: Prepared, checks: pd.DataFrame, dryness: Dryness, around: Surroundings, options: StageOptions
) -> list[Step]:
    noise = max(s.noise for s in made.spans)
    jumps = jump_candidates(made.logger_id, made.hours, ~dryness.dry, noise, options.least_step_m, around)
    edges = {int(made.hours.time[i]) for i in np.flatnonzero(np.diff(made.span)) + 1}
    jumps = [j for j in jumps if j.time not in edges]
    return jumps + hidden_candidates(made.hours, dryness.dry, checks["ns"].to_numpy(np.int64))


def _datum_note(settled: Settled) -> list[str]:
    """Tell of a datum that lies farther off than survey and sensor are told to be wrong."""
    out = []
    for k, row in enumerate(s.row for s in settled.spans):
        mine = np.flatnonzero(settled.span == k)
        if not mine.size:
            continue
        first = settled.hours.time[mine[:1]]
        added = float(settled.offset.at(first, np.array([k]))[0][0])
        e = settled.offset.evidence
        told = float(np.hypot(e.height_sd_m[k], e.sensor_sd_m))
        if abs(added) > max(3.0 * told, 0.02):
            out.append(
                f"logger {settled.logger_id}: {added * 100:+.1f} cm are added to it from {stamp(int(first[0]))}, "
                f"{abs(added) / told:.0f} times what survey and sensor are told to be wrong ({told * 100:.1f} cm); look at "
                f"height_m ({row['height_m']:g} m), the sensor's zero and the barometer's elevation"
            )
    return out


def _step_notes(settled: Settled, candidates: list[Step]) -> list[str]:
    out = []
    for step, (size, sd) in zip(settled.offset.steps, settled.offset.sizes(), strict=True):
        out.append(
            f"logger {settled.logger_id}: the record steps by {-size * 100:+.1f} cm (sd {sd * 100:.1f}) at "
            f"{stamp(step.time)} ({step.why}); taken as a moved sensor"
        )
    taken = {s.time for s in settled.offset.steps}
    for step in candidates:
        if step.log_odds > 0 and step.time not in taken:
            out.append(
                f"logger {settled.logger_id}: the record changes by {step.size_m * 100:+.1f} cm at "
                f"{stamp(step.time)} ({step.why}), but the checks speak against a moved sensor; "
                "left as it is"
            )
    return out


def build_record(
    rows: pd.DataFrame,
    readings: Readings,
    barometer: Barometer | None,
    checks: pd.DataFrame | None,
    latitude_deg: float,
    *,
    options: StageOptions | None = None,
    weather: pd.DataFrame | None = None,
) -> LoggerRecord:
    """Make one logger's record by itself (no other loggers to compare with).

    Parameters
    ----------
    rows : DataFrame
        The logger's rows of the registry.
    readings : Readings
    barometer : Barometer or None
    checks : DataFrame or None
        All or the logger's own checks.
    latitude_deg : float
    options : StageOptions, optional
    weather : DataFrame, optional
        date, precipitation_mm [, air_temperature_c].

    Returns
    -------
    LoggerRecord

    Raises
    ------
    InputError
        See :func:`prepare_logger`.
    """
    options = options or StageOptions()
    latitudes = dict.fromkeys(rows["wetland_id"], latitude_deg)
    made = prepare_logger(rows, readings, barometer, latitudes, options, frost=frost_days(weather), whole=True)
    found = find_datum(made, own_checks(checks, made.logger_id), Surroundings(sky_table(weather), {}), options)
    return replace(make_record(found), flagged=flagged_frame(found.settled, made.spans))


def frost_days(weather: pd.DataFrame | None) -> np.ndarray | None:
    """Return days (since 1970) which with the two before had a mean air temperature under -2, or None."""
    if weather is None or "air_temperature_c" not in weather:
        return None
    table = pd.Series(weather["air_temperature_c"].to_numpy(float), pd.DatetimeIndex(weather["date"])).sort_index()
    cold = (table < -2).astype(int).rolling(3).sum() == 3
    return table.index[cold].to_numpy("datetime64[D]").astype(np.int64)
