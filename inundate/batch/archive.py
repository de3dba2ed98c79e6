"""The archive folder: what the batch keeps of each scene between months, as Parquet tables over site pixels."""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from inundate.common.codes import MAP_NOT_SEEN
from inundate.common.writing import replacing

ROWS = 65_536
_MISSING = np.int16(-32768)
_SCALE = 10_000.0


def safe_name(name: str) -> str:
    """Return a file name for an id: plain ids stay, any other gets its odd bytes spelled out."""
    return re.sub(r"[^A-Za-z0-9_.-]", lambda m: "%" + m.group().encode().hex(), name)[:200]


@dataclass(frozen=True, slots=True)
class Archive:
    """Paths inside the output folder."""

    out: Path

    @property
    def folder(self) -> Path:
        """The archive."""
        return self.out / "archive"

    def view(self, scene_id: str) -> Path:
        """Reflectance and view codes of one scene over site pixels."""
        return self.folder / "views" / f"{safe_name(scene_id)}.parquet"

    def sample(self, scene_id: str) -> Path:
        """Reflectance under one scene's labels."""
        return self.folder / "samples" / f"{safe_name(scene_id)}.parquet"

    def score(self, scene_id: str) -> Path:
        """Water probability and fraction of one scene over site pixels."""
        return self.folder / "scores" / f"{safe_name(scene_id)}.parquet"

    def map(self, scene_id: str) -> Path:
        """Water probability map of one scene."""
        return self.out / "maps" / f"{safe_name(scene_id)}.tif"

    def table(self, name: str) -> Path:
        """Any other table of the archive."""
        return self.folder / "tables" / f"{name}.parquet"

    @property
    def models(self) -> Path:
        """Classifier folder."""
        return self.out / "models"

    def product(self, month: str) -> Path:
        """Folder of one delivery."""
        return self.out / "products" / month


def _write(path: Path, columns: dict[str, np.ndarray]) -> int:
    table = pa.table({k: pa.array(v) for k, v in columns.items()})
    with replacing(path) as scratch:
        pq.write_table(
            table, scratch, row_group_size=ROWS, compression="zstd", use_dictionary=False, write_statistics=False
        )
    return path.stat().st_size


def write_view(path: Path, bands: tuple[str, ...], reflectance: np.ndarray, code: np.ndarray) -> int:
    """Write a scene's view.

    Parameters
    ----------
    path : Path
    bands : tuple of str
        Band roles.
    reflectance : ndarray of float32, shape (band, pixel)
        Kept as int16 of 1/10000; NaN stays missing.
    code : ndarray of uint8, shape (pixel,)

    Returns
    -------
    int
        Bytes written.
    """
    return _write(path, {**{b: _scaled(reflectance[i]) for i, b in enumerate(bands)}, "code": code})


def _scaled(plane: np.ndarray) -> np.ndarray:
    whole = np.clip(np.round(plane * _SCALE), -32767, 32767)
    return np.where(np.isfinite(plane), whole, _MISSING).astype(np.int16)


def read_view(path: Path, groups: tuple[int, int] | None = None) -> tuple[tuple[str, ...], np.ndarray, np.ndarray]:
    """Read a scene's view: bands, reflectance (band, pixel) float32, code (pixel,) uint8; optionally row groups only."""
    table = _read(path, groups)
    bands = tuple(c for c in table.column_names if c != "code")
    raw = np.empty((len(bands), table.num_rows), np.int16)
    for i, band in enumerate(bands):
        raw[i] = table.column(band).to_numpy()
    values = raw.astype(np.float32) * np.float32(1.0 / _SCALE)
    values[raw == _MISSING] = np.nan
    return bands, values, table.column("code").to_numpy().astype(np.uint8)


def row_groups(path: Path) -> int:
    """Return the number of row groups of a file, each of ``ROWS`` site pixels but the last."""
    with pq.ParquetFile(path) as file:
        return int(file.num_row_groups)


def _read(path: Path, groups: tuple[int, int] | None) -> pa.Table:
    with pq.ParquetFile(path) as file:
        if groups is None:
            return file.read(use_threads=False)
        return file.read_row_groups(list(range(*groups)), use_threads=False)


def percent(values: np.ndarray, seen: np.ndarray) -> np.ndarray:
    """Turn shares 0..1 into uint8 percent, 255 where not seen."""
    whole = np.clip(np.nan_to_num(values) * 100.0 + 0.5, 0, 100).astype(np.uint8)
    return np.where(seen & np.isfinite(values), whole, np.uint8(MAP_NOT_SEEN))


def share(values: np.ndarray) -> np.ndarray:
    """Turn uint8 percent into float32 shares, NaN where 255."""
    out = values.astype(np.float32) * np.float32(0.01)
    out[values == MAP_NOT_SEEN] = np.nan
    return out


def write_score(path: Path, columns: dict[str, np.ndarray]) -> int:
    """Write a scene's scores: uint8 percent columns over site pixels."""
    return _write(path, columns)


def read_score(path: Path, names: tuple[str, ...], groups: tuple[int, int] | None = None) -> tuple[np.ndarray, ...]:
    """Read uint8 columns of a scene's scores."""
    table = _read(path, groups)
    return tuple(table.column(n).to_numpy() for n in names)
