"""A reserve read for scoring the pixel models: site pixels of every scene, brought to their place, and their truth.

Truth is read here for scoring alone.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import rasterio

from inundate.common.codes import BAND_ROLES, ViewCode
from inundate.common.site import Site, make_site
from inundate.extent import pixel_weights
from inundate.leaves import LeafCalendar
from inundate.pixels import (
    ExampleSet,
    ViewState,
    check_labels,
    label_pixels,
    make_examples,
    match_scenes,
    scene_context,
)
from inundate.scenes import Reference, apply_gain, apply_shift, area_grid, load_profile, open_catalog, read_view

MARGIN_PX = 2


@dataclass
class World:
    """scene (table), reflectance (scene, band, pixel) f4, code (scene, pixel) u1, truth of water and view (scene, pixel) in
    percent, and of the pixel: owner wetland (row, nearest outside), inside (share of the pixel in its wetland)."""

    site: Site
    scenes: pd.DataFrame
    wetlands: pd.DataFrame
    reflectance: np.ndarray
    code: np.ndarray
    water: np.ndarray
    seen: np.ndarray
    true_code: np.ndarray
    owner: np.ndarray
    inside: np.ndarray
    share: np.ndarray
    state: np.ndarray
    examples: ExampleSet
    label_truth: pd.DataFrame
    context: np.ndarray  # (scene, band)
    cells: pd.DataFrame | None = None


def load_world(folder: Path, *, register: bool = True, normalise: bool = False, cache: Path | None = None) -> World:
    """Read a reserve folder (``inputs`` and ``truth``)."""
    inputs = folder / "inputs"
    profile = load_profile("sentinel-2-l2a")
    catalog = open_catalog(inputs / "scenes" / "collection.json", profile)
    shapes = gpd.read_file(inputs / "wetlands.gpkg").sort_values("wetland_id", ignore_index=True)
    shapes["area_max_m2"] = shapes.geometry.area
    grid = area_grid(catalog.scenes, profile, "EPSG:32633", tuple(shapes.total_bounds), margin_m=100)
    weights = pixel_weights(shapes, grid)
    labels = gpd.read_file(inputs / "labels.gpkg")
    placed, _ = label_pixels(gpd.GeoDataFrame(check_labels(labels)), grid)
    scenes = pd.DataFrame(
        {
            "scene_id": [s.scene_id for s in catalog.scenes],
            "datetime": [s.datetime for s in catalog.scenes],
            "sun": [s.sun_elevation_deg for s in catalog.scenes],
        }
    )
    placed, _ = match_scenes(placed, scenes)
    core = make_site(grid, weights["row"].to_numpy(), weights["col"].to_numpy(), margin=MARGIN_PX)
    site = make_site(
        grid, np.concatenate([core.rows, placed["grid_row"]]), np.concatenate([core.cols, placed["grid_col"]])
    )
    name = f"{folder.name}_{int(register)}{int(normalise)}.npz"
    if cache is not None and (cache / name).exists():
        stacks = dict(np.load(cache / name))
    else:
        stacks = _read_all(catalog.scenes, profile, grid, site, folder / "truth" / "pixels", register, normalise)
        if cache is not None:
            np.savez(cache / name, **stacks)
    owner, inside = _owners(site, weights, shapes)
    share, state = _leaves(stacks, scenes, shapes, owner, inside)
    wetlands = shapes[["wetland_id", "area_max_m2"]].assign(
        cover=pd.read_parquet(folder / "truth" / "wetlands.parquet")
        .set_index("wetland_id")["cover"]
        .reindex(shapes["wetland_id"])
        .to_numpy()
    )
    ground = inside == 0
    context = np.array(
        [scene_context(r, BAND_ROLES, c, ground) for r, c in zip(stacks["reflectance"], stacks["code"], strict=True)]
    )
    examples = _examples(placed, scenes, stacks, site, (share, state, context))
    truth = pd.read_parquet(folder / "truth" / "labels.parquet")
    return World(
        site,
        scenes,
        wetlands,
        stacks["reflectance"],
        stacks["code"],
        stacks["water"],
        stacks["seen"],
        stacks["true_code"],
        owner,
        inside,
        share,
        state,
        examples,
        truth,
        context,
    )


def _read_all(scenes, profile, grid, site, truth, register, normalise):
    from inundate.common.grid import Window

    whole = (Window(0, grid.height, 0, grid.width),)
    reference = None
    if register:
        month = {s.scene_id: (pd.Timestamp(s.datetime).month in (11, 12, 1, 2, 3, 4)) for s in scenes}
        reference = Reference.from_views((read_view(s, profile, grid, whole) for s in scenes), groups=month)
    n, m = len(scenes), site.size
    out = {
        "reflectance": np.full((n, len(BAND_ROLES), m), np.nan, "f4"),
        "code": np.full((n, m), 255, "u1"),
        "water": np.full((n, m), 255, "u1"),
        "seen": np.full((n, m), 255, "u1"),
        "true_code": np.full((n, m), 255, "u1"),
        "shift": np.full((n, 2), np.nan),
    }
    for i, scene in enumerate(scenes):
        view = read_view(scene, profile, grid, whole, all_windows=True)
        if reference is not None:
            shift = reference.shift(view)
            out["shift"][i] = shift.dx_px, shift.dy_px
            if normalise:
                view = apply_gain(view, reference.gain(view, shift))
            view = apply_shift(view, shift)
        block = view.blocks[0]
        for k, band in enumerate(view.bands):
            out["reflectance"][i, BAND_ROLES.index(band)] = block.reflectance[k][site.rows, site.cols]
        out["code"][i] = block.code[site.rows, site.cols]
        with rasterio.open(truth / f"{scene.scene_id}.tif") as source:
            col, row = ~source.transform * (grid.west + 0.5 * grid.step, grid.north - 0.5 * grid.step)
            rows, cols = site.rows + int(np.floor(row)), site.cols + int(np.floor(col))
            on = (rows >= 0) & (rows < source.height) & (cols >= 0) & (cols < source.width)
            values = source.read()[:, rows[on], cols[on]]
        out["water"][i, on], out["seen"][i, on], out["true_code"][i, on] = values
    return out


def _owners(site, weights, shapes):
    from scipy.spatial import cKDTree

    place = site.positions(weights["row"].to_numpy(), weights["col"].to_numpy())
    row = pd.Index(shapes["wetland_id"]).get_indexer(weights["wetland_id"])
    inside, owner = np.zeros(site.size), np.full(site.size, -1)
    for p, r, s in sorted(zip(place, row, weights["share"], strict=True), key=lambda v: v[2]):
        owner[p], inside[p] = r, s
    known = owner >= 0
    xy = np.column_stack([site.rows, site.cols])
    owner[~known] = owner[known][cKDTree(xy[known]).query(xy[~known])[1]]
    return owner, inside


def _leaves(stacks, scenes, shapes, owner, inside):
    r = stacks["reflectance"]
    red, nir = r[:, BAND_ROLES.index("red")], r[:, BAND_ROLES.index("nir")]
    ndvi = np.where(stacks["code"] == ViewCode.CLEAR, (nir - red) / (nir + red), np.nan)
    date = pd.to_datetime(scenes["datetime"]).dt.tz_localize(None).dt.normalize()
    rows = []
    for k, name in enumerate(shapes["wetland_id"]):
        mine = (owner == k) & (inside > 0)
        with np.errstate(all="ignore"):
            seen = np.isfinite(ndvi[:, mine]).mean(axis=1)
            mean = np.array([np.nanmean(v) if s > 0 else np.nan for v, s in zip(ndvi[:, mine], seen, strict=True)])
        rows.append(pd.DataFrame({"wetland_id": name, "date": date, "ndvi": mean, "weight": seen}))
    green = pd.concat(rows, ignore_index=True)
    calendar = LeafCalendar().fit(green[np.isfinite(green["ndvi"]) & (green["weight"] > 0.2)])
    n, m = len(scenes), len(shapes)
    state, share = calendar.states(np.tile(shapes["wetland_id"], n), np.repeat(date.to_numpy(), m))
    return share.reshape(n, m)[:, owner].astype("f4"), state.reshape(n, m)[:, owner].astype("i1")


def _examples(placed, scenes, stacks, site, views):
    share, state, context = views
    i = pd.Index(scenes["scene_id"]).get_indexer(placed["scene_id"])
    p = site.positions(placed["grid_row"].to_numpy(), placed["grid_col"].to_numpy())
    values = stacks["reflectance"][i, :, p].T
    view = ViewState(share[i, p], state[i, p], scenes["sun"].to_numpy("f4")[i], context[i].T)
    clear = stacks["code"][i, p] == ViewCode.CLEAR
    return make_examples(placed, values, BAND_ROLES, view, clear=clear, starter="never")
