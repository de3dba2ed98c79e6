"""Labels, checked and placed on the pixels of a grid and on scenes."""

from __future__ import annotations

import geopandas as gpd
import numpy as np
import pandas as pd
import shapely

from inundate.common.errors import InputError, Refusal
from inundate.common.grid import Grid

LABELS = {"dry": 0, "water": 1}
_GROUP_STEP_M = 500.0  # labels outside every wetland are grouped by squares of this side; common practice, no source


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
