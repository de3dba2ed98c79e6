"""The files of a scene, opened once, and how the area's grid lies on them."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import rasterio
from rasterio.crs import CRS
from rasterio.enums import Resampling
from rasterio.errors import CRSError, RasterioError
from rasterio.vrt import WarpedVRT
from rasterio.warp import transform_bounds
from rasterio.windows import Window as FileWindow

from inundate.common.grid import Grid, Window
from inundate.scenes.places import gdal_name, is_remote, with_retries
from inundate.scenes.planning import Box, plan_reads
from inundate.scenes.scene import Scene, SceneError

_SAME = 1e-3
"""Origins and steps that agree within this share of a pixel are the same."""
_CELL = 128
"""Side of the cells that a file in another reference system is warped by."""
_GDAL = {
    "GDAL_DISABLE_READDIR_ON_OPEN": "EMPTY_DIR",
    "GDAL_HTTP_MERGE_CONSECUTIVE_RANGES": "YES",
    "GDAL_HTTP_MAX_RETRY": "4",
    "GDAL_HTTP_RETRY_DELAY": "0.5",
    "GDAL_CACHEMAX": 64_000_000,
}
"""GDAL's own retries (each waits longer) are what helps: it remembers a failed open, and would not ask again later."""
_REMOTE = {"VSI_CACHE": "TRUE", "VSI_CACHE_SIZE": "4000000"}  # one for each file; local files are cached by the system


@dataclass(frozen=True, slots=True)
class Source:
    """An open file (or its warped view) and how grid pixels lie on it: ``file = grid * ratio + shift`` in corners."""

    data: rasterio.io.DatasetReader | WarpedVRT
    ratio: float
    row_shift: float
    col_shift: float

    @property
    def same_pixels(self) -> bool:
        """Whether the file's pixels are the grid's own."""
        return self.ratio == 1.0 and self.row_shift == round(self.row_shift) and self.col_shift == round(self.col_shift)

    def rows(self, window: Window) -> np.ndarray:
        """Position of the centres of a window's rows, in file pixels from the file's upper edge."""
        return (np.arange(window.row0, window.row1) + 0.5) * self.ratio + self.row_shift

    def cols(self, window: Window) -> np.ndarray:
        """Position of the centres of a window's columns, in file pixels from the file's left edge."""
        return (np.arange(window.col0, window.col1) + 0.5) * self.ratio + self.col_shift

    def box(self, window: Window, margin: int) -> Box:
        """Return the part of the file under a window, widened by ``margin`` and kept inside; may be empty."""
        row, col = self.rows(window), self.cols(window)
        return (
            max(int(np.floor(row[0])) - margin, 0),
            min(int(np.floor(row[-1])) + 1 + margin, self.data.height),
            max(int(np.floor(col[0])) - margin, 0),
            min(int(np.floor(col[-1])) + 1 + margin, self.data.width),
        )


def gdal_settings(*hrefs: str) -> dict[str, object]:
    """Return the settings that GDAL opens and reads files with."""
    return {**_GDAL, **(_REMOTE if any(is_remote(href) for href in hrefs) else {})}


@contextmanager
def open_file(href: str) -> Iterator[rasterio.io.DatasetReader]:
    """Open one raster, local or remote (retried); raises OSError or RasterioError."""
    with (
        rasterio.Env(**gdal_settings(href)),
        with_retries(lambda: rasterio.open(gdal_name(href), sharing=False), href) as data,
    ):
        yield data


class SceneFiles:
    """The scene's files, each opened once, closed together."""

    def __init__(self, scene: Scene, grid: Grid) -> None:
        self.scene = scene
        self.grid = grid
        self.crs: CRS | None = None
        self._stack = ExitStack()
        self._open: dict[str, rasterio.io.DatasetReader] = {}
        self._sources: dict[tuple[str, int, bool], Source] = {}

    def __enter__(self) -> SceneFiles:
        self._stack.enter_context(rasterio.Env(**gdal_settings(*self.scene.files)))
        return self

    def __exit__(self, *error: object) -> None:
        self._stack.close()

    def broken(self, reason: str) -> SceneError:
        """Return the error of a scene that cannot serve."""
        return SceneError(self.scene.scene_id, reason)

    def source(self, href: str, band: int, fill: float | None, *, nearest: bool) -> Source:
        """Open a file's band on the grid."""
        key = (href, band, nearest)
        if key not in self._sources:
            if href not in self._open:
                self._open[href] = self._open_file(href)
            data = self._open[href]
            if not 1 <= band <= data.count:
                message = f"{href} has {data.count} band(s), band {band} is wanted; correct the catalog or the file"
                raise self.broken(message)
            self._sources[key] = self._place(data, fill, nearest)
        return self._sources[key]

    def _open_file(self, href: str) -> rasterio.io.DatasetReader:
        try:
            data = with_retries(lambda: rasterio.open(gdal_name(href), sharing=False), href)
        except (OSError, RasterioError) as error:
            message = f"{href} cannot be opened ({_short(error)}); restore the file"
            raise self.broken(message) from error
        self._stack.callback(data.close)
        if data.crs is None or data.transform.is_identity:
            message = f"{href} has no georeference; write it with its reference system and transform"
            raise self.broken(message)
        told = self.crs if self.crs is not None else self._told_crs()
        if told is not None and data.crs != told:
            message = (
                f"{href} is in {data.crs.to_string()}, not in {told.to_string()} as told; correct the item or the file"
            )
            raise self.broken(message)
        if self.crs is None:
            self.crs = data.crs
            self._check_overlap(data)
        return data

    def _told_crs(self) -> CRS | None:
        if self.scene.crs is None:
            return None
        try:
            return parse_crs(self.scene.crs)
        except CRSError as error:
            message = f"reference system {self.scene.crs!r} is not known ({_short(error)}); correct the item"
            raise self.broken(message) from error

    def _check_overlap(self, data: rasterio.io.DatasetReader) -> None:
        west, south, east, north = data.bounds
        target = parse_crs(self.grid.crs)
        if data.crs != target:
            try:
                west, south, east, north = transform_bounds(data.crs, target, west, south, east, north)
            except (RasterioError, OSError) as error:
                message = (
                    f"{data.name} cannot be brought from {data.crs.to_string()} to {self.grid.crs} ({_short(error)})"
                )
                raise self.broken(message) from error
        a = self.grid.bounds
        if west >= a[2] or east <= a[0] or south >= a[3] or north <= a[1]:
            message = (
                f"lies outside the area: it spans {west:.0f} {south:.0f} {east:.0f} {north:.0f}, the area "
                f"{a[0]:.0f} {a[1]:.0f} {a[2]:.0f} {a[3]:.0f} in {self.grid.crs}; check its reference system or remove it"
            )
            raise SceneError(self.scene.scene_id, message, "outside")

    def _place(self, data: rasterio.io.DatasetReader, fill: float | None, nearest: bool) -> Source:
        affine, grid = data.transform, self.grid
        upright = affine.b == 0.0 and affine.d == 0.0 and affine.a > 0.0 and abs(affine.a + affine.e) < 1e-6 * affine.a
        if data.crs == parse_crs(grid.crs) and upright and affine.a >= grid.step * (1 - _SAME):
            ratio = grid.step / affine.a
            ratio = 1.0 if abs(ratio - 1.0) * max(grid.height, grid.width) < _SAME else ratio
            row_shift = (affine.f - grid.north) / affine.a
            col_shift = (grid.west - affine.c) / affine.a
            return Source(data, ratio, _snap(row_shift), _snap(col_shift))
        finer = np.sqrt(abs(affine.determinant)) < 0.75 * grid.step if data.crs.is_projected else False
        if nearest:
            how = Resampling.mode if finer else Resampling.nearest
        else:
            how = Resampling.average if finer else Resampling.bilinear
        options = {} if fill is None else {"src_nodata": fill, "nodata": fill}
        if not finer:  # GDAL would take the scale from each piece that it warps, and blur by it
            options |= {"XSCALE": 1, "YSCALE": 1}
        warped = WarpedVRT(
            data,
            crs=parse_crs(grid.crs),
            transform=grid.transform,
            width=grid.width,
            height=grid.height,
            resampling=how,
            tolerance=0.02,
            add_alpha=False,
            **options,
        )
        self._stack.callback(warped.close)
        return Source(warped, 1.0, 0.0, 0.0)

    @contextmanager
    def reads(
        self, source: Source, href: str, band: int, boxes: list[Box]
    ) -> Iterator[Iterator[tuple[np.ndarray, Box, tuple[int, ...]]]]:
        """Give raw arrays with their place and the boxes that they serve."""
        data = source.data
        tile = data.block_shapes[band - 1]

        def parts() -> Iterator[tuple[np.ndarray, Box, tuple[int, ...]]]:
            for box, members in plan_reads(tuple(boxes), tile, (data.height, data.width)):
                yield with_retries(lambda box=box: _read_box(data, band, box), href), box, members  # type: ignore[misc]

        try:
            yield parts()
        except (OSError, RasterioError) as error:
            message = f"{href} cannot be decoded ({_short(error)}); restore the file"
            raise self.broken(message) from error


def _read_box(data: rasterio.io.DatasetReader | WarpedVRT, band: int, box: Box) -> np.ndarray:
    """Read a part of a band; a warped one cell by cell, since GDAL's warping differs with the piece that is asked for."""
    if not isinstance(data, WarpedVRT):
        plain: np.ndarray = data.read(band, window=FileWindow(box[2], box[0], box[3] - box[2], box[1] - box[0]))
        return plain
    out = np.empty((box[1] - box[0], box[3] - box[2]), data.dtypes[band - 1])
    for row in range(box[0] // _CELL * _CELL, box[1], _CELL):
        for col in range(box[2] // _CELL * _CELL, box[3], _CELL):
            size = min(_CELL, data.height - row), min(_CELL, data.width - col)
            cell = data.read(band, window=FileWindow(col, row, size[1], size[0]))
            top, bottom = max(row, box[0]), min(row + size[0], box[1])
            left, right = max(col, box[2]), min(col + size[1], box[3])
            out[top - box[0] : bottom - box[0], left - box[2] : right - box[2]] = cell[
                top - row : bottom - row, left - col : right - col
            ]
    return out


def _snap(shift: float) -> float:
    return float(round(shift)) if abs(shift - round(shift)) < _SAME else shift


@lru_cache(maxsize=64)
def parse_crs(text: str) -> CRS:
    """Return a reference system, parsed once; raises rasterio's CRSError for one that is not known."""
    return CRS.from_user_input(text)


def _short(error: Exception) -> str:
    return " ".join(str(error.__cause__ or error).split())[:200]
