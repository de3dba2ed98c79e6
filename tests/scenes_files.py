"""Small scene files for tests: rasters that encode their own coordinates, items and collections."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import rasterio
from rasterio.transform import from_origin

CRS = "EPSG:32633"
WEST, NORTH = 500_000.0, 5_600_000.0
S2_BANDS = {"B02": 10, "B03": 10, "B04": 10, "B08": 10, "B11": 20, "B12": 20}


def plane(west: float, north: float, step: float, shape: tuple[int, int]) -> np.ndarray:
    """A raw number that tells where it is: 2000 + 0.5 per metre east of WEST - 0.3 per metre south of NORTH, at centres."""
    x = west + (np.arange(shape[1]) + 0.5) * step - WEST
    y = NORTH - (north - (np.arange(shape[0]) + 0.5) * step)
    return 2000.0 + 0.5 * x[None, :] + 0.3 * y[:, None]


def write_tif(
    path: Path,
    data: np.ndarray,
    *,
    west: float = WEST,
    north: float = NORTH,
    step: float = 10.0,
    crs: str | None = CRS,
    **options: Any,
) -> Path:
    path.parent.mkdir(parents=True, exist_ok=True)
    data = data[None] if data.ndim == 2 else data
    names = options.pop("descriptions", None)
    options = {"blockxsize": 64, "blockysize": 64} | options
    place = {} if crs is None else {"crs": crs, "transform": from_origin(west, north, step, step)}
    with rasterio.open(
        path,
        "w",
        driver="GTiff",
        height=data.shape[1],
        width=data.shape[2],
        count=data.shape[0],
        dtype=data.dtype,
        tiled=True,
        compress="deflate",
        **place,
        **options,
    ) as file:
        file.write(data)
        if names:
            file.descriptions = names
    return path


def write_scene(
    folder: Path,
    scene_id: str = "A",
    *,
    size: int = 120,
    classes: np.ndarray | None = None,
    version: str = "1.0.0",
    when: str = "2021-05-01T10:00:00Z",
    **properties: Any,
) -> Path:
    """Write a complete scene (10 m and 20 m bands, classes) with its item; return the item's path."""
    assets: dict[str, Any] = {}
    for key, step in S2_BANDS.items():
        n = size * 10 // step
        write_tif(
            folder / scene_id / f"{key}.tif", plane(WEST, NORTH, step, (n, n)).astype(np.uint16), step=step, nodata=0
        )
        assets[key] = {"href": f"./{key}.tif"}
    n = size // 2
    classes = np.full((n, n), 4, np.uint8) if classes is None else classes
    write_tif(folder / scene_id / "SCL.tif", classes, step=20.0, nodata=0)
    assets["SCL"] = {"href": "./SCL.tif"}
    return write_item(
        folder / scene_id / f"{scene_id}.json", scene_id, assets, version=version, when=when, **properties
    )


def write_item(
    path: Path,
    scene_id: str,
    assets: dict[str, Any],
    *,
    version: str = "1.0.0",
    when: str | None = None,
    **properties: Any,
) -> Path:
    item = {
        "type": "Feature",
        "stac_version": version,
        "stac_extensions": [],
        "id": scene_id,
        "geometry": None,
        "properties": {"datetime": when or "2021-05-01T10:00:00Z", **properties},
        "links": [],
        "assets": assets,
    }
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(json.dumps(item))
    return path


def write_collection(
    path: Path, links: list[tuple[str, str]], *, version: str = "1.0.0", kind: str = "Collection"
) -> Path:
    body: dict[str, Any] = {
        "type": kind,
        "stac_version": version,
        "id": path.stem,
        "description": "test",
        "links": [{"rel": rel, "href": href} for rel, href in links],
    }
    if kind == "Collection":
        body |= {
            "license": "other",
            "extent": {"spatial": {"bbox": [[14, 50, 16, 51]]}, "temporal": {"interval": [[None, None]]}},
        }
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(json.dumps(body))
    return path
