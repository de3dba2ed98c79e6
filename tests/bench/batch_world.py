"""Made archives of any size for the batch's benches: cheap files, written strip by strip; no science is judged on them.

Wetlands are round basins of 0.07 to 1.1 ha on a loose lattice; their water swells and falls with the year. Dry ground is a
patchwork of fields, so that scenes can be registered; ten bands, 10 m and 20 m, and a class mask, as a full tile has.
"""

from __future__ import annotations

import json
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import rasterio
from rasterio.transform import from_origin
from rasterio.windows import Window
from shapely.geometry import Point

from tests.scenes_files import CRS, NORTH, WEST, write_collection, write_item

FINE = {"B02": (500, 300), "B03": (800, 400), "B04": (900, 300), "B08": (1500, 200)}
COARSE = {"B05": (1100, 250), "B06": (1300, 200), "B07": (1400, 200), "B8A": (1500, 150)}
COARSE |= {"B11": (2800, 100), "B12": (2000, 80)}
LEAFY = {"B08": 1500, "B8A": 1500, "B06": 900, "B07": 1200}
TILE = 512
STATED = {"raster:scale": 1e-4, "raster:offset": 0.0}


def basins(side: int, count: int, seed: int) -> pd.DataFrame:
    """Centres (m east, m south of the corner) and radii (m) of basins on a loose lattice over ``side`` pixels."""
    rng = np.random.default_rng(seed)
    across = int(np.ceil(np.sqrt(count)))
    cell = 10.0 * side / across
    place = np.arange(count)
    radius = np.minimum(15.0 * 4.0 ** rng.random(count), 0.35 * cell)
    jitter = (rng.random((count, 2)) - 0.5) * (cell - 2.2 * radius[:, None])
    return pd.DataFrame(
        {
            "wetland_id": [f"W{i:06d}" for i in place],
            "x": (place % across + 0.5) * cell + jitter[:, 0],
            "y": (place // across + 0.5) * cell + jitter[:, 1],
            "r": radius,
            "phase": rng.normal(0, 10, count),
        }
    )


def wet_share(day: pd.Timestamp, phase: np.ndarray) -> np.ndarray:
    """Share of each basin under water: high in spring, low in autumn."""
    turn = 2 * np.pi * (day.dayofyear + phase - 80) / 365.25
    return np.clip(0.55 + 0.35 * np.cos(turn), 0.05, 0.95)


def leafiness(day: pd.Timestamp) -> float:
    """Leaf share of the woods."""
    d = day.dayofyear
    return float(1 / (1 + np.exp(-(d - 125) / 6)) * (1 - 1 / (1 + np.exp(-(d - 285) / 8))))


class World:
    """A made archive in ``folder``: ``inputs/`` with a pipeline file.

    Parameters
    ----------
    folder : Path
    side : int
        Pixels of 10 m a side of the scenes; even.
    wetlands : int
    step_days : int
        Days between scenes.
    loggers : int
        Wetlands with a logger.
    settings : str
        More of the pipeline file.
    """

    def __init__(
        self,
        folder: Path,
        side: int,
        wetlands: int,
        *,
        step_days: int = 10,
        loggers: int = 4,
        settings: str = "",
        seed: int = 3,
    ) -> None:
        self.folder, self.side, self.step_days = folder / "inputs", side, step_days
        self.start = pd.Timestamp("2031-10-01")
        self.basins = basins(side, wetlands, seed)
        self.scenes = 0
        self.folder.mkdir(parents=True)
        rng = np.random.default_rng(seed)
        self.fields = {n: np.kron(rng.uniform(0.75, 1.25, (n // 8, n // 8)), np.ones((8, 8))) for n in (TILE,)}
        points = [Point(WEST + x, NORTH - y) for x, y in zip(self.basins["x"], self.basins["y"], strict=True)]
        shapes = [p.buffer(r) for p, r in zip(points, self.basins["r"], strict=True)]
        layer = gpd.GeoDataFrame({"wetland_id": self.basins["wetland_id"]}, geometry=shapes, crs=CRS)
        layer.to_file(self.folder / "wetlands.gpkg", driver="GPKG")
        self.logged = self.basins.iloc[:: max(wetlands // max(loggers, 1), 1)].head(loggers)
        text = f'[area]\nname = "Sallow Reserve"\ncrs = "{CRS}"\nwetlands = "wetlands.gpkg"\n'
        text += (
            'elevation = "elevation.tif"\n[scenes]\ncatalog = "scenes/collection.json"\n[output]\nfolder = "../out"\n'
        )
        text += '[loggers]\nregistry = "loggers.csv"\n' if loggers else ""
        self.pipeline = self.folder / "pipeline.toml"
        self.pipeline.write_text(text + settings)
        self._elevation()

    def grow(self, scenes: int) -> None:
        """Write scenes until there are so many, then loggers up to the last, and the collection."""
        for number in range(self.scenes, scenes):
            self._scene(number)
        self.scenes = scenes
        links = [("item", f"./{self._name(k)}/{self._name(k)}.json") for k in range(scenes)]
        write_collection(self.folder / "scenes" / "collection.json", links)
        if len(self.logged):
            self._loggers()

    def _name(self, number: int) -> str:
        return f"SR_{self.day(number):%Y%m%d}"

    def day(self, number: int) -> pd.Timestamp:
        return self.start + pd.Timedelta(days=number * self.step_days)

    def _scene(self, number: int) -> None:
        day, name = self.day(number), self._name(number)
        place = self.folder / "scenes" / name
        place.mkdir(parents=True)
        assets = {}
        for bands, step in ((FINE, 10.0), (COARSE, 20.0)):
            for key, (dry, wet) in bands.items():
                dry_now = dry + int(LEAFY.get(key, 0) * leafiness(day))
                self._band(place / f"{key}.tif", step, dry_now, wet, day)
                assets[key] = {"href": f"./{key}.tif", **STATED}
        self._plain(place / "SCL.tif", 20.0, 4)
        assets["SCL"] = {"href": "./SCL.tif"}
        when = f"{day:%Y-%m-%d}T10:00:00Z"
        facts = {"eo:cloud_cover": 5.0, "view:sun_elevation": 40.0}
        write_item(place / f"{name}.json", name, assets, when=when, **facts)

    def _open(self, path: Path, step: float, dtype: str, **more: object) -> rasterio.io.DatasetWriter:
        n = int(self.side * 10 / step)
        options = {"tiled": True, "blockxsize": TILE, "blockysize": TILE, "compress": "deflate", "zlevel": 1, **more}
        where = {"crs": CRS, "transform": from_origin(WEST, NORTH, step, step), "height": n, "width": n}
        return rasterio.open(path, "w", driver="GTiff", count=1, dtype=dtype, nodata=0, **where, **options)

    def _band(self, path: Path, step: float, dry: int, wet: int, day: pd.Timestamp) -> None:
        ground = (dry * self.fields[TILE]).astype(np.uint16)
        basins, depth = self.basins, np.sqrt(wet_share(day, self.basins["phase"].to_numpy()))
        r = basins["r"].to_numpy() * depth
        x, y = basins["x"].to_numpy(), basins["y"].to_numpy()
        with self._open(path, step, "uint16") as out:
            for top in range(0, out.height, TILE):
                rows = min(TILE, out.height - top)
                strip = np.tile(ground[:rows], (1, -(-out.width // TILE)))[:, : out.width].copy()
                for i in np.flatnonzero((y + r >= top * step) & (y - r <= (top + rows) * step)):
                    r0, r1 = max(int((y[i] - r[i]) / step) - top, 0), min(int((y[i] + r[i]) / step) - top + 1, rows)
                    c0, c1 = max(int((x[i] - r[i]) / step), 0), min(int((x[i] + r[i]) / step) + 1, out.width)
                    down = (np.arange(r0, r1) + top + 0.5) * step - y[i]
                    across = (np.arange(c0, c1) + 0.5) * step - x[i]
                    water = down[:, None] ** 2 + across[None, :] ** 2 < r[i] ** 2
                    strip[r0:r1, c0:c1][water] = wet
                out.write(strip, 1, window=Window(0, top, out.width, rows))

    def _plain(self, path: Path, step: float, value: int) -> None:
        with self._open(path, step, "uint8") as out:
            for top in range(0, out.height, TILE):
                rows = min(TILE, out.height - top)
                out.write(np.full((rows, out.width), value, np.uint8), 1, window=Window(0, top, out.width, rows))

    def _elevation(self, step: float = 5.0) -> None:
        """Bowls 1.2 m deep; what is not near a wetland stays unwritten."""
        with self._open(self.folder / "elevation.tif", step, "float32", sparse_ok="TRUE") as out:
            for x, y, r in self.basins[["x", "y", "r"]].itertuples(index=False):
                r0, r1 = max(int((y - r) / step) - 3, 0), min(int((y + r) / step) + 4, out.height)
                c0, c1 = max(int((x - r) / step) - 3, 0), min(int((x + r) / step) + 4, out.width)
                down = (np.arange(r0, r1) + 0.5) * step - y
                across = (np.arange(c0, c1) + 0.5) * step - x
                part = 100 + 1.2 * (down[:, None] ** 2 + across[None, :] ** 2) / r**2
                out.write(part.astype(np.float32), 1, window=Window(c0, r0, c1 - c0, r1 - r0))

    def _loggers(self) -> None:
        """Levels every six hours up to the last scene."""
        time = pd.date_range(self.start, self.day(self.scenes - 1), freq="6h")
        rows = ["logger_id,wetland_id,file,kind,unit,height_m,valid_from,valid_to,utc_offset"]
        for number, (name, phase) in enumerate(zip(self.logged["wetland_id"], self.logged["phase"], strict=True)):
            wet = np.array([wet_share(t, np.array([phase]))[0] for t in time])
            noise = np.random.default_rng(number).normal(0, 0.003, time.size)
            table = pd.DataFrame({"time": time.strftime("%Y-%m-%dT%H:%M:%SZ"), "value": 1.2 * wet + noise})
            table.to_csv(self.folder / f"L{number}.csv", index=False)
            rows.append(f"L{number},{name},L{number}.csv,level,m,0.0,{self.start:%Y-%m-%d},,+00:00")
        (self.folder / "loggers.csv").write_text("\n".join(rows) + "\n")


def told(folder: Path) -> dict:
    """Return run.json of the newest delivery below ``out``."""
    file = sorted((folder / "out" / "products").glob("????-??/run.json"))[-1]
    return json.loads(file.read_text())
