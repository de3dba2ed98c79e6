"""Daily stage of all loggers of an area."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from inundate.common.errors import InputError, Refusal
from inundate.stage.checks import own_checks
from inundate.stage.datum import Priors
from inundate.stage.days import CORRECTION_COLUMNS, DAILY_COLUMNS, SLOW_SD_M, Settled, flagged_frame
from inundate.stage.options import QUALITIES, StageOptions
from inundate.stage.prepare import Span
from inundate.stage.readings import Barometer, Readings
from inundate.stage.record import (
    Found,
    LoggerRecord,
    Prepared,
    find_datum,
    frost_days,
    make_record,
    prepare_logger,
)
from inundate.stage.signals import Hours, day_noise
from inundate.stage.steps import Surroundings, sky_table


@dataclass(slots=True)
class StageResult:
    """Stage of all loggers.

    Attributes
    ----------
    daily : DataFrame
        wetland_id, logger_id, date, stage_m, stage_sd_m, stage_min_m, stage_max_m, n, quality, censored, period; one
        row a logger and day with usable readings, sorted. ``censored``: the water stands at or below ``stage_m``.
        ``period`` rises where a step could not be bridged.
    corrections : DataFrame
        logger_id, kind, start, end, value_m, sd_m, why: all that was changed or left out.
    notes : list of str
        What an analyst should know.
    refused : list of Refusal
        Loggers and checks set aside.
    flagged : mapping of str to DataFrame
        By logger_id every reading: time, raw_value, depth_m, stage_m, flag. Made from the readings when asked for and not
        kept, since a network's readings may be many millions.
    """

    daily: pd.DataFrame
    corrections: pd.DataFrame
    notes: list[str] = field(default_factory=list)
    refused: list[Refusal] = field(default_factory=list)
    flagged: Mapping[str, pd.DataFrame] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class _Source:
    """What a logger is prepared from."""

    registry: pd.DataFrame
    readings: Mapping[str, Readings]
    barometer: Barometer | None
    latitudes: Mapping[str, float]
    options: StageOptions
    frost: np.ndarray | None

    def prepare(self, logger_id: str, before: list[Span] | None = None) -> Prepared:
        """Prepare one logger: what its days need, or every reading where it was prepared before."""
        rows = self.registry[self.registry["logger_id"] == logger_id]
        if logger_id not in self.readings:
            message = f"logger {logger_id}: no readings; give its file in the registry"
            raise InputError(message)
        return prepare_logger(
            rows,
            self.readings[logger_id],
            self.barometer,
            self.latitudes,
            self.options,
            frost=self.frost,
            whole=before is not None,
            before=before,
        )


class FlaggedReadings(Mapping[str, pd.DataFrame]):
    """Every reading of each logger with its flag, made anew when asked for: a mapping of logger_id to DataFrame."""

    def __init__(self, source: _Source, settled: dict[str, Settled]) -> None:
        self._source = source
        self._settled = settled

    def __getitem__(self, logger_id: str) -> pd.DataFrame:
        settled = self._settled[logger_id]
        return flagged_frame(settled, self._source.prepare(logger_id, settled.spans).spans)

    def __contains__(self, logger_id: object) -> bool:
        return logger_id in self._settled

    def __iter__(self) -> Iterator[str]:
        return iter(self._settled)

    def __len__(self) -> int:
        return len(self._settled)


def daily_stage(
    registry: pd.DataFrame,
    readings: Mapping[str, Readings],
    barometer: Barometer | None = None,
    checks: pd.DataFrame | None = None,
    latitudes: Mapping[str, float] | None = None,
    options: StageOptions | None = None,
    *,
    weather: pd.DataFrame | None = None,
) -> StageResult:
    """Turn the readings of all loggers into daily stage with uncertainty, flags and corrections.

    Parameters
    ----------
    registry : DataFrame
        From ``read_registry``.
    readings : mapping of logger_id to Readings
        May read on demand (``LoggerFiles``); each logger is asked for once, and again when its ``flagged`` is.
    barometer : Barometer, optional
        Needed by absolute loggers.
    checks : DataFrame, optional
        logger_id, time, stage_m [, sd_m, line].
    latitudes : mapping of wetland_id to float
        Degrees; of every wetland of the area.
    options : StageOptions, optional
    weather : DataFrame, optional
        date, precipitation_mm [, air_temperature_c]; helps to tell rain and ice from faults.

    Returns
    -------
    StageResult
        A logger that can't be used is refused and the rest goes on.

    Raises
    ------
    InputError
        When latitudes are missing or no logger at all can be used.
    """
    options = options or StageOptions()
    if latitudes is None:
        message = "daily_stage: latitudes is None; give the latitude of every wetland, degrees"
        raise InputError(message)
    source = _Source(registry, readings, barometer, latitudes, options, frost_days(weather))
    ready: dict[str, Prepared] = {}
    refused: list[Refusal] = []
    for logger_id in sorted(set(registry["logger_id"])):
        try:
            ready[logger_id] = source.prepare(logger_id)
        except InputError as fault:
            refused.append(Refusal("logger", logger_id, str(fault)))
    _some_left(ready, refused)
    around = Surroundings(sky_table(weather), {k: _wet(p.hours, p.hours.mean > 0.02) for k, p in ready.items()})
    found: dict[str, Found] = {}
    priors = Priors()
    for again in (False, True):
        if again:
            around.levels = {k: _wet(ready[k].hours, ~f.settled.dryness.dry) for k, f in found.items()}
            priors = priors.learn([f.settled.offset for f in found.values()])
        for logger_id in list(ready):
            try:
                found[logger_id] = find_datum(
                    ready[logger_id],
                    own_checks(checks, logger_id),
                    around,
                    options,
                    priors,
                    start=found[logger_id].settled.dryness if again else None,
                )
            except InputError as fault:
                del ready[logger_id]
                refused.append(Refusal("logger", logger_id, str(fault)))
        _some_left(ready, refused)
    around.levels = {}
    _share_slow_errors(found)
    made = {k: make_record(f) for k, f in found.items()}
    out = _gather(made, refused, _barometer_note(barometer) + _shared_clock(ready))
    out.flagged = FlaggedReadings(source, {k: f.settled for k, f in found.items()})
    return out


def _some_left(ready: dict[str, Prepared], refused: list[Refusal]) -> None:
    if refused and not ready:
        message = f"none of {len(refused)} loggers can be used; the first: {refused[0].reason}"
        raise InputError(message)


def _wet(hours: Hours, wet: np.ndarray) -> Hours:
    return Hours(*(getattr(hours, k)[wet] for k in ("hour", "time", "n", "mean", "low", "high")))


def _share_slow_errors(found: dict[str, Found]) -> None:
    """Give each logger the scatter that it shows when dry, or the middle one of the others.

    No logger's is more than the scatter of its own daily means about a smooth course. What the noise of single
    readings adds to either is taken out: it is counted apart.
    """
    seen = [_beyond_noise(f, f.settled.dryness.day_spread_m) for f in found.values()]
    known = [s for s in seen if np.isfinite(s)]
    usual = float(np.median(known)) if known else SLOW_SD_M
    for one, own in zip(found.values(), seen, strict=True):
        most = _beyond_noise(one, day_noise(one.settled.hours))
        one.settled.slow_m = max(own if np.isfinite(own) else min(usual, most), 5e-4)


def _beyond_noise(found: Found, spread_m: float) -> float:
    """Scatter of daily means without that of single readings; NaN stays."""
    hours = found.settled.hours
    per_day = max(float(hours.n.sum()) / max(np.unique(hours.hour // 24).size, 1), 1.0)
    return float(np.sqrt(np.maximum(spread_m**2 - found.settled.noise**2 / per_day, 0.0)))


def _barometer_note(barometer: Barometer | None) -> list[str]:
    if barometer is None or not barometer.n_refused:
        return []
    lines = "; ".join(f"{f} line {n}: {text!r}" for f, n, text in barometer.refused_rows)
    shown = f" ({lines})" if lines else ""
    return [
        f"barometer {barometer.name}: {barometer.n_refused} readings are no air pressure in kPa and were left out{shown}"
    ]


def _shared_clock(ready: dict[str, Prepared]) -> list[str]:
    absolute = [p for p in ready.values() if any(s.row["kind"] == "absolute" for s in p.spans)]
    off = [p for p in absolute if any(s.clock for s in p.spans)]
    hours = {s.clock[0].hours for p in off for s in p.spans if s.clock}
    if len(absolute) >= 2 and len(off) == len(absolute) and len(hours) == 1:
        only = hours.pop()
        return [
            f"all {len(off)} absolute loggers are {-only:+d} h off the barometer alike and were set by it; its clock may be "
            "the wrong one: look at utc_offset of the loggers and at the barometer's times"
        ]
    return []


def _gather(made: dict[str, LoggerRecord], refused: list[Refusal], notes: list[str]) -> StageResult:
    daily = [r.daily for r in made.values()]
    rows = [r.corrections for r in made.values() if len(r.corrections)]
    table = pd.concat(daily, ignore_index=True) if daily else pd.DataFrame(columns=list(DAILY_COLUMNS))
    changed = pd.concat(rows, ignore_index=True) if rows else pd.DataFrame(columns=list(CORRECTION_COLUMNS))
    return StageResult(
        table.sort_values(["wetland_id", "date", "logger_id"], ignore_index=True),
        changed.sort_values(["logger_id", "start", "kind"], kind="stable", ignore_index=True),
        notes + [n for r in made.values() for n in r.notes],
        refused + [f for r in made.values() for f in r.refused],
    )


def wetland_daily(result: StageResult | pd.DataFrame) -> pd.DataFrame:
    """Make one row a wetland and date from several loggers.

    Where two loggers give a level, they are weighed by their variances, and the standard deviation is that of the
    better one or half their disagreement, whichever is more (their errors may be shared). A logger that is dry gives
    way to one that is not; where all are dry the lowest sensor speaks.

    Parameters
    ----------
    result : StageResult or DataFrame
        Or its ``daily`` table.

    Returns
    -------
    DataFrame
        wetland_id, logger_id (joined by ``+``), date, stage_m, stage_sd_m, stage_min_m, stage_max_m, n, quality (the
        worst), censored, period (numbered anew in each wetland, by first day), sorted by wetland_id and date.
    """
    daily = result.daily if isinstance(result, StageResult) else result
    key = ["wetland_id", "date"]
    alone = ~daily.duplicated(key, keep=False)
    shared = [_merge(group) for _, group in daily[~alone].groupby(key, sort=False)]
    single = daily[alone].copy()
    single["_part"] = single["logger_id"] + "#" + single["period"].astype(str)
    out = pd.concat([single, pd.DataFrame(shared, columns=single.columns)], ignore_index=True) if shared else single
    out = out.sort_values(key, ignore_index=True).astype({c: daily[c].dtype for c in daily.columns})
    for _, rows in out.groupby("wetland_id", sort=False):
        names = {name: i + 1 for i, name in enumerate(dict.fromkeys(rows["_part"]))}
        out.loc[rows.index, "period"] = rows["_part"].map(names)
    return out.drop(columns="_part")


def _merge(group: pd.DataFrame) -> dict:
    wet = group[~group["censored"]]
    if wet.empty:
        low = group.iloc[int(group["stage_m"].argmin())]
        return {**low.to_dict(), "_part": f"{low['logger_id']}#{low['period']}"}
    weight = 1.0 / wet["stage_sd_m"].to_numpy() ** 2
    weight /= weight.sum()
    stage = wet["stage_m"].to_numpy()
    worst = max(wet["quality"], key=QUALITIES.index)
    out = wet.iloc[0].to_dict()
    out.update(
        logger_id="+".join(wet["logger_id"]),
        stage_m=float(weight @ stage),
        stage_sd_m=float(max(wet["stage_sd_m"].min(), np.ptp(stage) / 2)),
        stage_min_m=float(weight @ wet["stage_min_m"]),
        stage_max_m=float(weight @ wet["stage_max_m"]),
        n=int(wet["n"].sum()),
        quality=worst,
        _part="+".join(f"{a}#{b}" for a, b in zip(wet["logger_id"], wet["period"], strict=True)),
    )
    return out
