"""Daily weather of the reserve: rain, temperature, potential evapotranspiration, snow and ice."""

from __future__ import annotations

import numpy as np
import pandas as pd

from inundate.common.seeds import rng_for
from inundate.reserve.plan import LATITUDE_DEG, Plan


def extraterrestrial_radiation(day_of_year: np.ndarray, latitude_deg: float) -> np.ndarray:
    """Return daily radiation at the top of the atmosphere, MJ m-2 d-1 (Allen et al. 1998, FAO paper 56, eq. 21-25)."""
    phi = np.radians(latitude_deg)
    angle = 2 * np.pi * np.asarray(day_of_year, float) / 365.0
    near = 1 + 0.033 * np.cos(angle)
    declination = 0.409 * np.sin(angle - 1.39)
    sunset = np.arccos(np.clip(-np.tan(phi) * np.tan(declination), -1, 1))
    inner = sunset * np.sin(phi) * np.sin(declination) + np.cos(phi) * np.cos(declination) * np.sin(sunset)
    return 24 * 60 / np.pi * 0.0820 * near * inner


def oudin_pet(temperature_c: np.ndarray, day_of_year: np.ndarray, latitude_deg: float) -> np.ndarray:
    """Return potential evapotranspiration, mm d-1 (Oudin et al. 2005, J. Hydrol. 303:290, eq. 3)."""
    energy = extraterrestrial_radiation(day_of_year, latitude_deg) / 2.45
    return np.maximum(energy * (np.asarray(temperature_c, float) + 5.0) / 100.0, 0.0)


def _temperature(rng: np.random.Generator, doy: np.ndarray) -> np.ndarray:
    noise = rng.standard_normal(doy.size)
    slow = rng.standard_normal(doy.size // 60 + 3)
    season = np.interp(np.arange(doy.size), 60 * np.arange(slow.size), slow)
    anomaly = np.empty(doy.size)
    last = 0.0
    for i in range(doy.size):
        last = 0.78 * last + 2.1 * noise[i]
        anomaly[i] = last
    return 9.3 - 10.2 * np.cos(2 * np.pi * (doy - 20) / 365.25) + anomaly + 0.9 * season


def _rain(rng: np.random.Generator, doy: np.ndarray) -> np.ndarray:
    """Two-state Markov chain for wet days, gamma amounts (Richardson 1981, Water Resour. Res. 17:182)."""
    spell = rng.standard_normal(doy.size // 35 + 3)
    wetness = np.interp(np.arange(doy.size), 35 * np.arange(spell.size), spell)
    winter = np.cos(2 * np.pi * (doy - 10) / 365.25)
    chance_after_dry = np.clip(0.27 + 0.09 * winter + 0.07 * wetness, 0.05, 0.8)
    chance_after_wet = np.clip(0.60 + 0.06 * winter + 0.07 * wetness, 0.1, 0.95)
    draw, amount = rng.random(doy.size), rng.gamma(0.75, 1.0, doy.size)
    mean_mm = 6.9 - 0.3 * winter
    rain = np.zeros(doy.size)
    wet = False
    for i in range(doy.size):
        wet = bool(draw[i] < (chance_after_wet[i] if wet else chance_after_dry[i]))
        if wet:
            rain[i] = 0.2 + amount[i] * mean_mm[i] / 0.75
    return np.round(rain, 1)


def make_weather(plan: Plan, lead_days: int = 365) -> pd.DataFrame:
    """Make the daily weather, with ``lead_days`` before the first day for the balances to settle.

    Returns
    -------
    DataFrame
        date, precipitation_mm, pet_mm, air_temperature_c, liquid_mm (rain and melt), snow_mm (snow pack, water
        equivalent), ice_m (thickness on still water). Melt by degree days, ice by Stefan's law with a rule-of-thumb
        coefficient (common practice, no source).
    """
    rng = rng_for(plan.seed, "weather", plan.size)
    dates = pd.date_range(
        pd.Timestamp(plan.first_day) - pd.Timedelta(days=lead_days), periods=plan.n_days + lead_days, unit="ns"
    )
    doy = dates.day_of_year.to_numpy()
    air = _temperature(rng, doy)
    rain = _rain(rng, doy)
    n = doy.size
    pack, frost = 0.0, 0.0
    liquid, snow, ice = np.empty(n), np.empty(n), np.empty(n)
    for i in range(n):
        falls = rain[i] if air[i] < 0.3 else 0.0
        melt = min(pack + falls, max(2.5 * (air[i] - 0.3), 0.0))
        pack = pack + falls - melt
        liquid[i] = rain[i] - falls + melt
        snow[i] = pack
        frost = max(frost - air[i], 0.0) if air[i] < 0 else max(frost - 3.0 * air[i], 0.0)
        ice[i] = 0.022 * np.sqrt(frost)
    pet = oudin_pet(air, doy, LATITUDE_DEG)
    return pd.DataFrame(
        {
            "date": dates,
            "precipitation_mm": rain,
            "pet_mm": np.round(pet, 2),
            "air_temperature_c": np.round(air, 1),
            "liquid_mm": liquid,
            "snow_mm": snow,
            "ice_m": ice,
        }
    )
