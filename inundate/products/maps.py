"""Water probability maps as Cloud-Optimized GeoTIFF."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path

import numpy as np
import rasterio
from rasterio.shutil import copy as raster_copy
from rasterio.windows import Window as RasterWindow

from inundate.common.codes import MAP_NOT_SEEN
from inundate.common.grid import Grid, Window
from inundate.common.writing import replacing

_SMALL = 4_000_000


def write_map(path: Path, grid: Grid, blocks: Iterable[tuple[Window, np.ndarray]], tags: dict[str, str]) -> None:
    """Write a water probability map.

    Parameters
    ----------
    path : Path
        File to write (replaced in one step).
    grid : Grid
        The area's grid.
    blocks : iterable of (Window, ndarray of uint8, shape (row, column))
        Water probability in percent, 255 where not seen; what no block holds is 255.
    tags : dict
        Text tags of the file.

    Notes
    -----
    A GeoTIFF laid out as the OGC Cloud Optimized GeoTIFF standard (21-026) asks: tiled, overviews, header first. Grids
    of up to 4 million pixels are built in memory, larger ones in a sparse scratch file, so that memory stays bounded.
    """
    profile = {
        "driver": "GTiff",
        "height": grid.height,
        "width": grid.width,
        "count": 1,
        "dtype": "uint8",
        "nodata": MAP_NOT_SEEN,
        "crs": grid.crs,
        "transform": grid.transform,
    }
    cog = {"driver": "COG", "compress": "DEFLATE", "blocksize": 512, "overview_resampling": "nearest"}
    with replacing(path) as scratch:
        if grid.height * grid.width <= _SMALL:
            full = np.full((grid.height, grid.width), MAP_NOT_SEEN, np.uint8)
            for window, values in blocks:
                full[window.slices] = values
            with rasterio.MemoryFile() as memory:
                with memory.open(**profile) as out:
                    out.write(full, 1)
                    _describe(out, tags)
                with memory.open() as source:
                    raster_copy(source, scratch, **cog)
        else:
            rough = scratch.with_suffix(".rough.tif")
            try:
                sparse = {
                    **profile,
                    "tiled": True,
                    "blockxsize": 512,
                    "blockysize": 512,
                    "sparse_ok": "TRUE",
                    "compress": "DEFLATE",
                }
                with rasterio.open(rough, "w", **sparse) as out:
                    for window, values in blocks:
                        where = RasterWindow(window.col0, window.row0, values.shape[1], values.shape[0])
                        out.write(values, 1, window=where)
                    _describe(out, tags)
                raster_copy(rough, scratch, **cog, sparse_ok="TRUE")
            finally:
                rough.unlink(missing_ok=True)


def _describe(out: rasterio.io.DatasetWriter, tags: dict[str, str]) -> None:
    out.update_tags(**tags)
    out.set_band_description(1, "water probability")
    out.set_band_unit(1, "percent")
