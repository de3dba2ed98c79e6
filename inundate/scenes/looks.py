"""Looks of the ground: one a season, each the median of many views brought to one place."""

from __future__ import annotations

from collections.abc import Hashable, Iterable, Mapping
from dataclasses import dataclass, replace

import numpy as np

from inundate.common.errors import InputError
from inundate.common.grid import Window
from inundate.scenes.alignment import Points, align
from inundate.scenes.kernels import median_and_spread, shift_block
from inundate.scenes.normalise import Levels, level_places, take_levels
from inundate.scenes.structure import pick_points, structure_stack
from inundate.scenes.view import View

_LONE_VARIANCE_PX2 = 0.25
"""Variance of a single view's place, pixels squared, where nothing tells it (half a pixel; common practice, no source)."""


@dataclass(frozen=True, slots=True)
class ShiftOptions:
    """How shifts are judged.

    Attributes
    ----------
    reach_px : int
        Whole pixels searched on each side; a shift beyond ``limit_px`` (or at the end of the search) is refused.
    limit_px : float
    sd_px : float
        Greatest standard deviation of a shift that is corrected; half of it where the thirds of the ground, searched on
        their own, do not agree.
    max_views : int
        Views taken into one look of the reference, the clearest.
    rounds : int
        Rounds of placing views and building the look again.
    """

    reach_px: int = 4
    limit_px: float = 3.0
    sd_px: float = 0.15
    max_views: int = 20
    rounds: int = 3


@dataclass(frozen=True, slots=True)
class Look:
    """One look of the ground, such as leaf-off.

    Attributes
    ----------
    name : str
    image, spread : ndarray of float32, shape (window, channel, row, column)
        Median structure and its standard deviation in time.
    levels : Levels
        Reflectance of its ground.
    points : Points
        Pixels that serve for alignment.
    n_views : int
    dx_px, dy_px : float
        Place of the look against the reference's anchor.
    """

    name: str
    image: np.ndarray
    spread: np.ndarray
    levels: Levels
    points: Points
    n_views: int
    dx_px: float = 0.0
    dy_px: float = 0.0


@dataclass(frozen=True, slots=True)
class _Taken:
    """What is kept of one view while a reference is built."""

    scene_id: str
    seen: float
    stack: np.ndarray
    levels: np.ndarray


@dataclass(frozen=True, slots=True)
class Pools:
    """Views taken for a reference, by group."""

    taken: dict[str, list[_Taken]]
    windows: tuple[Window, ...]
    channels: tuple[str, ...]
    bands: tuple[str, ...]


def take_views(
    views: Iterable[View], groups: Mapping[str, Hashable] | None, channels: tuple[str, ...], most: int
) -> Pools:
    """Turn views into structure stacks and levels by group, the ``most`` clearest of each (then by scene_id).

    Raises
    ------
    InputError
        No view, views with different windows or bands, or nothing clear.
    """
    taken: dict[str, list[_Taken]] = {}
    windows: tuple[Window, ...] = ()
    bands: tuple[str, ...] = ()
    for view in views:
        mine = tuple(block.window for block in view.blocks)
        windows, bands = windows or mine, bands or view.bands
        if mine != windows or not windows or view.bands != bands:
            message = f"scene {view.scene_id}: read with other windows or bands than the first view; read all alike"
            raise InputError(message)
        kept = tuple(role for role in channels if role in bands)
        stack = structure_stack(view, windows, kept)
        seen = float(np.isfinite(stack).mean()) if stack.size else 0.0
        if seen == 0.0:
            continue
        pool = taken.setdefault("all" if groups is None else str(groups.get(view.scene_id, "other")), [])
        pool.append(_Taken(view.scene_id, seen, stack, take_levels(view, windows, bands, level_places(windows))))
        if len(pool) > most:
            pool.sort(key=lambda one: (-one.seen, one.scene_id))
            pool.pop()
    if not taken:
        message = "reference: no view with a clear pixel in its windows; choose clearer scenes or other windows"
        raise InputError(message)
    return Pools(taken, windows, tuple(role for role in channels if role in bands), bands)


def build_looks(pools: Pools, options: ShiftOptions) -> tuple[list[Look], float]:
    """Build the looks of all groups on one anchor; also return the standard deviation of the anchor's place, pixels."""
    built = []
    for name in sorted(pools.taken):
        members = sorted(pools.taken[name], key=lambda one: one.scene_id)
        image, spread, variance = _settle(np.stack([one.stack for one in members]), options)
        value, calm = _median(np.stack([one.levels for one in members]))
        levels = Levels(pools.bands, value, calm, *level_places(pools.windows), len(members))
        built.append((Look(name, image, spread, levels, pick_points(image, spread), len(members)), variance))
    built.sort(key=lambda pair: (-pair[0].n_views, pair[0].name))
    return _tie(built, options)


def _median(stacks: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return median and robust standard deviation over views; NaN where fewer than a third (at least one) see it."""
    flat = np.ascontiguousarray(stacks.reshape(len(stacks), -1))
    middle, spread = median_and_spread(flat, max(1, len(stacks) // 3))
    return middle.reshape(stacks.shape[1:]), spread.reshape(stacks.shape[1:])


def _settle(stacks: np.ndarray, options: ShiftOptions) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return image and spread of views brought to their mean place, and the variance of their places (x, y)."""
    image, spread = _median(stacks)
    if len(stacks) == 1:
        return image, spread, np.full(2, _LONE_VARIANCE_PX2)
    places = np.zeros((len(stacks), 2))
    for _ in range(options.rounds):
        points = pick_points(image, spread)
        sure = np.zeros(len(stacks), bool)
        for number, stack in enumerate(stacks):
            found = align(points, stack, reach=options.reach_px)
            if found is not None and not found.at_border and found.sd_px <= options.sd_px:
                places[number] = found.dx_px, found.dy_px
                sure[number] = True
        if not sure.any():
            break
        places[sure] -= places[sure].mean(axis=0)
        image, spread = _median(
            np.stack([_move(stack, *place) for stack, place in zip(stacks[sure], places[sure], strict=True)])
        )
    return image, spread, places.var(axis=0, ddof=1)


def _move(stack: np.ndarray, dx: float, dy: float) -> np.ndarray:
    """Bring a stack to its place by cubic convolution; NaN wherever a tap is."""
    out = np.empty_like(stack)
    code = np.zeros(stack.shape[2:], np.uint8)
    for w in range(stack.shape[0]):
        shift_block(stack[w], code, dy, dx, out[w], np.empty_like(code), strict=True)
    return out


def _tie(built: list[tuple[Look, np.ndarray]], options: ShiftOptions) -> tuple[list[Look], float]:
    """Place all looks on one anchor: the mean place of all views.

    A look's place against the first is its measured shift, weighed with the expectation that the mean places of both
    groups are the same within their standard errors.
    """
    first, first_var = built[0]
    places, sizes = [np.zeros(2)], [first.n_views]
    for look, variance in built[1:]:
        prior = variance / look.n_views + first_var / first.n_views
        found = align(first.points, look.image, reach=options.reach_px)
        place = np.zeros(2)
        if found is not None and np.isfinite(found.sd_px) and not found.at_border:
            place = np.array([found.dx_px, found.dy_px]) * prior / (prior + found.sd_px**2)
        places.append(place)
        sizes.append(look.n_views)
    table = np.array(places)
    table -= np.average(table, axis=0, weights=sizes)
    looks = [
        replace(one, dx_px=float(place[0]), dy_px=float(place[1])) for (one, _), place in zip(built, table, strict=True)
    ]
    spread = np.average([var.mean() for _, var in built], weights=sizes)
    return looks, float(np.sqrt(spread / sum(sizes)))
