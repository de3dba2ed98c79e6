"""Single readings that can't be trusted: spikes, visits, flat lines, ice and noise."""

from __future__ import annotations

import numpy as np

from inundate.stage.options import FLAG
from inundate.stage.signals import DAY_NS, HOUR_NS, Hours, hourly, interpolate, noise_of, outliers, resolution, spread

_REACH = 5


def flag_spikes(time: np.ndarray, depth: np.ndarray, flag: np.ndarray, noise: float) -> None:
    """Flag readings, and whole hours, that leave the running median of their neighbours and come back.

    Changes ``flag`` in place: ``out_of_water`` where the sensor drops from water to no water for at most a few
    readings or hours (taken out for download), ``spike`` for any other.

    Parameters
    ----------
    time : ndarray of int64, shape (reading,)
        ns, rising.
    depth : ndarray of float64, shape (reading,)
        m.
    flag : ndarray of uint8, shape (reading,)
        Only readings flagged good are looked at.
    noise : float
        Noise (sd) of single readings, m.
    """
    least = max(6.0 * noise, 0.01)
    good = np.flatnonzero(flag == FLAG["good"])
    usual = int(np.median(np.diff(time[good][:10000]))) if good.size > 2 else HOUR_NS
    span = max(12 * HOUR_NS, (_REACH + 1) * usual)
    bad = good[outliers(time[good], depth[good], _REACH, span, least)]
    flag[bad] = FLAG["spike"]
    good = np.flatnonzero(flag == FLAG["good"])
    hours = hourly(time[good], depth[good])
    if usual < HOUR_NS // 2 and hours.hour.size:
        odd = outliers(hours.time, hours.mean, _REACH, 12 * HOUR_NS, least)
        if odd.any():
            near = np.isin(time[good] // HOUR_NS, _around(hours.hour[odd]))
            at = good[near]
            steady = interpolate(time[at], hours.time[~odd], hours.mean[~odd], 24 * HOUR_NS)
            far = at[np.abs(depth[at] - steady) > least]
            flag[far] = FLAG["spike"]
            bad = np.union1d(bad, far)
            good = np.flatnonzero(flag == FLAG["good"])
    if bad.size and good.size:
        level = interpolate(time[bad], time[good], depth[good], DAY_NS)
        dry = (np.abs(depth[bad]) < 0.03) & (level > 0.06)
        flag[bad[dry]] = FLAG["out_of_water"]


def _around(hours: np.ndarray) -> np.ndarray:
    return np.unique(np.concatenate([hours - 1, hours, hours + 1]))


def flag_flat(
    time: np.ndarray,
    raw: np.ndarray,
    air_pa: np.ndarray | None,
    depth: np.ndarray,
    flag: np.ndarray,
    step_pa: float = 0.0,
) -> None:
    """Flag runs of the very same raw value that water or air can't give; changes ``flag`` in place.

    For an absolute sensor: six hours and more while the air's pressure (``air_pa``) moved by more than 50 Pa, and by more
    than five steps of the barometer's resolution and of the sensor's (``step_pa``). For others: two days
    and more, ten times longer than its long runs elsewhere, away from zero depth.

    Parameters
    ----------
    time : ndarray of int64, shape (reading,)
    raw : ndarray of float64, shape (reading,)
    air_pa : ndarray of float64, shape (reading,), or None
    depth : ndarray of float64, shape (reading,)
        m.
    flag : ndarray of uint8, shape (reading,)
    step_pa : float
        Smallest step between readings of an absolute sensor, Pa.
    """
    if raw.size < 6:
        return
    start = np.flatnonzero(np.r_[True, raw[1:] != raw[:-1]])
    stop = np.r_[start[1:], raw.size]
    length = time[stop - 1] - time[start]
    if air_pa is not None:
        for i in np.flatnonzero((length >= 6 * HOUR_NS) & (stop - start >= 6)):
            air = air_pa[start[i] : stop[i]]
            air = air[np.isfinite(air)]
            if air.size and np.ptp(air) > max(50.0, 5.0 * resolution(air), 5.0 * step_pa):
                _set(flag, start[i], stop[i], "flat")
        return
    several = length[stop - start > 1]
    usual = float(np.quantile(several, 0.9)) if several.size else 0.0
    long = (length >= 2 * DAY_NS) & (stop - start >= 24) & (length >= 10 * usual)
    for i in np.flatnonzero(long):
        if abs(depth[start[i]]) > 0.02:
            _set(flag, start[i], stop[i], "flat")


def _set(flag: np.ndarray, start: int, stop: int, name: str) -> None:
    part = flag[start:stop]
    part[part == FLAG["good"]] = FLAG[name]


def flag_ice(
    time: np.ndarray,
    warmth_c: np.ndarray | None,
    depth: np.ndarray,
    flag: np.ndarray,
    frost: np.ndarray | None,
) -> None:
    """Flag readings of a frozen sensor; changes ``flag`` in place.

    Water is never colder than 0, so a sensor under -0.3 is in ice, or in air (then it reads no more than 5 cm and
    falls under ``dry``). In a cold spell (within 0.3 of freezing, or ``frost`` where the logger has no temperature; up to
    a day of thaw in between) and the day after it, everything from the first to the last sudden change of level is
    flagged: ice presses and lifts, and lets go when it thaws. So is a cold spell of three days and more in which the level
    moves more than five times as much as in the rest of the record: water under ice is calm.

    Parameters
    ----------
    time : ndarray of int64, shape (reading,)
    warmth_c : ndarray of float, shape (reading,), or None
        Temperature at the sensor.
    depth : ndarray of float64, shape (reading,)
        m.
    flag : ndarray of uint8, shape (reading,)
    frost : ndarray of int64, or None
        Days since 1970 whose mean air temperature, and that of the two days before, were under -2.
    """
    if warmth_c is not None and np.isfinite(warmth_c).any():
        with np.errstate(invalid="ignore"):
            frozen = (warmth_c < -0.3) & (depth > 0.05)
            cold = warmth_c <= 0.3
    elif frost is not None and frost.size:
        frozen = np.zeros(time.size, bool)
        cold = np.isin(time // DAY_NS, frost)
    else:
        return
    flag[frozen & (flag == FLAG["good"])] = FLAG["ice"]
    good = flag == FLAG["good"]
    hours = hourly(time[good], depth[good])
    if not cold.any() or hours.hour.size < 48:
        return
    restless = _restless_spells(hours, np.unique(time[cold] // HOUR_NS))
    change = np.diff(hours.mean)
    limit = max(10.0 * spread(change), 0.01)
    jump_hours = hours.hour[1:][np.abs(change) > limit]
    hour = time // HOUR_NS
    for first, last in _spells(hour[cold]):
        if (first, last) in restless:
            lo, hi = np.searchsorted(hour, [first, last + 1])
            _set(flag, lo, hi, "ice")
        inside = jump_hours[(jump_hours >= first) & (jump_hours <= last + 24)]
        if inside.size >= 2:
            lo, hi = np.searchsorted(hour, [inside[0], inside[-1] + 1])
            _set(flag, lo, hi, "ice")


def _spells(hours: np.ndarray) -> list[tuple[int, int]]:
    """First and last of runs of hours that are at most a day apart."""
    cut = np.flatnonzero(np.diff(hours) > 24)
    return list(zip(hours[np.r_[0, cut + 1]].tolist(), hours[np.r_[cut, -1]].tolist(), strict=True))


def _restless_spells(hours: Hours, cold: np.ndarray) -> set[tuple[int, int]]:
    """Cold spells in which six-hourly changes scatter over five times as much as elsewhere, and over 1 cm."""
    later = np.searchsorted(hours.hour, hours.hour + 6)
    here = np.flatnonzero(later < hours.hour.size)
    here = here[hours.hour[later[here]] == hours.hour[here] + 6]
    change, start = hours.mean[later[here]] - hours.mean[here], hours.hour[here]
    usual = spread(change[~np.isin(start, cold)])
    limit = max(5.0 * usual, 0.01) if np.isfinite(usual) else np.inf
    out = set()
    for first, last in _spells(cold):
        inside = change[(start >= first) & (start + 6 <= last)]
        if last - first >= 72 and inside.size >= 24 and spread(inside) > limit:
            out.add((first, last))
    return out


def flag_noise(time: np.ndarray, depth: np.ndarray, flag: np.ndarray) -> float:
    """Flag days of wild scatter (over eight times the usual and over 1 cm) and return the usual noise of a reading.

    Parameters
    ----------
    time : ndarray of int64, shape (reading,)
    depth : ndarray of float64, shape (reading,)
    flag : ndarray of uint8, shape (reading,)
        Changed in place.

    Returns
    -------
    float
        sd of a reading, m.
    """
    good = np.flatnonzero(flag == FLAG["good"])
    x = depth[good]
    usual = noise_of(x, resolution(x))
    if good.size < 50:
        return usual
    second = np.abs(np.r_[0.0, x[2:] - 2.0 * x[1:-1] + x[:-2], 0.0]) / np.sqrt(6.0)
    day = time[good] // DAY_NS
    start = np.flatnonzero(np.r_[True, day[1:] != day[:-1]])
    count = np.diff(np.r_[start, day.size])
    scatter = np.add.reduceat(np.minimum(second, 1.0), start) / count
    wild = (scatter > max(8.0 * usual, 0.01)) & (count >= 6)
    for i in np.flatnonzero(wild):
        part = slice(start[i], start[i] + count[i])
        if np.mean(second[part] > 3.0 * max(usual, 0.001)) > 0.4:
            flag[good[part]] = FLAG["noise"]
    return usual
