"""The reference that places views: built from many of them, so that their own errors of place average out."""

from __future__ import annotations

import warnings
from collections.abc import Hashable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy import ndimage

from inundate.common.errors import InputError
from inundate.common.grid import Window
from inundate.scenes.alignment import Alignment, Points, align
from inundate.scenes.structure import pick_points, structure_stack
from inundate.scenes.view import View

CHANNELS = ("green", "red", "nir", "swir16")


@dataclass(frozen=True, slots=True)
class ShiftOptions:
    """How shifts are judged.

    Attributes
    ----------
    reach_px : int
        Whole pixels searched on each side; a shift beyond ``limit_px`` (or at the end of the search) is refused.
    limit_px : float
    sd_px : float
        Greatest standard deviation of a shift that is corrected.
    max_views : int
        Views taken into one look of the reference, the clearest.
    rounds : int
        Rounds of placing views and building the look again.
    """

    reach_px: int = 4
    limit_px: float = 3.0
    sd_px: float = 0.2
    max_views: int = 20
    rounds: int = 3


@dataclass(frozen=True, slots=True)
class Shift:
    """Where a view lies against the reference.

    Attributes
    ----------
    dx_px, dy_px : float
        The view shows at ``(row + dy_px, column + dx_px)`` what the reference shows at ``(row, column)``: positive to the
        east and to the south. 0 where nothing could be found.
    sd_px : float
        Standard deviation of either, infinite where nothing could be found.
    confident : bool
        To be corrected.
    n : int
        Cells that took part.
    outcome : str
        ``confident``; ``unsure`` (use the view as it lies); ``beyond`` (lies further off than the limit: set it aside).
    explained : float
        Share of the view's local variance that the reference explains, 0..1.
    """

    dx_px: float
    dy_px: float
    sd_px: float
    confident: bool
    n: int
    outcome: Literal["confident", "unsure", "beyond"]
    explained: float


NO_SHIFT = Shift(0.0, 0.0, float("inf"), False, 0, "unsure", 0.0)


@dataclass(frozen=True, slots=True)
class Look:
    """One look of the ground, such as leaf-off.

    Attributes
    ----------
    name : str
    image, spread : ndarray of float32, shape (window, channel, row, column)
        Median structure and its standard deviation in time.
    dx_px, dy_px : float
        Place of the look against the reference's anchor.
    points : Points
    n_views : int
    """

    name: str
    image: np.ndarray
    spread: np.ndarray
    dx_px: float
    dy_px: float
    points: Points
    n_views: int


class Reference:
    """Places views by the steady ground of an area.

    Made by :meth:`from_views` or :meth:`from_arrays`. Its anchor is the mean place of the views that it was built from:
    errors of place average out, ``anchor_sd_px`` tells how far.

    Parameters
    ----------
    windows : sequence of Window
    channels : sequence of str
    looks : sequence of Look
    anchor_sd_px : float
    options : ShiftOptions
    """

    def __init__(
        self,
        windows: Sequence[Window],
        channels: Sequence[str],
        looks: Sequence[Look],
        *,
        anchor_sd_px: float = float("nan"),
        options: ShiftOptions | None = None,
    ) -> None:
        self.windows = tuple(windows)
        self.channels = tuple(channels)
        self.looks = tuple(looks)
        self.anchor_sd_px = anchor_sd_px
        self.options = options or ShiftOptions()

    @classmethod
    def from_views(
        cls,
        views: Iterable[View],
        *,
        groups: Mapping[str, Hashable] | None = None,
        channels: Sequence[str] = CHANNELS,
        options: ShiftOptions | None = None,
    ) -> Reference:
        """Build a reference.

        Within each group the clearest views (then by scene_id) are taken; their median gives a first look, each view is
        placed against it, the places are freed of their mean, the views are moved there and the median is taken again.
        Groups are tied by their shift against the largest one, weighed with the expectation that both means are at the
        same place.

        Parameters
        ----------
        views : iterable of View
            All read with the same windows; clear ones with leaves off, and others in groups of their own.
        groups : mapping of scene_id to label, optional
            Such as the leaf state; all in one group by default.
        channels : sequence of str
            Band roles used; those in no view are dropped.
        options : ShiftOptions, optional

        Raises
        ------
        InputError
            No view, or views with different windows, or with nothing clear.
        """
        options = options or ShiftOptions()
        pools, windows, present = _pools(views, groups, tuple(channels), options)
        built = []
        for name in sorted(pools, key=str):
            pool = sorted(pools[name], key=lambda one: (-one[1], one[0]))[: options.max_views]
            built.append(_build_look(str(name), np.stack([one[2] for one in sorted(pool)]), options))
        order = sorted(range(len(built)), key=lambda i: (-built[i][0].n_views, built[i][0].name))
        looks, anchor_sd = _tie([built[i] for i in order], options)
        return cls(windows, present, looks, anchor_sd_px=anchor_sd, options=options)

    def shift(self, view: View) -> Shift:
        """Find where a view lies.

        Parameters
        ----------
        view : View
            Read with the reference's ``windows`` (and any others).

        Returns
        -------
        Shift
            Against the look that explains the view best.
        """
        stack = structure_stack(view, self.windows, self.channels)
        found = [(look, align(look.points, stack, reach=self.options.reach_px)) for look in self.looks]
        good = [(look, one) for look, one in found if one is not None]
        if not good:
            return NO_SHIFT
        look, best = min(good, key=lambda pair: (pair[1].at_border, pair[1].sd_px, pair[0].name))
        return _judge(best, look, self.options)

    def moved(self, dx_px: float, dy_px: float) -> Reference:
        """Return the same reference with another anchor: every shift it finds becomes smaller by these.

        To anchor on the mean place of many more scenes than it was built from, pass the mean of their shifts.
        """
        looks = [
            Look(one.name, one.image, one.spread, one.dx_px - dx_px, one.dy_px - dy_px, one.points, one.n_views)
            for one in self.looks
        ]
        return Reference(self.windows, self.channels, looks, anchor_sd_px=self.anchor_sd_px, options=self.options)

    def to_arrays(self) -> dict[str, np.ndarray]:
        """Return the reference as plain arrays, to be kept with ``numpy.savez``."""
        out = {
            "windows": np.array([(w.row0, w.row1, w.col0, w.col1) for w in self.windows], np.int64).reshape(-1, 4),
            "channels": np.array(self.channels, "U16"),
            "looks": np.array([one.name for one in self.looks], "U64"),
            "places": np.array([(one.dx_px, one.dy_px, one.n_views) for one in self.looks], float).reshape(-1, 3),
            "anchor_sd_px": np.array(self.anchor_sd_px),
            "options": np.array(
                [
                    self.options.reach_px,
                    self.options.limit_px,
                    self.options.sd_px,
                    self.options.max_views,
                    self.options.rounds,
                ],
                float,
            ),
        }
        for number, one in enumerate(self.looks):
            out[f"image_{number}"] = one.image
            out[f"spread_{number}"] = one.spread
        return out

    @classmethod
    def from_arrays(cls, arrays: Mapping[str, np.ndarray]) -> Reference:
        """Make a reference again from :meth:`to_arrays`."""
        told = np.asarray(arrays["options"], float)
        options = ShiftOptions(int(told[0]), float(told[1]), float(told[2]), int(told[3]), int(told[4]))
        windows = [Window(*(int(v) for v in row)) for row in np.asarray(arrays["windows"])]
        looks = []
        for number, name in enumerate(np.asarray(arrays["looks"])):
            image = np.asarray(arrays[f"image_{number}"], np.float32)
            spread = np.asarray(arrays[f"spread_{number}"], np.float32)
            dx, dy, n = np.asarray(arrays["places"], float)[number]
            looks.append(Look(str(name), image, spread, dx, dy, pick_points(image, spread), int(n)))
        channels = [str(one) for one in np.asarray(arrays["channels"])]
        return cls(windows, channels, looks, anchor_sd_px=float(arrays["anchor_sd_px"]), options=options)


def _judge(best: Alignment, look: Look, options: ShiftOptions) -> Shift:
    dx, dy = best.dx_px + look.dx_px, best.dy_px + look.dy_px
    sure = best.sd_px <= options.sd_px and best.n_cells >= 3
    outcome: Literal["confident", "unsure", "beyond"] = "confident" if sure else "unsure"
    if sure and (best.at_border or np.hypot(dx, dy) > options.limit_px):
        outcome = "beyond"
    elif best.at_border:
        outcome = "unsure"
    return Shift(float(dx), float(dy), best.sd_px, outcome == "confident", best.n_cells, outcome, best.explained)


def _pools(
    views: Iterable[View], groups: Mapping[str, Hashable] | None, channels: tuple[str, ...], options: ShiftOptions
) -> tuple[dict[Hashable, list[tuple[str, float, np.ndarray]]], tuple[Window, ...], tuple[str, ...]]:
    """Turn views into structure stacks by group, no more of each than can be used."""
    pools: dict[Hashable, list[tuple[str, float, np.ndarray]]] = {}
    windows: tuple[Window, ...] = ()
    present: set[str] = set()
    for view in views:
        mine = tuple(block.window for block in view.blocks)
        windows = windows or mine
        if mine != windows or not windows:
            message = (
                f"scene {view.scene_id}: read with other windows than the first view of the reference; read all alike"
            )
            raise InputError(message)
        stack = structure_stack(view, windows, channels)
        seen = float(np.isfinite(stack).mean())
        if seen == 0.0:
            continue
        present.update(set(view.bands) & set(channels))
        pool = pools.setdefault("all" if groups is None else groups.get(view.scene_id, "other"), [])
        pool.append((view.scene_id, seen, stack))
        if len(pool) > 2 * options.max_views:
            pool.sort(key=lambda one: (-one[1], one[0]))
            del pool[options.max_views :]
    if not pools:
        message = "reference: no view with a clear pixel in its windows; choose clearer scenes or other windows"
        raise InputError(message)
    kept = tuple(role for role in channels if role in present)
    index = [channels.index(role) for role in kept]
    for pool in pools.values():
        pool[:] = [(name, seen, stack[:, index]) for name, seen, stack in pool]
    return pools, windows, kept


def _median(stacks: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return median and robust standard deviation over views; NaN where fewer than a third (at least one) see it."""
    need = max(1, len(stacks) // 3)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)
        middle = np.nanmedian(stacks, axis=0)
        spread = 1.4826 * np.nanmedian(np.abs(stacks - middle), axis=0)
    middle[np.isfinite(stacks).sum(axis=0) < need] = np.nan
    return middle.astype(np.float32), spread.astype(np.float32)


def _build_look(name: str, stacks: np.ndarray, options: ShiftOptions) -> tuple[Look, np.ndarray]:
    """Return a look and the variance of its views' places (x, y)."""
    image, spread = _median(stacks)
    places = np.zeros((len(stacks), 2))
    if len(stacks) > 1:
        for _ in range(options.rounds):
            points = pick_points(image, spread)
            sure = np.zeros(len(stacks), bool)
            for number, stack in enumerate(stacks):
                found = align(points, stack, reach=options.reach_px) if points.value.size else None
                if found is not None and not found.at_border and found.sd_px <= 2 * options.sd_px:
                    places[number] = found.dx_px, found.dy_px
                    sure[number] = True
            if not sure.any():
                break
            places[sure] -= places[sure].mean(axis=0)
            placed = np.stack([_move(stack, *place) for stack, place in zip(stacks[sure], places[sure], strict=True)])
            image, spread = _median(placed)
    variance = places.var(axis=0, ddof=1) if len(stacks) > 1 else np.full(2, 0.25)
    return Look(name, image, spread, 0.0, 0.0, pick_points(image, spread), len(stacks)), variance


def _move(stack: np.ndarray, dx: float, dy: float) -> np.ndarray:
    """Bring a stack to its place: cubic spline, NaN spread by linear footprint."""
    out = np.empty_like(stack)
    for w in range(stack.shape[0]):
        for c in range(stack.shape[1]):
            plane = stack[w, c]
            known = np.isfinite(plane)
            moved = ndimage.shift(np.where(known, plane, 0.0), (-dy, -dx), order=3, mode="nearest")
            safe = ndimage.shift(known.astype(np.float32), (-dy, -dx), order=1, mode="constant")
            out[w, c] = np.where(safe > 0.999, moved, np.nan)
    return out


def _tie(built: list[tuple[Look, np.ndarray]], options: ShiftOptions) -> tuple[list[Look], float]:
    """Place all looks on one anchor: the mean place of all views."""
    first, first_var = built[0]
    places, sizes = [np.zeros(2)], [first.n_views]
    for look, variance in built[1:]:
        prior = variance / look.n_views + first_var / first.n_views
        found = align(first.points, look.image, reach=options.reach_px) if first.points.value.size else None
        place = np.zeros(2)
        if found is not None and np.isfinite(found.sd_px) and not found.at_border:
            place = np.array([found.dx_px, found.dy_px]) * prior / (prior + found.sd_px**2)
        places.append(place)
        sizes.append(look.n_views)
    table = np.array(places)
    table -= np.average(table, axis=0, weights=sizes)
    looks = [
        Look(one.name, one.image, one.spread, float(place[0]), float(place[1]), one.points, one.n_views)
        for (one, _), place in zip(built, table, strict=True)
    ]
    spread = np.average([var.mean() for _, var in built], weights=sizes)
    return looks, float(np.sqrt(spread / sum(sizes)))
