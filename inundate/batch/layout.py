"""The layout of an area: wetlands on the grid, site pixels, elevation cells; what every later step is indexed by."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd
from scipy.spatial import cKDTree

from inundate.common.errors import Refusal
from inundate.common.grid import Grid
from inundate.common.site import Site, make_site

if TYPE_CHECKING:
    import geopandas as gpd

MARGIN_PX = 2


@dataclass(frozen=True, slots=True)
class Layout:
    """Wetlands on the grid.

    Attributes
    ----------
    grid : Grid
    site : Site
        Pixels of all wetlands and a margin of two around them.
    wetlands : DataFrame
        wetland_id, area_max_m2, n_pixels, x, y and the layer's ``cover`` where it has one; sorted by wetland_id.
    weights : DataFrame
        wetland_id, pixel (position in the site), share.
    owner : ndarray of int32, shape (pixel,)
        Row of ``wetlands`` that each site pixel belongs to (largest share; nearest for the margin).
    cells, hypsometry : DataFrame or None
        From the elevation model, where there is one.
    refused : list of Refusal
        Wetlands that no pixel holds.
    """

    grid: Grid
    site: Site
    wetlands: pd.DataFrame
    weights: pd.DataFrame
    owner: np.ndarray
    cells: pd.DataFrame | None
    hypsometry: pd.DataFrame | None
    refused: list[Refusal]

    def dry_ground(self) -> np.ndarray:
        """Return a boolean array (pixel,): site pixels outside every wetland."""
        dry = np.ones(self.site.size, bool)
        dry[self.weights["pixel"].to_numpy()] = False
        return dry


def wetland_table(shapes: gpd.GeoDataFrame) -> pd.DataFrame:
    """Return the wetlands table (without pixels) of a polygon layer."""
    centre = shapes.geometry.centroid
    out = pd.DataFrame(
        {
            "wetland_id": shapes["wetland_id"].to_numpy(),
            "area_max_m2": shapes["area_max_m2"].to_numpy(float),
            "x": centre.x.to_numpy(),
            "y": centre.y.to_numpy(),
        }
    )
    return out


def make_layout(shapes: gpd.GeoDataFrame, grid: Grid, elevation: str | None) -> Layout:
    """Lay wetlands out on the grid.

    Parameters
    ----------
    shapes : GeoDataFrame
        wetland_id, area_max_m2, geometry in the grid's projection; sorted by wetland_id.
    grid : Grid
    elevation : str or None
        Path of a fine elevation model.

    Returns
    -------
    Layout
    """
    from inundate.extent import pixel_weights

    weights = pixel_weights(shapes, grid)
    site = make_site(grid, weights["row"].to_numpy(), weights["col"].to_numpy(), margin=MARGIN_PX)
    weights = _on_site(weights, site)[["wetland_id", "pixel", "share"]]
    wetlands = wetland_table(shapes)
    count = weights.groupby("wetland_id").size()
    wetlands["n_pixels"] = wetlands["wetland_id"].map(count).fillna(0).astype(int)
    refused = [
        Refusal("wetland", w, f"wetland '{w}' lies outside the scenes' grid; it has no views of its own")
        for w in wetlands.loc[wetlands["n_pixels"] == 0, "wetland_id"]
    ]
    cells, hypsometry = (None, None) if elevation is None else _elevation(shapes, grid, site, elevation)
    return Layout(grid, site, wetlands, weights, _owners(site, wetlands, weights), cells, hypsometry, refused)


def _on_site(table: pd.DataFrame, site: Site) -> pd.DataFrame:
    pixel = site.positions(table["row"].to_numpy(), table["col"].to_numpy())
    out = table.assign(pixel=pixel)
    return out[out["pixel"] >= 0].reset_index(drop=True)


def _elevation(
    shapes: gpd.GeoDataFrame, grid: Grid, site: Site, path: str
) -> tuple[pd.DataFrame | None, pd.DataFrame | None]:
    from inundate.extent import elevation_cells, hypsometry
    from inundate.scenes import read_elevation

    parts = []
    for _, group in shapes.groupby(_neighbourhood(shapes)):
        west, south, east, north = group.total_bounds
        values, transform, _ = read_elevation(path, grid.crs, (west - 20, south - 20, east + 20, north + 20))
        if np.isfinite(values).any():
            parts.append(elevation_cells(values, transform, group.reset_index(drop=True), grid))
    if not parts or all(p.empty for p in parts):
        return None, None
    cells = pd.concat(parts, ignore_index=True)
    cells = _on_site(cells, site)
    cells = cells.sort_values(["wetland_id", "pixel"], kind="stable").reset_index(drop=True)
    return cells, hypsometry(cells, shapes)


def _neighbourhood(shapes: gpd.GeoDataFrame, side: float = 2000.0) -> np.ndarray:
    """Return a block number a wetland, so that elevation is read block by block, never whole."""
    bounds = shapes.geometry.bounds
    return (np.floor(bounds["minx"] / side).astype(np.int64) * 1_000_003 + np.floor(bounds["miny"] / side)).to_numpy(
        np.int64
    )


def _owners(site: Site, wetlands: pd.DataFrame, weights: pd.DataFrame) -> np.ndarray:
    row_of = pd.Series(np.arange(len(wetlands)), index=wetlands["wetland_id"])
    best = weights.sort_values(["pixel", "share", "wetland_id"], ascending=[True, False, True]).drop_duplicates("pixel")
    owner = np.full(site.size, -1, np.int32)
    owner[best["pixel"].to_numpy()] = row_of[best["wetland_id"]].to_numpy()
    if best.empty:
        return owner
    known = np.flatnonzero(owner >= 0)
    lost = np.flatnonzero(owner < 0)
    places = np.column_stack([site.rows, site.cols]).astype(float)
    if lost.size:
        _, nearest = cKDTree(places[known]).query(places[lost])
        owner[lost] = owner[known[nearest]]
    return owner
