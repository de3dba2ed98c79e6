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

SHIFT_MARGIN_PX = 4


@dataclass(frozen=True, slots=True)
class ReadPlan:
    """What is the same for every scene of a run.

    Attributes
    ----------
    profile : SensorProfile
    site : Site
    out : Path
        Output folder.
    context : tuple of Window
        Extra windows for co-registration; empty without.
    reference : scenes.Reference or None
        What scenes are registered against.
    normalise : bool
        Bring scenes to the reference's gain too.
    shift_limit_px : float
    """

    profile: SensorProfile
    site: Site
    out: Path
    context: tuple[Window, ...] = ()
    reference: Any = None
    normalise: bool = False
    shift_limit_px: float = 2.0

    @property
    def windows(self) -> tuple[Window, ...]:
        """Windows of the site, with a margin where pixels will be shifted."""
        grid, margin = self.site.grid, SHIFT_MARGIN_PX if self.reference is not None else 0
        return tuple(w.grow(margin, grid.height, grid.width) for w in self.site.windows)


@dataclass(frozen=True, slots=True)
class ReadJob:
    """One scene to read.

    Attributes
    ----------
    plan : ReadPlan
    scene : Scene
    label_site : Site or None
        Pixels under the scene's labels.
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
    """
    from inundate.scenes import read_view

    plan, label_site = job.plan, job.label_site
    margin = SHIFT_MARGIN_PX if plan.reference is not None else 0
    grid = plan.site.grid
    own = plan.windows if job.want_view else ()
    under = () if label_site is None else tuple(w.grow(margin, grid.height, grid.width) for w in label_site.windows)
    view = read_view(job.scene, plan.profile, grid, (*own, *under, *plan.context))
    count = len(own) + len(under)
    detail: dict[str, Any] = {"read_bytes": int(sum(b.reflectance.nbytes for b in view.blocks))}
    if plan.reference is not None:
        view, registered = _register(plan, view, count)
        detail |= registered
    archive = Archive(plan.out)
    if job.want_view:
        reflectance, code = _gather(plan.site, view, 0, len(own))
        detail["clear"] = float(np.mean(code == ViewCode.CLEAR))
        detail["bytes"] = write_view(archive.view(job.scene.scene_id), view.bands, reflectance, code)
    if label_site is not None:
        reflectance, code = _gather(label_site, view, len(own), count)
        write_view(archive.sample(job.scene.scene_id), view.bands, reflectance, code)
    return detail


def _register(plan: ReadPlan, view: View, count: int) -> tuple[View, dict[str, Any]]:
    """Shift (and normalise) the first ``count`` blocks of a view against the reference."""
    from inundate.scenes import apply_gain, apply_shift

    shift = plan.reference.shift(view)
    detail: dict[str, Any] = {"shift": shift.as_dict()}
    kept = type(view)(view.scene_id, view.bands, view.blocks[:count])
    if plan.normalise:
        gain = plan.reference.gain(view)
        detail["gain"] = gain.as_dict()
        kept = apply_gain(kept, gain)
    return apply_shift(kept, shift), detail


def _gather(site: Site, view: View, first: int, last: int) -> tuple[np.ndarray, np.ndarray]:
    blocks = view.blocks[first:last]
    reflectance = site.gather(((b.window, b.reflectance) for b in blocks), np.nan, np.dtype(np.float32))
    code = site.gather(((b.window, b.code) for b in blocks), int(ViewCode.FILL), np.dtype(np.uint8))
    return reflectance, code
