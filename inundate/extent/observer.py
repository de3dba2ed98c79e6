"""Observed extent of every wetland in every scene."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
from sklearn.base import BaseEstimator
from sklearn.exceptions import NotFittedError

from inundate.common.codes import CANOPY_HIDES, LEAF_STATES
from inundate.common.errors import InputError
from inundate.common.seeds import rng_for, seed_for
from inundate.extent.combining import apply_decisions
from inundate.extent.estimate import Shape, Views, areas, band_of, look
from inundate.extent.learn import (
    LONGEST_BRIDGE,
    add_anchor,
    evidence,
    first_shape,
    fit_drift,
    learn_gain,
    masked_checks,
    neighbour_checks,
    noise_sums,
    renew_shape,
)
from inundate.extent.noise import BAND_EDGES, SHIFTS, NoiseModel, NoiseSums, anchor_noise, renew_noise, start_noise
from inundate.extent.response import full_pixels, possible_responses, with_response
from inundate.extent.stack import ExtentOptions, SceneStack, WetlandPixels, split_wetlands

REASONS = (
    "",
    "nothing seen",
    "ice or snow",
    CANOPY_HIDES,
    "outside the scene",
    "too few pixels seen",
    "shift not known",
    "analyst",
)
COLUMNS = [
    "wetland_id",
    "scene_id",
    "datetime",
    "area_m2",
    "area_sd_m2",
    "clear_fraction",
    "view_fraction",
    "leaf_state",
    "used",
    "reason",
]
TARGET_Z = 1.6448536269514722


class ExtentObserver(BaseEstimator):
    """Learns, from the archive's own views, how each wetland's pixels fill and how wrong fractions are; then observes.

    Parameters
    ----------
    weights : DataFrame
        ``wetland_id``, ``row``, ``col``, ``pixel``, ``share``, ``other_share`` (see :func:`weights_on_site`).
    wetlands : DataFrame
        ``wetland_id``, ``area_max_m2``.
    pixel_area_m2 : float
        Area of one pixel.
    cells : DataFrame, optional
        From :func:`elevation_cells`.
    errors : DataFrame, optional
        From :func:`fraction_errors`, out of fold.
    noise : NoiseModel, optional
        A fitted ``noise_`` of another group of wetlands of the same archive. With it, each wetland's result is
        independent of which others are in the group.
    options : ExtentOptions, optional

    Attributes
    ----------
    noise_ : NoiseModel
    shapes_ : dict of str to Shape
    """

    def __init__(
        self,
        weights: pd.DataFrame,
        wetlands: pd.DataFrame,
        pixel_area_m2: float,
        *,
        cells: pd.DataFrame | None = None,
        errors: pd.DataFrame | None = None,
        noise: NoiseModel | None = None,
        options: ExtentOptions | None = None,
    ) -> None:
        self.weights = weights
        self.wetlands = wetlands
        self.pixel_area_m2 = pixel_area_m2
        self.cells = cells
        self.errors = errors
        self.noise = noise
        self.options = options

    def fit(self, stack: SceneStack, y: object = None) -> ExtentObserver:  # noqa: ARG002
        """Learn noise (unless given) and shapes from all scenes at hand.

        Parameters
        ----------
        stack : SceneStack
        y : ignored

        Returns
        -------
        ExtentObserver

        Raises
        ------
        InputError
            Weight table, wetlands or stack do not fit together.
        """
        options = self._settle(stack)
        self.noise_ = self.noise if self.noise is not None else self._learn_noise(stack, options)
        self.shapes_: dict[str, Shape] = {}
        for name, wetland in self.pixels_.items():
            if wetland.pixel.size:
                self.shapes_[name] = self._shape(stack, wetland, self.noise_, options)
        return self

    def observe(self, stack: SceneStack, decisions: pd.DataFrame | None = None) -> pd.DataFrame:
        """Observe all wetlands in the scenes of a stack, with what has been learnt.

        Parameters
        ----------
        stack : SceneStack
            Any scenes of the same site, seen in ``fit`` or not.
        decisions : DataFrame, optional
            ``scene_id``, ``wetland_id`` (empty: all), ``use`` (bool), ``reason``: outranks the tool's word.

        Returns
        -------
        DataFrame
            ``extent_observed``: wetland_id, scene_id, datetime, area_m2, area_sd_m2 (NaN where nothing was seen),
            clear_fraction, view_fraction, leaf_state (name), used (bool), reason; one row a wetland and scene, sorted
            by wetland_id, datetime, scene_id.

        Raises
        ------
        NotFittedError
            Before ``fit``.
        """
        if not hasattr(self, "noise_"):
            text = "ExtentObserver is not fitted; call fit with the archive's stack first"
            raise NotFittedError(text)
        options = self.options or ExtentOptions()
        parts = [self._table(stack, wetland, options) for wetland in self.pixels_.values()]
        if not parts:
            return pd.DataFrame(columns=COLUMNS)
        out = pd.concat(parts, ignore_index=True)
        out = out.sort_values(["wetland_id", "datetime", "scene_id"], ignore_index=True)
        return out if decisions is None else apply_decisions(out, decisions)

    def _settle(self, stack: SceneStack) -> ExtentOptions:
        """Check inputs and cut tables into wetlands."""
        self.pixels_ = split_wetlands(self.weights, self.wetlands, self.pixel_area_m2)
        most = max((int(w.pixel.max()) for w in self.pixels_.values() if w.pixel.size), default=-1)
        if most >= stack.fraction.shape[1]:
            text = (
                f"stack: {stack.fraction.shape[1]} pixels, but the weights point at pixel {most}; use the weights of the "
                "same site"
            )
            raise InputError(text)
        self.cells_: dict[str, pd.DataFrame] = {}
        if self.cells is not None and len(self.cells):
            self.cells_ = {str(k): v for k, v in self.cells.groupby("wetland_id", sort=True)}
        return self.options or ExtentOptions()

    def _leaf(self, stack: SceneStack, name: str) -> np.ndarray:
        """Leaf state codes of one wetland in each scene."""
        at = np.flatnonzero(np.asarray(stack.wetland_id).astype(str) == name)
        if at.size == 0:
            text = f"stack: wetland {name!r} has no leaf states; give a column for every wetland"
            raise InputError(text)
        return np.minimum(stack.leaf_state[:, at[0]], 3)

    def _views(self, stack: SceneStack, wetland: WetlandPixels) -> Views:
        return look(stack, wetland, self._leaf(stack, wetland.name))

    def _shape(self, stack: SceneStack, wetland: WetlandPixels, noise: NoiseModel, options: ExtentOptions) -> Shape:
        """Shape of one wetland under a noise model: depends on nothing else."""
        views = self._views(stack, wetland)
        shape = first_shape(self.cells_.get(wetland.name), wetland, views, noise, options)
        shape = learn_gain(views, shape, wetland, noise, options)
        for _ in range(2):
            shape = renew_shape(views, shape, wetland, noise, options)
        return shape

    def _sample(self, options: ExtentOptions) -> list[WetlandPixels]:
        """Wetlands that teach noise: with pixels, picked by name."""
        full = [w for w in self.pixels_.values() if w.pixel.size and (w.pixel >= 0).any()]
        full.sort(key=lambda w: seed_for(options.seed, "noise", w.name))
        return sorted(full[: options.sample_wetlands], key=lambda w: w.name)

    def _learn_noise(self, stack: SceneStack, options: ExtentOptions) -> NoiseModel:
        """Noise shared by all wetlands, from a sample of them."""
        steps = options.levels + 1
        start, days = start_noise(steps, self.errors), _days(stack)
        sample = self._sample(options)
        anchors = NoiseSums(steps)
        for wetland in sample:
            add_anchor(anchors, self._views(stack, wetland), wetland)
        start = anchor_noise(start, anchors, self.errors)
        full = [full_pixels(self._views(stack, w), w, start) for w in sample]
        responses = possible_responses(full)
        noise = start = with_response(start, responses[0])
        for turn in range(options.rounds):
            sums = NoiseSums(steps, len(responses))
            for wetland in sample:
                views = self._views(stack, wetland)
                shape = first_shape(self.cells_.get(wetland.name), wetland, views, noise, options)
                before = noise_sums(views, shape, wetland, noise, days, options)
                if turn:
                    trials = [replace(noise, shift_px=float(s)) for s in SHIFTS]
                    before.shift = evidence(views, shape, wetland, trials, options)
                    if len(responses) > 1:
                        trials = [with_response(noise, r) for r in responses]
                        before.response = evidence(views, shape, wetland, trials, options)
                    shape = renew_shape(views, shape, wetland, noise, options)
                mine = noise_sums(views, shape, wetland, noise, days, options)
                mine.shape, mine.shift, mine.response = before.shape, before.shift, before.response
                sums.add(mine)
            noise = with_response(renew_noise(noise, sums, start), responses[int(np.argmax(sums.response))])
        return self._scale(stack, sample, noise, options)

    def _scale(
        self, stack: SceneStack, sample: list[WetlandPixels], noise: NoiseModel, options: ExtentOptions
    ) -> NoiseModel:
        """Factors on sd by band of view, and the wander of areas, from views against views."""
        masked, beside, days = [], [], _days(stack)
        for wetland in sample:
            views = self._views(stack, wetland)
            shape = self._shape(stack, wetland, noise, options)
            area, sd = areas(views, shape, wetland, noise)
            masked += masked_checks(views, shape, wetland, noise, options, rng_for(options.seed, "masks", wetland.name))
            beside += neighbour_checks(views, area, sd, days, options)
        table = np.array(beside, float).reshape(-1, 6)
        drift, top = fit_drift(table)
        scale = band_scales(np.array(masked, float).reshape(-1, 5), table, drift, top)
        values = {n: getattr(noise, n) for n in NoiseModel.__slots__}
        return NoiseModel(**{**values, "drift_var": drift, "scale": scale})

    def _table(self, stack: SceneStack, wetland: WetlandPixels, options: ExtentOptions) -> pd.DataFrame:
        """Rows of one wetland."""
        scenes = len(stack.scene_id)
        leaf = self._leaf(stack, wetland.name)
        frame = pd.DataFrame(
            {
                "wetland_id": np.full(scenes, wetland.name, dtype=object).astype(str),
                "scene_id": np.asarray(stack.scene_id).astype(str),
                "datetime": np.asarray(stack.datetime).astype("datetime64[ns]"),
                "area_m2": np.nan,
                "area_sd_m2": np.nan,
                "clear_fraction": 0.0,
                "view_fraction": 0.0,
                "leaf_state": np.asarray(LEAF_STATES, dtype=object)[leaf],
                "used": False,
                "reason": "outside the scene",
            }
        )
        if wetland.name not in self.shapes_ or not (wetland.pixel >= 0).any():
            return frame
        views = look(stack, wetland, leaf)
        area, sd = areas(views, self.shapes_[wetland.name], wetland, self.noise_)
        sd = np.minimum(sd * self.noise_.scale[band_of(views.view_fraction)], 0.5)
        reason = _reasons(views, sd, stack.scene_reason, options)
        blank = (views.clear_fraction <= 0) | np.isin(reason, ("nothing seen", "ice or snow", "outside the scene"))
        frame["area_m2"] = np.where(blank, np.nan, area * wetland.area_max_m2)
        frame["area_sd_m2"] = np.where(blank, np.nan, sd * wetland.area_max_m2)
        frame["clear_fraction"] = np.clip(views.clear_fraction, 0.0, 1.0)
        frame["view_fraction"] = np.clip(views.view_fraction, 0.0, 1.0)
        frame["reason"] = reason
        frame["used"] = reason == ""
        return frame


def _days(stack: SceneStack) -> np.ndarray:
    """Return scene times in days."""
    return np.asarray(stack.datetime).astype("datetime64[ns]").astype(np.int64) / 86400e9


def band_scales(masked: np.ndarray, beside: np.ndarray, drift_var: float, top: float) -> np.ndarray:
    """Factor on sd by band of view so that nine in ten checks lie within 1.645 sd.

    Parameters
    ----------
    masked : ndarray of float64, shape (check, 5)
        From ``masked_checks``.
    beside : ndarray of float64, shape (check, 6)
        From ``neighbour_checks``.
    drift_var, top : float
        From ``fit_drift``.

    Returns
    -------
    ndarray of float64, shape (band,)
    """
    bands = len(BAND_EDGES) + 1
    out = np.full(bands, top)
    for b in range(bands):
        own = masked[masked[:, 0] == b]
        near = beside[(beside[:, 0] == b) & (beside[:, 4] <= LONGEST_BRIDGE)]
        size = np.r_[np.abs(own[:, 1]), np.abs(near[:, 1])]
        mine = np.r_[own[:, 2], near[:, 2]] ** 2
        extra = np.r_[-((top * own[:, 3]) ** 2), (top * near[:, 3]) ** 2 + drift_var * near[:, 4]]
        if size.size < 20:
            continue
        low, high = 0.2, 5.0
        for _ in range(40):
            mid = 0.5 * (low + high)
            inside = size <= TARGET_Z * np.sqrt(np.maximum(mid**2 * mine + extra, 1e-8))
            if (inside.sum() + 9.0 * (mid >= top)) / (size.size + 10.0) < 0.9:
                low = mid
            else:
                high = mid
        out[b] = max(mid, 0.3)
    return out


def _reasons(views: Views, sd: np.ndarray, scene_reason: np.ndarray | None, options: ExtentOptions) -> np.ndarray:
    """Why a view is not used; empty where it is."""
    clear, view = views.clear_fraction, views.view_fraction
    out = np.full(clear.size, "", dtype=object)
    few = (view < options.least_view) | (sd > options.widest_sd)
    out[few] = "too few pixels seen"
    out[few & (clear >= 0.3) & (view < 0.7 * clear)] = CANOPY_HIDES
    out[clear <= 0] = "nothing seen"
    out[views.ice >= options.ice_share] = "ice or snow"
    out[(clear <= 0) & (views.off >= 0.999 * views.off.max(initial=0.5)) & (views.off >= 0.5)] = "outside the scene"
    if scene_reason is not None:
        given = np.asarray(scene_reason).astype(str)
        out = np.where((given != "") & (out == ""), given, out).astype(object)
    return out.astype(str)


def observe_extents(
    stack: SceneStack,
    weights: pd.DataFrame,
    wetlands: pd.DataFrame,
    options: ExtentOptions | None = None,
    *,
    pixel_area_m2: float,
    cells: pd.DataFrame | None = None,
    errors: pd.DataFrame | None = None,
    decisions: pd.DataFrame | None = None,
) -> pd.DataFrame:
    """Learn from a stack and observe every wetland in it: ``ExtentObserver(...).fit(stack).observe(stack)``.

    See :class:`ExtentObserver` for parameters, the table returned and errors raised.
    """
    observer = ExtentObserver(weights, wetlands, pixel_area_m2, cells=cells, errors=errors, options=options)
    return observer.fit(stack).observe(stack, decisions)
