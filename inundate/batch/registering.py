"""The co-registration reference of an area: built from clear views of each season, kept in the archive, used for every scene."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from inundate.batch.compute import run_units
from inundate.batch.layout import Layout
from inundate.batch.ledger import Unit, fingerprint
from inundate.batch.work import Inputs, Work, code_mark
from inundate.common.codes import ViewCode
from inundate.common.grid import Grid, Window
from inundate.common.writing import replacing

if TYPE_CHECKING:
    from inundate.scenes import Scene, SensorProfile, View

MOST_VIEWS = 32  # views looked at for the reference, the least cloudy of each quarter of the year
NEEDED = ("blue", "green", "red", "nir", "nir08", "swir16", "swir22")  # by shifts, greenness and detail
MOVED_SHARE = 0.25  # of the reference's scenes: with more of them changed or gone it is built again
REGROWTH = 3  # the reference is built again when the archive holds this many times the scenes it was chosen from


@dataclass(frozen=True, slots=True)
class Registrar:
    """The reference (None without co-registration), its context windows and its fingerprint.

    ``detail`` (None without) lends the fine bands' detail to coarser ones.
    """

    reference: Any = None
    context: tuple[Window, ...] = ()
    mark: str = "none"
    detail: Any = None


@dataclass(frozen=True, slots=True)
class ContextJob:
    """One scene's context windows to read."""

    scene: Scene
    profile: SensorProfile
    grid: Grid
    windows: tuple[Window, ...]
    bands: tuple[str, ...] | None


def read_context(job: ContextJob) -> View:
    """Read the context windows of a scene."""
    from inundate.scenes import read_view

    return read_view(job.scene, job.profile, job.grid, job.windows, bands=job.bands, all_windows=True)


def make_registrar(work: Work, inputs: Inputs, layout: Layout, scenes: list[Scene]) -> Registrar:
    """Load the area's reference, or build it where there is none, many of its scenes changed, or the archive outgrew it."""
    from inundate.scenes import Detail, Reference, ShiftOptions, context_windows
    from inundate.scenes import fingerprint as scene_mark

    if not work.pipeline.extent.co_registration:
        return Registrar()
    path = work.archive.folder / "reference.npz"
    marks = {s.scene_id: scene_mark(s) for s in inputs.catalog.scenes}
    fixed = {
        "grid": [
            layout.grid.crs,
            layout.grid.west,
            layout.grid.north,
            layout.grid.step,
            layout.grid.height,
            layout.grid.width,
        ],
        "limit": work.pipeline.extent.shift_limit_px,
        "every band": work.pipeline.extent.normalisation,  # gains are told for every band
        "code": code_mark("scenes", "batch/registering.py"),
    }
    unit = work.ledger.get("reference", "all")
    there = unit is not None and (unit.state == "set_aside" or path.exists())
    same = unit is not None and there and {k: unit.parts.get(k) for k in fixed} == fixed
    if unit is not None and same and not outdated(unit, marks, len(scenes)):
        if unit.state == "set_aside":
            return Registrar()
        with np.load(path, allow_pickle=False) as arrays:
            detail = Detail.from_arrays(arrays) if "slopes" in arrays else None
            return Registrar(Reference.from_arrays(arrays), context_windows(layout.grid), unit.fingerprint, detail)
    windows = context_windows(layout.grid)
    chosen = choose_scenes(scenes)
    with work.progress.step("co-registration reference", len(chosen)) as advance:
        bands = None if fixed["every band"] else tuple(r for r in inputs.profile.roles if r in NEEDED)
        jobs = [
            ContextJob(s, inputs.profile, layout.grid, windows, bands and tuple(b for b in bands if b in s.bands))
            for s in chosen
        ]
        views: list[View] = []
        for outcome in run_units(read_context, jobs, work.pipeline.compute, work.progress.say):
            if outcome.error is None:
                views.append(outcome.result)
            advance(1, sum(b.reflectance.nbytes for b in outcome.result.blocks) if outcome.error is None else 0)
        views.sort(key=lambda v: v.scene_id)
        parts = {**fixed, "scenes": {v.scene_id: marks[v.scene_id] for v in views}}
        options = ShiftOptions(limit_px=work.pipeline.extent.shift_limit_px)
        reference, detail = _build(work, views, options, lambda bare: lend_detail(chosen, bare, layout.grid))
        if reference is None:
            work.ledger.put("reference", "all", parts, state="set_aside", detail={"of": len(scenes)})
            return Registrar()
        with replacing(path) as scratch, scratch.open("wb") as stream:
            np.savez_compressed(stream, **reference.to_arrays(), **({} if detail is None else detail.to_arrays()))
        work.ledger.put("reference", "all", parts, detail={"of": len(scenes), "anchor_sd_px": reference.anchor_sd_px})
    return Registrar(reference, windows, fingerprint(parts), detail)


def outdated(unit: Unit, marks: dict[str, str], scenes: int) -> str:
    """Return in words why the reference must be built again; empty where it stands.

    Parameters
    ----------
    unit : Unit
        The reference as the ledger holds it.
    marks : dict of scene_id to text
        Marks of the catalog's scenes.
    scenes : int
        Scenes that the run is about.
    """
    used = unit.parts["scenes"]
    moved = sum(marks.get(k) != v for k, v in used.items())
    if moved > MOVED_SHARE * len(used):
        return f"{moved} of the {len(used)} scenes that it was built from changed or are gone"
    if scenes >= REGROWTH * unit.detail["of"]:
        return f"it was chosen from {unit.detail['of']} scenes, and there are {scenes}"
    return ""


def lend_detail(scenes: list[Scene], bare: list[View], grid: Grid) -> Any:
    """Fit how coarse bands follow fine ones, on leafless views; None where no band is coarser than the grid.

    Parameters
    ----------
    scenes : list of Scene
        The first that opens tells the bands' pixel sizes.
    bare : list of View
        Context windows of leafless views.
    grid : Grid
    """
    from inundate.common.errors import InputError
    from inundate.scenes import band_steps, fit_detail

    steps = band_steps(scenes)
    fine = tuple(b for b in ("blue", "green", "red", "nir") if steps.get(b, np.inf) <= 1.01 * grid.step)
    coarse = tuple(b for b in ("swir16", "swir22") if 1.5 * grid.step <= steps.get(b, 0.0) <= 4.0 * grid.step)
    if len(fine) < 3 or not coarse or not bare:
        return None
    try:
        return fit_detail(bare, fine=fine, coarse=coarse)
    except InputError:
        return None


def choose_scenes(scenes: list[Scene], most: int = MOST_VIEWS) -> list[Scene]:
    """Return the least cloudy scenes of each quarter of the year (by told cloud cover, then time and id)."""
    quarter: dict[int, list[Scene]] = {}
    for scene in scenes:
        quarter.setdefault((pd.Timestamp(scene.datetime).month % 12) // 3, []).append(scene)
    out = []
    for group in quarter.values():
        group.sort(key=lambda s: (s.cloud_cover if np.isfinite(s.cloud_cover) else 50.0, s.datetime, s.scene_id))
        out += group[: most // max(len(quarter), 1)]
    return sorted(out, key=lambda s: (s.datetime, s.scene_id))


def _build(work: Work, views: list[View], options: Any, lend: Callable[[list[View]], Any]) -> tuple[Any, Any]:
    """Return the reference and the detail, either None where there cannot be one; uses the list of views up."""
    from inundate.common.errors import InputError
    from inundate.scenes import Reference

    usable = [v for v in views if v.clear_fraction() > 0.3]
    views.clear()
    if len(usable) < 3:
        work.notes.append(
            f"co-registration: only {len(usable)} views are clear enough for a reference; scenes are used as they lie"
        )
        return None, None
    green = np.array([greenness(v) for v in usable])
    middle = np.nanmean(np.nanpercentile(green, [10, 90]))
    groups = {v.scene_id: "green" if g > middle else "bare" for v, g in zip(usable, green, strict=True)}
    detail = lend([v for v in usable if groups[v.scene_id] == "bare"])
    usable.reverse()
    one_by_one = (usable.pop() for _ in range(len(usable)))
    try:
        return Reference.from_views(one_by_one, groups=groups, options=options), detail
    except InputError as err:
        work.notes.append(f"co-registration: {err}; scenes are used as they lie")
        return None, detail


def greenness(view: View) -> float:
    """Return the mean NDVI of a view's clear pixels, NaN without any."""
    red = view.bands.index("red")
    nir = view.bands.index("nir" if "nir" in view.bands else "nir08")
    total, count = 0.0, 0
    for block in view.blocks:
        n, r = block.reflectance[nir], block.reflectance[red]
        good = (block.code == ViewCode.CLEAR) & (n + r > 0.01)
        total += float(((n - r)[good] / (n + r)[good]).sum(dtype=np.float64))
        count += int(good.sum())
    return total / count if count else float("nan")
