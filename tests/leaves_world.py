"""Made greenness with known leaf dates: reflectance of leaves, ground and water mixed, clouds, snow, noise.

Written apart from the package: no formula of ``inundate.leaves`` is used here.
"""

from __future__ import annotations

import numpy as np
import pandas as pd

KINDS = ("deciduous", "open", "evergreen")


def sigmoid(x: np.ndarray) -> np.ndarray:
    return 1.0 / (1.0 + np.exp(-x))


def ndvi_of(cover: np.ndarray, leaf: tuple, ground: tuple) -> np.ndarray:
    """NDVI of a mixture of leaves and ground given as (red, nir)."""
    red = cover * leaf[0] + (1 - cover) * ground[0]
    nir = cover * leaf[1] + (1 - cover) * ground[1]
    return (nir - red) / (nir + red)


def one_year(rng: np.random.Generator, kind: str, plan: tuple, days: np.ndarray, lai: float) -> np.ndarray:
    """NDVI of one wetland on days of one year."""
    up, down, k_up, k_down = plan
    leaf = sigmoid((days - up) / k_up) * sigmoid((down - days) / k_down)
    colour = sigmoid((days - down + 8.0) / k_down)
    wet = np.clip(0.5 + 0.5 * np.cos(2 * np.pi * (days - 75) / 365) + rng.normal(0, 0.1), 0, 1)
    ground = (0.12 - 0.09 * wet, 0.21 - 0.18 * wet)
    if kind == "deciduous":
        ground = (0.85 * ground[0] + 0.15 * 0.10, 0.85 * ground[1] + 0.15 * 0.17)  # stems
        cover = 1 - np.exp(-0.55 * lai * leaf)
        return ndvi_of(cover, (0.02 + 0.10 * colour, 0.42 - 0.02 * colour), ground)
    if kind == "evergreen":
        return ndvi_of(np.full(days.size, 0.85), (0.02, 0.30), ground)
    return ndvi_of(1 - np.exp(-0.5 * 2.5 * leaf), (0.04 + 0.06 * colour, 0.36), ground)


def world(
    *, wetlands: int = 24, years: range = range(2031, 2035), every: int = 5, cloud: float = 0.5, seed: int = 0
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Greenness table and true dates (day of year) of wetlands and years.

    A tenth of the clear views is hazy (greenness too low), a third of the winter ones snowy.
    """
    rng = np.random.default_rng(seed)
    shift = {y: np.random.default_rng([seed, y]).normal(0, 6, 2) for y in years}
    rows, truth = [], []
    for w in range(wetlands):
        kind = KINDS[(0, 0, 0, 1, 0, 0, 2, 0)[w % 8]]
        own, lai = rng.normal(0, 4, 2), rng.uniform(3.5, 5.5)
        for y in years:
            k_up, k_down = rng.uniform(3.5, 5.0), rng.uniform(5.0, 7.5)
            plan = (115 + own[0] + shift[y][0], 290 + own[1] + shift[y][1], k_up, k_down)
            if kind == "open":
                plan = (150 + own[0] + shift[y][0], 275 + own[1] + shift[y][1], 13.0, 11.0)
            days = np.arange(1 + rng.integers(every), 366, every).astype(float)
            days = days[rng.random(days.size) >= cloud]
            value = one_year(rng, kind, plan, days, lai) + rng.normal(0, 0.02, days.size)
            value = value - np.where(rng.random(days.size) < 0.1, rng.uniform(0.1, 0.4, days.size), 0)
            snow = ((days < 60) | (days > 345)) & (rng.random(days.size) < 0.33)
            value = np.where(snow, rng.uniform(-0.1, 0.1, days.size), value)
            dates = np.datetime64(f"{y}-01-01") + (days - 1).astype("timedelta64[D]")
            rows.append(pd.DataFrame({"wetland_id": f"W{w:02d}", "date": dates, "ndvi": np.clip(value, -1, 1)}))
            truth.append((f"W{w:02d}", y, kind, plan[0], plan[1], np.log(9) * k_up, np.log(9) * k_down))
    columns = ["wetland_id", "year", "kind", "up", "down", "up_reach", "down_reach"]
    return pd.concat(rows, ignore_index=True), pd.DataFrame(truth, columns=columns)


def warmth(years: range, warm: dict[int, float]) -> pd.DataFrame:
    """Daily air temperature, some years warmer than others."""
    date = pd.date_range(f"{years[0]}-01-01", f"{years[-1]}-12-31")
    day = date.day_of_year.to_numpy()
    extra = np.array([warm.get(y, 0.0) for y in date.year])
    return pd.DataFrame({"date": date, "air_temperature_c": 9 - 10 * np.cos(2 * np.pi * (day - 20) / 365.25) + extra})
