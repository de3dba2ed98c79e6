"""Labels become examples: checked, placed on pixels and scenes, and joined by starter examples where there are too few."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from importlib import resources

import geopandas as gpd
import numpy as np
import pandas as pd
import shapely

from inundate.common.codes import BAND_ROLES, LEAF_STATES
from inundate.common.errors import InputError, Refusal
from inundate.common.grid import Grid
from inundate.pixels.features import features

LABELS = {"dry": 0, "water": 1}
MIN_OWN = 100
"""Own examples of each class below which starter examples join; common practice, no source."""

_GROUP_STEP_M = 500.0  # labels outside every wetland are grouped by squares of this side; common practice, no source


@dataclass(frozen=True, slots=True)
class ExampleSet:
    """ExampleSet for training.

    Attributes
    ----------
    table : DataFrame
        row (of the labels file, -1 for starter examples), label (0 dry, 1 water), wetland_id (or another group),
        date (datetime64), scene_id, leaf_state (code, -1 unknown), leaf_share, sun_elevation_deg, source, weight,
        purity (share of the pixel that the label covers; NaN for points), fraction (water fraction, NaN where only the
        label is known).
    reflectance : ndarray of float32, shape (band, row)
        Bands as in ``common.codes.BAND_ROLES``; NaN where missing.
    notes : tuple of str
        What was done that the user should know.
    refused : tuple of Refusal
        Labels that could not be used.
    """

    table: pd.DataFrame
    reflectance: np.ndarray
    notes: tuple[str, ...] = ()
    refused: tuple[Refusal, ...] = field(default_factory=tuple)

    @property
    def X(self) -> np.ndarray:
        """Features, float32, shape (row, feature)."""
        leaf, sun = self.table["leaf_share"].to_numpy("f4"), self.table["sun_elevation_deg"].to_numpy("f4")
        return features(self.reflectance, BAND_ROLES, leaf, sun)

    @property
    def y(self) -> np.ndarray:
        """Labels, int8: 0 dry, 1 water."""
        return self.table["label"].to_numpy(np.int8)

    def take(self, rows: np.ndarray) -> ExampleSet:
        """Return the examples of the given rows (positions or mask)."""
        rows = np.flatnonzero(rows) if np.asarray(rows).dtype == bool else np.asarray(rows)
        return replace(self, table=self.table.iloc[rows].reset_index(drop=True), reflectance=self.reflectance[:, rows])


def check_labels(labels: pd.DataFrame) -> pd.DataFrame:
    """Return labels with ``label`` as 0 and 1 and every optional column present.

    Parameters
    ----------
    labels : DataFrame
        Column ``label`` (water / dry, any case), and ``date`` or ``scene_id``; optional wetland_id, source, weight.

    Returns
    -------
    DataFrame
        row, label, date (datetime64[ns]), scene_id, wetland_id, source, weight, and any geometry; ``row`` counts from 0.

    Raises
    ------
    InputError
        No such column, a label that is not known, a date that cannot be read, one class only, no row.
    """
    if "label" not in labels.columns or not ({"date", "scene_id"} & set(labels.columns)):
        message = (
            f"labels: columns {list(labels.columns)}; needs label (water or dry), and date or scene_id of the view that "
            "shows it; add the missing column"
        )
        raise InputError(message)
    out = labels.reset_index(drop=True)
    text = out["label"].astype(str).str.strip().str.lower()
    bad = ~text.isin(list(LABELS))
    if bad.any():
        first = int(np.flatnonzero(bad)[0])
        message = (
            f"labels: row {first} has label {out['label'].iloc[first]!r} ({int(bad.sum())} such rows); a label is water "
            "or dry, correct or remove it"
        )
        raise InputError(message)
    if text.nunique() < 2:
        found = f"all {len(text)} rows are {text.iloc[0]}" if len(text) else "there is no row"
        message = f"labels: one class only, {found}; give examples of both water and dry, or leave the file out to use starter examples"
        raise InputError(message)
    date = pd.to_datetime(out["date"], errors="coerce", utc=True).dt.tz_localize(None) if "date" in out else None
    scene = out["scene_id"].astype("object") if "scene_id" in out else pd.Series([None] * len(out), dtype="object")
    scene = scene.where(scene.notna(), None)
    if date is not None and (lost := date.isna() & scene.isna()).any():
        first = int(np.flatnonzero(lost)[0])
        message = f"labels: row {first} has date {out['date'].iloc[first]!r}; give an ISO 8601 date, or a scene_id"
        raise InputError(message)
    out["row"], out["label"] = np.arange(len(out)), text.map(LABELS).astype(np.int8)
    out["date"] = (
        pd.Series(np.full(len(out), np.datetime64("NaT"), "datetime64[ns]"))
        if date is None
        else date.astype("datetime64[ns]")
    )
    out["scene_id"] = scene
    out["wetland_id"] = (
        out["wetland_id"].where(out["wetland_id"].notna(), "").astype(str) if "wetland_id" in out else ""
    )
    out["source"] = out["source"].where(out["source"].notna(), "own").astype(str) if "source" in out else "own"
    out["weight"] = out["weight"].fillna(1.0).astype(float) if "weight" in out else 1.0
    return out


def label_pixels(
    labels: gpd.GeoDataFrame, grid: Grid, *, max_per_polygon: int = 50
) -> tuple[pd.DataFrame, list[Refusal]]:
    """Place checked labels on the pixels of a grid.

    Parameters
    ----------
    labels : GeoDataFrame
        From :func:`check_labels`; points, or polygons whose pixels with the centre inside count. CRS of the grid.
    grid : Grid
    max_per_polygon : int
        At most so many pixels of one polygon (evenly spaced ones), so that large polygons do not outweigh the rest.

    Returns
    -------
    pixels : DataFrame
        The columns of ``labels`` without geometry, and grid_row, grid_col, purity (share of the pixel inside the
        polygon, NaN for points). Labels without wetland_id get a group of nearby labels.
    refused : list of Refusal
        Labels outside the grid or without a shape.
    """
    shape = labels.geometry
    x, y = shape.centroid.x.to_numpy(), shape.centroid.y.to_numpy()
    refused, parts = [], []
    plain_columns = [c for c in labels.columns if c != shape.name]
    for i, one in enumerate(shape):
        rows, cols, purity = _cells_of(one, grid, max_per_polygon)
        keep = grid.inside(rows, cols)
        if not keep.any():
            reason = f"labels: row {i} lies outside the area of the scenes; check its coordinates and CRS"
            refused.append(Refusal("label", str(labels["row"].iloc[i]), reason))
            continue
        part = pd.DataFrame({"place": i, "grid_row": rows[keep], "grid_col": cols[keep], "purity": purity[keep]})
        parts.append(part)
    found = (
        pd.concat(parts, ignore_index=True)
        if parts
        else pd.DataFrame({"place": [], "grid_row": [], "grid_col": [], "purity": []}).astype(int)
    )
    place = found.pop("place").to_numpy(int)
    out = pd.concat([labels[plain_columns].iloc[place].reset_index(drop=True), found], axis=1)
    square = [
        f"square {int(a // _GROUP_STEP_M)} {int(b // _GROUP_STEP_M)}" for a, b in zip(x[place], y[place], strict=True)
    ]
    out["wetland_id"] = np.where(out["wetland_id"] == "", square, out["wetland_id"])
    return out, refused


def _cells_of(shape: shapely.Geometry, grid: Grid, most: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    if shape is None or shape.is_empty:
        none = np.array([], np.int64)
        return none, none, none.astype(float)
    if shape.geom_type in {"Point", "MultiPoint"}:
        xy = shapely.get_coordinates(shape)
        rows, cols = grid.locate(xy[:, 0], xy[:, 1])
        return rows, cols, np.full(rows.size, np.nan)
    west, south, east, north = shape.bounds
    (r0, r1), (c0, c1) = grid.locate(np.array([west, east]), np.array([north, south]))
    rows, cols = (a.ravel() for a in np.mgrid[r0 : r1 + 1, c0 : c1 + 1])
    cx, cy = grid.centres(rows, cols)
    inside = shapely.contains_xy(shape, cx, cy)
    if not inside.any():
        point = shape.representative_point()
        rows, cols = grid.locate(np.array([point.x]), np.array([point.y]))
    else:
        rows, cols = rows[inside], cols[inside]
    if rows.size > most:
        pick = np.unique(np.linspace(0, rows.size - 1, most).round().astype(int))
        rows, cols = rows[pick], cols[pick]
    cx, cy = grid.centres(rows, cols)
    half = grid.step / 2
    boxes = shapely.box(cx - half, cy - half, cx + half, cy + half)
    return rows, cols, shapely.area(shapely.intersection(boxes, shape)) / grid.pixel_area_m2


def match_scenes(
    pixels: pd.DataFrame, scenes: pd.DataFrame, *, max_days: float = 1.0
) -> tuple[pd.DataFrame, list[Refusal]]:
    """Give each label the scene that shows it.

    Parameters
    ----------
    pixels : DataFrame
        row, date, scene_id and others, as from :func:`label_pixels`.
    scenes : DataFrame
        scene_id, datetime.
    max_days : float
        Most days between a label's date and its scene (where it names no scene).

    Returns
    -------
    pixels : DataFrame
        Rows with a scene; ``scene_id`` filled, ``date`` the scene's day.
    refused : list of Refusal
        One for each label without a scene.

    Raises
    ------
    InputError
        No label meets any scene.
    """
    when = pd.to_datetime(scenes["datetime"]).dt.tz_localize(None).to_numpy("datetime64[ns]")
    ids = scenes["scene_id"].astype(str).to_numpy()
    order = np.lexsort((ids, when))
    when, ids = when[order], ids[order]
    named = {name: i for i, name in enumerate(ids)}
    chosen = np.full(len(pixels), -1)
    scene = pixels["scene_id"].to_numpy(object)
    noon = pixels["date"].dt.floor("D").to_numpy("datetime64[ns]") + np.timedelta64(12, "h")
    for i in range(len(pixels)):
        if scene[i] is not None:
            chosen[i] = named.get(str(scene[i]), -1)
        elif when.size and not np.isnat(noon[i]):
            away = np.abs((when - noon[i]) / np.timedelta64(1, "D"))
            best = int(np.argmin(away))
            chosen[i] = best if away[best] <= max_days + 0.5 else -1
    lost = pixels.loc[chosen < 0].drop_duplicates("row")
    if (chosen >= 0).sum() == 0:
        span = f"{when[0]!s:.10} to {when[-1]!s:.10}" if when.size else "none"
        message = (
            f"labels: none of {len(pixels)} labels meets a scene (scenes: {span}, at most {max_days:g} days apart); check the "
            "dates, scene ids and coordinates of the labels"
        )
        raise InputError(message)
    refused = [
        Refusal(
            "label",
            str(row),
            f"labels: row {row} (date {date!s:.10}) has no scene within {max_days:g} days; correct its date or scene_id",
        )
        for row, date in zip(lost["row"], lost["date"], strict=True)
    ]
    out = pixels.loc[chosen >= 0].reset_index(drop=True)
    hit = chosen[chosen >= 0]
    out["scene_id"], out["date"] = ids[hit], when[hit].astype("datetime64[D]").astype("datetime64[ns]")
    return out, refused


@dataclass(frozen=True, slots=True)
class ViewState:
    """What is known of the view of each label: leaf share 0..1, leaf state code, sun elevation (arrays, one a row)."""

    leaf_share: np.ndarray
    leaf_state: np.ndarray
    sun_elevation_deg: np.ndarray


def make_examples(
    pixels: pd.DataFrame,
    reflectance: np.ndarray,
    bands: tuple[str, ...],
    view: ViewState,
    *,
    clear: np.ndarray | None = None,
    min_own: int = MIN_OWN,
    starter: str = "auto",
) -> ExampleSet:
    """Turn label rows with sampled reflectance into examples.

    Parameters
    ----------
    pixels : DataFrame, one row a labelled pixel
        row, label (0 / 1), wetland_id, date, scene_id, source, weight and purity, as from :func:`match_scenes`; only row
        and label are necessary.
    reflectance : ndarray, shape (band, row)
        Sampled from each row's own scene; NaN where missing.
    bands : tuple of str
    view : ViewState
    clear : ndarray of bool, shape (row,), optional
        Rows whose pixel is clear in its scene; others are set aside.
    min_own : int
        Fewer own examples than this of either class bring the starter examples in (``starter="auto"``).
    starter : {"auto", "always", "never"}

    Returns
    -------
    ExampleSet

    Raises
    ------
    InputError
        No label has a clear pixel in its scene, or one class only and no starter examples are to join.
    """
    n = len(pixels)
    values = np.full((len(BAND_ROLES), n), np.nan, np.float32)
    values[[BAND_ROLES.index(b) for b in bands]] = reflectance
    seen = np.isfinite(values).any(axis=0)
    if clear is not None:
        seen &= np.asarray(clear, bool)
    table = _example_table(pixels, view)
    lost = table["row"].to_numpy()[~seen]
    refused = tuple(
        Refusal("label", str(r), f"labels: row {r} is not clear in its scene; label another date")
        for r in dict.fromkeys(lost.tolist())
    )
    if not seen.any():
        message = (
            f"labels: none of {n} labelled pixels is clear in its scene; check the dates and coordinates of the labels"
        )
        raise InputError(message)
    own = ExampleSet(table.loc[np.flatnonzero(seen)].reset_index(drop=True), values[:, seen], (), refused)
    return join_starter(own, min_own=min_own, starter=starter)


def _example_table(pixels: pd.DataFrame, view: ViewState) -> pd.DataFrame:
    n = len(pixels)
    get = lambda name, other: pixels[name].to_numpy() if name in pixels else np.full(n, other)  # noqa: E731
    return pd.DataFrame(
        {
            "row": pixels["row"].to_numpy(np.int64),
            "label": pixels["label"].to_numpy(np.int8),
            "wetland_id": get("wetland_id", "").astype(str),
            "date": pd.to_datetime(pd.Series(get("date", np.datetime64("NaT", "ns")))).to_numpy("datetime64[ns]"),
            "scene_id": get("scene_id", "").astype(str),
            "leaf_state": np.broadcast_to(np.asarray(view.leaf_state, np.int8), (n,)),
            "leaf_share": np.broadcast_to(np.asarray(view.leaf_share, np.float32), (n,)),
            "sun_elevation_deg": np.broadcast_to(np.asarray(view.sun_elevation_deg, np.float32), (n,)),
            "source": get("source", "own").astype(str),
            "weight": get("weight", 1.0).astype(float),
            "purity": get("purity", np.nan).astype(float),
            "fraction": get("fraction", np.nan).astype(float),
        }
    )


def join_starter(own: ExampleSet, *, min_own: int = MIN_OWN, starter: str = "auto") -> ExampleSet:
    """Join starter examples to own ones where these are too few, and say so in the notes.

    Raises
    ------
    InputError
        ``starter`` is not auto, always or never; or one class only and none may join.
    """
    if starter not in {"auto", "always", "never"}:
        message = f"starter: {starter!r}; use auto, always or never"
        raise InputError(message)
    water, dry = int((own.y == 1).sum()), int((own.y == 0).sum())
    few = min(water, dry) < min_own
    if starter == "never" or (starter == "auto" and not few):
        if min(water, dry) == 0:
            message = f"labels: one class only ({water} water, {dry} dry examples); add the other class or allow starter examples"
            raise InputError(message)
        return own
    base = starter_examples()
    reason = f"fewer than {min_own} of either" if few else "as asked"
    note = f"own examples: {water} water and {dry} dry; {len(base.table)} starter examples joined ({reason})"
    table = pd.concat([own.table, base.table], ignore_index=True)
    return ExampleSet(
        table, np.concatenate([own.reflectance, base.reflectance], axis=1), (*own.notes, note), own.refused
    )


def starter_examples(*, mixed: bool = False) -> ExampleSet:
    """Return the starter examples shipped with the package.

    Parameters
    ----------
    mixed : bool
        Also those between water and dry that have a fraction but no label (label -1).

    Returns
    -------
    ExampleSet
        ``source`` is ``starter``, ``wetland_id`` a group of rows of one surface family, no date.
    """
    with resources.as_file(resources.files("inundate.pixels.starter") / "examples.parquet") as path:
        rows = pd.read_parquet(path)
    if not mixed:
        rows = rows[rows["label"] >= 0]
    rows = rows.reset_index(drop=True)
    share = rows["leaf_share"].to_numpy("f4")
    off, on = LEAF_STATES.index("leaf_off"), LEAF_STATES.index("leaf_on")
    pixels = pd.DataFrame(
        {
            "row": -1,
            "label": rows["label"],
            "source": "starter",
            "fraction": rows["fraction"],
            "wetland_id": "starter " + rows["family"] + " " + (rows["number"] % 10).astype(str),
        }
    )
    state = np.where(share < 0.1, off, np.where(share > 0.9, on, LEAF_STATES.index("green_up")))
    view = ViewState(share, state, rows["sun_elevation_deg"].to_numpy("f4"))
    return ExampleSet(_example_table(pixels, view), rows[list(BAND_ROLES)].to_numpy("f4").T.copy())
