"""Detail of fine bands lent to coarse ones (20 m bands on a 10 m grid), by the slopes of an area's own edges.

High-pass fusion: a coarse band interpolated to fine pixels lacks what the fine bands show within its own pixel. That part
(a fine band less its mean at the coarse band's sharpness) times the slope of the coarse on the fine bands is added. Slopes
are fitted once for an area, over many views, at the coarse sharpness, where both are seen; so they do not depend on which
windows of a view are read. High-pass methods: Schowengerdt 1980 (Photogramm. Eng. Remote Sens. 46:1325, from memory);
regression on coarse sharpness carried to the fine one: Wang et al. 2016 (Remote Sens. Environ. 187:241, from memory).
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from inundate.common.codes import ViewCode
from inundate.common.errors import InputError
from inundate.scenes.view import Block, View

MARGIN_PX = 2
"""Blocks must reach so much further than what is needed: nearer to their edge no detail is added."""
_SHARPNESS = np.array([1.0, 4.0, 6.0, 4.0, 1.0], np.float32) / 16.0
"""A box two pixels wide, then linear interpolation between such boxes: together a variance of one pixel squared."""
_SMOOTH_PX = 15
_RIDGE = 1e-3
_MIN_PIXELS = 500


@dataclass(frozen=True, slots=True)
class Detail:
    """Slopes of coarse bands on fine ones.

    Attributes
    ----------
    fine, coarse : tuple of str
        Band roles.
    slopes : ndarray of float64, shape (fine, coarse)
    """

    fine: tuple[str, ...]
    coarse: tuple[str, ...]
    slopes: np.ndarray

    def to_arrays(self) -> dict[str, np.ndarray]:
        """Return plain arrays, to be kept with ``numpy.savez``."""
        return {
            "fine": np.array(self.fine, "U16"),
            "coarse": np.array(self.coarse, "U16"),
            "slopes": np.asarray(self.slopes, float),
        }

    @classmethod
    def from_arrays(cls, arrays: Mapping[str, np.ndarray]) -> Detail:
        """Make it again from :meth:`to_arrays`."""
        fine, coarse = (tuple(str(one) for one in np.asarray(arrays[key])) for key in ("fine", "coarse"))
        return cls(fine, coarse, np.asarray(arrays["slopes"], float))


def fit_detail(
    views: Iterable[View],
    *,
    fine: tuple[str, ...] = ("blue", "green", "red", "nir"),
    coarse: tuple[str, ...] = ("swir16", "swir22"),
) -> Detail:
    """Fit slopes over the clear ground of many views.

    Parameters
    ----------
    views : iterable of View
        Any order; blocks of some tens of pixels a side at least. Best of the season in which water is told (leaves off).
    fine, coarse : tuple of str
        Band roles on the grid's own pixels, and interpolated ones.

    Returns
    -------
    Detail

    Raises
    ------
    InputError
        A view lacks a band, or too few clear pixels in all views together.
    """
    parts = []
    for view in views:
        missing = [role for role in (*fine, *coarse) if role not in view.bands]
        if missing:
            message = f"scene {view.scene_id}: band {missing[0]} is needed to fit detail; read it or leave it out of the roles"
            raise InputError(message)
        for block in view.blocks:
            parts.append((view.scene_id, block.window.row0, block.window.col0, _equations(view, block, fine, coarse)))
    parts.sort(key=lambda one: one[:3])
    count = sum(one[3][2] for one in parts)
    if count < _MIN_PIXELS:
        message = (
            f"detail: {count} clear pixels in all views, {_MIN_PIXELS} are needed; give clearer views or larger windows"
        )
        raise InputError(message)
    matrix = np.sum([one[3][0] for one in parts], axis=0)
    right = np.sum([one[3][1] for one in parts], axis=0)
    ridge = _RIDGE * np.trace(matrix) / len(fine) * np.eye(len(fine))
    return Detail(fine, coarse, np.linalg.solve(matrix + ridge, right))


def add_detail(view: View, detail: Detail) -> View:
    """Add the fine bands' detail to a view's coarse bands.

    Parameters
    ----------
    view : View
        As read, before any shift.
    detail : Detail

    Returns
    -------
    View
        Coarse bands sharper where a pixel and all within ``MARGIN_PX`` are clear and inside the block; else as they were.
        The same view where it lacks a fine band.
    """
    coarse = [role for role in detail.coarse if role in view.bands]
    if not coarse or any(role not in view.bands for role in detail.fine):
        return view
    fine = [view.bands.index(role) for role in detail.fine]
    blocks = []
    for block in view.blocks:
        good = _all_clear(block.code)
        if not good.any():
            blocks.append(block)
            continue
        values = block.reflectance.copy()
        within = [np.where(good, values[k] - _coarse_sharpness(values[k]), np.float32(0.0)) for k in fine]
        for role in coarse:
            slopes = detail.slopes[:, detail.coarse.index(role)]
            target = values[view.bands.index(role)]
            for slope, part in zip(slopes, within, strict=True):
                target += np.float32(slope) * part
        blocks.append(Block(block.window, values, block.code))
    return View(view.scene_id, view.bands, tuple(blocks))


def _coarse_sharpness(plane: np.ndarray) -> np.ndarray:
    known = np.where(np.isfinite(plane), plane, np.float32(0.0))
    once = ndimage.convolve1d(known, _SHARPNESS, axis=0, mode="nearest")
    return ndimage.convolve1d(once, _SHARPNESS, axis=1, mode="nearest")


def _all_clear(code: np.ndarray, margin: int = MARGIN_PX) -> np.ndarray:
    return ndimage.minimum_filter(code == ViewCode.CLEAR, 2 * margin + 1, mode="constant", cval=0)


def _equations(
    view: View, block: Block, fine: tuple[str, ...], coarse: tuple[str, ...]
) -> tuple[np.ndarray, np.ndarray, int]:
    """Return the normal matrix, right side and pixels of one block, from what is left of the mean around each pixel."""
    good = _all_clear(block.code, MARGIN_PX + 2)
    n = int(good.sum())
    if n == 0:
        return np.zeros((len(fine), len(fine))), np.zeros((len(fine), len(coarse))), 0

    def edges(plane: np.ndarray) -> np.ndarray:
        known = np.where(np.isfinite(plane), plane, np.float32(np.nanmean(plane)))
        rest: np.ndarray = (known - ndimage.uniform_filter(known, _SMOOTH_PX))[good].astype(float)
        return rest

    x = np.stack([edges(_coarse_sharpness(block.reflectance[view.bands.index(role)])) for role in fine])
    y = np.stack([edges(block.reflectance[view.bands.index(role)]) for role in coarse])
    return x @ x.T, x @ y.T, n
