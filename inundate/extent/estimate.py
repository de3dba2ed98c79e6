"""Area and sd of one wetland in each scene, from its visible pixels and its shape."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from inundate.common.codes import LeafCode, ViewCode
from inundate.extent.kernels import near_cloud, posteriors
from inundate.extent.noise import BAND_EDGES, NoiseModel, kind_of
from inundate.extent.stack import SceneStack, WetlandPixels, as_fraction

LEFT_OVER = 0.25
"""Part of a shape's variance that views do not remove: water does not always take the same way."""


@dataclass(frozen=True, slots=True)
class Shape:
    """How a wetland's pixels fill.

    Attributes
    ----------
    prior, filling : ndarray of float32, shape (pixel, step)
        Before and after looking at views.
    source : str
        ``cells``, ``order`` or ``outline``.
    departure_var : float
        Variance of a half-full pixel's water about ``filling``.
    n_views : int
        Good views that taught it.
    gain : ndarray of float32, shape (pixel,), or None
        Part of its water that each pixel shows when wet (plants that stand in it hide some); None: all of it.
    """

    prior: np.ndarray
    filling: np.ndarray
    source: str
    departure_var: float
    n_views: int
    gain: np.ndarray | None = None


@dataclass(frozen=True, slots=True)
class Views:
    """What all scenes show of one wetland's pixels; arrays (scene, pixel) but for the last five, (scene,).

    ``kind`` is -1 where not seen; ``clear_fraction`` and ``view_fraction`` are shares of the largest extent, as are
    ``ice`` (snow or ice), ``off`` (fill: outside the scene).
    """

    fraction: np.ndarray
    kind: np.ndarray
    widen: np.ndarray
    clear_fraction: np.ndarray
    view_fraction: np.ndarray
    ice: np.ndarray
    off: np.ndarray
    leaf: np.ndarray


def pick_views(views: Views, scenes: np.ndarray) -> Views:
    """Return the views of some scenes (index or boolean array)."""
    return Views(*(getattr(views, name)[scenes] for name in Views.__slots__))


def look(stack: SceneStack, wetland: WetlandPixels, leaf: np.ndarray) -> Views:
    """Gather one wetland's pixels from a stack.

    Parameters
    ----------
    stack : SceneStack
    wetland : WetlandPixels
    leaf : ndarray of uint8, shape (scene,)

    Returns
    -------
    Views
    """
    at, known = np.maximum(wetland.pixel, 0), wetland.pixel >= 0
    code = np.where(known[None, :], stack.code[:, at], np.uint8(ViewCode.FILL))
    fraction = np.clip(as_fraction(stack.fraction[:, at]), 0.0, 1.0)
    seen = (code == ViewCode.CLEAR) & np.isfinite(fraction)
    if stack.view is None:
        view = np.ones(fraction.shape, np.float32)
    else:
        view = np.clip(np.nan_to_num(as_fraction(stack.view[:, at]), nan=1.0), 0.0, 1.0)
    near = near_cloud(np.ascontiguousarray(code), wetland.near)
    kind = np.where(seen, kind_of(leaf[:, None], view, near), np.int16(-1)).astype(np.int16)
    widen = np.ones(fraction.shape, np.float32)
    if stack.fraction_sd is not None:
        var = as_fraction(stack.fraction_sd[:, at]) ** 2
        with np.errstate(invalid="ignore"):
            usual = 0.02 + 0.2 * fraction * (1 - fraction)
            widen = np.clip(np.nan_to_num(var / usual, nan=1.0), 0.5, 4.0).astype(np.float32)
    if stack.unlike is not None:
        widen = np.where(stack.unlike[:, at], widen * 4, widen).astype(np.float32)
    part = wetland.area_m2 / max(wetland.area_max_m2, 1e-9)
    return Views(
        np.nan_to_num(fraction),
        kind,
        widen,
        seen @ part,
        (seen * view) @ part,
        (code == ViewCode.SNOW_ICE) @ part,
        (code == ViewCode.FILL) @ part,
        leaf,
    )


def neighbour_mean(values: np.ndarray, wetland: WetlandPixels) -> np.ndarray:
    """Mean over the eight touching pixels, those outside the wetland counting 0; float64 (pixel, step)."""
    padded = np.vstack([values, np.zeros((1, values.shape[1]))])
    out = np.zeros(values.shape)
    for k in range(8):
        out += padded[wetland.near[:, k]]
    return out / 8.0


def shown(held: np.ndarray, steep: float, bend: float) -> np.ndarray:
    """Return what pixels show that hold a water fraction (after blur): odds to the power ``steep`` over ``bend``."""
    if steep == 1.0 and bend == 1.0:
        return held
    wet = held**steep
    return wet / (wet + bend * (1.0 - held) ** steep)


def expected_fraction(shape: Shape, wetland: WetlandPixels, noise: NoiseModel) -> np.ndarray:
    """Water fraction of whole pixels at each step of area, as scenes show it.

    Own part as the shape's ``filling`` has it, other wetlands' part as full as this one, then ``blur`` of it exchanged with the eight
    touching pixels (coarser bands, point spread and shift carry water over the outline). At last mixed pixels show what
    the larger part is more than it is, and less water than they hold: the logarithm of the odds of what is shown is
    ``steep`` times that of what is there, less the logarithm of ``bend`` (models lean to the likelier label; shallow
    margins and what grows at the rim look dry), times the pixel's own ``gain``.

    Returns
    -------
    ndarray of float32, shape (pixel, step)
    """
    filling = shape.filling
    steps = filling.shape[1]
    fullness = np.linspace(0.0, 1.0, steps)[None, :]
    e = np.clip(wetland.share[:, None] * filling + wetland.other[:, None] * fullness, 0.0, 1.0)
    if noise.blur != 0.0:
        e = np.clip(e + noise.blur * (neighbour_mean(e, wetland) - e), 0.0, 1.0)
    e = shown(e, noise.steep, noise.bend)
    if shape.gain is not None:
        e = e * shape.gain[:, None]
    return np.ascontiguousarray(e, dtype=np.float32)


def with_gradients(e: np.ndarray, wetland: WetlandPixels) -> np.ndarray:
    """Stack expected fractions with their change for a shift of one pixel along columns and rows: (3, pixel, step).

    Central differences; pixels not held count 0.
    """
    padded = np.vstack([e, np.zeros((1, e.shape[1]), e.dtype)])
    out = np.empty((3, *e.shape), np.float32)
    out[0] = e
    up, left, right, down = (padded[wetland.near[:, k]] for k in range(4))
    out[1], out[2] = 0.5 * (left - right), 0.5 * (up - down)
    return out


def seasons(views: Views, noise: NoiseModel) -> list[tuple[NoiseModel, np.ndarray]]:
    """Return the noise model of leaf-off scenes and that of all others, each with its scenes.

    Full wetlands teach ``bend`` with leaves off; under leaves, where canopies look like water as often as the reverse, it does
    not hold.
    """
    bare = views.leaf == int(LeafCode.LEAF_OFF)
    if noise.bend == 1.0 or bare.all():
        return [(noise, np.arange(bare.size))]
    return [(noise, np.flatnonzero(bare)), (replace(noise, bend=1.0), np.flatnonzero(~bare))]


def weigh(views: Views, shape: Shape, wetland: WetlandPixels, noise: NoiseModel) -> tuple[np.ndarray, np.ndarray]:
    """Posterior over steps of area (scene, step), and what :func:`posteriors` says beside it (scene, 4); float64."""
    strangers = 1.0 + 4.0 * np.minimum(wetland.other, 0.5)
    widen = np.ascontiguousarray(views.widen * strangers[None, :], dtype=np.float32)
    shared = np.array([noise.rho, noise.temper, noise.shift_px])
    fraction = np.ascontiguousarray(views.fraction, dtype=np.float32)
    post, rest = np.empty((fraction.shape[0], shape.filling.shape[1])), np.empty((fraction.shape[0], 4))
    for one, at in seasons(views, noise):
        e = with_gradients(expected_fraction(shape, wetland, one), wetland)
        post[at], rest[at] = posteriors(
            fraction[at], views.kind[at], widen[at], e, noise.table, shared, np.log(noise.area_prior)
        )
    return post, rest


def fitted_fraction(
    views: Views, found: tuple[np.ndarray, np.ndarray], shape: Shape, wetland: WetlandPixels, noise: NoiseModel
) -> tuple[np.ndarray, np.ndarray]:
    """Expected water fraction of whole pixels given what :func:`weigh` found: as the ground lies, and as shifted."""
    post, rest = found
    still, moved = np.empty(views.fraction.shape), np.empty(views.fraction.shape)
    for one, at in seasons(views, noise):
        e = with_gradients(expected_fraction(shape, wetland, one), wetland).astype(float)
        still[at] = post[at] @ e[0].T
        moved[at] = still[at] + rest[at, 2:3] * (post[at] @ e[1].T) + rest[at, 3:4] * (post[at] @ e[2].T)
    return still, np.clip(moved, 0.0, 1.0)


def pixel_terms(views: Views, noise: NoiseModel, e: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Unbiased water fraction of whole pixels, its variance, and the slope; (scene, pixel), 0 where not seen.

    ``e`` is the expected water fraction of whole pixels, (scene, pixel).
    """
    row = noise.table[np.maximum(views.kind, 0)]
    seen = views.kind >= 0
    slope = np.maximum(row[..., 1], 1e-3)
    var = (row[..., 2] + row[..., 3] * 4 * e * (1 - e)) * views.widen / slope**2
    value = (views.fraction - row[..., 0]) / slope
    return np.where(seen, value, 0.0), np.where(seen, var, 1e6), np.where(seen, slope, 0.0)


def areas(views: Views, shape: Shape, wetland: WetlandPixels, noise: NoiseModel) -> tuple[np.ndarray, np.ndarray]:
    """Mean area and sd (before scaling) of one wetland in each scene.

    The level that explains the visible pixels gives every pixel an expected filling; each visible pixel then moves from
    it towards what was seen, as far as the shape's departure variance outweighs the pixel's error.

    Returns
    -------
    area, sd : ndarray of float64, shape (scene,)
        Share of the largest extent, 0..1.
    """
    post, rest = weigh(views, shape, wetland, noise)
    steps = post.shape[1]
    level = np.linspace(0.0, 1.0, steps)
    mean = post @ level
    var = np.maximum(post @ level**2 - mean**2, 0.0) + 1.0 / (12.0 * (steps - 1) ** 2)
    var *= np.clip(rest[:, 0], 1.0, 4.0)
    filled = post @ shape.filling.T.astype(float)
    _, e = fitted_fraction(views, (post, rest), shape, wetland, noise)
    value, error, _ = pixel_terms(views, noise, e)
    mixed = 0.9 * 4 * filled * (1 - filled) + 0.02
    own = shape.departure_var * mixed * wetland.share[None, :] ** 2
    gain = np.where(views.kind >= 0, own / (own + error), 0.0)
    cell = wetland.area_m2 / np.maximum(wetland.share, 1e-12) / wetland.area_max_m2
    part = 1.0 if shape.gain is None else shape.gain[None, :]
    move = gain * np.clip((value - e) / part, -1.0, 1.0) * (1.0 - wetland.other[None, :])
    area = mean + move @ cell
    var += 2.0 * (own * (1 - gain)) @ cell**2
    var += noise.steady_var * (4 * mean * (1 - mean) * 0.9 + 0.1)
    return np.clip(area, 0.0, 1.0), np.sqrt(var)


def band_of(view_fraction: np.ndarray) -> np.ndarray:
    """Band of view (int64) in which a view fraction lies."""
    return np.digitize(view_fraction, BAND_EDGES)
