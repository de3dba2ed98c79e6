"""What the filled series takes, its options, and the aligned arrays (panel) that the science works on."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from inundate.common.codes import CANOPY_HIDES, COVERS, LEAF_STATES
from inundate.common.errors import InputError
from inundate.series.maps import LevelMaps, Relations, build_maps

SPIN_UP_DAYS = 730


_TELLS_VIEW = {"view_fraction", "clear_fraction"}
LEAST_OPEN, DIM = 0.15, 0.3
"""Share of the ground that a canopy must let through for a view to tell anything, and below which it proves nothing about other canopies
(common practice, no source)."""


@dataclass(frozen=True, slots=True)
class SeriesInputs:
    """Tables for :func:`inundate.series.fill_series`.

    Attributes
    ----------
    wetlands : DataFrame
        wetland_id, area_max_m2, cover.
    observed : DataFrame
        extent_observed: wetland_id, datetime, area_m2, area_sd_m2, leaf_state, used [, view_fraction, clear_fraction, reason]. Rows
        with ``used`` false count nothing, but for wetlands that have no other: there a view that the canopy hides serves.
    stage_daily : DataFrame or None
        Full daily stage: wetland_id, date, stage_m, stage_sd_m, censored.
    relations : Relations or None
        Stage-area relations; may lack wetlands.
    hypsometry : DataFrame or None
        wetland_id, stage_m, area_m2.
    weather : DataFrame or None
        date, precipitation_mm, pet_mm [, air_temperature_c].
    leaf_daily : DataFrame
        wetland_id, date, leaf_state [, leaf_share].
    first_date, last_date : Timestamp or None
        First and last day wanted; None means the span of views, stage and (last) the leaf calendar.
    lasting_part : dict or None
        wetland_id -> part (0..1) of ``FillOptions.lasting`` that is left where something beside views tells a wetland's curve; 1 elsewhere.
    """

    wetlands: pd.DataFrame
    observed: pd.DataFrame
    stage_daily: pd.DataFrame | None
    relations: Relations | None
    hypsometry: pd.DataFrame | None
    weather: pd.DataFrame | None
    leaf_daily: pd.DataFrame
    first_date: pd.Timestamp | None = None
    last_date: pd.Timestamp | None = None
    lasting_part: dict[str, float] | None = None


@dataclass(frozen=True, slots=True)
class FillOptions:
    """Settings of the filled series.

    Attributes
    ----------
    members : int
        Plausible parameter sets carried a wetland.
    blocks : int
        Most season-long blocks of views that are hidden in turn to score predictors.
    score_wetlands : int
        Most wetlands whose blocks are hidden (a seeded sample beyond that).
    outlier_share : float
        Share of views taken to be unrelated to the truth, where too few views tell (common practice, no source).
    min_view_sd : float
        Least standard deviation of a view as a share of the largest extent.
    workers : int
        Threads; the result does not depend on it.
    lasting : (float, float)
        Standard deviations, from wetland to wetland, of the share of water that views keep missing and of the share of
        dry ground that they keep calling water: what no number of views of the same wetland averages out.
    """

    members: int = 64
    blocks: int = 4
    score_wetlands: int = 200
    outlier_share: float = 0.02
    min_view_sd: float = 0.01
    workers: int = 1
    lasting: tuple[float, float] = (0.0, 0.0)


@dataclass(frozen=True, slots=True)
class Events:
    """Ragged daily events of all wetlands, sorted by wetland and day.

    Attributes
    ----------
    start : ndarray of int64, shape (wetland + 1,)
        Slice bounds a wetland.
    day : ndarray of int64, shape (event,)
    value, sd : ndarray of float64, shape (event,)
        Share of the largest extent (views) or level in m (stage).
    kind : ndarray of int8, shape (event,)
        Leaf state of a view; 1 for a censored stage.
    open : ndarray of float64, shape (event,)
        Share of the ground that the canopy let through, where clear; 1 for a stage.
    """

    start: np.ndarray
    day: np.ndarray
    value: np.ndarray
    sd: np.ndarray
    kind: np.ndarray
    open: np.ndarray

    @property
    def owner(self) -> np.ndarray:
        """Wetland position of each event."""
        return np.repeat(np.arange(self.start.size - 1), np.diff(self.start))

    def keep(self, wanted: np.ndarray) -> Events:
        """Return the events where ``wanted`` is true."""
        counts = np.bincount(self.owner[wanted], minlength=self.start.size - 1)
        start = np.concatenate([[0], np.cumsum(counts)])
        return Events(start, *(getattr(self, n)[wanted] for n in ("day", "value", "sd", "kind", "open")))

    def certain(self) -> Events:
        """Return stage events that settle the extent: measured, or dry at or below ground."""
        return self.keep((self.kind == 0) | (self.value <= 0))

    def with_sd(self, sd: np.ndarray) -> Events:
        """Return the same events with other standard deviations."""
        return replace(self, sd=sd)


@dataclass(frozen=True, slots=True)
class Panel:
    """Aligned arrays: wetlands in order of id, every day from first to last.

    Attributes
    ----------
    ids : tuple of str
    dates : ndarray of datetime64[ns], shape (day,)
    area_max_m2 : ndarray, shape (wetland,)
    cover : ndarray of int, shape (wetland,)
    leaf : ndarray of uint8, shape (wetland, day)
    maps : LevelMaps
    views, stage : Events
    weather : DataFrame or None
    lacked : tuple of str
    """

    ids: tuple[str, ...]
    dates: np.ndarray
    area_max_m2: np.ndarray
    cover: np.ndarray
    leaf: np.ndarray
    maps: LevelMaps
    views: Events
    stage: Events
    weather: pd.DataFrame | None
    lacked: tuple[str, ...]


def _need(table: pd.DataFrame, name: str, columns: tuple[str, ...]) -> None:
    gone = [c for c in columns if c not in table.columns]
    if gone:
        msg = f"{name}: column {gone[0]!r} is missing (has {', '.join(map(str, table.columns))}): give it"
        raise InputError(msg)


def _dates(values: pd.Series) -> pd.Series:
    stamps = pd.to_datetime(values, utc=True).dt.tz_localize(None)
    return stamps.dt.normalize()


def _wetlands(table: pd.DataFrame) -> pd.DataFrame:
    _need(table, "wetlands", ("wetland_id", "area_max_m2"))
    out = pd.DataFrame(
        {"wetland_id": table["wetland_id"].astype(str), "area_max_m2": table["area_max_m2"].astype(float)}
    )
    out["cover"] = table["cover"].astype(str) if "cover" in table else "open"
    out = out.sort_values("wetland_id", ignore_index=True)
    twice = out["wetland_id"][out["wetland_id"].duplicated()]
    if len(twice):
        msg = f"wetlands: wetland_id {twice.iloc[0]!r} occurs twice: ids must be unique, drop or rename one"
        raise InputError(msg)
    bad = out[~(out["area_max_m2"] > 0)]
    if len(bad):
        row = bad.iloc[0]
        msg = f"wetlands: {row['wetland_id']!r} has area_max_m2 {row['area_max_m2']}: it must be above 0, check its polygon"
        raise InputError(msg)
    if out.empty:
        msg = "wetlands: the table has no rows: give at least one wetland"
        raise InputError(msg)
    return out


def _span(inputs: SeriesInputs) -> tuple[pd.Timestamp, pd.Timestamp]:
    days: list[pd.Series] = []
    if len(inputs.observed):
        days.append(_dates(inputs.observed["datetime"]))
    if inputs.stage_daily is not None and len(inputs.stage_daily):
        days.append(_dates(inputs.stage_daily["date"]))
    if not days and (inputs.first_date is None or inputs.last_date is None):
        msg = "observed, stage_daily: both are empty and no first_date and last_date given: give views, stage or both dates"
        raise InputError(msg)
    first = min(d.min() for d in days) if inputs.first_date is None else pd.Timestamp(inputs.first_date).normalize()
    last = max(d.max() for d in days) if inputs.last_date is None else pd.Timestamp(inputs.last_date).normalize()
    if last < first:
        msg = f"last_date: {last.date()} lies before first_date {first.date()}: swap or correct them"
        raise InputError(msg)
    return first, last


def _events(frame: pd.DataFrame, wetlands: int, days: int) -> Events:
    frame = frame[(frame["day"] >= 0) & (frame["day"] < days)].sort_values(["wetland", "day"], kind="stable")
    counts = np.bincount(frame["wetland"].to_numpy(np.int64), minlength=wetlands)
    return Events(
        np.concatenate([[0], np.cumsum(counts)]).astype(np.int64),
        frame["day"].to_numpy(np.int64),
        frame["value"].to_numpy(np.float64),
        frame["sd"].to_numpy(np.float64),
        frame["kind"].to_numpy(np.int8),
        frame["open"].to_numpy(np.float64),
    )


def _merge_days(frame: pd.DataFrame) -> pd.DataFrame:
    """Combine events of one wetland and day by their precision; the result does not depend on row order."""
    weight = 1 / frame["sd"] ** 2
    frame = frame.assign(weight=weight, product=weight * frame["value"])
    frame = frame.sort_values(["wetland", "day", "value", "sd"])
    grouped = frame.groupby(["wetland", "day"], as_index=False)
    out = grouped.agg(weight=("weight", "sum"), product=("product", "sum"), kind=("kind", "max"), open=("open", "max"))
    out["value"] = out["product"] / out["weight"]
    out["sd"] = 1 / np.sqrt(out["weight"])
    return out


def _views(
    inputs: SeriesInputs, place: dict[str, int], first: pd.Timestamp, area_max: np.ndarray, least: float
) -> pd.DataFrame:
    table = inputs.observed
    _need(table, "observed", ("wetland_id", "datetime", "area_m2", "area_sd_m2", "leaf_state", "used"))
    wetland = table["wetland_id"].astype(str).map(place)
    good = (table["used"].astype(bool) | _last_resort(table)) & wetland.notna()
    good &= np.isfinite(table["area_m2"]) & np.isfinite(table["area_sd_m2"])
    table, wetland = table[good], wetland[good].astype(np.int64)
    unknown = set(table["leaf_state"].astype(str)) - set(LEAF_STATES)
    if unknown:
        msg = f"observed: leaf_state {sorted(unknown)[0]!r} is unknown: use one of {', '.join(LEAF_STATES)}"
        raise InputError(msg)
    largest = area_max[wetland.to_numpy()]
    frame = pd.DataFrame({"wetland": wetland.to_numpy(), "day": (_dates(table["datetime"]) - first).dt.days.to_numpy()})
    frame["value"] = np.clip(table["area_m2"].to_numpy(float) / largest, 0, 1)
    frame["sd"] = np.maximum(table["area_sd_m2"].to_numpy(float) / largest, least)
    frame["kind"] = table["leaf_state"].astype(str).map({s: k for k, s in enumerate(LEAF_STATES)}).to_numpy()
    seen = table[["view_fraction", "clear_fraction"]].to_numpy(float) if set(table.columns) >= _TELLS_VIEW else None
    frame["open"] = 1.0 if seen is None else np.clip(seen[:, 0] / np.maximum(seen[:, 1], 1e-6), 0.0, 1.0)
    return _merge_days(frame)


def _last_resort(table: pd.DataFrame) -> pd.Series:
    """Which views that the canopy hides serve: those of wetlands without any usable view, where gaps let some ground be seen."""
    if not {"reason", *_TELLS_VIEW} <= set(table.columns):
        return pd.Series(False, index=table.index)
    never = ~table["used"].astype(bool).groupby(table["wetland_id"]).transform("any")
    seen = (table["clear_fraction"] >= 0.5) & (table["view_fraction"] >= LEAST_OPEN * table["clear_fraction"])
    return never & seen & (table["reason"] == CANOPY_HIDES)


def _stage(table: pd.DataFrame | None, place: dict[str, int], first: pd.Timestamp) -> pd.DataFrame:
    if table is None or not len(table):
        return pd.DataFrame({c: [] for c in ("wetland", "day", "value", "sd", "kind", "open")}).astype(
            {"wetland": np.int64, "day": np.int64}
        )
    _need(table, "stage_daily", ("wetland_id", "date", "stage_m"))
    wetland = table["wetland_id"].astype(str).map(place)
    good = wetland.notna() & np.isfinite(table["stage_m"].astype(float))
    table, wetland = table[good], wetland[good].astype(np.int64)
    frame = pd.DataFrame({"wetland": wetland.to_numpy(), "day": (_dates(table["date"]) - first).dt.days.to_numpy()})
    frame["value"] = table["stage_m"].to_numpy(float)
    sd = table["stage_sd_m"].to_numpy(float) if "stage_sd_m" in table else np.full(len(table), 0.02)
    frame["sd"] = np.maximum(np.where(np.isfinite(sd), sd, 0.02), 0.002)
    frame["kind"] = table["censored"].fillna(False).astype(np.int8).to_numpy() if "censored" in table else 0
    frame["open"] = 1.0
    # A day with a measured value outranks a censored one of a second logger.
    measured = frame.groupby(["wetland", "day"])["kind"].transform("min")
    return _merge_days(frame[frame["kind"] == measured])


def _leaf(table: pd.DataFrame, place: dict[str, int], first: pd.Timestamp, days: int) -> np.ndarray:
    _need(table, "leaf_daily", ("wetland_id", "date", "leaf_state"))
    out = np.full((len(place), days), 255, np.uint8)
    row = table["wetland_id"].astype(str).map(place)
    day = (_dates(table["date"]) - first).dt.days
    code = table["leaf_state"].astype(str).map({s: k for k, s in enumerate(LEAF_STATES)})
    ok = row.notna() & (day >= 0) & (day < days) & code.notna()
    out[row[ok].astype(int), day[ok].astype(int)] = code[ok].astype(np.uint8)
    for i in range(out.shape[0]):
        known = np.flatnonzero(out[i] != 255)
        if known.size and known.size < days:
            nearest = known[np.clip(np.searchsorted(known, np.arange(days)), 0, known.size - 1)]
            out[i] = np.where(out[i] == 255, out[i][nearest], out[i])
    out[out == 255] = 0
    return out


def _lacked(inputs: SeriesInputs, maps: LevelMaps, views: Events, stage: Events, dates: np.ndarray) -> tuple[str, ...]:
    words = []
    if stage.day.size == 0:
        words.append("no logger gave stage: dry-down under leaves rests on weather and season alone")
    if inputs.weather is None or not len(inputs.weather):
        words.append("no weather: rain and evapotranspiration do not inform the series")
    if inputs.hypsometry is None or not len(inputs.hypsometry):
        words.append("no elevation: wetlands without relation take a bowl shape pooled by size")
    if dates.size < 500:
        words.append(f"{dates.size} days of record: one year cannot show how years differ")
    owner = views.owner
    year = dates[views.day].astype("datetime64[D]").astype(object) if views.day.size else []
    seen = (
        {(d.year + (d.month >= 9)) for d, k in zip(year, views.kind, strict=True) if k == 0}
        if views.day.size
        else set()
    )
    last = pd.Timestamp(dates[-1])
    for winter in range(pd.Timestamp(dates[0]).year + 1, last.year + 1):
        if winter not in seen and pd.Timestamp(winter, 1, 15) <= last:
            words.append(f"no usable leaf-off view in the winter {winter - 1}/{winter}")
    blind = len(maps.source) - np.unique(np.concatenate([owner, stage.owner])).size
    if blind:
        words.append(
            f"{blind} wetland{'s' if blind > 1 else ''} never seen by a view or a logger: the series is that of its like"
        )
    return tuple(words)


def build_panel(inputs: SeriesInputs, options: FillOptions) -> Panel:
    """Check the tables and align them.

    Raises
    ------
    InputError
        If a column is missing, an id occurs twice, an area is not positive, or dates are reversed.
    """
    wetlands = _wetlands(inputs.wetlands)
    first, last = _span(inputs)
    dates = pd.date_range(first, last, freq="D")
    ids = tuple(wetlands["wetland_id"])
    place = {w: i for i, w in enumerate(ids)}
    area_max = wetlands["area_max_m2"].to_numpy(float)
    maps = build_maps(ids, area_max, inputs.relations, inputs.hypsometry)
    views = _events(_views(inputs, place, first, area_max, options.min_view_sd), len(ids), len(dates))
    stage = _events(_stage(inputs.stage_daily, place, first), len(ids), len(dates))
    weather = None
    if inputs.weather is not None and len(inputs.weather):
        _need(inputs.weather, "weather", ("date", "precipitation_mm", "pet_mm"))
        weather = (
            inputs.weather.assign(date=_dates(inputs.weather["date"]))
            .drop_duplicates("date")
            .set_index("date")
            .sort_index()
        )
    cover = np.array([COVERS.index(c) if c in COVERS else 0 for c in wetlands["cover"]])
    stamps = dates.to_numpy().astype("datetime64[ns]")
    lacked = _lacked(inputs, maps, views, stage, stamps)
    leaf = _leaf(inputs.leaf_daily, place, first, len(dates))
    return Panel(ids, stamps, area_max, cover, leaf, maps, views, stage, weather, lacked)
