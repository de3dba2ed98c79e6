"""Small pictures of a wetland in its scenes: true and false colour beside water probability."""

from __future__ import annotations

import base64
import struct
import zlib
from dataclasses import dataclass

import numpy as np
import pandas as pd

from inundate.common.codes import LEAF_STATES, MAP_NOT_SEEN

MOST_SIDE_PX = 72
_NOT_SEEN = np.array([118, 118, 118], np.uint8)


@dataclass(frozen=True, slots=True)
class Thumbnail:
    """One wetland in one scene.

    Attributes
    ----------
    scene_id : str
    true_colour, false_colour, probability : bytes
        PNG pictures of the same size; grey where the ground was not seen.
    bounds : tuple of float
        West, south, east, north of the picture, m.
    size : tuple of int
        Width and height, pixels.
    """

    scene_id: str
    true_colour: bytes
    false_colour: bytes
    probability: bytes
    bounds: tuple[float, float, float, float]
    size: tuple[int, int]


def choose_views(observed: pd.DataFrame, most: int = 6) -> list[str]:
    """Choose the views of one wetland that tell most.

    Parameters
    ----------
    observed : DataFrame
        One wetland's rows of extent_observed.
    most : int

    Returns
    -------
    list of str
        Scene ids by time: the newest used view of each leaf state, then the used views of largest and least extent, then
        the newest used ones; only views with at least half of the wetland clear, where there are any.
    """
    used = observed[observed["used"].astype(bool)].sort_values(["datetime", "scene_id"])
    clear = used[used["clear_fraction"] >= 0.5]
    used = clear if len(clear) else used
    if used.empty:
        return []
    wanted = [rows["scene_id"].iloc[-1] for s in LEAF_STATES if len(rows := used[used["leaf_state"] == s])]
    sized = used.dropna(subset=["area_m2"])
    if len(sized):
        area, scene = sized["area_m2"].to_numpy(float), sized["scene_id"].to_numpy(object)
        wanted += [scene[area.argmax()], scene[area.argmin()]]
    wanted += used["scene_id"].iloc[::-1].head(most).tolist()
    chosen = set(list(dict.fromkeys(wanted))[:most])
    return [str(s) for s in used["scene_id"].drop_duplicates() if s in chosen]


def png(pixels: np.ndarray) -> bytes:
    """Return an 8-bit RGB PNG of pixels (row, column, 3); the same pixels give the same bytes."""
    height, width, _ = pixels.shape
    raw = np.concatenate([np.zeros((height, 1), np.uint8), pixels.reshape(height, -1)], axis=1).tobytes()

    def chunk(kind: bytes, body: bytes) -> bytes:
        return struct.pack(">I", len(body)) + kind + body + struct.pack(">I", zlib.crc32(kind + body))

    head = struct.pack(">IIBBBBB", width, height, 8, 2, 0, 0, 0)
    return b"\x89PNG\r\n\x1a\n" + chunk(b"IHDR", head) + chunk(b"IDAT", zlib.compress(raw, 9)) + chunk(b"IEND", b"")


def data_uri(picture: bytes) -> str:
    """Return a PNG as a data address."""
    return "data:image/png;base64," + base64.b64encode(picture).decode()


def _colour(bands: tuple[np.ndarray, np.ndarray, np.ndarray], most: tuple[float, float, float]) -> np.ndarray:
    """Stretch three bands by fixed limits and a square root, so that views of different days can be compared."""
    parts = [np.sqrt(np.clip(np.nan_to_num(b) / m, 0.0, 1.0)) * 255.0 for b, m in zip(bands, most, strict=True)]
    out = np.stack(parts, axis=-1).astype(np.uint8)
    out[~np.isfinite(np.stack(bands)).all(axis=0)] = _NOT_SEEN
    return out


def _probability(percent: np.ndarray) -> np.ndarray:
    """Colour water probability, percent, by ColorBrewer's Blues (Harrower and Brewer, 2003)."""
    from matplotlib import colormaps

    table = (colormaps["Blues"](np.linspace(0.0, 1.0, 101))[:, :3] * 255.0).astype(np.uint8)
    out = table[np.minimum(percent, 100)]
    out[percent == MAP_NOT_SEEN] = _NOT_SEEN
    return out


def paint_view(
    scene_id: str, bands: dict[str, np.ndarray], percent: np.ndarray, bounds: tuple[float, float, float, float]
) -> Thumbnail:
    """Paint one wetland in one scene.

    Parameters
    ----------
    scene_id : str
    bands : dict of str to ndarray of float32, shape (row, column)
        ``blue green red nir`` reflectance 0..1, NaN where not seen; a band that is missing is drawn grey.
    percent : ndarray of uint8, shape (row, column)
        Water probability, 255 where not seen.
    bounds : tuple of float
        West, south, east, north, m.

    Returns
    -------
    Thumbnail
        Pictures longer than 72 pixels are thinned by whole steps.
    """
    step = -(-max(percent.shape) // MOST_SIDE_PX)
    percent = percent[::step, ::step]
    blank = np.full(percent.shape, np.nan, np.float32)
    blue, green, red, nir = (bands[b][::step, ::step] if b in bands else blank for b in ("blue", "green", "red", "nir"))
    return Thumbnail(
        str(scene_id),
        png(_colour((red, green, blue), (0.25, 0.25, 0.25))),
        png(_colour((nir, red, green), (0.5, 0.25, 0.25))),
        png(_probability(percent)),
        bounds,
        (percent.shape[1], percent.shape[0]),
    )
