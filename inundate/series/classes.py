"""Inundated area of size classes a day and a month, varying and static, with intervals from joint draws."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise

import numpy as np
import pandas as pd

from inundate.common.errors import InputError
from inundate.series.result import SeriesResult

DEFAULT_EDGES_HA = (0.1, 0.3, 1.0, 3.0)


def class_names(edges_ha: Sequence[float]) -> list[str]:
    """Return the names of size classes between edges (ha, rising), smallest first.

    Raises
    ------
    InputError
        If an edge is not positive or the edges do not rise.
    """
    edges = [float(e) for e in edges_ha]
    if not edges or edges[0] <= 0 or any(b <= a for a, b in pairwise(edges)):
        msg = f"edges_ha: got {edges}: give positive edges in rising order, in hectares"
        raise InputError(msg)
    return [
        f"<{edges[0]:g} ha",
        *(f"{a:g}-{b:g} ha" for a, b in pairwise(edges)),
        f">={edges[-1]:g} ha",
    ]


def _members(
    result: SeriesResult, wetlands: pd.DataFrame, edges_ha: Sequence[float]
) -> tuple[list[str], np.ndarray, np.ndarray]:
    names = class_names(edges_ha)
    size = (
        wetlands.assign(wetland_id=wetlands["wetland_id"].astype(str))
        .set_index("wetland_id")["area_max_m2"]
        .astype(float)
    )
    gone = [w for w in result.wetland_ids if w not in size.index]
    if gone:
        msg = f"wetlands: {gone[0]!r} of the series is not in the table: give all wetlands of the series"
        raise InputError(msg)
    largest = size.loc[list(result.wetland_ids)].to_numpy()
    return names, np.digitize(largest / 1e4, np.asarray(edges_ha, float)), largest


def _class_draws(result: SeriesResult, member: np.ndarray, classes: int, n_draws: int) -> np.ndarray:
    """Return summed areas (class + 1, draw, day); the last class is all wetlands."""
    out = np.zeros((classes + 1, n_draws, len(result.dates)))
    for i, draws in result.iter_draws(n_draws):
        out[member[i]] += draws
        out[classes] += draws
    return out


def size_classes(
    result: SeriesResult,
    wetlands: pd.DataFrame,
    edges_ha: Sequence[float] = DEFAULT_EDGES_HA,
    *,
    n_draws: int = 100,
) -> pd.DataFrame:
    """Return the inundated area of each size class a day.

    Intervals are those of sums of joint draws, so errors that wetlands share do not cancel.

    Parameters
    ----------
    result : SeriesResult
    wetlands : DataFrame
        wetland_id, area_max_m2.
    edges_ha : sequence of float
        Class edges, ha, rising.
    n_draws : int
        Joint draws.

    Returns
    -------
    DataFrame
        date, size_class (the classes, smallest first, then ``all``), area_m2 (varying), area_lo_m2, area_hi_m2 (90 %),
        area_max_m2 (static: largest extent held), n_wetlands.

    Raises
    ------
    InputError
        If edges do not rise or a wetland is missing.
    """
    names, member, largest = _members(result, wetlands, edges_ha)
    sums = _class_draws(result, member, len(names), n_draws)
    area, days, rows = result.area_m2, len(result.dates), []
    for k, name in enumerate([*names, "all"]):
        own = member == k if k < len(names) else np.ones(member.size, bool)
        if not own.any():
            continue
        best = area[own].sum(axis=0, dtype=np.float64)
        low, high = np.percentile(sums[k], [5, 95], axis=0)
        frame = pd.DataFrame({"date": result.dates, "size_class": name, "area_m2": best})
        frame["area_lo_m2"], frame["area_hi_m2"] = np.minimum(low, best), np.maximum(high, best)
        frame["area_max_m2"], frame["n_wetlands"] = float(largest[own].sum()), int(own.sum())
        frame["_order"] = np.arange(days) * (len(names) + 1) + k
        rows.append(frame)
    return pd.concat(rows).sort_values("_order", ignore_index=True).drop(columns="_order")


def area_days(
    result: SeriesResult,
    wetlands: pd.DataFrame,
    edges_ha: Sequence[float] = DEFAULT_EDGES_HA,
    *,
    n_draws: int = 100,
) -> pd.DataFrame:
    """Return the sum of daily inundated area a month by size class, ready to multiply by a daily flux.

    Parameters
    ----------
    result, wetlands, edges_ha, n_draws
        As in :func:`size_classes`.

    Returns
    -------
    DataFrame
        month (first day), size_class, area_days_m2d (varying), area_days_lo_m2d, area_days_hi_m2d (90 %),
        area_days_max_m2d (static), n_days (days of the month in the series), n_wetlands.

    Raises
    ------
    InputError
        If edges do not rise or a wetland is missing.
    """
    names, member, largest = _members(result, wetlands, edges_ha)
    sums = _class_draws(result, member, len(names), n_draws)
    months, start = np.unique(result.dates.astype("datetime64[M]"), return_index=True)
    length = np.diff(np.append(start, len(result.dates)))
    area, rows = result.area_m2, []
    for k, name in enumerate([*names, "all"]):
        own = member == k if k < len(names) else np.ones(member.size, bool)
        if not own.any():
            continue
        best = np.add.reduceat(area[own].sum(axis=0, dtype=np.float64), start)
        low, high = np.percentile(np.add.reduceat(sums[k], start, axis=1), [5, 95], axis=0)
        frame = pd.DataFrame({"month": months.astype("datetime64[ns]"), "size_class": name, "area_days_m2d": best})
        frame["area_days_lo_m2d"], frame["area_days_hi_m2d"] = np.minimum(low, best), np.maximum(high, best)
        frame["area_days_max_m2d"], frame["n_days"] = largest[own].sum() * length, length
        frame["n_wetlands"] = int(own.sum())
        frame["_order"] = np.arange(months.size) * (len(names) + 1) + k
        rows.append(frame)
    return pd.concat(rows).sort_values("_order", ignore_index=True).drop(columns="_order")
