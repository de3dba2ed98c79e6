"""Hourly water balance of every depression, with a regional water table."""

from __future__ import annotations

from dataclasses import dataclass

import numba
import numpy as np
import pandas as pd

from inundate.common.seeds import rng_for
from inundate.reserve.plan import Plan

LEAD_DAYS = 365
SPECIFIC_YIELD = 0.22
"""Drainable pore space of the organic ground below a wetland (common practice, no source)."""


@dataclass(frozen=True, slots=True)
class Water:
    """Stage through time.

    Attributes
    ----------
    hourly : ndarray of float64, shape (wetland, hour)
        Stage above the lowest ground at the middle of each hour, m; below 0 the water is below ground.
    daily : ndarray of float64, shape (wetland, day)
        Mean of the 24 hours.
    area_daily : ndarray of float64, shape (wetland, day)
        Area of the relation at the daily mean stage, m2.
    balance : DataFrame
        One row a wetland: totals of each flux over the record (m3) and what does not close.
    antecedent_mm : ndarray of float64, shape (day,)
        Wetness of bare ground away from wetlands: rain of the last days, decaying.
    """

    hourly: np.ndarray
    daily: np.ndarray
    area_daily: np.ndarray
    balance: pd.DataFrame
    antecedent_mm: np.ndarray


def area_at(table: np.ndarray, stage_m: np.ndarray | float) -> np.ndarray:
    """Return the area (m2) of 1 cm hypsometry at stages: 0 at and below 0, the full area at and above the sill."""
    stage = np.maximum(np.asarray(stage_m, float), 0.0)
    return np.interp(stage * 100.0, np.arange(table.size), table)


def hourly_rain(daily_mm: np.ndarray, seed: int, name: str) -> np.ndarray:
    """Spread each day's water over one storm of random start and length; shape (hour,)."""
    rng = rng_for(seed, name)
    start, length = rng.integers(0, 24, daily_mm.size), rng.integers(2, 14, daily_mm.size)
    hour = np.arange(24)
    wet = (hour[None, :] >= start[:, None]) & (hour[None, :] < (start + length)[:, None])
    share = wet / np.maximum(wet.sum(axis=1, keepdims=True), 1)
    return (daily_mm[:, None] * share).ravel()


@numba.njit(cache=True, nogil=True)
def _region(rain: np.ndarray, pet: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Soil bucket and regional water table, hourly: lateral inflow (mm per unit catchment) and table (m)."""
    n = rain.size
    inflow, table = np.empty(n), np.empty(n)
    soil, quick, level = 110.0, 0.0, 0.0
    capacity = 150.0
    for i in range(n):
        storm = 0.025 * rain[i]
        soil += rain[i] - storm
        excess = max(soil - capacity, 0.0)
        soil -= excess
        soil -= pet[i] * min(1.0, soil / 75.0)
        soil = max(soil, 0.0)
        leak = 0.0
        if soil > 105.0:
            leak = 0.0012 * (soil - 105.0)
            soil -= leak
        quick += 0.6 * excess + storm
        out = quick / 96.0
        quick -= out
        inflow[i] = out
        level += (0.4 * excess + leak) / 1000.0 / 0.11 - level / (120.0 * 24.0)
        table[i] = level
    return inflow, table


@numba.njit(cache=True, nogil=True)
def _interpolate(table: np.ndarray, stage: float) -> float:
    place = stage * 100.0
    if place <= 0.0:
        return 0.0
    i = int(place)
    if i >= table.size - 1:
        return table[table.size - 1]
    return table[i] + (place - i) * (table[i + 1] - table[i])


@numba.njit(cache=True, nogil=True)
def _balance(
    table: np.ndarray, rain: np.ndarray, pet: np.ndarray, inflow: np.ndarray, head: np.ndarray, par: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Step one wetland; returns stage (hour,) and totals: rain, inflow, et, seepage, exchange, spill, storage change, m3.

    par: catchment ratio, seepage m/h, exchange 1/h, sill m, first stage m, share of ground that stores water, canopy
    factor of evaporation.
    """
    n = rain.size
    stage = np.empty(n)
    total = np.zeros(7)
    catchment, seep, pull, sill, level, reach, factor = par
    full = table[table.size - 1]
    ground = reach * full
    for i in range(n):
        wet = _interpolate(table, level)
        store = wet + SPECIFIC_YIELD * max(ground - wet, 0.0)
        store = max(store, SPECIFIC_YIELD * ground)
        catch = max(wet, ground)
        gain_rain = rain[i] / 1000.0 * catch
        gain_in = inflow[i] / 1000.0 * catchment * full
        damp = 1.0 if level > -0.10 else np.exp((level + 0.10) / 0.30)
        lose_et = factor * pet[i] / 1000.0 * catch * damp
        lose_seep = seep * catch * (1.0 if level > -0.3 else max(0.0, 1.0 + (level + 0.3) / 0.5))
        swap = pull * (head[i] - level) * catch
        change = gain_rain + gain_in - lose_et - lose_seep + swap
        spill = 0.0
        if level > sill:
            spill = min(0.35 * (level - sill), 0.6 * (level - sill)) * store
        change -= spill
        level += change / store
        total[0] += gain_rain
        total[1] += gain_in
        total[2] += lose_et
        total[3] += lose_seep
        total[4] += swap
        total[5] += spill
        total[6] += change
        stage[i] = level
    return stage, total


def wetland_parameters(plan: Plan, wetland_id: str, area_m2: float, sill_m: float) -> dict[str, float]:
    """Draw the parameters of one wetland's balance."""
    rng = rng_for(plan.seed, "balance", wetland_id)
    ha = area_m2 / 1e4
    return {
        "catchment_ratio": float(rng.uniform(1.0, 3.0) * ha**-0.22),
        "seepage_mm_d": float(np.exp(rng.normal(np.log(1.6), 0.5)) * ha**-0.15),
        "exchange_per_d": float(np.exp(rng.normal(np.log(0.006), 0.7)) * ha**-0.15),
        "head_offset_m": float(rng.uniform(-1.0, 0.05)) * float(np.clip(sill_m, 0.4, 1.0)),
        "head_lag_d": float(rng.uniform(5, 40)),
        "stored_share": float(rng.uniform(0.25, 0.5)),
        "et_factor": float(rng.uniform(0.8, 1.1)),
    }


def _lagged(head: np.ndarray, lag_hours: float) -> np.ndarray:
    from scipy.signal import lfilter

    keep = np.exp(-1.0 / lag_hours)
    return lfilter([1 - keep], [1, -keep], head, zi=[keep * head[0]])[0]


def _daylight(days: int, doy: np.ndarray) -> np.ndarray:
    """Hourly shares of a day's evaporation, shape (day, hour), rows add to 1."""
    half = 4.0 + 4.0 * (0.5 - 0.5 * np.cos(2 * np.pi * (doy - 10) / 365.25))
    hour = np.arange(24) + 0.5
    light = np.maximum(np.cos(np.pi / 2 * (hour[None, :] - 11.5) / half[:, None]), 0.0)
    light *= np.abs(hour[None, :] - 11.5) < half[:, None]
    assert_rows = light.sum(axis=1, keepdims=True)
    return light.reshape(days, 24) / assert_rows


def run_water(
    plan: Plan, weather: pd.DataFrame, ids: list[str], tables: list[np.ndarray], sill_m: np.ndarray
) -> tuple[Water, pd.DataFrame]:
    """Run the balance of all wetlands.

    Parameters
    ----------
    plan : Plan
    weather : DataFrame
        From :func:`weather.make_weather`, with ``LEAD_DAYS`` before the first day.
    ids : list of str
    tables : list of ndarray
        Hypsometry, 1 cm steps from stage 0.
    sill_m : ndarray, shape (wetland,)
        Height of each sill above the lowest ground.

    Returns
    -------
    Water, DataFrame of parameters (one row a wetland)
    """
    doy = weather["date"].dt.day_of_year.to_numpy()
    rain = hourly_rain(weather["liquid_mm"].to_numpy(), plan.seed, "storms")
    pet = (weather["pet_mm"].to_numpy()[:, None] * _daylight(doy.size, doy)).ravel()
    inflow, head = _region(rain, pet)
    head = head - head[LEAD_DAYS * 24 :].mean()
    skip = LEAD_DAYS * 24
    hourly = np.empty((len(ids), plan.n_days * 24))
    rows, parameters = [], []
    for i, name in enumerate(ids):
        p = wetland_parameters(plan, name, float(tables[i][-1]), float(sill_m[i]))
        own = _lagged(head, 24 * p["head_lag_d"]) + 0.55 * sill_m[i] + p["head_offset_m"]
        par = np.array(
            [
                p["catchment_ratio"],
                p["seepage_mm_d"] / 24000.0,
                p["exchange_per_d"] / 24.0,
                sill_m[i],
                0.6 * sill_m[i],
                p["stored_share"],
                p["et_factor"],
            ]
        )
        stage, total = _balance(tables[i], rain, pet, inflow, own, par)
        hourly[i] = stage[skip:]
        names = ("rain", "inflow", "et", "seepage", "exchange", "spill", "storage_change")
        one = {"wetland_id": name, **{f"{k}_m3": v for k, v in zip(names, total, strict=True)}}
        closes = total[0] + total[1] - total[2] - total[3] + total[4] - total[5] - total[6]
        rows.append({**one, "unclosed_m3": closes})
        parameters.append({"wetland_id": name, **p})
    daily = hourly.reshape(len(ids), plan.n_days, 24).mean(axis=2)
    area = np.stack([area_at(t, d) for t, d in zip(tables, daily, strict=True)])
    wet = np.empty(weather.shape[0])
    last = 0.0
    for i, (p_mm, e_mm) in enumerate(zip(weather["liquid_mm"], weather["pet_mm"], strict=True)):
        last = max(0.72 * last + p_mm - 0.5 * e_mm, 0.0)
        wet[i] = last
    return Water(hourly, daily, area, pd.DataFrame(rows), wet[LEAD_DAYS:]), pd.DataFrame(parameters)
