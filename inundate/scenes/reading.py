"""Windows of reflectance and view code from a scene's files, on the area's grid."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
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

from inundate.common.codes import BAND_ROLES, ViewCode
from inundate.common.errors import InputError
from inundate.common.grid import Grid, Window
from inundate.scenes.kernels import copy_band, decode_mask, interpolate_band
from inundate.scenes.places import gdal_name, with_retries
from inundate.scenes.planning import Box, plan_reads
from inundate.scenes.scene import BandSource, Scene, SceneError
from inundate.scenes.sensors import SensorProfile
from inundate.scenes.view import Block, View

_SAME = 1e-3
"""Origins and steps that agree within this share of a pixel are the same."""
_GDAL = {
    "GDAL_DISABLE_READDIR_ON_OPEN": "EMPTY_DIR",
    "GDAL_HTTP_MERGE_CONSECUTIVE_RANGES": "YES",
    "GDAL_HTTP_MAX_RETRY": "3",
    "GDAL_HTTP_RETRY_DELAY": "0.5",
    "VSI_CACHE": "TRUE",
    "GDAL_CACHEMAX": 64_000_000,
}


@dataclass(frozen=True, slots=True)
class _Source:
    """An open file (or its warped view) and how grid pixels lie on it: ``file = grid * ratio + shift`` in corners."""

    data: rasterio.io.DatasetReader | WarpedVRT
    ratio: float
    row_shift: float
    col_shift: float

    @property
    def same_pixels(self) -> bool:
        return self.ratio == 1.0 and self.row_shift == round(self.row_shift) and self.col_shift == round(self.col_shift)

    def rows(self, window: Window) -> np.ndarray:
        """Position of the centres of a window's rows, in file pixels from the file's upper edge."""
        return (np.arange(window.row0, window.row1) + 0.5) * self.ratio + self.row_shift

    def cols(self, window: Window) -> np.ndarray:
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


def read_view(
    scene: Scene,
    profile: SensorProfile,
    grid: Grid,
    windows: Sequence[Window],
    *,
    bands: Sequence[str] | None = None,
    all_windows: bool = False,
) -> View:
    """Read reflectance and view code of a scene in windows of the area's grid.

    Files on the grid's own pixels are copied; coarser ones (20 m bands on a 10 m grid) are interpolated bilinearly
    between pixel centres that hold data, so that a shoreline keeps its place and no blocks arise; finer ones are
    averaged; files in another reference system are warped bilinearly. Masks take the nearest pixel (the commonest where
    finer). Fill is tested on raw numbers, before scaling.

    Parameters
    ----------
    scene : Scene
    profile : SensorProfile
        Gives the bands to read where ``bands`` is None: the profile's that the scene has.
    grid : Grid
    windows : sequence of Window
        Inside the grid; parts outside the scene become FILL.
    bands : sequence of str, optional
        Band roles, in the order wanted; one that the scene lacks is NaN throughout and does not count as fill.
    all_windows : bool
        Read reflectance of windows without a clear pixel too; else it stays NaN there and is not decoded.

    Returns
    -------
    View

    Raises
    ------
    SceneError
        A file is missing, empty, truncated, without the band or without georeference, files disagree in reference
        system with each other or with the item (kind ``broken``); the scene does not touch the grid (``outside``); only
        fill in the windows that it touches (``empty``).
    InputError
        A window off the grid, or a band role that is not known.
    """
    roles = _roles(scene, profile, bands)
    _check_windows(windows, grid)
    code = [np.full(window.shape, ViewCode.FILL, np.uint8) for window in windows]
    blocks = [np.full((len(roles), *window.shape), np.nan, np.float32) for window in windows]
    with _Files(scene, grid) as files:
        clear, seen, touched = _read_mask(files, scene, windows, code)
        if touched.any() and not seen.any():
            message = f"mask {scene.mask.href} holds fill alone in all windows; the scene has no data here"
            raise SceneError(scene.scene_id, message, "empty")
        wanted = np.flatnonzero(seen if all_windows else clear)
        counts = {}
        for number, role in enumerate(roles):
            if role in scene.bands and wanted.size:
                source = scene.bands[role]
                outs = [(windows[i], blocks[i][number], code[i]) for i in wanted.tolist()]
                counts[role] = _read_band(files, source, outs)
    empty = [role for role, count in counts.items() if count == 0]
    if empty:
        message = (
            f"band {empty[0]} ({scene.bands[empty[0]].href}) holds fill or no number where the mask sees ground; "
            "restore the file"
        )
        raise SceneError(scene.scene_id, message, "empty" if len(empty) == len(counts) else "broken")
    made = (Block(window, values, codes) for window, values, codes in zip(windows, blocks, code, strict=True))
    return View(scene.scene_id, roles, tuple(made))


def _roles(scene: Scene, profile: SensorProfile, bands: Sequence[str] | None) -> tuple[str, ...]:
    if bands is None:
        return tuple(role for role in profile.roles if role in scene.bands)
    for role in bands:
        if role not in BAND_ROLES:
            message = f"band {role!r}: must be one of {', '.join(BAND_ROLES)}"
            raise InputError(message)
    return tuple(bands)


def _check_windows(windows: Sequence[Window], grid: Grid) -> None:
    for one in windows:
        if not (0 <= one.row0 < one.row1 <= grid.height and 0 <= one.col0 < one.col1 <= grid.width):
            message = f"window {one}: must lie inside the grid of {grid.height} x {grid.width} pixels and not be empty"
            raise InputError(message)


class _Files:
    """The scene's files, each opened once, closed together."""

    def __init__(self, scene: Scene, grid: Grid) -> None:
        self.scene = scene
        self.grid = grid
        self.crs: CRS | None = None
        self._stack = ExitStack()
        self._open: dict[str, rasterio.io.DatasetReader] = {}
        self._sources: dict[tuple[str, int, bool], _Source] = {}

    def __enter__(self) -> _Files:
        self._stack.enter_context(rasterio.Env(**_GDAL))
        return self

    def __exit__(self, *error: object) -> None:
        self._stack.close()

    def broken(self, reason: str) -> SceneError:
        return SceneError(self.scene.scene_id, reason)

    def source(self, href: str, band: int, fill: float | None, *, nearest: bool) -> _Source:
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

    def _place(self, data: rasterio.io.DatasetReader, fill: float | None, nearest: bool) -> _Source:
        affine, grid = data.transform, self.grid
        upright = affine.b == 0.0 and affine.d == 0.0 and affine.a > 0.0 and abs(affine.a + affine.e) < 1e-6 * affine.a
        if data.crs == parse_crs(grid.crs) and upright and affine.a >= grid.step * (1 - _SAME):
            ratio = grid.step / affine.a
            ratio = 1.0 if abs(ratio - 1.0) * max(grid.height, grid.width) < _SAME else ratio
            row_shift = (affine.f - grid.north) / affine.a
            col_shift = (grid.west - affine.c) / affine.a
            return _Source(data, ratio, _snap(row_shift), _snap(col_shift))
        finer = np.sqrt(abs(affine.determinant)) < 0.75 * grid.step if data.crs.is_projected else False
        if nearest:
            how = Resampling.mode if finer else Resampling.nearest
        else:
            how = Resampling.average if finer else Resampling.bilinear
        options = {} if fill is None else {"src_nodata": fill, "nodata": fill}
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
        return _Source(warped, 1.0, 0.0, 0.0)

    @contextmanager
    def reads(
        self, source: _Source, href: str, band: int, boxes: list[Box]
    ) -> Iterator[Iterator[tuple[np.ndarray, Box, tuple[int, ...]]]]:
        """Give raw arrays with their place and the boxes that they serve."""
        data = source.data
        tile = data.block_shapes[band - 1]

        def parts() -> Iterator[tuple[np.ndarray, Box, tuple[int, ...]]]:
            for box, members in plan_reads(tuple(boxes), tile, (data.height, data.width)):
                part = FileWindow(box[2], box[0], box[3] - box[2], box[1] - box[0])
                yield with_retries(lambda part=part: data.read(band, window=part), href), box, members  # type: ignore[misc]

        try:
            yield parts()
        except (OSError, RasterioError) as error:
            message = f"{href} cannot be decoded ({_short(error)}); restore the file"
            raise self.broken(message) from error


def _snap(shift: float) -> float:
    return float(round(shift)) if abs(shift - round(shift)) < _SAME else shift


@lru_cache(maxsize=64)
def parse_crs(text: str) -> CRS:
    """Return a reference system, parsed once; raises rasterio's CRSError for one that is not known."""
    return CRS.from_user_input(text)


def _short(error: Exception) -> str:
    return " ".join(str(error.__cause__ or error).split())[:200]


def _read_mask(
    files: _Files, scene: Scene, windows: Sequence[Window], code: list[np.ndarray]
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Fill view codes; return clear pixels, pixels seen and whether the mask touches it, for each window."""
    mask = scene.mask
    source = files.source(mask.href, mask.band, None, nearest=True)
    table = mask.rules.table()
    clear, seen = np.zeros(len(windows), np.int64), np.zeros(len(windows), np.int64)
    boxes = [source.box(window, 0) for window in windows]
    touched = np.array([box[0] < box[1] and box[2] < box[3] for box in boxes], bool)
    live = np.flatnonzero(touched)
    with files.reads(source, mask.href, mask.band, [boxes[i] for i in live]) as parts:
        for raw, box, members in parts:
            values = raw
            lookup = table
            if raw.dtype not in (np.uint8, np.uint16):
                values, lookup = mask.rules.decode(raw), np.arange(256, dtype=np.uint8)
            for member in members:
                i = live[member]
                rows = _nearest(source.rows(windows[i]), source.data.height, box[0])
                cols = _nearest(source.cols(windows[i]), source.data.width, box[2])
                clear[i], seen[i] = decode_mask(values, rows, cols, lookup, code[i])
    return clear, seen, touched


def _nearest(position: np.ndarray, size: int, start: int) -> np.ndarray:
    index = np.floor(position).astype(np.int64)
    return np.where((index >= 0) & (index < size), index - start, -1)


def _read_band(files: _Files, band: BandSource, outs: list[tuple[Window, np.ndarray, np.ndarray]]) -> int:
    """Fill reflectance of windows and mark fill in their codes; return the number of finite pixels (-1: untouched)."""
    source = files.source(band.href, band.band, band.fill, nearest=False)
    fill = np.nan if band.fill is None else float(band.fill)
    numbers = (band.scale, band.offset, fill, float(band.valid[0]), float(band.valid[1]))
    margin = 0 if source.same_pixels else 1
    boxes = [source.box(window, margin) for window, _, _ in outs]
    live = [i for i, box in enumerate(boxes) if box[0] < box[1] and box[2] < box[3]]
    for i in set(range(len(outs))) - set(live):
        outs[i][2][...] = ViewCode.FILL
    if not live:
        return -1
    count = 0
    with files.reads(source, band.href, band.band, [boxes[i] for i in live]) as parts:
        for raw, box, members in parts:
            values = raw if raw.dtype in (np.uint8, np.uint16, np.int16, np.float32) else raw.astype(np.float64)
            for member in members:
                window, out, code = outs[live[member]]
                if source.same_pixels:
                    origin = (
                        window.row0 + int(source.row_shift) - box[0],
                        window.col0 + int(source.col_shift) - box[2],
                    )
                    count += copy_band(values, origin, numbers, out, code)
                else:
                    mine = boxes[live[member]]
                    part = values[mine[0] - box[0] : mine[1] - box[0], mine[2] - box[2] : mine[3] - box[2]]
                    rows = _between(source.rows(window), source.data.height, mine[0])
                    cols = _between(source.cols(window), source.data.width, mine[2])
                    count += interpolate_band(np.ascontiguousarray(part), rows, cols, numbers, out, code)
    return count


def _between(position: np.ndarray, size: int, start: int) -> np.ndarray:
    inside = (position >= 0) & (position <= size)
    return np.where(inside, position - 0.5 - start, np.nan)
