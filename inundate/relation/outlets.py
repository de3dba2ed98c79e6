"""Outlets: the level that a full wetland comes back to and hardly rises above, and what that says of its views and its curve."""

from __future__ import annotations

import numpy as np
import pandas as pd

TOP_M = 0.03
LEAST_DAYS, LEAST_YEARS, LEAST_RATIO = 60, 2, 2.0
"""A level is held by an outlet when stage stays within ``TOP_M`` of its highest on so many days of so many years, and so many
times as often as in the ``TOP_M`` below (common practice, no source)."""
FULL, FULL_SD = 0.97, 0.05
"""Share of the largest extent that a wetland has at its outlet's level (common practice, no source)."""
_LEAST_VIEWS = 3
_LARGEST = 0.5


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


def with_outlets(pairs: pd.DataFrame, outlets: pd.DataFrame, wetlands: pd.DataFrame) -> pd.DataFrame:
    """Add, for each outlet, the pair that it stands for: its level goes with the largest extent.

    Where a canopy hides all views, this alone ties the stage of a wetland to its elevation model.

    Parameters
    ----------
    pairs : DataFrame
        From :func:`inundate.relation.make_pairs`.
    outlets : DataFrame
        From :func:`outlet_levels`.
    wetlands : DataFrame
        wetland_id, area_max_m2.

    Returns
    -------
    DataFrame
        Columns of ``pairs``, one row more an outlet (leaf state ``leaf_off``, view fraction 1), sorted by wetland and date.
    """
    if outlets.empty:
        return pairs
    size = outlets["wetland_id"].map(wetlands.set_index("wetland_id")["area_max_m2"]).to_numpy(float)
    rows = pd.DataFrame(
        {
            "wetland_id": outlets["wetland_id"],
            "date": pd.to_datetime(outlets["date"]).dt.normalize().astype(pairs["date"].dtype),
            "stage_m": outlets["level_m"] + 0.5 * TOP_M,
            "stage_sd_m": 0.5 * TOP_M,
            "censored": False,
            "area_m2": FULL * size,
            "area_sd_m2": FULL_SD * size,
            "leaf_state": "leaf_off",
            "view_fraction": 1.0,
            "period": outlets["period"],
        }
    ).reindex(columns=pairs.columns)
    rows = rows[np.isfinite(rows["area_m2"])].astype(pairs.dtypes.to_dict())
    both = rows if pairs.empty else pd.concat([pairs, rows], ignore_index=True)
    return both.sort_values(["wetland_id", "date"], kind="stable", ignore_index=True)


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
