"""Largest extents looked up by wetland."""

from __future__ import annotations

import pandas as pd


def largest_extents(wetland_id: pd.Series, wetlands: pd.DataFrame) -> pd.Series:
    """Return the largest extent (m2, float64) of each row's wetland.

    Parameters
    ----------
    wetland_id : Series of text
        May be empty.
    wetlands : DataFrame
        wetland_id, area_max_m2; ids are unique.

    Returns
    -------
    Series
        With the index of ``wetland_id``; NaN where a wetland is not named.
    """
    return wetland_id.map(dict(zip(wetlands["wetland_id"], wetlands["area_max_m2"], strict=True))).astype(float)
