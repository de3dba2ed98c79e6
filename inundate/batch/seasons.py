"""Greenness of each wetland through time, leaf calendar, and how much of the ground each pixel's canopy lets through."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from inundate.batch.archive import Archive, read_view
from inundate.batch.layout import Layout
from inundate.common.codes import ViewCode


@dataclass(frozen=True, slots=True)
class ScenePlace:
    """When and how a scene of the archive was taken, and the fingerprint it was read with.

    ``ground`` is the reflectance of its dry ground by ``BAND_ROLES`` (see pixels.scene_context), NaN where unknown.
    """

    scene_id: str
    datetime: pd.Timestamp
    sun_elevation_deg: float
    mark: str
    ground: tuple[float, ...] = ()


def pixel_ndvi(bands: tuple[str, ...], reflectance: np.ndarray, code: np.ndarray) -> np.ndarray:
    """Return NDVI (Rouse et al. 1974) of site pixels, NaN where not clear; reflectance is (band, pixel)."""
    nir = "nir" if "nir" in bands else "nir08"
    n, r = reflectance[bands.index(nir)], reflectance[bands.index("red")]
    total = n + r
    with np.errstate(invalid="ignore", divide="ignore"):
        value = np.where(total > 0.01, (n - r) / total, np.nan)
    return np.where(code == ViewCode.CLEAR, np.clip(value, -1, 1), np.nan).astype(np.float32)


def wetland_greenness(layout: Layout, ndvi: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return mean NDVI (wetland,) weighted by share, and the clear share of the wetland (wetland,)."""
    index = pd.Index(layout.wetlands["wetland_id"]).get_indexer(layout.weights["wetland_id"])
    share, values = layout.weights["share"].to_numpy(), ndvi[layout.weights["pixel"].to_numpy()]
    seen = np.isfinite(values)
    n = len(layout.wetlands)
    total = np.bincount(index, share, n)
    clear = np.bincount(index[seen], share[seen], n)
    green = np.bincount(index[seen], (share * values)[seen], n)
    with np.errstate(invalid="ignore", divide="ignore"):
        return green / clear, np.where(total > 0, clear / total, 0.0)


def update_greenness(archive: Archive, layout: Layout, scenes: list[ScenePlace]) -> pd.DataFrame:
    """Bring the greenness table up to date with the scenes of the archive.

    Returns
    -------
    DataFrame
        wetland_id, scene_id, date, ndvi, weight (clear share); rows of scenes that are gone are dropped.
    """
    path = archive.table("greenness")
    have = pd.read_parquet(path) if path.exists() else None
    marks = {s.scene_id: s.mark for s in scenes}
    if have is not None:
        have = have[have["mark"] == have["scene_id"].map(marks)]
    known = set() if have is None else set(have["scene_id"])
    parts = [] if have is None or have.empty else [have]
    for scene in scenes:
        if scene.scene_id in known:
            continue
        bands, reflectance, code = read_view(archive.view(scene.scene_id))
        green, clear = wetland_greenness(layout, pixel_ndvi(bands, reflectance, code))
        parts.append(
            pd.DataFrame(
                {
                    "wetland_id": layout.wetlands["wetland_id"],
                    "scene_id": scene.scene_id,
                    "date": scene.datetime.normalize(),
                    "ndvi": green,
                    "weight": clear,
                    "mark": scene.mark,
                }
            )
        )
    from inundate.common.writing import write_table

    table = pd.concat(parts, ignore_index=True).sort_values(["wetland_id", "date", "scene_id"], kind="stable")
    if len(parts) > (0 if have is None or have.empty else 1) or (have is not None and len(have) != len(table)):
        write_table(path, table)
    return table.reset_index(drop=True)
