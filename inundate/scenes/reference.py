"""The reference that places views: built from many of them, so that their own errors of place average out."""

from __future__ import annotations

from collections.abc import Hashable, Iterable, Mapping, Sequence
from dataclasses import asdict, astuple, dataclass, replace
from typing import Literal

import numpy as np

from inundate.common.grid import Window
from inundate.scenes.alignment import Alignment, refine, search
from inundate.scenes.looks import Look, ShiftOptions, build_looks, take_views
from inundate.scenes.normalise import Gain, Levels, estimate_gain, level_places
from inundate.scenes.structure import pick_points, structure_stack
from inundate.scenes.view import View

CHANNELS = ("green", "red", "nir", "swir16")


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
    look : str
        Look of the reference that it was held against.
    """

    dx_px: float
    dy_px: float
    sd_px: float
    confident: bool
    n: int
    outcome: Literal["confident", "unsure", "beyond"]
    explained: float
    look: str = ""

    def as_dict(self) -> dict[str, object]:
        """Return plain values for JSON."""
        out = asdict(self)
        return {key: round(value, 5) if isinstance(value, float) else value for key, value in out.items()} | {
            "sd_px": round(self.sd_px, 5) if np.isfinite(self.sd_px) else None
        }


NO_SHIFT = Shift(0.0, 0.0, float("inf"), False, 0, "unsure", 0.0)
_MIN_CELLS = 6
_MIN_CELLS_BEYOND, _EXPLAINED_BEYOND = 16, 0.3  # a scene is not set aside on the word of a few cells


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
        pools = take_views(views, groups, tuple(channels), options.max_views)
        looks, anchor_sd = build_looks(pools, options)
        return cls(pools.windows, pools.channels, looks, anchor_sd_px=anchor_sd, options=options)

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
        if not any(block.window in self.windows for block in view.blocks):
            return NO_SHIFT
        stack = structure_stack(view, self.windows, self.channels)
        reach = self.options.reach_px
        starts = [search(look.points, stack, reach=reach) for look in self.looks]
        best = max(range(len(self.looks)), key=lambda i: starts[i].explained)
        found = refine(self.looks[best].points, stack, starts[best])
        return NO_SHIFT if found is None else _judge(found, self.looks[best], self.options)

    def gain(self, view: View, shift: Shift | None = None) -> Gain:
        """Estimate how a view's reflectance lies against the look that it resembles most.

        Parameters
        ----------
        view : View
            Read with the reference's ``windows``.
        shift : Shift, optional
            As found for the view; found anew where None. It tells the look.
        """
        shift = self.shift(view) if shift is None else shift
        look = next((one for one in self.looks if one.name == shift.look), self.looks[0])
        return estimate_gain(view, self.windows, look.levels, look=look.name)

    def moved(self, dx_px: float, dy_px: float) -> Reference:
        """Return the same reference with another anchor: every shift it finds becomes smaller by these.

        To anchor on the mean place of many more scenes than it was built from, pass the mean of their shifts.
        """
        looks = [replace(one, dx_px=one.dx_px - dx_px, dy_px=one.dy_px - dy_px) for one in self.looks]
        return Reference(self.windows, self.channels, looks, anchor_sd_px=self.anchor_sd_px, options=self.options)

    def to_arrays(self) -> dict[str, np.ndarray]:
        """Return the reference as plain arrays, to be kept with ``numpy.savez``; the same views give the same arrays."""
        bands = self.looks[0].levels.bands
        out = {
            "windows": np.array([(w.row0, w.row1, w.col0, w.col1) for w in self.windows], np.int64).reshape(-1, 4),
            "channels": np.array(self.channels, "U16"),
            "bands": np.array(bands, "U16"),
            "looks": np.array([one.name for one in self.looks], "U64"),
            "places": np.array([(one.dx_px, one.dy_px, one.n_views) for one in self.looks], float).reshape(-1, 3),
            "anchor_sd_px": np.array(self.anchor_sd_px),
            "options": np.array(astuple(self.options), float),
        }
        for number, one in enumerate(self.looks):
            out[f"image_{number}"] = one.image
            out[f"spread_{number}"] = one.spread
            out[f"level_{number}"] = one.levels.value
            out[f"level_spread_{number}"] = one.levels.spread
        return out

    @classmethod
    def from_arrays(cls, arrays: Mapping[str, np.ndarray]) -> Reference:
        """Make a reference again from :meth:`to_arrays`."""
        told = np.asarray(arrays["options"], float)
        options = ShiftOptions(int(told[0]), float(told[1]), float(told[2]), int(told[3]), int(told[4]))
        windows = [Window(*(int(v) for v in row)) for row in np.asarray(arrays["windows"])]
        bands = tuple(str(one) for one in np.asarray(arrays["bands"]))
        looks = []
        for number, name in enumerate(np.asarray(arrays["looks"])):
            image = np.asarray(arrays[f"image_{number}"], np.float32)
            spread = np.asarray(arrays[f"spread_{number}"], np.float32)
            value = np.asarray(arrays[f"level_{number}"], np.float32)
            calm = np.asarray(arrays[f"level_spread_{number}"], np.float32)
            dx, dy, n = (float(one) for one in np.asarray(arrays["places"], float)[number])
            levels = Levels(bands, value, calm, *level_places(windows), int(n))
            looks.append(Look(str(name), image, spread, levels, pick_points(image, spread), int(n), dx, dy))
        channels = [str(one) for one in np.asarray(arrays["channels"])]
        return cls(windows, channels, looks, anchor_sd_px=float(arrays["anchor_sd_px"]), options=options)


def _judge(best: Alignment, look: Look, options: ShiftOptions) -> Shift:
    dx, dy = best.dx_px + look.dx_px, best.dy_px + look.dy_px
    least = options.sd_px if best.agree else options.sd_px / 2  # thirds that disagree must be outweighed
    sure = best.sd_px <= least and best.n_cells >= _MIN_CELLS
    far = best.at_border or float(np.hypot(dx, dy)) > options.limit_px
    outcome: Literal["confident", "unsure", "beyond"] = "confident" if sure and not far else "unsure"
    if sure and far and best.agree and best.n_cells >= _MIN_CELLS_BEYOND and best.explained >= _EXPLAINED_BEYOND:
        outcome = "beyond"
    return Shift(
        float(dx),
        float(dy),
        best.sd_px,
        outcome == "confident",
        best.n_cells,
        outcome,
        best.explained,
        look.name,
    )
