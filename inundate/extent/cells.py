"""Fine elevation cells inside wetlands, and stage-area tables from them."""

from __future__ import annotations

import geopandas as gpd
import numpy as np
import pandas as pd
from affine import Affine

from inundate.common.errors import InputError
from inundate.common.grid import Grid
from inundate.extent.weights import cell_shares, check_wetlands

LOWEST_SHARE = 0.01
STAGE_STEP_M = 0.01
LONGEST_TABLE = 5000


def elevation_cells(elevation: np.ndarray, transform: Affine, wetlands: gpd.GeoDataFrame, grid: Grid) -> pd.DataFrame:
    """Cut the elevation model by the wetlands, cell by cell.

    A cell that spans several pixels of the grid is divided among them by area. Cells coarser than a pixel are first
    divided so that each pixel gets its own.

    Parameters
    ----------
    elevation : ndarray of float, shape (row, column)
        Metres, NaN where missing; north-up.
    transform : Affine
        From (column, row) of ``elevation`` to (x, y) in the grid's coordinate reference system; no rotation.
    wetlands : GeoDataFrame
        ``wetland_id`` and geometry.
    grid : Grid
        The area's pixel grid.

    Returns
    -------
    DataFrame
        ``wetland_id``, ``row``, ``col`` (pixel of the grid), ``elevation_m`` (float32, as in the model), ``area_m2``
        (float64, inside the wetland). Cells without elevation, off the model or off the grid are left out;
        :func:`cell_coverage` tells how much is left.

    Raises
    ------
    InputError
        Elevation not two-dimensional, rotated transform, or a bad wetland layer.
    """
    check_wetlands(wetlands)
    if elevation.ndim != 2:
        text = f"elevation: array has shape {elevation.shape}; (row, column) is needed; pass one band"
        raise InputError(text)
    if transform.b != 0 or transform.d != 0 or transform.a <= 0 or transform.e >= 0:
        text = f"elevation: transform {tuple(transform)[:6]} is not north-up; warp the model to a north-up grid first"
        raise InputError(text)
    fine = max(1, int(np.ceil(max(transform.a, -transform.e) / grid.step - 1e-9)))
    width, height = transform.a / fine, -transform.e / fine
    parts = []
    for name, geometry in zip(wetlands["wetland_id"].astype(str), wetlands.geometry, strict=True):
        r, c, share = cell_shares(geometry, transform.c, transform.f, width, height)
        er, ec = r // fine, c // fine
        keep = (er >= 0) & (er < elevation.shape[0]) & (ec >= 0) & (ec < elevation.shape[1])
        r, c, share, er, ec = r[keep], c[keep], share[keep], er[keep], ec[keep]
        z = elevation[er, ec].astype(np.float32)
        keep = np.isfinite(z)
        part = _to_pixels(r[keep], c[keep], share[keep], z[keep], (transform.c, transform.f, width, height), grid)
        part.insert(0, "wetland_id", name)
        parts.append(part)
    if not parts:
        return pd.DataFrame(columns=["wetland_id", "row", "col", "elevation_m", "area_m2"])
    out = pd.concat(parts, ignore_index=True)
    return out.sort_values(["wetland_id", "row", "col", "elevation_m"], ignore_index=True, kind="stable")


def _to_pixels(
    r: np.ndarray,
    c: np.ndarray,
    share: np.ndarray,
    z: np.ndarray,
    lattice: tuple[float, float, float, float],
    grid: Grid,
) -> pd.DataFrame:
    """Divide cells (none larger than a pixel) among the pixels that they touch, by area."""
    west, north, width, height = lattice
    x0, y0 = (west + c * width - grid.west) / grid.step, (grid.north - north + r * height) / grid.step
    rows, cols, areas, heights = [], [], [], []
    for pr, down in _spans(y0, height / grid.step):
        for pc, across in _spans(x0, width / grid.step):
            area = share * down * across * width * height
            keep = (area > 1e-9 * width * height) & grid.inside(pr, pc)
            rows.append(pr[keep])
            cols.append(pc[keep])
            areas.append(area[keep])
            heights.append(z[keep])
    return pd.DataFrame(
        {
            "row": np.concatenate(rows),
            "col": np.concatenate(cols),
            "elevation_m": np.concatenate(heights),
            "area_m2": np.concatenate(areas),
        }
    )


def _spans(start: np.ndarray, length: float) -> list[tuple[np.ndarray, np.ndarray]]:
    """Return the one or two pixels along an axis that each cell spans, with the part of the cell in each."""
    first = np.floor(start + 1e-9).astype(np.int64)
    part = np.clip((first + 1 - start) / length, 0.0, 1.0)
    part = np.where(part > 1 - 1e-7, 1.0, part)
    return [(first, part), (first + 1, 1.0 - part)]


def cell_coverage(cells: pd.DataFrame, wetlands: gpd.GeoDataFrame) -> pd.DataFrame:
    """How much of each wetland has elevation.

    Parameters
    ----------
    cells : DataFrame
        From :func:`elevation_cells`.
    wetlands : GeoDataFrame

    Returns
    -------
    DataFrame
        ``wetland_id``, ``n_cells`` (int), ``covered_share`` (float, 0..1 of the polygon's area), sorted by id.
    """
    found = cells.groupby("wetland_id")["area_m2"].agg(["size", "sum"])
    ids = wetlands["wetland_id"].astype(str).to_numpy()
    found = found.reindex(ids, fill_value=0)
    share = found["sum"].to_numpy(float) / np.maximum(wetlands.geometry.area.to_numpy(), 1e-12)
    out = pd.DataFrame(
        {"wetland_id": ids, "n_cells": found["size"].to_numpy(int), "covered_share": np.clip(share, 0.0, 1.0)}
    )
    return out.sort_values("wetland_id", ignore_index=True)


def lowest_elevation(elevation_m: np.ndarray, area_m2: np.ndarray) -> float:
    """Elevation of the lowest ground, robust to single low cells: below it lies one hundredth of the area.

    One hundredth is common practice, no source; at least the lowest cell counts.

    Parameters
    ----------
    elevation_m, area_m2 : ndarray of float, shape (cell,)

    Returns
    -------
    float
        Metres.
    """
    order = np.argsort(elevation_m, kind="stable")
    reached = np.cumsum(area_m2[order])
    return float(elevation_m[order][np.searchsorted(reached, LOWEST_SHARE * reached[-1])])


def hypsometry(cells: pd.DataFrame, wetlands: gpd.GeoDataFrame) -> pd.DataFrame:
    """Area below each stage, from elevation cells.

    Parameters
    ----------
    cells : DataFrame
        From :func:`elevation_cells`.
    wetlands : GeoDataFrame
        ``wetland_id`` and geometry; the polygon's area is the area at the highest stage.

    Returns
    -------
    DataFrame
        ``wetland_id``, ``stage_m`` (float, above the wetland's lowest ground, see :func:`lowest_elevation`; 1 cm
        steps from 0, coarser only where the range exceeds 50 m), ``area_m2`` (float, never falling; 0 at stage 0,
        scaled to the polygon's area where cells are missing). A wetland without cells has no rows.
    """
    full = dict(zip(wetlands["wetland_id"].astype(str), wetlands.geometry.area, strict=True))
    parts = []
    for name, group in cells.groupby("wetland_id", sort=True):
        if name not in full:
            continue
        z, a = group["elevation_m"].to_numpy(float), group["area_m2"].to_numpy(float)
        order = np.argsort(z, kind="stable")
        z, reached = z[order], np.cumsum(a[order])
        low = lowest_elevation(z, a[order])
        step = max(STAGE_STEP_M, (z[-1] - low) / LONGEST_TABLE)
        stage = np.arange(0, int(np.ceil((z[-1] - low) / step - 1e-6)) + 2) * step
        place = np.searchsorted(z - low, stage - 1e-6, side="right")
        area = np.where(place > 0, reached[np.maximum(place - 1, 0)], 0.0) * (full[str(name)] / reached[-1])
        area[0] = 0.0
        area[-1] = full[str(name)]
        parts.append(pd.DataFrame({"wetland_id": str(name), "stage_m": np.round(stage, 6), "area_m2": area}))
    if not parts:
        return pd.DataFrame({"wetland_id": pd.Series(dtype=str), "stage_m": [], "area_m2": []})
    return pd.concat(parts, ignore_index=True)
