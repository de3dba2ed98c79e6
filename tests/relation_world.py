"""Invented bowls with known curves, for the tests of relations."""

from __future__ import annotations

import numpy as np
import pandas as pd

DAY0 = pd.Timestamp("2031-01-01")


def bowl(depth: float, b: float, bump: float = 0.0) -> tuple[np.ndarray, np.ndarray]:
    """Return stage (m) and share of a bowl of a given depth: a power, with a bump that no power law follows."""
    u = np.linspace(0, 1, 301)
    share = np.maximum.accumulate(np.clip(u**b + bump * np.sin(2 * np.pi * u), 0, 1))
    return u * depth, share / share[-1]


def pairs_of(
    name: str, stage: np.ndarray, share: np.ndarray, size: float, n: int, rng: np.random.Generator
) -> pd.DataFrame:
    """Return pairs over three years with an area sd of 4 % and a stage sd of 1 cm."""
    day = np.sort(rng.choice(1095, n, replace=False))
    true = stage[-1] * np.clip(
        0.45 + 0.4 * np.cos(2 * np.pi * (day - 60) / 365) + 0.1 * rng.standard_normal(n), -0.05, 1.05
    )
    area = np.interp(true, stage, share) * (true > 0) + 0.04 * rng.standard_normal(n)
    return pd.DataFrame(
        {
            "wetland_id": name,
            "date": DAY0 + pd.to_timedelta(day, "D"),
            "stage_m": true + 0.01 * rng.standard_normal(n),
            "stage_sd_m": 0.01,
            "censored": False,
            "area_m2": np.clip(area, 0, 1) * size,
            "area_sd_m2": 0.04 * size,
            "leaf_state": "leaf_off",
            "view_fraction": 1.0,
            "period": "1",
        }
    )


class World:
    """Twelve wetlands, nine with pairs, all with elevation 8 cm too high in its zero."""

    def __init__(self, seed: int = 3, n: int = 40, n_wetlands: int = 12, n_loggers: int = 9) -> None:
        rng = np.random.default_rng(seed)
        rows, parts, heights, self.truth = [], [], [], {}
        for i in range(n_wetlands):
            name = f"w{i:02d}"
            size = float(np.exp(rng.uniform(np.log(600), np.log(20000))))
            depth = float(np.exp(rng.normal(np.log(0.7), 0.2)))
            stage, share = bowl(depth, float(np.exp(rng.normal(0.25, 0.25))), (0.0, 0.05, -0.04)[i % 3])
            self.truth[name] = (stage, share * size, size)
            rows.append({"wetland_id": name, "area_max_m2": size, "cover": ("open", "deciduous")[i % 2]})
            z = np.arange(0, depth + 0.3, 0.01)
            low = np.interp(z - 0.08, stage, share, left=0.0, right=1.0)
            heights.append(pd.DataFrame({"wetland_id": name, "stage_m": z, "area_m2": low * size}))
            if i < n_loggers:
                parts.append(pairs_of(name, stage, share, size, n, rng))
        self.wetlands = pd.DataFrame(rows)
        self.pairs = pd.concat(parts, ignore_index=True)
        self.hypsometry = pd.concat(heights, ignore_index=True)

    def error(self, found, name: str) -> float:
        """Return the RMSE over the whole bowl, as a share of the largest extent."""
        stage, area, size = self.truth[name]
        return float(np.sqrt(np.mean((found.predict(name, stage)["area_m2"].to_numpy() - area) ** 2)) / size)
