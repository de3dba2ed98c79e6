"""Scoring of archived views: water probability, fraction and greenness over site pixels, and the map of each scene."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np

from inundate.batch.archive import ROWS, Archive, percent, read_view, row_groups, write_score
from inundate.batch.seasons import pixel_ndvi
from inundate.common.codes import BAND_ROLES, ViewCode
from inundate.common.grid import Window
from inundate.common.site import Site
from inundate.products import write_map

UNLIKE_SCALE = 0.2  # a pixel is unlike all examples from one radius on: 20 in the archive's percent
SCORE_COLUMNS = ("probability", "fraction", "fraction_sd", "unlike", "ndvi", "haze", "dark", "code")


@dataclass(frozen=True, slots=True)
class ScoreJob:
    """One scene to score.

    Attributes
    ----------
    scene_id : str
    leaf_share : ndarray of float32, shape (wetland,)
        Leaf share of each wetland at the scene's date.
    leaf_state : ndarray of uint8, shape (wetland,)
        Leaf state code of each wetland, which picks the calibration.
    owner : ndarray of int32, shape (pixel,)
        Wetland row of each site pixel.
    sun_elevation_deg : float
    ground : tuple of float
        Reflectance of the scene's dry ground, by ``BAND_ROLES``; empty where unknown.
    site : Site
    out : Path
        Output folder.
    model_mark : str
        Fingerprint of the classifier in ``out/models``.
    """

    scene_id: str
    leaf_share: np.ndarray
    leaf_state: np.ndarray
    owner: np.ndarray
    sun_elevation_deg: float
    ground: tuple[float, ...]
    site: Site
    out: Path
    model_mark: str


class _Scorer:
    """Both models of a folder behind the fast forest."""

    def __init__(self, folder: Path) -> None:
        from inundate.pixels import FractionModel, WaterClassifier

        self.classifier = WaterClassifier.load(folder)
        self.fraction = FractionModel.load(folder)

    def score(self, table: np.ndarray, leaf_state: np.ndarray) -> dict[str, np.ndarray]:
        """Return probability, fraction, fraction_sd and unlike (0..1, in fifths of a radius) of feature rows."""
        raw = self.classifier.raw_score(table)
        fraction = self.fraction.predict(table)
        return {
            "probability": self.classifier.probability_of_raw(raw, leaf_state),
            "fraction": fraction,
            "fraction_sd": self.fraction.sd(fraction),
            "unlike": np.clip(self.classifier.unlike(table) * UNLIKE_SCALE, 0.0, 1.0),
        }


@lru_cache(maxsize=2)
def _scorer(folder: Path, mark: str) -> _Scorer:  # noqa: ARG001 - the mark is part of the cache's key
    return _Scorer(folder)


@dataclass(frozen=True, slots=True)
class Bytes:
    """Numbers kept as uint8 in steps of ``step`` (``per_unit`` of them make 1) from ``zero`` on; 255 where missing."""

    zero: float
    per_unit: float
    step: float
    top: int = 254

    def code(self, values: np.ndarray) -> np.ndarray:
        """Turn numbers into bytes."""
        code = np.clip(np.nan_to_num(values) * self.per_unit + (self.zero + 0.5), 0, self.top).astype(np.uint8)
        return np.where(np.isfinite(values), code, np.uint8(255))

    def value(self, code: np.ndarray) -> np.ndarray:
        """Turn bytes back into numbers, NaN where 255."""
        return np.where(code == 255, np.nan, (code.astype(np.float32) - self.zero) * self.step)


NDVI = Bytes(100.0, 100.0, 0.01, 200)  # -1..1
HAZE = Bytes(100.0, 1000.0, 0.001)  # -0.1..0.15
DARK = Bytes(150.0, 50.0, 0.02)  # -3..2


def _darkness(job: ScoreJob, bands: tuple[str, ...], reflectance: np.ndarray) -> np.ndarray:
    from inundate.extent import darkness

    nothing = np.full(reflectance.shape[1], np.nan, np.float32)
    nir = "nir" if "nir" in bands else "nir08"
    values = [reflectance[bands.index(b)] if b in bands else nothing for b in (nir, "swir16")]
    base = [job.ground[BAND_ROLES.index(b)] if job.ground else np.nan for b in (nir, "swir16")]
    return darkness(values[0], values[1], (float(base[0]), float(base[1])))


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
    archive = Archive(job.out)
    view = archive.view(job.scene_id)
    columns = {name: np.full(job.site.size, 255, np.uint8) for name in SCORE_COLUMNS}
    for group in range(row_groups(view)):
        bands, reflectance, code = read_view(view, (group, group + 1))
        part = slice(group * ROWS, group * ROWS + code.size)
        for name, values in _score_part(job, archive, bands, reflectance, code, job.owner[part]).items():
            columns[name][part] = values
    nbytes = write_score(archive.score(job.scene_id), columns)
    blocks = _blocks(job.site, columns["probability"])
    tags = {"SCENE_ID": job.scene_id, "CONTENT": "water probability, percent; 255 = not seen"}
    write_map(archive.map(job.scene_id), job.site.grid, blocks, tags)
    water = columns["probability"][columns["probability"] != 255]
    return {
        "seen": int(water.size),
        "water_share": float(water.mean() / 100.0) if water.size else None,
        "bytes": nbytes,
    }


def _score_part(
    job: ScoreJob,
    archive: Archive,
    bands: tuple[str, ...],
    reflectance: np.ndarray,
    code: np.ndarray,
    owner: np.ndarray,
) -> dict[str, np.ndarray]:
    """Score a run of site pixels; reflectance is (band, pixel), code and owner are (pixel,)."""
    from inundate.extent import haze_index
    from inundate.pixels import features

    n = code.size
    clear = code == ViewCode.CLEAR
    seen = np.flatnonzero(clear & np.isfinite(reflectance).any(axis=0))
    columns = {name: np.full(n, 255, np.uint8) for name in SCORE_COLUMNS}
    columns["code"] = code
    columns["ndvi"] = NDVI.code(pixel_ndvi(bands, reflectance, code))
    blue, red = (reflectance[bands.index(b)] if b in bands else np.full(n, np.nan, np.float32) for b in ("blue", "red"))
    columns["haze"] = HAZE.code(haze_index(blue, red))
    columns["dark"] = DARK.code(np.where(clear, _darkness(job, bands, reflectance), np.nan))
    if seen.size:
        scorer = _scorer(archive.models, job.model_mark)
        leaf = job.leaf_share[owner[seen]].astype(np.float32)
        context = np.array(job.ground, np.float32) if job.ground else None
        table = features(np.ascontiguousarray(reflectance[:, seen]), bands, leaf, job.sun_elevation_deg, context)
        ones = np.ones(seen.size, bool)
        for name, values in scorer.score(table, job.leaf_state[owner[seen]]).items():
            columns[name][seen] = percent(values, ones)
    return columns


def _blocks(site: Site, values: np.ndarray) -> Iterator[tuple[Window, np.ndarray]]:
    """Spread site values over the site's windows, one after the other, 255 elsewhere."""
    for number, window in enumerate(site.windows):
        block = np.full(window.shape, 255, np.uint8)
        place = site.place(number)
        block[site.rows[place] - window.row0, site.cols[place] - window.col0] = values[place]
        yield window, block
