"""From labels to the classifier: labels meet scenes, samples become examples, the models are trained and kept."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from inundate.common.errors import Refusal
from inundate.common.grid import Grid

if TYPE_CHECKING:
    import geopandas as gpd

MATCH_DAYS = 2  # a label without a scene of its own day takes the nearest within two days; common practice, no source


def match_labels(
    labels: gpd.GeoDataFrame, scenes: pd.DataFrame, grid: Grid, wetlands: gpd.GeoDataFrame
) -> tuple[pd.DataFrame, list[Refusal]]:
    """Give each label its scene and its pixels.

    Parameters
    ----------
    labels : GeoDataFrame
        row, date, scene_id, label, wetland_id, source, geometry.
    scenes : DataFrame
        scene_id, datetime; one row a scene.
    grid : Grid
    wetlands : GeoDataFrame
        wetland_id, geometry; labels without a wetland_id get the nearest one.

    Returns
    -------
    matched : DataFrame
        row, scene_id, date, label, wetland_id, source, grid_row, grid_col; one row a label pixel, sorted.
    refused : list of Refusal
        Labels with no scene within two days, or outside the grid.
    """
    known = set(scenes["scene_id"])
    order = scenes.sort_values(["datetime", "scene_id"]).reset_index(drop=True)
    noon = labels["date"] + pd.Timedelta(hours=12)
    times = order["datetime"].to_numpy()
    chosen = []
    for scene_id, when in zip(labels["scene_id"], noon, strict=True):
        if scene_id:
            chosen.append(scene_id if scene_id in known else None)
            continue
        gap = np.abs(times - np.datetime64(when))
        best = int(np.argmin(gap)) if gap.size else -1
        near = best >= 0 and gap[best] <= np.timedelta64(MATCH_DAYS * 24 + 12, "h")
        chosen.append(order["scene_id"].iloc[best] if near else None)
    labels = labels.assign(scene_id=chosen)
    lost = labels["scene_id"].isna()
    refused = [
        Refusal("label", str(r), f"label row {r}: no scene within {MATCH_DAYS} days; it is left out")
        for r in labels.loc[lost, "row"]
    ]
    labels = labels[~lost]
    table, off = _label_pixels(labels, grid)
    refused += [Refusal("label", str(r), f"label row {r}: lies outside the scenes' grid; it is left out") for r in off]
    table = _nearest_wetland(table, grid, wetlands)
    table["date"] = table["scene_id"].map(order.set_index("scene_id")["datetime"]).dt.normalize()
    keep = ["row", "scene_id", "date", "label", "wetland_id", "source", "grid_row", "grid_col"]
    return table[keep].sort_values(["scene_id", "row", "grid_row", "grid_col"]).reset_index(drop=True), refused


def _label_pixels(labels: gpd.GeoDataFrame, grid: Grid) -> tuple[pd.DataFrame, list[int]]:
    """Return one row a label pixel (points: theirs; polygons: pixels whose centre lies inside, else the centroid's)."""
    import shapely

    parts, off = [], []
    for item in labels.itertuples():
        shape = item.geometry
        if shape.geom_type == "Point":
            rows, cols = grid.locate(np.array([shape.x]), np.array([shape.y]))
        else:
            r0, c0 = grid.locate(np.array([shape.bounds[0]]), np.array([shape.bounds[3]]))
            r1, c1 = grid.locate(np.array([shape.bounds[2]]), np.array([shape.bounds[1]]))
            rr, cc = np.meshgrid(np.arange(r0[0], r1[0] + 1), np.arange(c0[0], c1[0] + 1), indexing="ij")
            x, y = grid.centres(rr.ravel(), cc.ravel())
            inside = shapely.contains_xy(shape, x, y)
            rows, cols = rr.ravel()[inside], cc.ravel()[inside]
            if rows.size == 0:
                middle = shape.representative_point()
                rows, cols = grid.locate(np.array([middle.x]), np.array([middle.y]))
        on = grid.inside(rows, cols)
        if not on.any():
            off.append(int(item.row))
            continue
        parts.append(
            pd.DataFrame(
                {
                    "row": int(item.row),
                    "scene_id": item.scene_id,
                    "label": item.label,
                    "wetland_id": item.wetland_id,
                    "source": item.source,
                    "grid_row": rows[on],
                    "grid_col": cols[on],
                }
            )
        )
    columns = ["row", "scene_id", "label", "wetland_id", "source", "grid_row", "grid_col"]
    return (pd.concat(parts, ignore_index=True) if parts else pd.DataFrame(columns=columns)), off


def _nearest_wetland(table: pd.DataFrame, grid: Grid, wetlands: gpd.GeoDataFrame) -> pd.DataFrame:
    import shapely

    known = set(wetlands["wetland_id"])
    blank = ~table["wetland_id"].isin(known)
    if blank.any():
        x, y = grid.centres(table.loc[blank, "grid_row"].to_numpy(), table.loc[blank, "grid_col"].to_numpy())
        tree = shapely.STRtree(wetlands.geometry.to_numpy())
        index = tree.nearest(shapely.points(x, y))
        table = table.copy()
        table.loc[blank, "wetland_id"] = wetlands["wetland_id"].to_numpy()[index]
    return table
