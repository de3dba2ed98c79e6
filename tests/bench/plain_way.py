"""The plain way of mapping an archive, as the yardstick: whole scenes, LightGBM's own predict, class > 0.5, zonal mean.

What an analyst writes in an afternoon with the same libraries: every band of every scene read whole, 20 m bands brought to
10 m, the same features, ``Booster.predict`` with the same trained model and as many threads, one GeoTIFF a scene, zonal
statistics by exactextract.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import rasterio
from scipy.ndimage import zoom

from inundate.batch.inputs import read_wetlands
from inundate.batch.pipeline import load_pipeline
from inundate.pixels import WaterClassifier, features
from inundate.scenes import load_profile, open_catalog


def map_plainly(pipeline_file: Path, models: Path, out: Path, threads: int) -> pd.DataFrame:
    """Map every scene of a pipeline whole; return wetland_id, scene_id, area_m2 (class > 0.5, area-weighted)."""
    from exactextract import exact_extract

    pipeline = load_pipeline(pipeline_file)
    files = pipeline.input_files()
    shapes = read_wetlands(files["area.wetlands"], pipeline.area.crs)
    profile = load_profile(pipeline.scenes.sensor)
    booster = WaterClassifier.load(models).booster_
    out.mkdir(parents=True, exist_ok=True)
    tables = []
    for scene in open_catalog(files["scenes.catalog"], profile).scenes:
        bands = tuple(scene.bands)
        planes = []
        for role in bands:
            source = scene.bands[role]
            with rasterio.open(source.href) as data:
                raw = data.read(source.band).astype(np.float32)
                if data.transform.a == 10.0:
                    meta = data.profile
            planes.append(np.where(raw == 0, np.nan, raw * source.scale + source.offset))
        height, width = meta["height"], meta["width"]
        full = np.stack(
            [p if p.shape == (height, width) else zoom(p, 2, order=1, grid_mode=True, mode="nearest") for p in planes]
        )
        with rasterio.open(scene.mask.href) as data:
            mask = np.kron(data.read(1), np.ones((2, 2), np.uint8))[:height, :width]
        table = features(
            full.reshape(len(bands), -1).astype(np.float32),
            bands,
            np.zeros(height * width, np.float32),
            scene.sun_elevation_deg,
        )
        water = booster.predict(table, num_threads=threads).reshape(height, width)
        clear = np.isin(mask, (2, 4, 5, 6, 7))
        percent = np.where(clear, np.round(water * 100), 255).astype(np.uint8)
        name = out / f"{scene.scene_id}.tif"
        with rasterio.open(name, "w", **{**meta, "dtype": "uint8", "nodata": 255, "count": 1}) as sink:
            sink.write(percent, 1)
        with rasterio.MemoryFile() as memory:
            with memory.open(**{**meta, "dtype": "float32", "nodata": np.nan, "count": 1}) as sink:
                sink.write(np.where(clear, (water > 0.5).astype(np.float32), np.nan), 1)
            with memory.open() as source:
                share = exact_extract(source, shapes, ["mean"], include_cols=["wetland_id"], output="pandas")
        share["area_m2"] = share["mean"] * shapes["area_max_m2"].to_numpy()
        tables.append(share.assign(scene_id=scene.scene_id)[["wetland_id", "scene_id", "area_m2"]])
    return pd.concat(tables, ignore_index=True)
