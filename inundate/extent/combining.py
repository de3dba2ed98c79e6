"""What becomes of observed extents: an analyst's decisions, and several views of a day made one."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
import pandas as pd

from inundate.common.errors import InputError
from inundate.common.sizes import largest_extents


def apply_decisions(observed: pd.DataFrame, decisions: pd.DataFrame) -> pd.DataFrame:
    """Let an analyst's word on views outrank the tool's.

    Parameters
    ----------
    observed : DataFrame
        ``extent_observed``.
    decisions : DataFrame
        ``scene_id``, ``wetland_id`` (empty or missing: all wetlands), ``use`` (bool), ``reason``. A later row
        outranks an earlier one, a row that names the wetland outranks one for all.

    Returns
    -------
    DataFrame
        ``used`` and ``reason`` changed: reason ``analyst: <reason>`` where a view is refused, empty where it is used.
        A view without an area is never used.

    Raises
    ------
    InputError
        A column is missing.
    """
    for column in ("scene_id", "wetland_id", "use"):
        if column not in decisions.columns:
            text = f"decisions: column {column!r} is missing; columns scene_id, wetland_id, use, reason are needed"
            raise InputError(text)
    out = observed.copy()
    used, reason = out["used"].to_numpy(bool).copy(), out["reason"].to_numpy(object).copy()
    wetland = decisions["wetland_id"].fillna("").astype(str).str.strip()
    said = (
        decisions["reason"].fillna("").astype(str) if "reason" in decisions.columns else pd.Series("", decisions.index)
    )
    order = np.argsort((wetland != "").to_numpy(), kind="stable")
    for i in order:
        mine = (out["scene_id"] == str(decisions["scene_id"].iloc[i])).to_numpy(copy=True)
        if wetland.iloc[i]:
            mine &= (out["wetland_id"] == wetland.iloc[i]).to_numpy()
        use = bool(decisions["use"].iloc[i])
        words = "analyst" + (f": {said.iloc[i].strip()}" if said.iloc[i].strip() else "")
        has = out["area_m2"].notna().to_numpy()
        used[mine] = use & has[mine]
        reason[mine & has] = "" if use else words
        if not use:
            reason[mine] = words
    out["used"], out["reason"] = used, reason.astype(str)
    return out


def combine_same_day(observed: pd.DataFrame, groups: Iterable[str] = ("wetland_id",)) -> pd.DataFrame:
    """Combine used observations of a wetland on the same day by inverse variance.

    Overlapping orbits and several sensors each give a row; the combined sd counts their errors as correlated by one
    half (same shape, same learnt errors; common practice, no source), and grows when they disagree by more than their sds allow.

    Parameters
    ----------
    observed : DataFrame
        ``extent_observed``.
    groups : iterable of str
        Key columns besides the day.

    Returns
    -------
    DataFrame
        Same columns and order of columns; one used row a wetland and day (scene_id joined by ``+``, mean time, largest
        fractions), rows not used stay as they are; sorted by wetland_id, datetime, scene_id.
    """
    keys = [*groups, "_day"]
    table = observed.assign(_day=observed["datetime"].dt.floor("D"))
    counts = table[table["used"]].groupby(keys)["scene_id"].transform("size")
    several = counts.index[counts > 1]
    parts = [observed.drop(index=several)]
    for _, group in table.loc[several].groupby(keys, sort=True):
        parts.append(_combined(group.sort_values("scene_id"))[observed.columns])
    out = pd.concat(parts, ignore_index=True) if len(parts) > 1 else parts[0].copy()
    return out.sort_values(["wetland_id", "datetime", "scene_id"], ignore_index=True)


def _combined(group: pd.DataFrame) -> pd.DataFrame:
    """One row from several used rows of a wetland and day."""
    area, sd = group["area_m2"].to_numpy(float), np.maximum(group["area_sd_m2"].to_numpy(float), 1e-9)
    w = sd**-2 / np.sum(sd**-2)
    mean = float(np.sum(w * area))
    shared = float(np.sum(w**2 * sd**2) + 0.5 * (np.sum(w * sd) ** 2 - np.sum(w**2 * sd**2)))
    excess = max(1.0, float(np.sum(((area - mean) / sd) ** 2) / (area.size - 1)))
    best = int(np.argmin(sd))
    row = group.iloc[[best]].copy()
    row["scene_id"] = "+".join(group["scene_id"])
    row["datetime"] = pd.Timestamp(int(group["datetime"].astype("int64").mean() // 1_000_000_000 * 1_000_000_000))
    row["area_m2"], row["area_sd_m2"] = mean, float(np.sqrt(shared * excess))
    for name in ("clear_fraction", "view_fraction"):
        row[name] = float(group[name].max())
    return row


def widen_observed(
    observed: pd.DataFrame, wetlands: pd.DataFrame, lasting: tuple[float, float], leafy: dict[str, float] | None = None
) -> pd.DataFrame:
    """Return observed extents whose standard deviation also holds errors that last in a wetland, or that leaves bring.

    Such errors do not average out over views, so they are left out where views are weighed against each other, and put in
    where one view's extent is told by itself.

    Parameters
    ----------
    observed : DataFrame
        ``extent_observed``.
    wetlands : DataFrame
        wetland_id, area_max_m2.
    lasting : (float, float)
        Standard deviations, from wetland to wetland, of the share of water missed and of dry ground called water.
    leafy : dict of str to float, optional
        Factor on the view's own sd by leaf state (see relation.leaf_factors); 1 where not given.
    """
    own = observed["area_sd_m2"] * observed["leaf_state"].map(leafy or {}).fillna(1.0).astype(float)
    largest = largest_extents(observed["wetland_id"], wetlands)
    own = own.clip(upper=0.5 * largest)  # no view is worse than not knowing at all
    missed, added = observed["area_m2"] * lasting[0], (largest - observed["area_m2"]) * lasting[1]
    return observed.assign(area_sd_m2=np.sqrt(own**2 + missed**2 + added**2))
