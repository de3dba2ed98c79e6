"""Windows of reflectance and view code from a scene's files, on the area's grid."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from inundate.common.codes import BAND_ROLES, ViewCode
from inundate.common.errors import InputError
from inundate.common.grid import Grid, Window
from inundate.scenes.files import SceneFiles
from inundate.scenes.kernels import copy_band, decode_mask, interpolate_band
from inundate.scenes.scene import BandSource, Scene, SceneError
from inundate.scenes.sensors import SensorProfile
from inundate.scenes.view import Block, View


class SceneReader:
    """Reads a scene part by part with its files open in between; what it holds in memory is the part asked for.

    Files on the grid's own pixels are copied; coarser ones (20 m bands on a 10 m grid) are interpolated bilinearly
    between pixel centres that hold data, so that a shoreline keeps its place and no blocks arise; finer ones are
    averaged; files in another reference system are warped bilinearly. Masks take the nearest pixel (the commonest where
    finer). Fill is tested on raw numbers, before scaling. A window's values do not depend on what else is read.

    Parameters
    ----------
    scene : Scene
    profile : SensorProfile
        Gives the bands to read where ``bands`` is None: the profile's that the scene has.
    grid : Grid
    bands : sequence of str, optional
        Band roles, in the order wanted; one that the scene lacks is NaN throughout and does not count as fill.

    Raises
    ------
    InputError
        A band role that is not known.
    """

    def __init__(self, scene: Scene, profile: SensorProfile, grid: Grid, *, bands: Sequence[str] | None = None) -> None:
        self.scene = scene
        self.grid = grid
        self.roles = _roles(scene, profile, bands)
        self._files = SceneFiles(scene, grid)
        self._touched = self._seen = False
        self._counts: dict[str, int] = {}

    def __enter__(self) -> SceneReader:
        self._files.__enter__()
        return self

    def __exit__(self, *error: object) -> None:
        self._files.__exit__(*error)

    def read(self, windows: Sequence[Window], *, all_windows: bool = False) -> View:
        """Read some windows; see :func:`read_view`. Call :meth:`check` when all are read."""
        _check_windows(windows, self.grid)
        scene = self.scene
        code = [np.full(window.shape, ViewCode.FILL, np.uint8) for window in windows]
        blocks = [np.full((len(self.roles), *window.shape), np.nan, np.float32) for window in windows]
        clear, seen, touched = _read_mask(self._files, scene, windows, code)
        self._touched |= bool(touched.any())
        self._seen |= bool(seen.any())
        wanted = np.flatnonzero(seen if all_windows else clear)
        for number, role in enumerate(self.roles):
            if role in scene.bands and wanted.size:
                outs = [(windows[i], blocks[i][number], code[i]) for i in wanted.tolist()]
                count = _read_band(self._files, scene.bands[role], outs)
                self._counts[role] = max(count, self._counts.get(role, -1))
        made = (Block(window, values, codes) for window, values, codes in zip(windows, blocks, code, strict=True))
        return View(scene.scene_id, self.roles, tuple(made))

    def check(self) -> None:
        """Raise SceneError where all that was read holds fill alone, or a band does where the mask sees ground."""
        if self._touched and not self._seen:
            message = f"mask {self.scene.mask.href} holds fill alone in all windows; the scene has no data here"
            raise SceneError(self.scene.scene_id, message, "empty")
        empty = [role for role, count in self._counts.items() if count == 0]
        if empty:
            message = (
                f"band {empty[0]} ({self.scene.bands[empty[0]].href}) holds fill or no number where the mask sees "
                "ground; restore the file"
            )
            raise SceneError(self.scene.scene_id, message, "empty" if len(empty) == len(self._counts) else "broken")


def read_view(
    scene: Scene,
    profile: SensorProfile,
    grid: Grid,
    windows: Sequence[Window],
    *,
    bands: Sequence[str] | None = None,
    all_windows: bool = False,
) -> View:
    """Read reflectance and view code of a scene in windows of the area's grid, all at once (see :class:`SceneReader`).

    Parameters
    ----------
    scene, profile, grid, bands
        As for :class:`SceneReader`.
    windows : sequence of Window
        Inside the grid; parts outside the scene become FILL.
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
    with SceneReader(scene, profile, grid, bands=bands) as reader:
        view = reader.read(windows, all_windows=all_windows)
        reader.check()
    return view


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


def _read_mask(
    files: SceneFiles, scene: Scene, windows: Sequence[Window], code: list[np.ndarray]
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


def _read_band(files: SceneFiles, band: BandSource, outs: list[tuple[Window, np.ndarray, np.ndarray]]) -> int:
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
