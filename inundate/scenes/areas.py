"""The area's grid, and fixed context windows for co-registration."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from rasterio.errors import CRSError, RasterioError

from inundate.common.errors import InputError
from inundate.common.grid import Grid, Window
from inundate.scenes.files import open_file, parse_crs
from inundate.scenes.scene import Scene
from inundate.scenes.sensors import SensorProfile

_OPEN_AT_MOST = 5


def area_grid(
    scenes: Sequence[Scene],
    profile: SensorProfile,
    crs: str,
    bounds: tuple[float, float, float, float],
    *,
    margin_m: float = 0.0,
) -> Grid:
    """Return the area's grid: the profile's step, on the pixels of the first scene (by time, then id) in the same CRS.

    Parameters
    ----------
    scenes : sequence of Scene
    profile : SensorProfile
    crs : str
        Projected, metres.
    bounds : (west, south, east, north)
        Metres; the grid covers them and the margin.
    margin_m : float
        Widens the bounds on each side, metres.

    Returns
    -------
    Grid
        Aligned to multiples of the step where no scene in this CRS and step is found among the first few that open.

    Raises
    ------
    InputError
        CRS not known, not projected or not in metres; bounds empty or not finite.
    """
    try:
        target = parse_crs(crs)
    except CRSError as error:
        message = f"[area] crs = {crs!r}: not a known reference system; give one such as EPSG:32633"
        raise InputError(message) from error
    if not target.is_projected or abs(target.linear_units_factor[1] - 1.0) > 1e-9:
        message = f"[area] crs = {crs!r}: must be projected with metres; give one such as EPSG:32633"
        raise InputError(message)
    west, south, east, north = (float(one) for one in bounds)
    if not (np.isfinite([west, south, east, north]).all() and west < east and south < north):
        message = f"area bounds {tuple(bounds)}: must be west < east, south < north; check the wetland layer"
        raise InputError(message)
    step = profile.step_m
    x0, y0 = _origin(scenes, profile, crs)
    col0 = int(np.floor((west - margin_m - x0) / step + 1e-9))
    col1 = int(np.ceil((east + margin_m - x0) / step - 1e-9))
    row0 = int(np.floor((y0 - north - margin_m) / step + 1e-9))
    row1 = int(np.ceil((y0 - south + margin_m) / step - 1e-9))
    return Grid(crs, x0 + col0 * step, y0 - row0 * step, step, max(row1 - row0, 1), max(col1 - col0, 1))


def _origin(scenes: Sequence[Scene], profile: SensorProfile, crs: str) -> tuple[float, float]:
    opened = 0
    for scene in sorted(scenes, key=lambda one: (one.datetime, one.scene_id)):
        if opened >= _OPEN_AT_MOST:
            break
        for role in [one for one in profile.roles if one in scene.bands]:
            try:
                with open_file(scene.bands[role].href) as data:
                    affine, told = data.transform, data.crs
            except RasterioError:
                break
            opened += 1
            upright = affine.b == 0.0 and affine.d == 0.0 and affine.e < 0.0
            if told == parse_crs(crs) and upright and abs(affine.a - profile.step_m) < 1e-6 * profile.step_m:
                return float(affine.c), float(affine.f)
    return 0.0, 0.0


def context_windows(grid: Grid, *, count: int = 9, side: int = 96) -> tuple[Window, ...]:
    """Return fixed windows spread evenly over the grid, for co-registration.

    The whole grid as one window where it is no larger than ``count`` such windows together.

    Parameters
    ----------
    grid : Grid
    count : int
        About how many windows.
    side : int
        Pixels a side.

    Returns
    -------
    tuple of Window
        Disjoint, inside the grid, row-major.
    """
    if grid.height * grid.width <= count * side * side:
        return (Window(0, grid.height, 0, grid.width),)
    down = max(1, min(round(np.sqrt(count * grid.height / grid.width)), grid.height // side or 1))
    across = max(1, min(round(count / down), grid.width // side or 1))
    rows, cols = min(side, grid.height), min(side, grid.width)
    out = []
    for i in range(down):
        row0 = round((i + 0.5) * grid.height / down - rows / 2)
        for j in range(across):
            col0 = round((j + 0.5) * grid.width / across - cols / 2)
            out.append(Window(row0, row0 + rows, col0, col0 + cols))
    return tuple(out)


def band_steps(scenes: Sequence[Scene]) -> dict[str, float]:
    """Return the pixel side of each band, metres (or the file's own unit), of the first scene whose files all open.

    Parameters
    ----------
    scenes : sequence of Scene

    Returns
    -------
    dict of role to float
        Empty where none of the first few opens.
    """
    for scene in list(scenes)[:_OPEN_AT_MOST]:
        steps = {}
        try:
            for role, source in scene.bands.items():
                with open_file(source.href) as data:
                    steps[role] = abs(float(data.transform.a))
        except RasterioError:
            continue
        return steps
    return {}
