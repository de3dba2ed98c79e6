"""Scoring of archived views: water probability, fraction and greenness over site pixels, and the map of each scene."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np

from inundate.batch.archive import Archive, percent, read_view, write_score
from inundate.batch.seasons import pixel_ndvi
from inundate.common.codes import ViewCode
from inundate.common.site import Site
from inundate.products import write_map

SCORE_COLUMNS = ("probability", "fraction", "fraction_sd", "unlike", "ndvi", "code")


@dataclass(frozen=True, slots=True)
class ScoreJob:
    """One scene to score.

    Attributes
    ----------
    scene_id : str
    leaf_share : ndarray of float32, shape (wetland,)
        Leaf share of each wetland at the scene's date.
    owner : ndarray of int32, shape (pixel,)
        Wetland row of each site pixel.
    sun_elevation_deg : float
    site : Site
    out : Path
        Output folder.
    model_mark : str
        Fingerprint of the classifier in ``out/models``.
    """

    scene_id: str
    leaf_share: np.ndarray
    owner: np.ndarray
    sun_elevation_deg: float
    site: Site
    out: Path
    model_mark: str


@lru_cache(maxsize=2)
def _models(folder: Path, mark: str) -> tuple[Any, Any]:  # noqa: ARG001 - the mark is part of the cache's key
    from inundate.pixels import FractionModel, WaterClassifier

    return WaterClassifier.load(folder), FractionModel.load(folder)


def ndvi_code(ndvi: np.ndarray) -> np.ndarray:
    """Turn NDVI -1..1 into uint8 0..200, 255 where missing."""
    code = np.clip(np.nan_to_num(ndvi) * 100.0 + 100.5, 0, 200).astype(np.uint8)
    return np.where(np.isfinite(ndvi), code, np.uint8(255))


def ndvi_value(code: np.ndarray) -> np.ndarray:
    """Turn uint8 0..200 back into NDVI, NaN where 255."""
    return np.where(code == 255, np.nan, (code.astype(np.float32) - 100.0) * 0.01)


def score_scene(job: ScoreJob) -> dict[str, Any]:
    """Score one archived view; leaves the scene's scores and map, returns counts.

    Parameters
    ----------
    job : ScoreJob

    Returns
    -------
    dict
        seen (pixels), water_share (mean probability over seen pixels), bytes.
    """
    from inundate.pixels import features

    archive = Archive(job.out)
    bands, reflectance, code = read_view(archive.view(job.scene_id))
    clear = code == ViewCode.CLEAR
    seen = np.flatnonzero(clear & np.isfinite(reflectance).any(axis=0))
    n = code.size
    columns = {name: np.full(n, 255, np.uint8) for name in SCORE_COLUMNS}
    columns["code"] = code
    columns["ndvi"] = ndvi_code(pixel_ndvi(bands, reflectance, code))
    if seen.size:
        classifier, fraction_model = _models(archive.models, job.model_mark)
        leaf = job.leaf_share[job.owner[seen]].astype(np.float32)
        table = features(np.ascontiguousarray(reflectance[:, seen]), bands, leaf, job.sun_elevation_deg)
        ones = np.ones(seen.size, bool)
        columns["probability"][seen] = percent(classifier.predict_water(table, leaf_share=leaf), ones)
        fraction, sd = fraction_model.predict(table, return_sd=True)
        columns["fraction"][seen] = percent(fraction, ones)
        columns["fraction_sd"][seen] = percent(sd, ones)
        columns["unlike"][seen] = percent(classifier.unlike(table), ones)
    nbytes = write_score(archive.score(job.scene_id), columns)
    blocks = _blocks(job.site, columns["probability"])
    tags = {"SCENE_ID": job.scene_id, "CONTENT": "water probability, percent; 255 = not seen"}
    write_map(archive.map(job.scene_id), job.site.grid, blocks, tags)
    water = columns["probability"][seen]
    return {"seen": int(seen.size), "water_share": float(water.mean() / 100.0) if seen.size else None, "bytes": nbytes}


def _blocks(site: Site, values: np.ndarray) -> list[tuple[Any, np.ndarray]]:
    """Spread site values over the site's windows, 255 elsewhere."""
    out = []
    for window in site.windows:
        block = np.full(window.shape, 255, np.uint8)
        inside = np.flatnonzero(
            (site.rows >= window.row0)
            & (site.rows < window.row1)
            & (site.cols >= window.col0)
            & (site.cols < window.col1)
        )
        block[site.rows[inside] - window.row0, site.cols[inside] - window.col0] = values[inside]
        out.append((window, block))
    return out
