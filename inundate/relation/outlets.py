"""Outlets: the level that a full wetland comes back to and hardly rises above, and what that says of its views and its curve."""

from __future__ import annotations

import numpy as np
import pandas as pd

from inundate.common.sizes import largest_extents
from inundate.relation.families import water_at_survey
from inundate.relation.lasting import shared_sd

TOP_M = 0.03
LEAST_DAYS, LEAST_YEARS, LEAST_RATIO = 60, 2, 2.0
"""A level is held by an outlet when stage stays within ``TOP_M`` of its highest on so many days of so many years, and so many
times as often as in the ``TOP_M`` below (common practice, no source)."""
FULL, FULL_SD = 0.97, 0.05
"""Share of the largest extent that a wetland has at its outlet's level (common practice, no source)."""
RUNGS, RIM, RIM_SD_M = (0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.85), 0.95, 0.04
"""Shares of the largest extent whose depth below the rim an elevation model tells; the share at whose level the rim is put (noise and
uneven ground smear the rest over the rim); and the sd of such a depth, m (common practice, no source)."""
_RIM_LINE = (0.6, 0.85)
_LEAST_VIEWS = 3
_LARGEST = 0.5  # of the water that views may miss


def outlet_levels(stage_daily: pd.DataFrame) -> pd.DataFrame:
    """Find wetlands whose stage record shows an outlet.

    Water that reaches an outlet runs off over it, so the record piles up just below its highest stage, wet season after
    wet season.

    Parameters
    ----------
    stage_daily : DataFrame
        wetland_id, date, stage_m [, period, censored].

    Returns
    -------
    DataFrame
        wetland_id, period, level_m (the lower edge of the pile), days, years, date (the middle one of the days); no row where no
        outlet shows.
    """
    rows = []
    table = stage_daily[np.isfinite(stage_daily["stage_m"]) & (stage_daily["stage_m"] > TOP_M)]
    if "censored" in table:
        table = table[~table["censored"].astype(bool)]
    period = table["period"] if "period" in table else pd.Series(0, index=table.index)
    for (name, part), mine in table.groupby(["wetland_id", period]):
        stage = mine["stage_m"].to_numpy(float)
        top = float(np.quantile(stage, 0.995))
        high = stage > top - TOP_M
        below = int(((stage <= top - TOP_M) & (stage > top - 2 * TOP_M)).sum())
        years = int(pd.to_datetime(mine["date"])[high].dt.year.nunique())
        if high.sum() >= LEAST_DAYS and years >= LEAST_YEARS and high.sum() >= LEAST_RATIO * below:
            days = np.sort(pd.to_datetime(mine["date"])[high].to_numpy())
            rows.append((str(name), part, top - TOP_M, int(high.sum()), years, days[days.size // 2]))
    return pd.DataFrame(rows, columns=["wetland_id", "period", "level_m", "days", "years", "date"])


def believed_outlets(outlets: pd.DataFrame, pairs: pd.DataFrame, wetlands: pd.DataFrame) -> pd.DataFrame:
    """Return the outlets that views do not contradict: a held level (a weir, a pump) need not be that of the largest extent.

    Parameters
    ----------
    outlets : DataFrame
        From :func:`outlet_levels`.
    pairs : DataFrame
        From :func:`inundate.relation.make_pairs`.
    wetlands : DataFrame
        wetland_id, area_max_m2.

    Returns
    -------
    DataFrame
        Rows of ``outlets`` but for those at whose level three leaf-off views or more show, in the median, less than half of the largest
        extent.
    """
    bare = pairs[pairs["leaf_state"].astype(str) == "leaf_off"]
    keep = []
    for row in outlets.assign(largest=largest_extents(outlets["wetland_id"], wetlands)).to_dict("records"):
        mine = (bare["wetland_id"] == row["wetland_id"]) & (bare["stage_m"] > row["level_m"])
        if "period" in bare:
            mine &= bare["period"] == row["period"]
        share = bare.loc[mine, "area_m2"] / row["largest"]
        keep.append(len(share) < _LEAST_VIEWS or not float(share.median()) < 1.0 - _LARGEST)
    return outlets[np.array(keep, bool)].reset_index(drop=True)


def with_outlets(
    pairs: pd.DataFrame, outlets: pd.DataFrame, wetlands: pd.DataFrame, hypsometry: pd.DataFrame | None = None
) -> pd.DataFrame:
    """Add the pairs that outlets stand for: full at the outlet's level and, below it, as full as the elevation model says.

    An outlet is where the rim of a bowl is lowest. It ties the stage of a wetland to its elevation model, whose own zero is seldom
    known: noise lowers it, and water that stood at the survey hides it. Where a canopy hides all views, nothing else does.

    Parameters
    ----------
    pairs : DataFrame
        From :func:`inundate.relation.make_pairs`.
    outlets : DataFrame
        From :func:`outlet_levels`.
    wetlands : DataFrame
        wetland_id, area_max_m2.
    hypsometry : DataFrame, optional
        wetland_id, stage_m, area_m2.

    Returns
    -------
    DataFrame
        Columns of ``pairs`` and ``made`` (true for rows that were added), sorted by wetland and date.
    """
    grounds = {} if hypsometry is None else {str(k): g for k, g in hypsometry.groupby("wetland_id")}
    rows = []
    for row in outlets.assign(largest=largest_extents(outlets["wetland_id"], wetlands)).to_dict("records"):
        level, largest = row["level_m"] + 0.5 * TOP_M, row["largest"]
        key = row["wetland_id"], row["period"], row["date"]
        below = _below_rim(grounds[row["wetland_id"]]) if row["wetland_id"] in grounds else []
        rows.append((*key, level, 0.5 * TOP_M, FULL * largest, FULL_SD * largest))
        rows.extend((*key, level - drop, RIM_SD_M, share * largest, FULL_SD * largest) for drop, share in below)
    names = ["wetland_id", "period", "date", "stage_m", "stage_sd_m", "area_m2", "area_sd_m2"]
    made = pd.DataFrame(rows, columns=names).assign(censored=False, leaf_state="leaf_off", view_fraction=1.0)
    made = made[(made["stage_m"] > 0) & made["area_m2"].notna()].reindex(columns=pairs.columns)
    made["date"] = pd.to_datetime(made["date"]).dt.normalize()
    made = made.astype(pairs.dtypes.to_dict()).assign(made=True)
    both = [t for t in (pairs.assign(made=False), made) if len(t)] or [made]
    return pd.concat(both, ignore_index=True).sort_values(["wetland_id", "date"], kind="stable", ignore_index=True)


def lasting_parts(
    outlets: pd.DataFrame, wetlands: pd.DataFrame, hypsometry: pd.DataFrame | None, lasting: tuple[float, float]
) -> dict[str, float]:
    """Return the part of lasting errors of views that is left where an outlet ties a wetland to its elevation model.

    Two witnesses of the same curve: views, which err by ``lasting``, and the elevation model hung on the outlet, which errs by the sd of
    its depths times the share that a metre fills. The part left is the error of both together over that of views alone, for a half
    full wetland.

    Parameters
    ----------
    outlets : DataFrame
        From :func:`outlet_levels`.
    wetlands : DataFrame
        wetland_id.
    hypsometry : DataFrame or None
        wetland_id, stage_m, area_m2.
    lasting : (float, float)
        Water missed and dry ground added that last in a wetland, sds as shares.

    Returns
    -------
    dict
        wetland_id -> 0..1, for wetlands with outlet and elevation.
    """
    views = shared_sd(lasting)
    if hypsometry is None or views <= 0:
        return {}
    wanted = set(outlets["wetland_id"]) & set(wetlands["wetland_id"])
    out = {}
    for name, ground in hypsometry[hypsometry["wetland_id"].isin(wanted)].groupby("wetland_id"):
        rungs = _below_rim(ground)
        if len(rungs) < 2:
            continue
        (deep, least), (near, most) = rungs[0], rungs[-1]
        model = RIM_SD_M * (most - least) / max(deep - near, 0.05)
        out[str(name)] = model / float(np.hypot(model, views))
    return out


def up_to_rim(stage_m: np.ndarray, share: np.ndarray) -> np.ndarray:
    """Return a hypsometry whose top ends at the rim.

    The outline of a wetland is where its rim lies, so the bowl is full there; noise of the model and uneven ground smear the highest
    cells over it. From 85 % up the curve follows the line through its 60 and 85 %, where that is steeper than what the model shows (a
    power law of stage with an exponent of 0.5 to 3 then ends within 4 % of its depth).

    Parameters
    ----------
    stage_m, share : ndarray, shape (step,)
        Stage, rising, and share of the largest extent below it, never falling, up to 1.

    Returns
    -------
    ndarray of float64, shape (step,)
    """
    low, high = (_stage_at(part, stage_m, share) for part in _RIM_LINE)
    if high <= low:
        return share
    line = _RIM_LINE[1] + (_RIM_LINE[1] - _RIM_LINE[0]) * (stage_m - high) / (high - low)
    return np.where(stage_m > high, np.clip(np.maximum(line, share), 0.0, 1.0), share)


def _stage_at(part: float, stage_m: np.ndarray, share: np.ndarray) -> float:
    """Return the stage at which a share of the largest extent is reached; ``share`` never falls."""
    return float(np.interp(part, share + 1e-9 * np.arange(share.size), stage_m))


def _below_rim(ground: pd.DataFrame) -> list[tuple[float, float]]:
    """Return (m below the rim, share of the largest extent there) from one hypsometry, down to water at the survey."""
    stage, area = ground["stage_m"].to_numpy(float), ground["area_m2"].to_numpy(float)
    share = np.maximum.accumulate(area) / max(float(area.max()), 1e-9)
    floor = float(np.interp(water_at_survey(stage, share)[0], stage, share))
    share = up_to_rim(stage, share)
    rim = _stage_at(RIM, stage, share)
    return [(rim - _stage_at(part, stage, share), part) for part in RUNGS if part > floor + FULL_SD]


def through_outlets(
    pairs: pd.DataFrame, outlets: pd.DataFrame, wetlands: pd.DataFrame, missed_sd: float
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Scale a wetland's observed extents by what its views show when its outlet says that it is full.

    The part of its water that a wetland's views miss, season after season, is believed to be 0 with a standard deviation of
    ``missed_sd``; views at the outlet's level measure it, as far as a full wetland is known to have its largest extent.

    Parameters
    ----------
    pairs : DataFrame
        wetland_id, stage_m, area_m2, area_sd_m2 [, period].
    outlets : DataFrame
        From :func:`outlet_levels`.
    wetlands : DataFrame
        wetland_id, area_max_m2.
    missed_sd : float
        See pixels.lasting_errors; 0 leaves pairs as they are.

    Returns
    -------
    pairs : DataFrame
        Extents of wetlands with an outlet, raised so that a full one shows full: by the whole of what is missed there, less
        so the less water there is (what hides water or blurs its edge in a full wetland lies dry in an emptier one); at
        most the largest extent.
    told : DataFrame
        wetland_id, level_m, days, shown (part of the water, 0.5..1) of the wetlands that were scaled.
    """
    out, told = pairs.copy(), []
    size = dict(zip(wetlands["wetland_id"], wetlands["area_max_m2"], strict=True))
    for row in outlets.to_dict("records"):
        mine = (pairs["wetland_id"] == row["wetland_id"]).to_numpy()
        if "period" in pairs:
            mine = mine & (pairs["period"] == row["period"]).to_numpy()
        largest = float(size[row["wetland_id"]])
        full = pairs[mine & (pairs["stage_m"] > row["level_m"]).to_numpy()]
        if len(full) < _LEAST_VIEWS or missed_sd <= 0:
            continue
        seen = float(full["area_m2"].median()) / largest
        error = FULL_SD**2 + float((full["area_sd_m2"] / largest).pow(2).mean()) / len(full)
        missed = (1.0 - seen / FULL) * missed_sd**2 / (missed_sd**2 + error)
        if missed <= 0:
            continue
        shown = 1.0 - min(missed, _LARGEST)
        area = pairs.loc[mine, "area_m2"]
        out.loc[mine, "area_m2"] = np.minimum(area * (1.0 + (1.0 / shown - 1.0) * area / (seen * largest)), largest)
        told.append((row["wetland_id"], row["level_m"], row["days"], shown))
    return out, pd.DataFrame(told, columns=["wetland_id", "level_m", "days", "shown"])
