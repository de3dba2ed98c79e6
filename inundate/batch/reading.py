"""Reading of scenes: each scene once, only windows that matter, co-registered, kept over site pixels in the archive."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from inundate.batch.archive import Archive, write_view
from inundate.common.codes import ViewCode
from inundate.common.grid import Window
from inundate.common.site import Site

if TYPE_CHECKING:
    from inundate.scenes import Scene, SensorProfile, View

MARGIN_PX = 6  # pixels around windows that shifting and lending detail need


@dataclass(frozen=True, slots=True)
class ReadPlan:
    """What is the same for every scene of a run.

    Attributes
    ----------
    profile : SensorProfile
    site : Site
    ground : ndarray of bool, shape (pixel,)
        Site pixels outside every wetland: the scene's dry ground.
    out : Path
        Output folder.
    context : tuple of Window
        Extra windows for co-registration; empty without.
    reference : scenes.Reference or None
        What scenes are registered against.
    detail : scenes.Detail or None
        Lends the fine bands' detail to coarse ones.
    normalise : bool
        Bring scenes to the reference's gain too.
    shift_limit_px : float
    """

    profile: SensorProfile
    site: Site
    ground: np.ndarray
    out: Path
    context: tuple[Window, ...] = ()
    reference: Any = None
    detail: Any = None
    normalise: bool = False
    shift_limit_px: float = 2.0

    @property
    def windows(self) -> tuple[Window, ...]:
        """Windows of the site, with a margin where pixels will be shifted."""
        return grown(self.site, self.reference is not None)


@dataclass(frozen=True, slots=True)
class ReadJob:
    """One scene to read.

    Attributes
    ----------
    plan : ReadPlan
    scene : Scene
    label_site : Site or None
        Pixels under the scene's labels; on a grid of its own, since labels may lie outside the area's.
    want_view : bool
        False where only the samples under labels are wanted.
    """

    plan: ReadPlan
    scene: Scene
    label_site: Site | None
    want_view: bool


def read_scene(job: ReadJob) -> dict[str, Any]:
    """Read one scene; leaves its view and label samples in the archive, returns counts, shift and gain.

    Parameters
    ----------
    job : ReadJob

    Returns
    -------
    dict
        clear (share of site pixels), bytes, and shift and gain where they were asked for.

    Raises
    ------
    SceneError
        When the scene cannot serve.
    InputError
        When it lies further off than the limit.
    """
    from inundate.common.errors import InputError
    from inundate.pixels import scene_context
    from inundate.scenes import read_view

    plan, archive, scene = job.plan, Archive(job.plan.out), job.scene
    own = plan.windows if job.want_view else ()
    view = read_view(scene, plan.profile, plan.site.grid, (*own, *plan.context)) if own or plan.context else None
    detail: dict[str, Any] = {"read_bytes": 0 if view is None else int(sum(b.reflectance.nbytes for b in view.blocks))}
    shift = gain = None
    if plan.reference is not None and view is not None:
        shift = plan.reference.shift(view)
        detail["shift"] = shift.as_dict()
        if shift.outcome == "beyond":
            message = f"scene {scene.scene_id}: lies {np.hypot(shift.dx_px, shift.dy_px):.1f} pixels off the other scenes, over the limit of {plan.shift_limit_px:g}; it is set aside (key 'extent.shift_limit_px')"
            raise InputError(message)
        if plan.normalise:
            gain = plan.reference.gain(view, shift)
            detail["gain"] = gain.as_dict()
    if job.want_view and view is not None:
        kept = type(view)(view.scene_id, view.bands, view.blocks[: len(own)])
        kept = _settled(kept, plan.detail, shift, gain)
        reflectance, code = _gather(plan.site, kept)
        context = scene_context(reflectance, kept.bands, code, plan.ground)
        detail["ground"] = [float(v) for v in context]
        detail["clear"] = float(np.mean(code == ViewCode.CLEAR))
        detail["bytes"] = write_view(archive.view(scene.scene_id), kept.bands, reflectance, code)
    if job.label_site is not None:
        windows = grown(job.label_site, plan.reference is not None)
        under = _settled(read_view(scene, plan.profile, job.label_site.grid, windows), plan.detail, shift, gain)
        reflectance, code = _gather(job.label_site, under)
        write_view(archive.sample(scene.scene_id), under.bands, reflectance, code)
    return detail


def grown(site: Site, shifting: bool) -> tuple[Window, ...]:
    """Return a site's windows, with a margin where pixels will be shifted."""
    margin = MARGIN_PX if shifting else 0
    return tuple(w.grow(margin, site.grid.height, site.grid.width) for w in site.windows)


def _settled(view: View, detail: Any, shift: Any, gain: Any) -> View:
    """Return the view sharp, at its level and place."""
    from inundate.scenes import add_detail, apply_gain, apply_shift

    if detail is not None:
        view = add_detail(view, detail)
    if gain is not None:
        view = apply_gain(view, gain)
    return view if shift is None else apply_shift(view, shift)


def _gather(site: Site, view: View) -> tuple[np.ndarray, np.ndarray]:
    reflectance = site.gather(((b.window, b.reflectance) for b in view.blocks), np.nan, np.dtype(np.float32))
    code = site.gather(((b.window, b.code) for b in view.blocks), int(ViewCode.FILL), np.dtype(np.uint8))
    return reflectance, code
