"""Exact share of each pixel inside each wetland polygon."""

from __future__ import annotations

import geopandas as gpd
import numpy as np
import pandas as pd
import shapely
from numba import njit

from inundate.common.errors import InputError
from inundate.common.grid import Grid

SMALLEST_SHARE = 1e-9


@njit(cache=True, nogil=True)
def _add_piece(
    cover: np.ndarray, spill: np.ndarray, row: int, x0: float, x1: float, rise: float, top: int, left: int
) -> None:
    """Add one edge piece that stays within one row: signed area right of it, in its cells and all cells right."""
    if rise == 0.0:
        return
    low, high = min(x0, x1), max(x0, x1)
    first, last = int(np.floor(low)), int(np.floor(high))
    if first == last or high == low:
        cover[row - top, first - left] += rise * (first + 1.0 - 0.5 * (low + high))
        spill[row - top, first - left] += rise
        return
    per_x = rise / (high - low)
    for col in range(first, last + 1):
        a, b = max(low, float(col)), min(high, float(col + 1))
        if b > a:
            part = per_x * (b - a)
            cover[row - top, col - left] += part * (col + 1.0 - 0.5 * (a + b))
            spill[row - top, col - left] += part


@njit(cache=True, nogil=True)
def _add_ring(cover: np.ndarray, spill: np.ndarray, x: np.ndarray, y: np.ndarray, top: int, left: int) -> None:
    """Add the signed coverage of a closed ring; x and y in cell units, y down."""
    for i in range(x.size - 1):
        x0, y0, x1, y1 = x[i], y[i], x[i + 1], y[i + 1]
        if y0 == y1:
            continue
        sign = 1.0
        if y1 < y0:
            x0, y0, x1, y1 = x1, y1, x0, y0
            sign = -1.0
        slope = (x1 - x0) / (y1 - y0)
        row, last = int(np.floor(y0)), int(np.floor(y1))
        a, xa = y0, x0
        while row <= last:
            b = min(y1, row + 1.0)
            xb = x1 if b == y1 else x0 + slope * (b - y0)
            if b > a:
                _add_piece(cover, spill, row, xa, xb, sign * (b - a), top, left)
            a, xa = b, xb
            row += 1


def _rings(geometry: shapely.Geometry) -> list[tuple[np.ndarray, float]]:
    """Return the rings of a polygon or multipolygon with the sign that makes outer rings count positive."""
    rings = []
    for part in shapely.get_parts(geometry):
        for number, ring in enumerate([shapely.get_exterior_ring(part), *part.interiors]):
            xy = shapely.get_coordinates(ring)
            if xy.shape[0] < 4:
                continue
            origin = xy[0]
            x, y = xy[:, 0] - origin[0], xy[:, 1] - origin[1]
            turn = float(np.sum(x[:-1] * y[1:] - x[1:] * y[:-1]))
            rings.append((xy, (1.0 if turn > 0 else -1.0) * (1.0 if number == 0 else -1.0)))
    return rings


def cell_shares(
    geometry: shapely.Geometry, west: float, north: float, width_m: float, height_m: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Share of each cell of an endless north-up lattice inside a polygon, exact to rounding.

    Signed areas right of each edge are summed by cell (exact area coverage by accumulation); float64.

    Parameters
    ----------
    geometry : shapely Polygon or MultiPolygon
        Valid; may hold holes and parts.
    west, north : float
        Corner of the cell at row 0, column 0, m.
    width_m, height_m : float
        Cell sides, m.

    Returns
    -------
    rows, cols : ndarray of int64, shape (cell,)
        May be negative or lie beyond any raster.
    shares : ndarray of float64, shape (cell,)
        Above 1e-9 and at most 1.
    """
    none = np.zeros(0, np.int64), np.zeros(0, np.int64), np.zeros(0)
    rings = [(((xy[:, 0] - west) / width_m), ((north - xy[:, 1]) / height_m), s) for xy, s in _rings(geometry)]
    if not rings:
        return none
    left = int(np.floor(min(x.min() for x, _, _ in rings)))
    top = int(np.floor(min(y.min() for _, y, _ in rings)))
    cols = int(np.floor(max(x.max() for x, _, _ in rings))) - left + 1
    rows = int(np.floor(max(y.max() for _, y, _ in rings))) - top + 1
    total = np.zeros((rows, cols))
    for x, y, sign in rings:
        cover, spill = np.zeros((rows, cols)), np.zeros((rows, cols))
        _add_ring(cover, spill, x, y, top, left)
        total += sign * (cover + np.cumsum(spill, axis=1) - spill)
    r, c = np.nonzero(total > SMALLEST_SHARE)
    return r + top, c + left, np.minimum(total[r, c], 1.0)


def check_wetlands(wetlands: gpd.GeoDataFrame) -> None:
    """Check a wetland layer.

    Parameters
    ----------
    wetlands : GeoDataFrame
        Columns ``wetland_id`` (text, unique) and geometry (valid polygons or multipolygons).

    Raises
    ------
    InputError
        Column missing, id repeated, geometry empty, not polygonal or not valid.
    """
    if "wetland_id" not in wetlands.columns:
        text = f"wetlands: columns are {list(wetlands.columns)}; 'wetland_id' is needed; add it"
        raise InputError(text)
    again = wetlands["wetland_id"][wetlands["wetland_id"].duplicated()]
    if len(again):
        text = f"wetlands: wetland_id {again.iloc[0]!r} occurs more than once; ids must be unique; merge or rename"
        raise InputError(text)
    shapes = np.asarray(wetlands.geometry.values, dtype=object)
    kind = shapely.get_type_id(shapes)
    bad = ~np.isin(kind, (3, 6)) | shapely.is_empty(shapes)
    if bad.any():
        at = int(np.flatnonzero(bad)[0])
        name, got = wetlands["wetland_id"].iloc[at], getattr(shapes[at], "geom_type", "no geometry")
        text = f"wetlands: {name!r} is {got} or empty; a filled polygon or multipolygon is needed; redraw it"
        raise InputError(text)
    crossed = ~shapely.is_valid(shapes)
    if crossed.any():
        at = int(np.flatnonzero(crossed)[0])
        why = shapely.is_valid_reason(shapes[at])
        text = f"wetlands: {wetlands['wetland_id'].iloc[at]!r} is not a valid polygon ({why}); repair the outline"
        raise InputError(text)


def pixel_weights(wetlands: gpd.GeoDataFrame, grid: Grid) -> pd.DataFrame:
    """Exact share of each grid pixel inside each wetland.

    Parameters
    ----------
    wetlands : GeoDataFrame
        Columns ``wetland_id`` and geometry, in the grid's coordinate reference system.
    grid : Grid

    Returns
    -------
    DataFrame
        ``wetland_id`` (text), ``row``, ``col`` (int64), ``share`` (float64, 0..1 of the pixel's area inside the
        wetland), ``other_share`` (float64, share inside other wetlands of the layer); sorted by wetland_id, row, col.
        Pixels off the grid are left out: a wetland wholly outside has no rows.

    Raises
    ------
    InputError
        See :func:`check_wetlands`.
    """
    check_wetlands(wetlands)
    frame = _clipped(wetlands, grid)
    ids, rows, cols, shares = [], [], [], []
    for name, geometry in zip(frame[0], frame[1], strict=True):
        r, c, s = cell_shares(geometry, grid.west, grid.north, grid.step, grid.step)
        keep = grid.inside(r, c)
        ids.append(np.full(int(keep.sum()), name, dtype=object))
        rows.append(r[keep])
        cols.append(c[keep])
        shares.append(s[keep])
    out = pd.DataFrame(
        {
            "wetland_id": np.concatenate([*ids, np.zeros(0, object)]).astype(str),
            "row": np.concatenate([*rows, np.zeros(0, np.int64)]),
            "col": np.concatenate([*cols, np.zeros(0, np.int64)]),
            "share": np.concatenate([*shares, np.zeros(0)]),
        }
    )
    out["other_share"] = other_shares(out["row"].to_numpy() * grid.width + out["col"].to_numpy(), out["share"])
    return out.sort_values(["wetland_id", "row", "col"], ignore_index=True)


def other_shares(pixel: np.ndarray, share: np.ndarray | pd.Series) -> np.ndarray:
    """Share of each listed pixel that other wetlands hold: the pixel's total less its own, never above what is left.

    Parameters
    ----------
    pixel : ndarray of int, shape (row of the weight table,)
    share : ndarray of float, same shape

    Returns
    -------
    ndarray of float64, same shape, 0..1
    """
    share = np.asarray(share, float)
    _, place = np.unique(np.asarray(pixel), return_inverse=True)
    total = np.bincount(place, weights=share, minlength=int(place.max()) + 1 if place.size else 0)
    return np.clip(np.minimum(total[place] - share, 1.0 - share), 0.0, 1.0) if place.size else np.zeros(0)


def _clipped(wetlands: gpd.GeoDataFrame, grid: Grid) -> tuple[np.ndarray, np.ndarray]:
    """Return ids and geometries, those that reach off the grid cut to one pixel beyond its bounds."""
    ids = wetlands["wetland_id"].astype(str).to_numpy()
    shapes = np.asarray(wetlands.geometry.values, dtype=object)
    west, south, east, north = grid.bounds
    box = shapely.box(west - grid.step, south - grid.step, east + grid.step, north + grid.step)
    bounds = shapely.bounds(shapes).reshape(-1, 4)
    out = (bounds[:, 0] < west) | (bounds[:, 1] < south) | (bounds[:, 2] > east) | (bounds[:, 3] > north)
    for i in np.flatnonzero(out):
        shapes[i] = _polygonal(shapely.intersection(shapes[i], box))
    return ids, shapes


def _polygonal(geometry: shapely.Geometry) -> shapely.Geometry:
    """Keep the polygons of a geometry."""
    parts = [p for p in shapely.get_parts(geometry) if p.geom_type == "Polygon"]
    return shapely.MultiPolygon(parts)
