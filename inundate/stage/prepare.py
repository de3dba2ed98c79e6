"""From a logger's raw readings over one period of the registry to depth of water above its sensor, flagged."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from inundate.common.errors import InputError
from inundate.stage.clock import ClockSpell, clock_spells, set_clock
from inundate.stage.options import FLAG, StageOptions
from inundate.stage.physics import METRE, PASCAL, STANDARD_GRAVITY, carry_pressure, depth_of_pressure, gravity
from inundate.stage.quality import flag_flat, flag_ice, flag_noise, flag_spikes
from inundate.stage.readings import Barometer, Readings
from inundate.stage.signals import HOUR_NS, Hours, hourly, interpolate, noise_of, resolution, stamp

#: Plausible middle depths (m) by kind, and total pressures (Pa): from a high mountain's air to 50 m of water on the sea's.
_DEPTHS = {"absolute": (-0.15, 40.0), "vented": (-0.3, 40.0), "level": (-15.0, 40.0)}
_TOTAL_PA = (45e3, 600e3)


@dataclass(slots=True)
class Span:
    """One logger over one period of the registry.

    Attributes
    ----------
    row : dict
        The registry's row.
    time : ndarray of int64, shape (reading,)
        ns UTC, clock corrected, rising.
    raw : ndarray of float64, shape (reading,)
        Raw value, in the registry's unit.
    depth : ndarray of float32, shape (reading,)
        Depth above the sensor, m.
    flag : ndarray of uint8, shape (reading,)
        Codes of ``options.FLAGS``.
    hours : Hours
        Depth of good readings by hours.
    noise : float
        sd of a reading, m.
    warm : bool
        Whether the logger measured temperature.
    clock : list of ClockSpell
    notes : list of str
    """

    row: Mapping
    time: np.ndarray
    raw: np.ndarray
    depth: np.ndarray
    flag: np.ndarray
    hours: Hours
    noise: float
    warm: bool = True
    clock: list[ClockSpell] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)


def convert(value: np.ndarray, unit: str, kind: str) -> np.ndarray:
    """Return values in Pa (absolute, vented; a length is a conventional column of water) or metres (level).

    Parameters
    ----------
    value : ndarray of float64
    unit : str
        One of ``physics.UNITS``.
    kind : {"absolute", "vented", "level"}
    """
    if kind == "level":
        return value * METRE[unit]
    return value * (PASCAL[unit] if unit in PASCAL else METRE[unit] * 1000.0 * STANDARD_GRAVITY)


def _fits(middle: float, kind: str, air_pa: float) -> list[str]:
    """Units and kinds under which a middle raw value would be plausible, likeliest first."""
    out = []
    for unit in (*PASCAL, *METRE):
        if unit in PASCAL and _TOTAL_PA[0] <= middle * PASCAL[unit] <= _TOTAL_PA[1]:
            depth = (middle * PASCAL[unit] - air_pa) / 9800.0
            if _DEPTHS["absolute"][0] <= depth <= 10:
                out.append(f"{unit} as absolute")
        if unit in METRE and 0.0 <= middle * METRE[unit] <= 5 and not (unit == "ft" and kind == "absolute"):
            out.append(f"{unit} as level")
    return out


def _implausible(row: Mapping, name: str, what: str, middle: float, air_pa: float) -> InputError:
    fits = [f for f in _fits(middle, row["kind"], air_pa) if f != f"{row['unit']} as {row['kind']}"]
    hint = f"such values would fit {', '.join(fits[:3])}; " if fits else ""
    return InputError(
        f"logger {row['logger_id']} ({name}): the middle value {middle:.4g} {row['unit']} read as kind {row['kind']} is "
        f"{what}; {hint}correct unit or kind in the registry"
    )


def _air(time: np.ndarray, row: Mapping, barometer: Barometer, options: StageOptions) -> np.ndarray:
    air = interpolate(
        time,
        barometer.time.astype("datetime64[ns]").view(np.int64),
        barometer.pressure_kpa * 1000.0,
        int(options.barometer_hole_h * HOUR_NS),
    )
    place = row.get("elevation_m", np.nan)
    if options.barometer_elevation_m is not None and np.isfinite(place):
        air = carry_pressure(air, options.barometer_elevation_m, float(place))
    return air


def _check_middle(row: Mapping, name: str, raw: np.ndarray, depth: np.ndarray, air_pa: float) -> None:
    lo, hi = _DEPTHS[row["kind"]]
    middle = float(np.nanmedian(depth))
    if not lo <= middle <= hi:
        what = f"a depth of {middle:.3g} m, outside {lo}..{hi} m"
        if row["kind"] == "absolute" and -2.0 < middle < lo:
            what += " (or the barometer stands much lower than the logger: give both elevations)"
        raise _implausible(row, name, what, float(np.nanmedian(raw)), air_pa)


def _follows_air(time: np.ndarray, value: np.ndarray, barometer: Barometer) -> bool:
    """Whether a gauge pressure is really a total one: tens of kPa, and its hourly changes are the air's."""
    good = np.isfinite(value)
    if not good.any() or not 45e3 <= np.median(value[good]) <= 150e3:
        return False
    hours = hourly(time[good], value[good])
    air = interpolate(
        hours.time, barometer.time.astype("datetime64[ns]").view(np.int64), barometer.pressure_kpa, 3 * HOUR_NS
    )
    mine, theirs = np.diff(hours.mean), np.diff(air) * 1000.0
    both = np.isfinite(theirs)
    if both.sum() < 24 or theirs[both].std() == 0:
        return False
    return float((mine[both] @ theirs[both]) / (theirs[both] @ theirs[both])) > 0.5


def _window(row: Mapping, time: np.ndarray) -> slice:
    lo, hi = 0, time.size
    if row.get("valid_from") is not None and not pd.isna(row["valid_from"]):
        lo = int(np.searchsorted(time, pd.Timestamp(row["valid_from"]).value))
    if row.get("valid_to") is not None and not pd.isna(row["valid_to"]):
        hi = int(np.searchsorted(time, pd.Timestamp(row["valid_to"]).value))
    return slice(lo, hi)


def _set_clock(
    readings: Readings, row: Mapping, air: Barometer | None, known: list[ClockSpell] | None
) -> tuple[np.ndarray, np.ndarray | None, list[ClockSpell]]:
    time = readings.time.astype("datetime64[ns]", copy=False).view(np.int64)
    if row["kind"] != "absolute" or air is None:
        return time, None, []
    spells = known
    if spells is None:
        good = np.isfinite(readings.value)
        pressure = convert(readings.value[good], row["unit"], row["kind"])
        told = air.time.astype("datetime64[ns]").view(np.int64)
        spells = clock_spells(time[good], pressure, told, air.pressure_kpa * 1000.0)
    if not spells:
        return time, None, []
    fixed, order = set_clock(time, spells)
    return fixed, order, spells


def prepare_span(
    row: Mapping,
    readings: Readings,
    barometer: Barometer | None,
    latitude_deg: float,
    options: StageOptions,
    *,
    frost: np.ndarray | None = None,
    clock: list[ClockSpell] | None = None,
) -> Span:
    """Turn one registry row's readings into flagged depth above the sensor.

    Parameters
    ----------
    row : mapping
        A row of the registry.
    readings : Readings
        Of the logger; only those inside ``[valid_from, valid_to)`` are used.
    barometer : Barometer, optional
        Needed for kind ``absolute``.
    latitude_deg : float
    options : StageOptions
    frost : ndarray of int64, optional
        Days since 1970 of lasting frost (see ``quality.flag_ice``).
    clock : list of ClockSpell, optional
        Where the clock is off, if that was found before.

    Returns
    -------
    Span

    Raises
    ------
    InputError
        When an absolute logger has no barometer, when the two don't overlap, when values are implausible in the unit
        told, or when no reading falls inside the period.
    """
    kind, name = row["kind"], readings.name
    place = f"logger {row['logger_id']} ({name})"
    if kind == "absolute" and barometer is None:
        message = f"{place}: kind absolute needs air pressure; give a barometer or set kind to vented or level"
        raise InputError(message)
    time, order, spells = _set_clock(readings, row, barometer, clock)
    raw = readings.value if order is None else readings.value[order]
    warmth = readings.temperature_c
    warmth = warmth if order is None or warmth is None else warmth[order]
    part = _window(row, time)
    time, raw = time[part], raw[part]
    warmth = None if warmth is None else warmth[part]
    if not np.isfinite(raw).any():
        message = f"{place}: no reading between valid_from and valid_to; correct the registry's dates or the file"
        raise InputError(message)
    depth, air = _depth(row, name, (time, raw, warmth), barometer, latitude_deg, options)
    flag = np.zeros(time.size, np.uint8)
    hours, noise = _flag_all(row, (time, raw, warmth), (depth, air), flag, frost)
    warm = row["kind"] == "level" or (warmth is not None and bool(np.isfinite(warmth).mean() > 0.5))
    span = Span(row, time, raw, depth.astype(np.float32), flag, hours, noise, warm, spells)
    _remark(span, readings, place)
    return span


def _depth(
    row: Mapping,
    name: str,
    read: tuple[np.ndarray, np.ndarray, np.ndarray | None],
    barometer: Barometer | None,
    latitude_deg: float,
    options: StageOptions,
) -> tuple[np.ndarray, np.ndarray | None]:
    time, raw, warmth = read
    value = convert(raw, row["unit"], row["kind"])
    if row["kind"] == "level":
        _check_middle(row, name, raw, value, 101e3)
        return value, None
    air = None
    air_pa = 101e3
    if row["kind"] == "absolute" and barometer is not None:
        air_pa = float(np.median(barometer.pressure_kpa)) * 1000.0
        middle = float(np.nanmedian(value))
        if not _TOTAL_PA[0] <= middle <= _TOTAL_PA[1]:
            what = f"a total pressure of {middle / 1000:.4g} kPa, outside {_TOTAL_PA[0] / 1e3:g}..{_TOTAL_PA[1] / 1e3:g} kPa"
            raise _implausible(row, name, what, float(np.nanmedian(raw)), air_pa)
        air = _air(time, row, barometer, options)
        if not np.isfinite(air).any():
            span = barometer.time[[0, -1]].astype("datetime64[D]")
            message = (
                f"logger {row['logger_id']} ({name}): the barometer {barometer.name} ({span[0]} to {span[1]}) covers none "
                "of its readings; give air pressure for the logger's time"
            )
            raise InputError(message)
        value = value - air
    warm = np.full(1, options.water_temperature_c)
    if warmth is not None:
        with np.errstate(invalid="ignore"):
            known = (warmth > -5) & (warmth < 45)
        warm = warmth if known.all() else np.where(known, warmth, np.float32(options.water_temperature_c))
    depth = depth_of_pressure(value, warm, gravity(latitude_deg))
    if row["kind"] == "vented" and barometer is not None and _follows_air(time, value, barometer):
        what = f"a gauge pressure of {float(np.nanmedian(value)) / 1000:.4g} kPa that follows the air's"
        raise _implausible(row, name, what, float(np.nanmedian(raw)), float(np.median(barometer.pressure_kpa)) * 1e3)
    _check_middle(row, name, raw, depth, air_pa)
    return depth, air


def _flag_all(
    row: Mapping,
    read: tuple[np.ndarray, np.ndarray, np.ndarray | None],
    made: tuple[np.ndarray, np.ndarray | None],
    flag: np.ndarray,
    frost: np.ndarray | None,
) -> tuple[Hours, float]:
    (time, raw, warmth), (depth, air) = read, made
    flag[np.isnan(depth)] = FLAG["no_barometer"]
    flag[np.isnan(raw)] = FLAG["no_value"]
    lo, hi = _DEPTHS[row["kind"]]
    with np.errstate(invalid="ignore"):
        flag[(depth < lo - 0.5) | (depth > hi + 10)] = FLAG["implausible"]
    good = flag == FLAG["good"]
    step_pa = 0.0 if air is None else resolution(raw) * float(convert(np.ones(1), row["unit"], row["kind"])[0])
    flag_flat(time, raw, air, depth, flag, step_pa)
    noise = noise_of(depth[good], resolution(depth[good][:2000]))
    flag_spikes(time, depth, flag, noise)
    flag_ice(time, warmth, depth, flag, frost)
    noise = flag_noise(time, depth, flag)
    good = flag == FLAG["good"]
    return hourly(time[good], depth[good]), noise


def _remark(span: Span, readings: Readings, place: str) -> None:
    if readings.n_refused:
        lines = "; ".join(f"{f} line {n}: {text!r}" for f, n, text in readings.refused_rows)
        span.notes.append(f"{place}: {readings.n_refused} of {readings.n_rows} rows could not be read ({lines})")
    if readings.n_conflicting:
        span.notes.append(f"{place}: {readings.n_conflicting} rows repeat a time with another value; the first is kept")
    if readings.clock_back.size:
        span.notes.append(
            f"{place}: the clock goes back at {str(readings.clock_back[0])[:16]}"
            f"{f' and {readings.clock_back.size - 1} more times' if readings.clock_back.size > 1 else ''}"
        )
    for spell in span.clock:
        start, end = stamp(spell.start), stamp(spell.end)
        span.notes.append(
            f"{place}: from {start} to {end} (its own clock) the clock is {-spell.hours:+d} h off the barometer's; "
            f"{spell.hours:+d} h added (log likelihood gain {spell.gain:.0f})"
        )
    counts = np.bincount(span.flag, minlength=11)
    if counts[FLAG["implausible"]]:
        first = int(np.flatnonzero(span.flag == FLAG["implausible"])[0])
        span.notes.append(
            f"{place}: {counts[FLAG['implausible']]} readings can't be water and were left out "
            f"(the first {span.raw[first]:g} {span.row['unit']} at {stamp(span.time[first])})"
        )
    if counts[FLAG["no_barometer"]]:
        span.notes.append(f"{place}: {counts[FLAG['no_barometer']]} readings have no air pressure within reach")
