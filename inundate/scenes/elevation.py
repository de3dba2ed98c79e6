"""Windows of a fine elevation model."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import rasterio
from affine import Affine
from rasterio.crs import CRS
from rasterio.enums import Resampling
from rasterio.errors import CRSError, RasterioError
from rasterio.vrt import WarpedVRT
from rasterio.windows import Window as FileWindow

from inundate.common.errors import InputError
from inundate.scenes.files import open_file
from inundate.scenes.places import with_retries


def read_elevation(
    path: str | Path, crs: str, bounds: tuple[float, float, float, float]
) -> tuple[np.ndarray, Affine, str]:
    """Read the elevation cells that touch a box.

    Only the part under the box is decoded, so that a large model can be read wetland by wetland. Cells on the model's
    own grid are returned as they are; a model in another reference system is warped bilinearly to cells of about its
    own size, on multiples of that size (the same cells whatever the box).

    Parameters
    ----------
    path : str or Path
        Raster, local or remote; integer and scaled ones (band scale and offset) as well.
    crs : str
        Wanted, projected, metres.
    bounds : (west, south, east, north)
        In ``crs``.

    Returns
    -------
    elevation : ndarray of float32, shape (row, column)
        Metres as in the model, NaN where it has none. Shape (0, 0) where the box lies off the model.
    transform : Affine
        From (column, row) to (x, y) in ``crs``.
    crs : str
        As asked for.

    Raises
    ------
    InputError
        The file cannot be opened or decoded, has no georeference, or the box is empty.
    """
    west, south, east, north = (float(one) for one in bounds)
    if not (np.isfinite([west, south, east, north]).all() and west < east and south < north):
        message = f"elevation bounds {tuple(bounds)}: must be west < east and south < north"
        raise InputError(message)
    href = str(path)
    try:
        target = CRS.from_user_input(crs)
        with open_file(href) as data:
            if data.crs is None or data.transform.is_identity:
                message = f"elevation {href}: has no georeference; write it with its reference system and transform"
                raise InputError(message)
            upright = data.transform.b == 0.0 and data.transform.d == 0.0 and data.transform.e < 0.0
            if data.crs == target and upright:
                values, transform = _read_box(data, href, (west, south, east, north))
            else:
                with _warped(data, target) as warped:
                    values, transform = _read_box(warped, href, (west, south, east, north))
    except (OSError, RasterioError, CRSError) as error:
        why = " ".join(str(error.__cause__ or error).split())[:200]
        message = f"elevation {href}: cannot be read ({why}); restore the file or correct [area] elevation"
        raise InputError(message) from error
    return values, transform, crs


def _warped(data: rasterio.io.DatasetReader, target: CRS) -> WarpedVRT:
    with WarpedVRT(data, crs=target) as rough:  # GDAL's own choice of cell size
        step = float(abs(rough.transform.a))
        left, bottom, right, top = rough.bounds
    col0, row0 = np.floor(left / step), np.ceil(top / step)
    width = int(np.ceil(right / step) - col0)
    height = int(row0 - np.floor(bottom / step))
    transform = Affine(step, 0.0, col0 * step, 0.0, -step, row0 * step)
    nodata = data.nodata if data.nodata is not None else None
    options = {} if nodata is None else {"src_nodata": nodata, "nodata": nodata}
    return WarpedVRT(
        data,
        crs=target,
        transform=transform,
        width=width,
        height=height,
        resampling=Resampling.bilinear,
        tolerance=0.02,
        add_alpha=nodata is None,
        **options,
    )


def _read_box(
    data: rasterio.io.DatasetReader | WarpedVRT, href: str, bounds: tuple[float, float, float, float]
) -> tuple[np.ndarray, Affine]:
    affine = data.transform
    west, south, east, north = bounds
    col0 = max(int(np.floor((west - affine.c) / affine.a + 1e-9)), 0)
    col1 = min(int(np.ceil((east - affine.c) / affine.a - 1e-9)), data.width)
    row0 = max(int(np.floor((north - affine.f) / affine.e + 1e-9)), 0)
    row1 = min(int(np.ceil((south - affine.f) / affine.e - 1e-9)), data.height)
    if row0 >= row1 or col0 >= col1:
        return np.empty((0, 0), np.float32), affine
    part = FileWindow(col0, row0, col1 - col0, row1 - row0)
    raw = with_retries(lambda: data.read(1, window=part, masked=True), href)
    scale, offset = data.scales[0], data.offsets[0]
    values = raw.astype(np.float64).filled(np.nan)
    if scale != 1.0 or offset != 0.0:
        values = values * scale + offset
    values[~np.isfinite(values)] = np.nan
    return values.astype(np.float32), affine * Affine.translation(col0, row0)
