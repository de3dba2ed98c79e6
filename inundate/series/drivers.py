"""What drives every wetland's level: rain, evapotranspiration, the region's loggers, and the season."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numba import njit

from inundate.series.inputs import SPIN_UP_DAYS, Panel

# Memory lengths (days) of antecedent rain minus evapotranspiration: weeks to seasons, common practice, no source.
MEMORIES_DAYS = (5.0, 15.0, 45.0, 120.0, 300.0)
# Capacity (m) and power of a shallow and a deep soil; within the ranges common for this form, no source.
SOILS = ((0.05, 1.5), (0.20, 3.0))
# Share of a day's storage that drains from the quick and the slow reservoir, share of what leaves the soil that recharges the
# slow one, drainable pore space, and lags (days) of groundwater under a wetland behind the region's: common practice, no source;
# each wetland's own multipliers and lag are free.
QUICK_DRAIN, SLOW_DRAIN, RECHARGE_SHARE, YIELD = 0.25, 0.01, 0.4, 0.15
LAGS_DAYS = (8.0, 60.0)
# Degree-day melt, m of water per degree and day; common practice, no source.
MELT_M = 0.003


@dataclass(frozen=True, slots=True)
class Drivers:
    """Daily drivers; the first ``spin`` days lie before the panel's first day.

    Attributes
    ----------
    rain_m, pet_m : ndarray, shape (spin + day,)
        Rain and melt, and potential evapotranspiration, m; zeros without weather.
    region : ndarray, shape (6, spin + day)
        Inflow from around (m a day) of a shallow and of a deep soil; then groundwater, m about its mean, of the shallow soil after a
        short and a long lag, and of the deep soil likewise.
    wetness : ndarray, shape (spin + day, memory)
        Antecedent rain minus evapotranspiration at each memory length, standardised.
    season : ndarray, shape (spin + day, 4)
        Cosine and sine of one and two cycles a year.
    loggers : ndarray, shape (fold + 1, spin + day, component)
        Regional signals of the loggers; fold 0 rests on all loggers, fold f leaves out those of fold f.
    fold : ndarray of int, shape (wetland,)
        Fold of each wetland with stage (1 ..), 0 for others.
    has_weather : bool
    spin : int
    """

    rain_m: np.ndarray
    pet_m: np.ndarray
    region: np.ndarray
    wetness: np.ndarray
    season: np.ndarray
    loggers: np.ndarray
    fold: np.ndarray
    has_weather: bool
    spin: int


@njit(cache=True, nogil=True)
def leaky_sum(x: np.ndarray, memory: float) -> np.ndarray:
    """Exponentially weighted mean with the given memory (days), started at the series' mean."""
    out = np.empty(x.size)
    keep = np.exp(-1.0 / memory)
    level = x.mean()
    for t in range(x.size):
        level = keep * level + (1.0 - keep) * x[t]
        out[t] = level
    return out


@njit(cache=True, nogil=True)
def snow_and_melt(rain: np.ndarray, temperature: np.ndarray, melt_rate: float) -> np.ndarray:
    """Rain plus melt (m) of precipitation that is held as snow below 0 degrees Celsius."""
    out = np.empty(rain.size)
    pack = 0.0
    for t in range(rain.size):
        if temperature[t] < 0.0:
            pack += rain[t]
            out[t] = 0.0
        else:
            melt = min(pack, melt_rate * temperature[t])
            pack -= melt
            out[t] = rain[t] + melt
    return out


@njit(cache=True, nogil=True)
def region_water(rain: np.ndarray, pet: np.ndarray, capacity: float, power: float) -> tuple[np.ndarray, np.ndarray]:
    """Inflow from the ground around (m a day) and groundwater storage (m) of a soil store and two reservoirs below it.

    Rain times the filled share to a power leaves the soil; evaporation falls with the store. Part of what leaves recharges
    groundwater, which drains slowly; the rest runs off within days. Form of the routines of Bergstrom, Development and application of
    a conceptual runoff model for Scandinavian catchments, SMHI RHO 7, 1976.
    """
    quick, ground = np.empty(rain.size), np.empty(rain.size)
    store, upper, lower = 0.8 * capacity, 0.0, 0.2 * rain.mean() / SLOW_DRAIN
    for t in range(rain.size):
        out = rain[t] * (store / capacity) ** power
        store += rain[t] - out
        if store > capacity:
            out += store - capacity
            store = capacity
        store = max(store - pet[t] * min(store / (0.7 * capacity), 1.0), 0.0)
        upper += (1.0 - RECHARGE_SHARE) * out
        quick[t] = QUICK_DRAIN * upper
        upper -= quick[t]
        lower += RECHARGE_SHARE * out
        lower -= SLOW_DRAIN * lower
        ground[t] = lower
    return quick, ground


def _region(rain: np.ndarray, pet: np.ndarray, tail: int) -> np.ndarray:
    """Inflow of both soils, then groundwater (m about its mean) of each soil after a short and a long lag: (6, time)."""
    water = [region_water(rain, pet, *soil) for soil in SOILS]
    heads = [(ground - ground[-tail:].mean()) / YIELD for _, ground in water]
    return np.ascontiguousarray(
        [quick for quick, _ in water] + [leaky_sum(head, lag) for head in heads for lag in LAGS_DAYS]
    )


def _full_column(weather: pd.DataFrame, column: str, days: pd.DatetimeIndex) -> np.ndarray:
    """Return a weather column on all days, gaps filled by the mean of that time of year (31-day window)."""
    known = weather[column].astype(float).dropna()
    if known.empty:
        return np.zeros(len(days))
    by_day = known.groupby(pd.DatetimeIndex(known.index).day_of_year).mean().reindex(range(1, 367))
    wrapped = pd.concat([by_day, by_day, by_day], ignore_index=True)
    smooth = wrapped.rolling(31, center=True, min_periods=1).mean().interpolate(limit_direction="both")
    typical = smooth.to_numpy()[366 : 2 * 366]
    out = known.reindex(days).to_numpy(float, copy=True)
    gap = ~np.isfinite(out)
    out[gap] = typical[np.asarray(days.day_of_year)[gap] - 1]
    return out


def _standardise(x: np.ndarray, tail: int) -> np.ndarray:
    window = x[-tail:]
    sd = window.std(axis=0)
    return (x - window.mean(axis=0)) / np.where(sd > 0, sd, 1.0)


def _components(level: np.ndarray, guess: np.ndarray, most: int) -> np.ndarray:
    """Return smooth-filled principal signals (day, component) of logger levels (day, logger) with gaps.

    Each logger is standardised; gaps are filled from the signals themselves (iterated), and days with no logger at all
    from ``guess`` (day, predictor) by ridge regression.
    """
    count = min(most, level.shape[1])
    known = np.isfinite(level)
    sd = np.nanstd(level, axis=0)
    z = (level - np.nanmean(level, axis=0)) / np.where(sd > 0, sd, 1)
    x = np.column_stack([np.ones(len(z)), guess])
    filled = z.copy()
    for j in range(z.shape[1]):
        ok = known[:, j]
        gram = x[ok].T @ x[ok] + np.eye(x.shape[1])
        filled[~ok, j] = x[~ok] @ np.linalg.solve(gram, x[ok].T @ z[ok, j])
    for _ in range(12):
        u, s, vt = np.linalg.svd(filled, full_matrices=False)
        low = (u[:, :count] * s[:count]) @ vt[:count]
        some = known.any(axis=1)[:, None] & ~known
        filled = np.where(some, low, filled)
    u, s, vt = np.linalg.svd(filled, full_matrices=False)
    sign = np.where(vt[:count].sum(axis=1) < 0, -1.0, 1.0)
    return u[:, :count] * s[:count] * sign


def logger_folds(panel: Panel, most: int = 5) -> np.ndarray:
    """Return the fold of each wetland with at least 60 days of stage (1 ..), 0 for others; by rank of size, so even."""
    days = np.diff(panel.stage.start)
    logged = np.flatnonzero(days >= 60)
    fold = np.zeros(len(panel.ids), int)
    count = max(min(most, logged.size), 1)
    order = logged[np.lexsort((logged, panel.area_max_m2[logged]))]
    fold[order] = np.arange(order.size) % count + 1
    return fold


def _logger_signals(panel: Panel, fold: np.ndarray, guess: np.ndarray, spin: int) -> np.ndarray:
    days, logged = len(panel.dates), np.flatnonzero(fold > 0)
    level = np.full((days, logged.size), np.nan)
    for j, i in enumerate(logged):
        part = slice(panel.stage.start[i], panel.stage.start[i + 1])
        level[panel.stage.day[part], j] = panel.stage.value[part]
    most = 2 if logged.size >= 4 else 1
    signals = np.zeros((int(fold.max()) + 1, spin + days, most if logged.size else 0))
    for f in range(signals.shape[0]):
        use = fold[logged] != f if f else np.ones(logged.size, bool)
        if not use.any():
            continue
        full = np.vstack([np.full((spin, int(use.sum())), np.nan), level[:, use]])
        got = _standardise(_components(full, guess, most), days)
        signals[f, :, : got.shape[1]] = got
    return signals


def build_drivers(panel: Panel) -> Drivers:
    """Make the drivers of a panel.

    Parameters
    ----------
    panel : Panel

    Returns
    -------
    Drivers
    """
    spin = SPIN_UP_DAYS
    days = pd.date_range(
        pd.Timestamp(panel.dates[0]) - pd.Timedelta(days=spin), pd.Timestamp(panel.dates[-1]), freq="D"
    )
    turn = 2 * np.pi * np.asarray(days.day_of_year) / 365.25
    season = np.column_stack([np.cos(turn), np.sin(turn), np.cos(2 * turn), np.sin(2 * turn)])
    rain, pet = np.zeros(len(days)), np.zeros(len(days))
    wetness = np.zeros((len(days), 0))
    if panel.weather is not None:
        rain = _full_column(panel.weather, "precipitation_mm", days) / 1000
        pet = _full_column(panel.weather, "pet_mm", days) / 1000
        if "air_temperature_c" in panel.weather and panel.weather["air_temperature_c"].notna().any():
            rain = snow_and_melt(rain, _full_column(panel.weather, "air_temperature_c", days), MELT_M)
        net = rain - pet
        wetness = _standardise(np.column_stack([leaky_sum(net, m) for m in MEMORIES_DAYS]), len(panel.dates))
    fold = logger_folds(panel)
    guess = np.column_stack([wetness, season])
    loggers = _logger_signals(panel, fold, guess, spin)
    region = _region(rain, pet, len(panel.dates))
    return Drivers(rain, pet, region, wetness, season, loggers, fold, panel.weather is not None, spin)
