"""Write the inputs and the truth in the files' own formats, with the same bytes for the same seed."""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pyproj
import rasterio
from affine import Affine

from inundate.common.codes import BAND_ROLES
from inundate.common.grid import Grid
from inundate.common.writing import write_json, write_text
from inundate.reserve.plan import CRS, Plan
from inundate.reserve.render import BANDS_10M, BANDS_20M
from inundate.reserve.scenes import ViewData, ViewPlan
from inundate.reserve.spectra import CENTRES_NM, WIDTHS_NM

ASSETS = ("B02", "B03", "B04", "B05", "B06", "B07", "B08", "B8A", "B11", "B12")
"""Asset keys in the order of common.codes.BAND_ROLES."""
COMMON_NAMES = ("blue", "green", "red", "rededge", "rededge", "rededge", "nir", "nir08", "swir16", "swir22")
EXTENSIONS = (
    "https://stac-extensions.github.io/eo/v1.1.0/schema.json",
    "https://stac-extensions.github.io/view/v1.0.0/schema.json",
    "https://stac-extensions.github.io/projection/v1.1.0/schema.json",
    "https://stac-extensions.github.io/processing/v1.2.0/schema.json",
)
_TIFF = "image/tiff; application=geotiff"
PIPELINE = """\
# The Sallow Reserve: an invented landscape with known truth.
[area]
name = "Sallow Reserve"
crs = "EPSG:32633"
wetlands = "wetlands.gpkg"
elevation = "elevation.tif"

[scenes]
catalog = "scenes/collection.json"
sensor = "sentinel-2-l2a"

[labels]
examples = "labels.gpkg"

[loggers]
registry = "loggers.csv"
barometer = "barometer.csv"
checks = "checks.csv"

[weather]
daily = "weather.csv"

[skill]
walked_extents = "walked_extents.csv"

[output]
folder = "../out"
"""


def write_raster(path: Path, values: np.ndarray, transform: Affine, *, nodata: float | None = None) -> None:
    """Write a tiled, deflated GeoTIFF from (row, column) or (band, row, column)."""
    block = values if values.ndim == 3 else values[None]
    path.parent.mkdir(parents=True, exist_ok=True)
    whole = np.issubdtype(values.dtype, np.integer)
    profile = {
        "driver": "GTiff", "height": block.shape[1], "width": block.shape[2], "count": block.shape[0],
        "dtype": values.dtype, "crs": CRS, "transform": transform, "nodata": nodata, "compress": "deflate",
        "zlevel": 4, "tiled": True, "blockxsize": 128, "blockysize": 128,
        "predictor": 1 if values.dtype == np.uint8 else (2 if whole else 3),
    }  # fmt: skip
    with rasterio.open(path, "w", **profile) as target:
        target.write(block)


@contextmanager
def fixed_clock() -> Iterator[None]:
    """Hold the clock that GDAL writes into GeoPackages, so that files repeat byte by byte."""
    name, before = "OGR_CURRENT_DATE", os.environ.get("OGR_CURRENT_DATE")
    import pyogrio

    pyogrio.set_gdal_config_options({name: "2034-01-01T00:00:00.000Z"})
    os.environ[name] = "2034-01-01T00:00:00.000Z"
    try:
        yield
    finally:
        pyogrio.set_gdal_config_options({name: None})
        if before is None:
            os.environ.pop(name, None)
        else:
            os.environ[name] = before


def write_layer(path: Path, layer: gpd.GeoDataFrame) -> None:
    """Write a GeoPackage layer with repeatable bytes; the layer is named after the file."""
    path.parent.mkdir(parents=True, exist_ok=True)
    path.unlink(missing_ok=True)
    with fixed_clock():
        layer.to_file(path, driver="GPKG", layer=path.stem, engine="pyogrio")


def write_csv(path: Path, table: pd.DataFrame) -> None:
    """Write a CSV with Unix line ends."""
    write_text(path, table.to_csv(index=False, lineterminator="\n"))


def _footprint(grid: Grid) -> tuple[list[float], dict]:
    west, south, east, north = grid.bounds
    to_degrees = pyproj.Transformer.from_crs(CRS, "EPSG:4326", always_xy=True)
    corners = [(west, south), (east, south), (east, north), (west, north), (west, south)]
    ring = [[round(v, 7) for v in to_degrees.transform(x, y)] for x, y in corners]
    xs, ys = [p[0] for p in ring], [p[1] for p in ring]
    return [min(xs), min(ys), max(xs), max(ys)], {"type": "Polygon", "coordinates": [ring]}


def _band_asset(number: int, grid: Grid) -> dict:
    step = 10 if number in BANDS_10M else 20
    side = grid.height * 10 // step
    return {
        "href": f"./{ASSETS[number]}.tif",
        "type": _TIFF,
        "roles": ["data", "reflectance"],
        "gsd": step,
        "eo:bands": [
            {
                "name": ASSETS[number],
                "common_name": COMMON_NAMES[number],
                "center_wavelength": round(CENTRES_NM[number] / 1000, 4),
                "full_width_half_max": round(WIDTHS_NM[number] / 1000, 4),
            }
        ],
        "proj:shape": [side, side],
        "proj:transform": [step, 0, grid.west, 0, -step, grid.north],
    }


def item_of(plan: Plan, view: ViewPlan, cloud_percent: float) -> dict:
    """Return the STAC 1.0 item of a view."""
    grid = plan.grid
    bbox, geometry = _footprint(grid)
    side = grid.height // 2
    assets = {ASSETS[i]: _band_asset(i, grid) for i in range(len(BAND_ROLES))}
    assets["SCL"] = {
        "href": "./SCL.tif",
        "type": _TIFF,
        "roles": ["data", "classification"],
        "gsd": 20,
        "proj:shape": [side, side],
        "proj:transform": [20, 0, grid.west, 0, -20, grid.north],
    }
    return {
        "type": "Feature",
        "stac_version": "1.0.0",
        "stac_extensions": list(EXTENSIONS),
        "id": view.scene_id,
        "bbox": bbox,
        "geometry": geometry,
        "collection": "sallow-reserve",
        "properties": {
            "datetime": f"{view.time:%Y-%m-%dT%H:%M:%SZ}",
            "platform": "invented-2a",
            "instruments": ["msi"],
            "gsd": 10,
            "eo:cloud_cover": round(cloud_percent, 1),
            "view:sun_elevation": round(view.sun_elevation, 3),
            "view:sun_azimuth": round(view.sun_azimuth, 3),
            "proj:epsg": 32633,
            "processing:level": "L2A",
            "processing:version": view.baseline,
            "s2:processing_baseline": view.baseline,
        },
        "links": [
            {"rel": "root", "href": "../collection.json", "type": "application/json"},
            {"rel": "parent", "href": "../collection.json", "type": "application/json"},
            {"rel": "collection", "href": "../collection.json", "type": "application/json"},
        ],
        "assets": assets,
    }


def write_view(folder: Path, plan: Plan, view: ViewPlan, data: ViewData) -> None:
    """Write the bands, the classification and the item of a view into ``folder/<scene_id>/``."""
    home = folder / view.scene_id
    home.mkdir(parents=True, exist_ok=True)
    west, north = plan.grid.west, plan.grid.north
    ten, twenty = Affine(10, 0, west, 0, -10, north), Affine(20, 0, west, 0, -20, north)
    for place, number in enumerate(BANDS_10M):
        write_raster(home / f"{ASSETS[number]}.tif", data.ten[place], ten, nodata=0)
    for place, number in enumerate(BANDS_20M):
        write_raster(home / f"{ASSETS[number]}.tif", data.twenty[place], twenty, nodata=0)
    write_raster(home / "SCL.tif", data.classes, twenty, nodata=0)
    cloud = 100 * float(np.isin(data.classes, (8, 9, 10)).mean())
    write_json(home / f"{view.scene_id}.json", item_of(plan, view, cloud))


def write_catalog(folder: Path, plan: Plan, views: list[ViewPlan]) -> None:
    """Write the static STAC collection ``folder/scenes/collection.json`` and the table ``folder/scenes.csv``."""
    bbox, _ = _footprint(plan.grid)
    first, last = views[0].time, views[-1].time
    links = [{"rel": "root", "href": "./collection.json", "type": "application/json"}]
    links += [
        {"rel": "item", "href": f"./{v.scene_id}/{v.scene_id}.json", "type": "application/geo+json"} for v in views
    ]
    collection = {
        "type": "Collection",
        "stac_version": "1.0.0",
        "stac_extensions": [],
        "id": "sallow-reserve",
        "title": "Sallow Reserve, invented surface reflectance",
        "description": "Simulated multispectral surface reflectance of an invented landscape of small wetlands.",
        "license": "MIT",
        "extent": {
            "spatial": {"bbox": [bbox]},
            "temporal": {"interval": [[f"{first:%Y-%m-%dT%H:%M:%SZ}", f"{last:%Y-%m-%dT%H:%M:%SZ}"]]},
        },
        "summaries": {"gsd": [10, 20]},
        "links": links,
    }
    write_json(folder / "scenes" / "collection.json", collection)
    rows = []
    for view in views:
        row = {"scene_id": view.scene_id, "datetime": f"{view.time:%Y-%m-%dT%H:%M:%SZ}", "sensor": "sentinel-2-l2a"}
        for role, asset in zip(BAND_ROLES, ASSETS, strict=True):
            row[role] = f"scenes/{view.scene_id}/{asset}.tif"
        row["mask"] = f"scenes/{view.scene_id}/SCL.tif"
        row["baseline"] = view.baseline
        row["sun_elevation"] = f"{view.sun_elevation:.3f}"
        row["sun_azimuth"] = f"{view.sun_azimuth:.3f}"
        rows.append(row)
    write_csv(folder / "scenes.csv", pd.DataFrame(rows))
