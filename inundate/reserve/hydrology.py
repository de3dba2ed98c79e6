"""Hourly water balance of every depression, with a regional water table."""

from __future__ import annotations

from dataclasses import dataclass

import numba
import numpy as np
import pandas as pd
from scipy.signal import lfilter

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
    soil, quick, level = 80.0, 0.0, 0.0
    capacity = 105.0
    for i in range(n):
        storm = 0.025 * rain[i]
        full = rain[i] * (0.9 * soil / capacity) ** 2.5
        soil += rain[i] - storm - full
        excess = max(soil - capacity, 0.0)
        soil -= excess
        excess += full
        soil -= pet[i] * min(1.0, soil / 70.0)
        soil = max(soil, 0.0)
        leak = 0.0
        if soil > 75.0:
            leak = 0.0012 * (soil - 75.0)
            soil -= leak
        quick += 0.6 * excess + storm
        out = quick / 96.0
        quick -= out
        inflow[i] = out
        level += (0.4 * excess + leak) / 1000.0 / 0.14 - level / (120.0 * 24.0)
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
        damp = 1.0 if level > -0.10 else np.exp((level + 0.10) / 0.22)
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


def wetland_parameters(plan: Plan, wetland_id: str, area_m2: float, sill_m: float, place: float) -> dict[str, float]:
    """Draw the parameters of one wetland's balance; ``place`` (0..1) ranks it from perched to fed by groundwater."""
    rng = rng_for(plan.seed, "balance", wetland_id)
    ha = area_m2 / 1e4
    return {
        "catchment_ratio": float(np.exp(rng.normal(np.log(1.9), 0.4)) * ha**-0.22),
        "seepage_mm_d": float(np.exp(rng.normal(np.log(1.4), 0.65)) * ha**-0.15),
        "exchange_per_d": float(np.exp(rng.normal(np.log(0.006), 0.9)) * ha**-0.15),
        "head_offset_m": (-1.1 + 1.35 * place) * float(np.clip(sill_m, 0.4, 1.0)),
        "head_lag_d": float(rng.uniform(5, 70)),
        "stored_share": float(rng.uniform(0.25, 0.5)),
        "et_factor": float(rng.uniform(0.8, 1.1)),
    }


def _lagged(head: np.ndarray, lag_hours: float) -> np.ndarray:
    keep = np.exp(-1.0 / lag_hours)
    return lfilter([1 - keep], [1, -keep], head, zi=[keep * head[0]])[0]


def _rain_factors(plan: Plan, doy: np.ndarray, places: np.ndarray) -> np.ndarray:
    """Local rain over the gauge's, by wetland and hour: each day tilts across the area (lognormal, mean near 1)."""
    rng = rng_for(plan.seed, "rain tilt", plan.size)
    spread = 0.45 - 0.30 * np.cos(2 * np.pi * (doy - 15) / 365.25)
    tilt = rng.standard_normal((2, doy.size)) * spread
    side = plan.side_px * 10.0
    middle = np.array([plan.grid.west + side / 2, plan.grid.north - side / 2])
    away = (places - middle) / side
    return np.repeat(np.exp(away @ tilt), 24, axis=1)


def _daylight(days: int, doy: np.ndarray) -> np.ndarray:
    """Hourly shares of a day's evaporation, shape (day, hour), rows add to 1."""
    half = 4.0 + 4.0 * (0.5 - 0.5 * np.cos(2 * np.pi * (doy - 10) / 365.25))
    hour = np.arange(24) + 0.5
    light = np.maximum(np.cos(np.pi / 2 * (hour[None, :] - 11.5) / half[:, None]), 0.0)
    light *= np.abs(hour[None, :] - 11.5) < half[:, None]
    return light.reshape(days, 24) / light.sum(axis=1, keepdims=True)


def _antecedent(weather: pd.DataFrame) -> np.ndarray:
    """Rain and melt of the last days less evaporation, decaying by 28 % a day, mm; lead-in days dropped."""
    wet = np.empty(weather.shape[0])
    last = 0.0
    for i, (water_mm, pet_mm) in enumerate(zip(weather["liquid_mm"], weather["pet_mm"], strict=True)):
        last = max(0.72 * last + water_mm - 0.5 * pet_mm, 0.0)
        wet[i] = last
    return wet[LEAD_DAYS:]


def run_water(
    plan: Plan,
    weather: pd.DataFrame,
    ids: list[str],
    tables: list[np.ndarray],
    sill_m: np.ndarray,
    places: np.ndarray | None = None,
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
    places : ndarray, shape (wetland, 2), optional
        Centres, m; rain then varies across the landscape, in summer more than in winter.

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
    local = np.ones((len(ids), 1)) if places is None else _rain_factors(plan, doy, places)
    hourly = np.empty((len(ids), plan.n_days * 24))
    draw = rng_for(plan.seed, "groundwater", plan.size)
    place = (draw.permutation(len(ids)) + draw.random(len(ids))) / len(ids)
    rows, parameters = [], []
    for i, name in enumerate(ids):
        p = wetland_parameters(plan, name, float(tables[i][-1]), float(sill_m[i]), float(place[i]))
        own = _lagged(head, 24 * p["head_lag_d"]) + 0.55 * sill_m[i] + p["head_offset_m"]
        flows = (p["catchment_ratio"], p["seepage_mm_d"] / 24000.0, p["exchange_per_d"] / 24.0)
        par = np.array([*flows, sill_m[i], 0.6 * sill_m[i], p["stored_share"], p["et_factor"]])
        stage, total = _balance(tables[i], rain * local[i], pet, inflow * local[i], own, par)
        hourly[i] = stage[skip:]
        names = ("rain", "inflow", "et", "seepage", "exchange", "spill", "storage_change")
        one = {"wetland_id": name, **{f"{k}_m3": v for k, v in zip(names, total, strict=True)}}
        closes = total[0] + total[1] - total[2] - total[3] + total[4] - total[5] - total[6]
        rows.append({**one, "unclosed_m3": closes})
        parameters.append({"wetland_id": name, **p})
    daily = hourly.reshape(len(ids), plan.n_days, 24).mean(axis=2)
    area = np.stack([area_at(t, d) for t, d in zip(tables, daily, strict=True)])
    return Water(hourly, daily, area, pd.DataFrame(rows), _antecedent(weather)), pd.DataFrame(parameters)
