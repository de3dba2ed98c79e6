"""Sudden changes of level that may be a moved sensor, and what speaks for or against it."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numba
import numpy as np
import pandas as pd

from inundate.stage.datum import Step
from inundate.stage.signals import DAY_NS, HOUR_NS, Hours, spread

_SIDE = 6
_REACH_NS = 12 * HOUR_NS


def _reach(hours: Hours) -> int:
    """Widest distance (ns) of neighbouring hours: 12 h, or one and a half usual steps of a sparse record."""
    usual = int(np.median(np.diff(hours.time))) if hours.time.size > 1 else 0
    return max(_REACH_NS, usual * 3 // 2)


@numba.njit(cache=True, nogil=True)
def _sides(time: np.ndarray, x: np.ndarray, at: np.ndarray, side: int, reach: int) -> tuple[np.ndarray, np.ndarray]:
    """Medians of up to ``side`` values before and after the step between at and at + 1."""
    before, after = np.empty(at.size), np.empty(at.size)
    for k in range(at.size):
        i = at[k]
        lo = i
        while lo > 0 and i - lo < side - 1 and time[i] - time[lo - 1] <= reach:
            lo -= 1
        hi = i + 1
        while hi + 1 < x.size and hi - i < side and time[hi + 1] - time[i + 1] <= reach:
            hi += 1
        before[k] = np.median(x[lo : i + 1])
        after[k] = np.median(x[i + 1 : hi + 1])
    return before, after


@dataclass(slots=True)
class Surroundings:
    """What the neighbourhood says of a change at a time.

    Attributes
    ----------
    weather : DataFrame or None
        Indexed by date: rain_mm of the day and the day before, and melt (whether snow may be melting).
    levels : dict of str to Hours
        Depth by logger, at wet times.
    """

    weather: pd.DataFrame | None
    levels: dict[str, Hours]

    def others(self, logger_id: str, time: int) -> np.ndarray:
        """Return changes (m) of the other loggers' level over three hours about a time."""
        out = []
        hour = time // HOUR_NS
        for name, hours in self.levels.items():
            if name == logger_id:
                continue
            i = np.searchsorted(hours.hour, [hour - 2, hour + 1])
            if i[1] < hours.hour.size and i[1] > i[0] and hours.hour[i[1]] - hours.hour[i[0]] <= 6:
                out.append(hours.mean[i[1]] - hours.mean[i[0]])
        return np.array(out)

    def sky(self, time: int) -> tuple[float, bool]:
        """Return rain (mm) of the day and the day before (NaN where not known), and whether snow may be melting."""
        day = pd.Timestamp(time // DAY_NS * DAY_NS)
        if self.weather is None or day not in self.weather.index:
            return float("nan"), False
        at = self.weather.index.get_loc(day)
        return float(self.weather["rain_mm"].to_numpy()[at]), bool(self.weather["melt"].to_numpy()[at])


def sky_table(weather: pd.DataFrame | None) -> pd.DataFrame | None:
    """Prepare daily weather for :class:`Surroundings`.

    Snow may be melting on a day with a mean over 0.5 degrees where, within the 30 days before, more than 2 mm fell on
    days under 1 degree. Common practice, no source.

    Parameters
    ----------
    weather : DataFrame or None
        date, precipitation_mm [, air_temperature_c].

    Returns
    -------
    DataFrame or None
    """
    if weather is None or "precipitation_mm" not in weather:
        return None
    table = pd.DataFrame({"rain": weather["precipitation_mm"].to_numpy(float)}, pd.DatetimeIndex(weather["date"]))
    table["warmth"] = np.nan if "air_temperature_c" not in weather else weather["air_temperature_c"].to_numpy(float)
    table = table[~table.index.duplicated()].sort_index().asfreq("D")
    snow = table["rain"].where(table["warmth"] < 1.0, 0.0).rolling(30, min_periods=1).sum()
    rain = table["rain"].rolling(2, min_periods=1).sum()
    return pd.DataFrame({"rain_mm": rain, "melt": (snow > 2.0) & (table["warmth"] > 0.5)})


def jump_candidates(
    logger_id: str, hours: Hours, wet: np.ndarray, noise: float, least: float, around: Surroundings
) -> list[Step]:
    """List sudden changes between neighbouring hours, with odds by rain and by what other loggers did.

    Parameters
    ----------
    logger_id : str
    hours : Hours
        Depth by hours.
    wet : ndarray of bool, shape (hour,)
        False where the sensor is dry: a change there is water coming or going.
    noise : float
        sd of a reading, m.
    least : float
        Smallest change listed, m.
    around : Surroundings

    Returns
    -------
    list of Step
        Largest by significance first, at most 16.
    """
    x, time, reach = hours.mean, hours.time, _reach(hours)
    if x.size < 2 * _SIDE:
        return []
    change = np.diff(x)
    whole = _whole_change(change, hours.n)
    close = np.diff(time) <= reach
    usual = max(spread(change[close]), noise)
    limit = max(least, 6.0 * usual)
    at = np.flatnonzero((np.abs(whole) >= 0.6 * limit) & close & wet[1:] & wet[:-1])
    if not at.size:
        return []
    before, after = _sides(time, x, at, _SIDE, reach)
    size = after - before
    sharp = (np.abs(size) >= limit) & (np.abs(whole[at]) >= 0.6 * np.abs(size)) & (change[at] * size > 0)
    out: list[Step] = []
    order = sorted(np.flatnonzero(sharp), key=lambda k: -abs(size[k]))
    for k in order:
        moment = int(time[at[k] + 1])
        if all(abs(s.time - moment) > reach for s in out):
            odds, why = _odds(logger_id, moment, float(size[k]), around)
            sd = float(np.hypot(usual * np.sqrt(2.0), 0.003))
            out.append(Step(moment, float(size[k]), sd, odds, "jump", why))
        if len(out) >= 16:
            break
    return out


def _whole_change(change: np.ndarray, n: np.ndarray) -> np.ndarray:
    """Change from hour to hour, with that of the next hour where a sudden one inside an hour is shared by the two.

    Only where hours hold several readings, and both changes have one sign.
    """
    if change.size < 2 or np.median(n) < 2:
        return change
    after: np.ndarray = np.r_[change[1:], 0.0]
    before: np.ndarray = np.r_[0.0, change[:-1]]
    other = np.where(np.abs(after) > np.abs(before), after, before)
    return np.where(other * change > 0, change + other, change)


def _odds(logger_id: str, time: int, size: float, around: Surroundings) -> tuple[float, str]:
    """Log odds that a sudden change is a moved sensor. Common practice, no source: rain and company excuse a rise."""
    others = around.others(logger_id, time)
    rain, melt = around.sky(time)
    same = others * np.sign(size)
    if others.size and np.median(same) > max(0.25 * abs(size), 0.004):
        return -7.0, f"{others.size} other loggers change alike (median {np.median(others) * 100:+.1f} cm)"
    if size > 0 and others.size and (same > 0.003).mean() >= 0.5:
        return -4.0, f"{(same > 0.003).sum()} of {others.size} other loggers change a little in the same hours"
    quiet = others.size >= 2 and bool((np.abs(others) < 0.25 * abs(size)).mean() > 0.7)
    calm = f"{others.size} other loggers stay" if quiet else "no other logger to compare"
    if size < 0:
        return (4.0 if quiet else 2.0), f"a sudden fall that draining can't give; {calm}"
    if not np.isfinite(rain):
        return (-1.0 if quiet else -3.0), f"a sudden rise, rain not known; {calm}"
    if melt:
        return (-2.0 if quiet else -4.0), f"a sudden rise while snow may be melting; {calm}"
    if rain < 0.5:
        return (4.0 if quiet else 2.0), f"a sudden rise without rain ({rain:.1f} mm in two days); {calm}"
    if size > 0.02 * rain:
        return (1.0 if quiet else -2.0), f"a sudden rise of over 20 times the rain ({rain:.1f} mm); {calm}"
    return (-3.0 if quiet else -5.0), f"a sudden rise with rain ({rain:.1f} mm); {calm}"


def hidden_candidates(hours: Hours, dry: np.ndarray, checks: np.ndarray) -> list[Step]:
    """List places where a step could hide from the record: holes over half a day, dry spells, and between checks.

    Parameters
    ----------
    hours : Hours
    dry : ndarray of bool, shape (hour,)
    checks : ndarray of int64
        Times of checks, ns, sorted.

    Returns
    -------
    list of Step
        Size 0 with a wide sd (15 cm): checks alone must size it.
    """
    out: list[Step] = []
    hole = np.flatnonzero(np.diff(hours.time) > _reach(hours))
    for i in sorted(hole, key=lambda i: hours.time[i] - hours.time[i + 1])[:10]:
        out.append(Step(int(hours.time[i + 1]), 0.0, 0.15, -5.0, "gap", "in a hole of the record"))
    edge = np.flatnonzero(np.diff(np.r_[0, dry.astype(np.int8), 0]))
    for a, b in list(zip(edge[::2], edge[1::2], strict=True))[:10]:
        middle = (hours.time[a] + hours.time[b - 1]) // 2
        out.append(Step(int(middle), 0.0, 0.15, -6.0, "dry", "while the sensor was dry"))
    for a, b in pairwise(checks[1:-1].tolist()):
        out.append(Step(int((a + b) // 2), 0.0, 0.15, -7.0, "checks", "between two checks"))
    return out
