"""Labelled pixels become examples, joined by starter examples where there are too few."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from importlib import resources

import numpy as np
import pandas as pd

from inundate.common.codes import BAND_ROLES, LEAF_STATES
from inundate.common.errors import InputError, Refusal
from inundate.pixels.features import features

MIN_OWN = 100
"""Own examples of each class below which starter examples join; common practice, no source."""


@dataclass(frozen=True, slots=True)
class ExampleSet:
    """ExampleSet for training.

    Attributes
    ----------
    table : DataFrame
        row (of the labels file, -1 for starter examples), label (0 dry, 1 water), wetland_id (or another group),
        date (datetime64), scene_id, leaf_state (code, -1 unknown), leaf_share, sun_elevation_deg, source, weight,
        purity (share of the pixel that the label covers; NaN for points), fraction (water fraction, NaN where only the
        label is known).
    reflectance : ndarray of float32, shape (band, row)
        Bands as in ``common.codes.BAND_ROLES``; NaN where missing.
    context : ndarray of float32, shape (band, row)
        Dry ground of each row's scene (:func:`~inundate.pixels.features.scene_context`); NaN where unknown.
    notes : tuple of str
        What was done that the user should know.
    refused : tuple of Refusal
        Labels that could not be used.
    """

    table: pd.DataFrame
    reflectance: np.ndarray
    context: np.ndarray
    notes: tuple[str, ...] = ()
    refused: tuple[Refusal, ...] = field(default_factory=tuple)

    @property
    def X(self) -> np.ndarray:
        """Features, float32, shape (row, feature)."""
        leaf, sun = self.table["leaf_share"].to_numpy("f4"), self.table["sun_elevation_deg"].to_numpy("f4")
        return features(self.reflectance, BAND_ROLES, leaf, sun, self.context)

    @property
    def y(self) -> np.ndarray:
        """Labels, int8: 0 dry, 1 water."""
        return self.table["label"].to_numpy(np.int8)

    def take(self, rows: np.ndarray) -> ExampleSet:
        """Return the examples of the given rows (positions or mask)."""
        rows = np.flatnonzero(rows) if np.asarray(rows).dtype == bool else np.asarray(rows)
        table = self.table.iloc[rows].reset_index(drop=True)
        return replace(self, table=table, reflectance=self.reflectance[:, rows], context=self.context[:, rows])


@dataclass(frozen=True, slots=True)
class ViewState:
    """What is known of the view of each label.

    Attributes
    ----------
    leaf_share, leaf_state, sun_elevation_deg : ndarray, shape (row,)
        Leaf share 0..1, leaf state code, degrees.
    context : ndarray, shape (10, row), optional
        Dry ground of each row's scene (:func:`~inundate.pixels.features.scene_context`).
    """

    leaf_share: np.ndarray
    leaf_state: np.ndarray
    sun_elevation_deg: np.ndarray
    context: np.ndarray | None = None


def make_examples(
    pixels: pd.DataFrame,
    reflectance: np.ndarray,
    bands: tuple[str, ...],
    view: ViewState,
    *,
    clear: np.ndarray | None = None,
    min_own: int = MIN_OWN,
    starter: str = "auto",
) -> ExampleSet:
    """Turn label rows with sampled reflectance into examples.

    Parameters
    ----------
    pixels : DataFrame, one row a labelled pixel
        row, label (0 / 1), wetland_id, date, scene_id, source, weight and purity, as from :func:`match_scenes`; only row
        and label are necessary.
    reflectance : ndarray, shape (band, row)
        Sampled from each row's own scene; NaN where missing.
    bands : tuple of str
    view : ViewState
    clear : ndarray of bool, shape (row,), optional
        Rows whose pixel is clear in its scene; others are set aside.
    min_own : int
        Fewer own examples than this of either class bring the starter examples in (``starter="auto"``).
    starter : {"auto", "always", "never"}

    Returns
    -------
    ExampleSet

    Raises
    ------
    InputError
        No label has a clear pixel in its scene, or one class only and no starter examples are to join.
    """
    n = len(pixels)
    values = np.full((len(BAND_ROLES), n), np.nan, np.float32)
    values[[BAND_ROLES.index(b) for b in bands]] = reflectance
    seen = np.isfinite(values).any(axis=0)
    if clear is not None:
        seen &= np.asarray(clear, bool)
    table = _example_table(pixels, view)
    lost = table["row"].to_numpy()[~seen]
    refused = tuple(
        Refusal("label", str(r), f"labels: row {r} is not clear in its scene; label another date")
        for r in dict.fromkeys(lost.tolist())
    )
    if not seen.any():
        message = (
            f"labels: none of {n} labelled pixels is clear in its scene; check the dates and coordinates of the labels"
        )
        raise InputError(message)
    context = _context(view, n)
    own = ExampleSet(
        table.loc[np.flatnonzero(seen)].reset_index(drop=True), values[:, seen], context[:, seen], (), refused
    )
    return join_starter(own, min_own=min_own, starter=starter)


def _context(view: ViewState, n: int) -> np.ndarray:
    if view.context is None:
        return np.full((len(BAND_ROLES), n), np.nan, np.float32)
    context = np.asarray(view.context, np.float32)
    if context.shape != (len(BAND_ROLES), n):
        message = f"context: shape {context.shape} for {n} labelled pixels; give (10, row)"
        raise InputError(message)
    return context


def _example_table(pixels: pd.DataFrame, view: ViewState) -> pd.DataFrame:
    n = len(pixels)
    get = lambda name, other: pixels[name].to_numpy() if name in pixels else np.full(n, other)  # noqa: E731
    return pd.DataFrame(
        {
            "row": pixels["row"].to_numpy(np.int64),
            "label": pixels["label"].to_numpy(np.int8),
            "wetland_id": get("wetland_id", "").astype(str),
            "date": pd.to_datetime(pd.Series(get("date", np.datetime64("NaT", "ns")))).to_numpy("datetime64[ns]"),
            "scene_id": get("scene_id", "").astype(str),
            "leaf_state": np.broadcast_to(np.asarray(view.leaf_state, np.int8), (n,)),
            "leaf_share": np.broadcast_to(np.asarray(view.leaf_share, np.float32), (n,)),
            "sun_elevation_deg": np.broadcast_to(np.asarray(view.sun_elevation_deg, np.float32), (n,)),
            "source": get("source", "own").astype(str),
            "weight": get("weight", 1.0).astype(float),
            "purity": get("purity", np.nan).astype(float),
            "fraction": get("fraction", np.nan).astype(float),
        }
    )


def join_starter(own: ExampleSet, *, min_own: int = MIN_OWN, starter: str = "auto") -> ExampleSet:
    """Join starter examples to own ones where these are too few, and say so in the notes.

    Raises
    ------
    InputError
        ``starter`` is not auto, always or never; or one class only and none may join.
    """
    if starter not in {"auto", "always", "never"}:
        message = f"starter: {starter!r}; use auto, always or never"
        raise InputError(message)
    water, dry = int((own.y == 1).sum()), int((own.y == 0).sum())
    few = min(water, dry) < min_own
    if starter == "never" or (starter == "auto" and not few):
        if min(water, dry) == 0:
            message = f"labels: one class only ({water} water, {dry} dry examples); add the other class or allow starter examples"
            raise InputError(message)
        return own
    base = starter_examples()
    reason = f"fewer than {min_own} of either" if few else "as asked"
    note = f"own examples: {water} water and {dry} dry; {len(base.table)} starter examples joined ({reason})"
    table = pd.concat([own.table, base.table], ignore_index=True)
    reflectance = np.concatenate([own.reflectance, base.reflectance], axis=1)
    context = np.concatenate([own.context, base.context], axis=1)
    return ExampleSet(table, reflectance, context, (*own.notes, note), own.refused)


def starter_examples(*, mixed: bool = False) -> ExampleSet:
    """Return the starter examples shipped with the package.

    Parameters
    ----------
    mixed : bool
        Also those between water and dry that have a fraction but no label (label -1).

    Returns
    -------
    ExampleSet
        ``source`` is ``starter``, ``wetland_id`` a group of rows of one surface family, no date.
    """
    with resources.as_file(resources.files("inundate.pixels.starter") / "examples.parquet") as path:
        rows = pd.read_parquet(path)
    if not mixed:
        rows = rows[rows["label"] >= 0]
    rows = rows.reset_index(drop=True)
    share = rows["leaf_share"].to_numpy("f4")
    off, on = LEAF_STATES.index("leaf_off"), LEAF_STATES.index("leaf_on")
    pixels = pd.DataFrame(
        {
            "row": -1,
            "label": rows["label"],
            "source": "starter",
            "fraction": rows["fraction"],
            "wetland_id": "starter " + rows["family"] + " " + (rows["number"] % 10).astype(str),
        }
    )
    state = np.where(share < 0.1, off, np.where(share > 0.9, on, LEAF_STATES.index("green_up")))
    view = ViewState(share, state, rows["sun_elevation_deg"].to_numpy("f4"))
    reflectance = rows[list(BAND_ROLES)].to_numpy("f4").T.copy()
    return ExampleSet(_example_table(pixels, view), reflectance, np.full_like(reflectance, np.nan))
