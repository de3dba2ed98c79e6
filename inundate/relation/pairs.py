"""Pairs of stage and observed extent: making them, checking them, and laying them out for the compiled fits."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass, field, replace

import numpy as np
import pandas as pd
from scipy import stats

from inundate.common.codes import LEAF_STATES
from inundate.common.errors import InputError, Refusal
from inundate.common.sizes import largest_extents
from inundate.relation.families import empty_table, hypsometry_table
from inundate.relation.options import RelationOptions

PAIR_COLUMNS = (
    "wetland_id",
    "date",
    "stage_m",
    "stage_sd_m",
    "censored",
    "area_m2",
    "area_sd_m2",
    "leaf_state",
    "view_fraction",
    "period",
)
POOR_QUALITY = frozenset({"bad", "suspect", "rejected", "missing", "ice", "fault"})


def need(table: pd.DataFrame, name: str, columns: tuple[str, ...]) -> None:
    """Raise InputError when a table lacks columns."""
    missing = [column for column in columns if column not in table.columns]
    if missing:
        message = f"table {name}: columns {missing} are missing; it must have {list(columns)}; add them"
        raise InputError(message)


def make_pairs(extent_observed: pd.DataFrame, stage_daily: pd.DataFrame) -> pd.DataFrame:
    """Join observed extents with the stage of their day.

    Parameters
    ----------
    extent_observed : DataFrame
        wetland_id, datetime, area_m2, area_sd_m2, view_fraction, leaf_state, used; one row a wetland and scene. Rows with
        ``used`` false or no area are left out.
    stage_daily : DataFrame
        wetland_id, date, stage_m, stage_sd_m and, where known, quality, censored, period. Days without stage or of poor
        quality are left out. Of several loggers on one day the one with the smallest sd serves.

    Returns
    -------
    DataFrame
        ``pairs``: wetland_id, date, stage_m, stage_sd_m, censored, area_m2, area_sd_m2, leaf_state, view_fraction, period,
        rising (stage change over the last week, m; NaN unknown), sorted by wetland and date. Extents of one wetland and
        day are averaged by their precision.

    Raises
    ------
    InputError
        When a column is missing.
    """
    need(
        extent_observed,
        "extent_observed",
        ("wetland_id", "datetime", "area_m2", "area_sd_m2", "view_fraction", "leaf_state", "used"),
    )
    need(stage_daily, "stage_daily", ("wetland_id", "date", "stage_m", "stage_sd_m"))
    seen = extent_observed.loc[extent_observed["used"].astype(bool) & extent_observed["area_m2"].notna()].copy()
    seen["date"] = _day(seen["datetime"])
    stage = stage_daily.loc[stage_daily["stage_m"].notna()].copy()
    stage["date"] = _day(stage["date"])
    if "quality" in stage:
        stage = stage.loc[~stage["quality"].astype(str).str.lower().isin(POOR_QUALITY)]
    if "censored" not in stage:
        stage["censored"] = False
    if "period" not in stage:
        stage["period"] = "1"
    stage = stage.sort_values(["wetland_id", "date", "censored", "stage_sd_m", "stage_m"], kind="stable")
    stage = stage.drop_duplicates(["wetland_id", "date"])
    stage["rising"] = _week_change(stage)
    both = _one_a_day(seen).merge(
        stage[["wetland_id", "date", "stage_m", "stage_sd_m", "censored", "period", "rising"]],
        on=["wetland_id", "date"],
        how="inner",
    )
    both["censored"] = both["censored"].astype(bool)
    return both.sort_values(["wetland_id", "date"], kind="stable")[[*PAIR_COLUMNS, "rising"]].reset_index(drop=True)


def best_pairs(pairs: pd.DataFrame, *, anchored: Collection[str] = (), least: int = 8) -> pd.DataFrame:
    """Return the pairs that relations should rest on: those with leaves off, where a wetland has enough of them.

    A canopy in leaf hides water in ways that an observation's own standard deviation does not fully tell; such pairs serve
    where nothing better does.

    Parameters
    ----------
    pairs : DataFrame
        From :func:`make_pairs`.
    anchored : collection of str
        Wetlands whose stage an outlet ties to an elevation model (see :func:`inundate.relation.with_outlets`): that is better, however
        few their leaf-off pairs.
    least : int
        Leaf-off pairs from which a wetland (and period) needs no others (common practice, no source).

    Returns
    -------
    DataFrame
        Rows of ``pairs`` in their order.
    """
    bare = pairs["leaf_state"].astype(str) == "leaf_off"
    count = bare.groupby([pairs["wetland_id"], pairs["period"]]).transform("sum")
    needed = (count < least) & ~pairs["wetland_id"].isin(list(anchored))
    return pairs[bare | needed].reset_index(drop=True)


def _day(times: pd.Series) -> pd.Series:
    stamp = pd.to_datetime(times)
    if getattr(stamp.dt, "tz", None) is not None:
        stamp = stamp.dt.tz_convert("UTC").dt.tz_localize(None)
    return stamp.dt.normalize().astype("datetime64[ns]")


def _week_change(stage: pd.DataFrame) -> np.ndarray:
    past = stage[["wetland_id", "date", "stage_m", "period"]].copy()
    past["date"] = past["date"] + pd.Timedelta(days=7)
    joined = stage[["wetland_id", "date", "stage_m", "period"]].merge(
        past, on=["wetland_id", "date", "period"], how="left", suffixes=("", "_past")
    )
    return (joined["stage_m"] - joined["stage_m_past"]).to_numpy(float)


def _one_a_day(seen: pd.DataFrame) -> pd.DataFrame:
    seen = seen.sort_values(["wetland_id", "date", "area_sd_m2", "area_m2"], kind="stable")
    sd = seen["area_sd_m2"].fillna(seen["area_sd_m2"].median()).clip(lower=1e-3)
    seen["heft"] = 1.0 / sd**2
    seen["moment"] = seen["heft"] * seen["area_m2"]
    grouped = seen.groupby(["wetland_id", "date"], sort=True)
    out = grouped.agg(
        heft=("heft", "sum"),
        moment=("moment", "sum"),
        area_sd_m2=("area_sd_m2", "min"),
        leaf_state=("leaf_state", "first"),
        view_fraction=("view_fraction", "max"),
    ).reset_index()
    out["area_m2"] = out["moment"] / out["heft"]
    return out.drop(columns=["heft", "moment"])


@dataclass(slots=True)
class Units:
    """Pairs of all wetlands laid out flat; a unit is a wetland, or one confirmed period of it.

    Attributes
    ----------
    table : DataFrame
        One row a unit, sorted by wetland_id and start: wetland_id, period, area_max_m2, cover, valid_from, valid_to, n_pairs,
        stage_min_m, stage_max_m, hypsometry (position in ``tables``, -1 none), note.
    pairs : ndarray, shape (pair, 5)
        Stage (m), stage sd (m), share of the largest extent, share sd, censored (0/1).
    first : ndarray of int64, shape (unit + 1,)
    date : ndarray of datetime64[ns]; leaf : ndarray of int64 (-1 unknown); rising : ndarray of float64 (pair,)
    made : ndarray of bool, shape (pair,)
        Pairs that no view stands behind (see :func:`inundate.relation.with_outlets`): they shape curves, and judge nothing.
    tables, spans : ndarray
        Hypsometry tables (table, level, column) and spans (table, 5), see :func:`inundate.relation.families.hypsometry_table`.
    hypsometry : dict
        wetland_id -> (stage_m, area share) as laid out.
    refused : list of Refusal
    """

    table: pd.DataFrame
    pairs: np.ndarray
    first: np.ndarray
    date: np.ndarray
    leaf: np.ndarray
    rising: np.ndarray
    made: np.ndarray
    tables: np.ndarray
    spans: np.ndarray
    hypsometry: dict[str, tuple[np.ndarray, np.ndarray]]
    refused: list[Refusal] = field(default_factory=list)

    @property
    def unit_of_pair(self) -> np.ndarray:
        """Position of the unit of each pair (int64)."""
        return np.repeat(np.arange(self.first.size - 1), np.diff(self.first))

    def seen_rows(self, unit: int) -> np.ndarray:
        """Positions of the pairs of one unit that views stand behind (int64)."""
        return np.flatnonzero(~self.made[self.first[unit] : self.first[unit + 1]]) + self.first[unit]

    def seen(self) -> Units:
        """Return the same units with none but pairs that views stand behind."""
        if not self.made.any():
            return self
        keep = ~self.made
        first = np.concatenate([[0], np.cumsum(keep)])[self.first]
        return replace(
            self,
            pairs=np.ascontiguousarray(self.pairs[keep]),
            first=first,
            date=self.date[keep],
            leaf=self.leaf[keep],
            rising=self.rising[keep],
            made=self.made[keep],
        )


def lay_out(
    pairs: pd.DataFrame, wetlands: pd.DataFrame, hypsometry: pd.DataFrame | None, options: RelationOptions
) -> Units:
    """Check pairs and lay them out; what cannot be used is named in ``refused`` and the rest goes on.

    Raises
    ------
    InputError
        When a column is missing, a wetland is named twice, or a largest extent is not positive.
    """
    need(wetlands, "wetlands", ("wetland_id", "area_max_m2"))
    need(pairs, "pairs", ("wetland_id", "date", "stage_m", "area_m2"))
    sites = wetlands[["wetland_id", "area_max_m2"]].copy()
    sites["wetland_id"] = sites["wetland_id"].astype(str)
    sites["cover"] = wetlands["cover"].astype(str) if "cover" in wetlands else "open"
    for key in sites.loc[sites["wetland_id"].duplicated(), "wetland_id"]:
        message = f"table wetlands: wetland_id {key!r} stands in two rows; ids must be unique; rename one"
        raise InputError(message)
    bad = sites.loc[~(sites["area_max_m2"] > 0)]
    if len(bad):
        key, value = bad.iloc[0]["wetland_id"], bad.iloc[0]["area_max_m2"]
        message = (
            f"table wetlands, wetland {key}: area_max_m2 is {value}; it must be above 0 m2; give the polygon's area"
        )
        raise InputError(message)
    sites = sites.sort_values("wetland_id", kind="stable").reset_index(drop=True)
    tables, spans, laid, place = _hypsometries(hypsometry, sites)
    clean, refused = _clean(pairs, sites, options)
    clean = _believable(clean, laid, options, refused)
    units = _unit_table(clean, sites, place)
    joined = clean.merge(
        units[["wetland_id", "period", "unit", "area_max_m2"]], on=["wetland_id", "period"], how="left"
    ).sort_values(["unit", "date", "stage_m", "area_m2"], kind="stable")
    size = joined["area_max_m2"].to_numpy(float)
    flat = np.column_stack(
        [
            joined["stage_m"].to_numpy(float),
            np.maximum(joined["stage_sd_m"].to_numpy(float), 0.002),
            np.minimum(joined["area_m2"].to_numpy(float) / size, 1.0),
            np.maximum(joined["area_sd_m2"].to_numpy(float) / size, 0.01),
            joined["censored"].to_numpy(float),
        ]
    ).reshape(-1, 5)
    first = np.searchsorted(joined["unit"].to_numpy(np.int64), np.arange(len(units) + 1)).astype(np.int64)
    leaf = np.array([LEAF_STATES.index(s) if s in LEAF_STATES else -1 for s in joined["leaf_state"]], np.int64)
    return Units(
        units,
        np.ascontiguousarray(flat),
        first,
        joined["date"].to_numpy("datetime64[ns]"),
        leaf,
        joined["rising"].to_numpy(float),
        joined["made"].to_numpy(bool),
        tables,
        spans,
        laid,
        refused,
    )


def _hypsometries(
    hypsometry: pd.DataFrame | None, sites: pd.DataFrame
) -> tuple[np.ndarray, np.ndarray, dict[str, tuple[np.ndarray, np.ndarray]], dict[str, int]]:
    laid: dict[str, tuple[np.ndarray, np.ndarray]] = {}
    if hypsometry is not None and len(hypsometry):
        need(hypsometry, "hypsometry", ("wetland_id", "stage_m", "area_m2"))
        known = set(sites["wetland_id"])
        for key, found in hypsometry.groupby(hypsometry["wetland_id"].astype(str), sort=True):
            rows = found.dropna(subset=["stage_m", "area_m2"]).sort_values("stage_m", kind="stable")
            if key not in known or len(rows) < 3 or not rows["area_m2"].max() > 0:
                continue
            stage, area = rows["stage_m"].to_numpy(float), np.maximum.accumulate(rows["area_m2"].to_numpy(float))
            full = float(stage[np.searchsorted(area, area[-1] * (1 - 1e-9))])
            grid = np.linspace(min(stage[0], 0.0), max(full, 0.01), 161)
            laid[str(key)] = (grid, np.interp(grid, stage, area) / area[-1])
    return (*stack_tables(laid), laid, {key: i for i, key in enumerate(laid)})


def stack_tables(laid: dict[str, tuple[np.ndarray, np.ndarray]]) -> tuple[np.ndarray, np.ndarray]:
    """Return hypsometry tables and spans stacked for the compiled code; one empty table where there is none."""
    built = [hypsometry_table(stage, share) for stage, share in laid.values()] or [empty_table()]
    return np.stack([one[0] for one in built]), np.stack([one[1] for one in built])


def _clean(pairs: pd.DataFrame, sites: pd.DataFrame, options: RelationOptions) -> tuple[pd.DataFrame, list[Refusal]]:
    clean = pairs.copy()
    clean["wetland_id"] = clean["wetland_id"].astype(str)
    clean["date"] = _day(clean["date"]) if len(clean) else pd.to_datetime(clean["date"])
    clean["period"] = clean["period"].astype(str) if "period" in clean else "1"
    for column, value in (
        ("censored", False),
        ("made", False),
        ("leaf_state", ""),
        ("rising", np.nan),
        ("view_fraction", np.nan),
    ):
        if column not in clean:
            clean[column] = value
    for column in ("censored", "made"):
        clean[column] = clean[column].fillna(False).astype(bool)
    size = largest_extents(clean["wetland_id"], sites)
    for column in ("stage_sd_m", "area_sd_m2"):
        if column not in clean:
            clean[column] = np.nan
        clean[column] = clean[column].astype(float).where(clean[column].astype(float) >= 0)
    clean["stage_sd_m"] = clean["stage_sd_m"].fillna(options.stage_sd_m)
    clean["area_sd_m2"] = clean["area_sd_m2"].fillna(options.area_sd_share * size)
    refused: list[Refusal] = []
    for key in sorted(set(clean.loc[size.isna(), "wetland_id"])):
        reason = f"pairs, wetland {key}: it is not among the wetlands; its pairs are left out; add its polygon"
        refused.append(Refusal("wetland", key, reason))
    finite = np.isfinite(clean["stage_m"].astype(float)) & np.isfinite(clean["area_m2"].astype(float))
    good = finite & (clean["area_m2"] >= 0) & clean["date"].notna()
    for row in clean.loc[~good & size.notna()].itertuples():
        reason = (
            f"pairs, wetland {row.wetland_id} on {row.date}: stage {row.stage_m} m, area {row.area_m2} m2; both must be "
            "numbers and the area not negative; the pair is left out"
        )
        refused.append(Refusal("row", str(row.Index), reason))
    return clean.loc[good & size.notna()].reset_index(drop=True), refused


def _believable(
    clean: pd.DataFrame,
    laid: dict[str, tuple[np.ndarray, np.ndarray]],
    options: RelationOptions,
    refused: list[Refusal],
) -> pd.DataFrame:
    keep = np.ones(len(clean), bool)
    for (key, period), rows in clean.groupby(["wetland_id", "period"], sort=True):
        stage, area = rows["stage_m"].to_numpy(float), rows["area_m2"].to_numpy(float)
        limit = options.stage_limit_m
        if key in laid:
            limit = min(limit, 10.0 * float(laid[key][0][-1]) + 1.0)
        top = float(np.quantile(stage, 0.9))
        place = f"pairs, wetland {key}" + (f" period {period}" if clean["period"].nunique() > 1 else "")
        reason = ""
        if top > limit:
            reason = (
                f"{place}: stages reach {stage.max():.2f} m, deeper than the {limit:.1f} m believed of this bowl; stages in "
                f"centimetres would be {stage.max() / 100:.2f} m; give the unit in the logger registry; pairs left out"
            )
        elif len(rows) >= 6 and np.ptp(stage) > 0.05 and np.ptp(area) > 0:
            rank = stats.spearmanr(stage, area)
            if rank.statistic < -0.3 and rank.pvalue < 0.02:
                reason = (
                    f"{place}: area falls as stage rises (rank correlation {rank.statistic:.2f} over {len(rows)} pairs); no "
                    "relation can hold both; check which wetland the logger stands in and its datum; pairs left out"
                )
        if reason:
            refused.append(Refusal("wetland", str(key), reason))
            keep[rows.index.to_numpy()] = False
    return clean.loc[keep].reset_index(drop=True)


def _unit_table(clean: pd.DataFrame, sites: pd.DataFrame, place: dict[str, int]) -> pd.DataFrame:
    key = ["wetland_id", "period"]
    found = clean.groupby(key, sort=True).agg(start=("date", "min")).reset_index()
    seen = (
        clean[~clean["made"]]
        .groupby(key, sort=True)
        .agg(n_pairs=("date", "size"), stage_min_m=("stage_m", "min"), stage_max_m=("stage_m", "max"))
        .reset_index()
    )
    units = sites.merge(found.merge(seen, on=key, how="left"), on="wetland_id", how="left")
    units["period"] = units["period"].fillna("1")
    units = units.sort_values(["wetland_id", "start", "period"], kind="stable").reset_index(drop=True)
    units["n_pairs"] = units["n_pairs"].fillna(0).astype(np.int64)
    many = units.groupby("wetland_id")["period"].transform("size") > 1
    begins = units.groupby("wetland_id").cumcount() == 0
    units["valid_from"] = units["start"].where(many & ~begins)
    following = units.groupby("wetland_id")["start"].shift(-1)
    units["valid_to"] = following - pd.Timedelta(days=1)
    units["hypsometry"] = units["wetland_id"].map(place).fillna(-1).astype(np.int64)
    spread = (units["stage_max_m"] - units["stage_min_m"]).to_numpy(float)
    hung = set(map(tuple, clean.loc[clean["made"], ["wetland_id", "period"]].to_numpy()))
    keys = zip(units["wetland_id"], units["period"], units["n_pairs"].to_numpy(), spread, strict=True)
    units["note"] = [_note(n, wide, (name, period) in hung) for name, period, n, wide in keys]
    units["unit"] = np.arange(len(units))
    return units.drop(columns="start")


def _note(n_pairs: int, spread_m: float, hung: bool) -> str:
    if n_pairs == 0 and hung:
        return "no pairs: the relation rests on elevation, tied to stage by an outlet that the record shows"
    if n_pairs == 0:
        return "no pairs: the relation rests on other wetlands and elevation alone"
    if n_pairs == 1:
        return "one pair: the shape is borrowed from other wetlands"
    if spread_m < 0.03:
        return f"all {n_pairs} pairs lie within 3 cm of stage: the shape is borrowed from other wetlands"
    return ""
