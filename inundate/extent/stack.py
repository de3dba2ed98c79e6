"""What a set of scenes shows of the site pixels, and the options of observed extent."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from inundate.common.errors import InputError
from inundate.common.site import Site


@dataclass(frozen=True, slots=True)
class SceneStack:
    """Water fractions and views of the site pixels in a set of scenes.

    Attributes
    ----------
    scene_id : ndarray of text, shape (scene,)
    datetime : ndarray of datetime64[ns], shape (scene,)
        UTC.
    fraction : ndarray, shape (scene, pixel)
        Water fraction of the whole pixel: float 0..1 with NaN missing, or uint8 percent with 255 missing.
    code : ndarray of uint8, shape (scene, pixel)
        ``common.codes.ViewCode``.
    wetland_id : ndarray of text, shape (wetland,)
        Names of the columns of ``leaf_state``.
    leaf_state : ndarray of uint8, shape (scene, wetland)
        ``common.codes.LeafCode``.
    view : ndarray, shape (scene, pixel), optional
        Share of the ground that the canopy lets through: float 0..1, or uint8 percent. None: 1 everywhere. NaN or
        255 counts as 1.
    fraction_sd : ndarray, shape (scene, pixel), optional
        Standard deviation of ``fraction`` as its model states it (float, or uint8 percent); only its relative size is
        used, the level is learnt.
    unlike : ndarray of bool, shape (scene, pixel), optional
        True where a pixel is far from all examples; it then counts a quarter.
    scene_reason : ndarray of text, shape (scene,), optional
        Why a whole scene is set aside (for example ``shift not known``); empty where it is not.
    """

    scene_id: np.ndarray
    datetime: np.ndarray
    fraction: np.ndarray
    code: np.ndarray
    wetland_id: np.ndarray
    leaf_state: np.ndarray
    view: np.ndarray | None = None
    fraction_sd: np.ndarray | None = None
    unlike: np.ndarray | None = None
    scene_reason: np.ndarray | None = None

    def __post_init__(self) -> None:
        """Check shapes and names."""
        scenes = len(self.scene_id)
        if self.fraction.ndim != 2 or self.fraction.shape[0] != scenes or len(self.datetime) != scenes:
            text = (
                f"stack: fraction has shape {self.fraction.shape} for {scenes} scene ids and {len(self.datetime)} times; "
                "(scene, pixel) is needed; stack one row a scene"
            )
            raise InputError(text)
        for name in ("code", "view", "fraction_sd", "unlike"):
            value = getattr(self, name)
            if value is not None and value.shape != self.fraction.shape:
                text = f"stack: {name} has shape {value.shape}, fraction {self.fraction.shape}; they must agree; stack alike"
                raise InputError(text)
        if self.leaf_state.shape != (scenes, len(self.wetland_id)):
            text = (
                f"stack: leaf_state has shape {self.leaf_state.shape}; (scene, wetland) = "
                f"{(scenes, len(self.wetland_id))} is needed; give one code a scene and wetland"
            )
            raise InputError(text)
        if self.scene_reason is not None and len(self.scene_reason) != scenes:
            text = f"stack: {len(self.scene_reason)} scene reasons for {scenes} scenes; give one a scene, empty if none"
            raise InputError(text)
        names = pd.Index(self.scene_id)
        if names.has_duplicates:
            text = (
                f"stack: scene_id {names[names.duplicated()][0]!r} occurs twice; ids must be unique; drop or rename one"
            )
            raise InputError(text)

    def pick(self, scenes: np.ndarray) -> SceneStack:
        """Return the stack of some scenes (index or boolean array)."""
        values = {}
        for name in self.__slots__:
            value = getattr(self, name)
            values[name] = value if value is None or name == "wetland_id" else value[scenes]
        return SceneStack(**values)


@dataclass(frozen=True, slots=True, kw_only=True)
class ExtentOptions:
    """Settings of observed extent.

    Attributes
    ----------
    levels : int
        Steps of wetland area, from dry to full, over which the posterior is computed.
    good_clear, good_view : float
        Clear fraction and view fraction from which a view teaches shapes and noise.
    least_view : float
        View fraction below which a view is not used.
    ice_share : float
        Share of the wetland under snow or ice from which a view is not used: what is left is likely ice too.
    widest_sd : float
        A view is not used when its sd exceeds this share of the largest extent (a guess without any view has 0.29).
    sample_wetlands : int
        Wetlands from which noise shared by all is learnt, picked by name.
    rounds : int
        Rounds of learning shapes and noise in turn.
    seed : int
    """

    levels: int = 64
    good_clear: float = 0.9
    good_view: float = 0.6
    least_view: float = 0.3
    ice_share: float = 0.2
    widest_sd: float = 0.25
    sample_wetlands: int = 300
    rounds: int = 4
    seed: int = 0


NEAR_STEPS = sorted(
    ((i, j) for i in (-2, -1, 0, 1, 2) for j in (-2, -1, 0, 1, 2) if (i, j) != (0, 0)),
    key=lambda ij: (max(abs(ij[0]), abs(ij[1])), abs(ij[0]) + abs(ij[1]), ij),
)
"""Row and column steps to the 24 neighbours, nearest first."""


def as_fraction(values: np.ndarray) -> np.ndarray:
    """Return float32 fractions with NaN from float values or uint8 percent with 255 missing."""
    if values.dtype == np.uint8:
        out = values.astype(np.float32) * np.float32(0.01)
        out[values == 255] = np.nan
        return out
    return values.astype(np.float32)


def weights_on_site(weights: pd.DataFrame, site: Site) -> pd.DataFrame:
    """Add the position in the site to a weight table, and the pixels that touch each wetland from outside.

    Water that coarser bands, point spread or shift carry over the outline shows in the touching pixels; they join with
    share 0 as far as they are site pixels (build the site with a margin of one pixel or more).

    Parameters
    ----------
    weights : DataFrame
        From :func:`inundate.extent.pixel_weights`, all wetlands of the area.
    site : Site
        Holds every pixel of the table.

    Returns
    -------
    DataFrame
        The table with ``pixel`` (int64, position in the site), and the rows of share 0; sorted by wetland_id, row, col.

    Raises
    ------
    InputError
        A pixel of the table is not in the site.
    """
    place = site.positions(weights["row"].to_numpy(), weights["col"].to_numpy())
    if (place < 0).any():
        bad = weights.iloc[int(np.flatnonzero(place < 0)[0])]
        text = (
            f"weights: pixel row {bad['row']}, column {bad['col']} of wetland {bad['wetland_id']!r} is not a site pixel; "
            "build the site from the same weights"
        )
        raise InputError(text)
    own = weights.assign(pixel=place)
    steps = [own.assign(row=own["row"] + i, col=own["col"] + j) for i, j in NEAR_STEPS[:8]]
    ring = pd.concat(steps, ignore_index=True).drop_duplicates(["wetland_id", "row", "col"])
    ring["pixel"] = site.positions(ring["row"].to_numpy(), ring["col"].to_numpy())
    held = np.bincount(own["pixel"].to_numpy(), weights=own["share"].to_numpy(), minlength=max(site.size, 1))
    ring = ring[ring["pixel"] >= 0].assign(share=0.0)
    ring["other_share"] = np.minimum(held[ring["pixel"].to_numpy(np.int64)], 1.0)
    out = pd.concat([own, ring], ignore_index=True).drop_duplicates(["wetland_id", "row", "col"], keep="first")
    return out.sort_values(["wetland_id", "row", "col"], ignore_index=True)


@dataclass(frozen=True, slots=True)
class WetlandPixels:
    """Pixels of one wetland.

    Attributes
    ----------
    name : str
    area_max_m2 : float
    pixel : ndarray of int64, shape (n,)
        Position in the stack's pixel axis; -1 for the part of the wetland that lies off the grid, never seen.
    row, col : ndarray of int64, shape (n,)
    share, other : ndarray of float64, shape (n,)
        Share of the pixel inside this and inside other wetlands.
    area_m2 : ndarray of float64, shape (n,)
        Area of the wetland's part of each pixel; sums to ``area_max_m2``.
    near : ndarray of int64, shape (n, 24)
        Positions within this wetland of the pixels at most two rows and columns away, -1 where none; the first eight are
        those that touch: north, west, east, south, then the corners.
    """

    name: str
    area_max_m2: float
    pixel: np.ndarray
    row: np.ndarray
    col: np.ndarray
    share: np.ndarray
    other: np.ndarray
    area_m2: np.ndarray
    near: np.ndarray = field(repr=False)


def _neighbours(row: np.ndarray, col: np.ndarray) -> np.ndarray:
    """Return positions of the 24 neighbours of each pixel, -1 where not in the wetland."""
    out = np.full((row.size, 24), -1, np.int64)
    if not row.size:
        return out
    r, c = row - row.min() + 2, col - col.min() + 2
    place = np.full((int(r.max()) + 3, int(c.max()) + 3), -1, np.int64)
    place[r, c] = np.arange(row.size)
    for k, (i, j) in enumerate(NEAR_STEPS):
        out[:, k] = place[r + i, c + j]
    return out


def split_wetlands(weights: pd.DataFrame, wetlands: pd.DataFrame, pixel_area_m2: float) -> dict[str, WetlandPixels]:
    """Cut the weight table into wetlands.

    Parameters
    ----------
    weights : DataFrame
        ``wetland_id``, ``row``, ``col``, ``pixel``, ``share`` and ``other_share``; any row order.
    wetlands : DataFrame
        ``wetland_id`` and ``area_max_m2`` (or a geometry).
    pixel_area_m2 : float

    Returns
    -------
    dict of str to WetlandPixels
        In order of wetland_id; wetlands without pixels are held with none.

    Raises
    ------
    InputError
        A needed column is missing.
    """
    for column in ("wetland_id", "row", "col", "pixel", "share", "other_share"):
        if column not in weights.columns:
            text = f"weights: column {column!r} is missing; use pixel_weights and weights_on_site"
            raise InputError(text)
    ids = wetlands["wetland_id"].astype(str).to_numpy()
    if "area_max_m2" in wetlands.columns:
        largest = wetlands["area_max_m2"].to_numpy(float)
    elif hasattr(wetlands, "geometry"):
        largest = wetlands.geometry.area.to_numpy(float)
    else:
        text = "wetlands: column 'area_max_m2' is missing; add the polygon area in m2"
        raise InputError(text)
    table = weights.sort_values(["wetland_id", "row", "col"], ignore_index=True)
    names = table["wetland_id"].astype(str).to_numpy()
    first, last = np.searchsorted(names, ids, "left"), np.searchsorted(names, ids, "right")
    arrays = {c: table[c].to_numpy() for c in ("row", "col", "pixel", "share", "other_share")}
    out = {}
    for i in np.argsort(ids, kind="stable"):
        mine = slice(int(first[i]), int(last[i]))
        row, col, pixel, share, other = (arrays[c][mine] for c in ("row", "col", "pixel", "share", "other_share"))
        area = share * pixel_area_m2
        missing = largest[i] - area.sum()
        if missing > 0.005 * largest[i]:
            row, col = np.append(row, row[-1:] if row.size else [0]), np.append(col, col[-1:] if col.size else [0])
            pixel, area = np.append(pixel, -1), np.append(area, missing)
            share, other = np.append(share, missing / pixel_area_m2), np.append(other, 0.0)
        elif area.size:
            area = area * (largest[i] / area.sum())
        near = _neighbours(row, col)
        near[np.asarray(pixel) < 0] = -1
        out[str(ids[i])] = WetlandPixels(
            str(ids[i]), float(largest[i]), pixel.astype(np.int64), row, col, share, other, area, near
        )
    return out
