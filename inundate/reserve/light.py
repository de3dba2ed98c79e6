"""Where the sun stands, and which ground lies in the shade of trees."""

from __future__ import annotations

import numba
import numpy as np
import pandas as pd

from inundate.reserve.plan import FINE_STEP_M, LATITUDE_DEG

SCATTERED = 0.16
"""Share of the beam that crowns and trunks around scatter into full shade (common practice, no source)."""


def sun_position(day: pd.Timestamp, local_hour: float = 10.9) -> tuple[float, float]:
    """Return sun elevation and azimuth (degrees, from north over east) at a local solar hour.

    Declination by Cooper 1969 (Solar Energy 12:333); the spherical triangle is textbook astronomy.
    """
    declination = np.radians(23.45) * np.sin(2 * np.pi * (284 + day.day_of_year) / 365.0)
    phi, hour = np.radians(LATITUDE_DEG), np.radians(15.0 * (local_hour - 12.0))
    up = np.sin(phi) * np.sin(declination) + np.cos(phi) * np.cos(declination) * np.cos(hour)
    elevation = np.arcsin(up)
    north = (np.sin(declination) - np.sin(elevation) * np.sin(phi)) / (np.cos(elevation) * np.cos(phi))
    azimuth = np.degrees(np.arccos(np.clip(north, -1, 1)))
    return float(np.degrees(elevation)), float(azimuth if hour < 0 else 360.0 - azimuth)


@numba.njit(cache=True, nogil=True)
def beam_map(
    height: np.ndarray, plant_area: np.ndarray, grain: np.ndarray, elevation_deg: float, azimuth_deg: float
) -> np.ndarray:
    """Return the share of the direct beam that reaches each cell's surface, 0..1, float32 (row, column).

    Parameters
    ----------
    height : ndarray of float32
        Height of tree crowns, m.
    plant_area : ndarray of float32
        Leaf and woody area index of the crowns.
    grain : ndarray of float32
        Fixed unevenness of crowns, 0..1: crowns shade one another and their trunks more in low sun.
    elevation_deg, azimuth_deg : float
        Sun.

    Notes
    -----
    Beer-Lambert along the ray with extinction 0.5 (random leaves); crowns reach from 30 % of the tree's height to its top.
    """
    rows, cols = height.shape
    out = np.ones((rows, cols), np.float32)
    elevation, azimuth = np.radians(elevation_deg), np.radians(azimuth_deg)
    step = 1.5
    climb = step * FINE_STEP_M * np.tan(elevation)
    length = step * FINE_STEP_M / np.cos(elevation)
    d_row, d_col = -step * np.cos(azimuth), step * np.sin(azimuth)
    n_steps = int(min(26.0 / climb, 28.0)) + 1
    uneven = 0.35 * (1.0 - np.sin(elevation))
    for i in range(rows):
        for j in range(cols):
            if height[i, j] > 4.0:
                out[i, j] = 1.0 - uneven * grain[i, j]
                continue
            depth = 0.0
            for k in range(1, n_steps + 1):
                ii, jj = int(i + 0.5 + k * d_row), int(j + 0.5 + k * d_col)
                if ii < 0 or jj < 0 or ii >= rows or jj >= cols:
                    break
                top = height[ii, jj]
                z = k * climb
                if z < top:
                    if z > 0.3 * top:
                        depth += 0.5 * plant_area[ii, jj] / (0.7 * top) * length
                    else:
                        depth += 0.03
                    if depth > 4.0:
                        break
            out[i, j] = SCATTERED + (1.0 - SCATTERED) * np.exp(-depth)
    return out
