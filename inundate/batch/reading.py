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
    batch_bytes : int
        Most that the blocks of windows that are read together hold; what is left in the archive does not depend on it.
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
    batch_bytes: int = 100_000_000

    @property
    def windows(self) -> tuple[Window, ...]:
        """Windows of the site, with a margin where pixels will be shifted."""
        return grown(self.site, self.reference is not None)

    def batches(self, bands: int) -> list[tuple[int, ...]]:
        """Return numbers of the site's windows that are read together; the first with the context windows beside them."""
        pixel = 4 * bands + 1
        held = sum(w.shape[0] * w.shape[1] for w in self.context) * pixel
        out: list[list[int]] = [[]]
        for number, window in enumerate(self.windows):
            size = window.shape[0] * window.shape[1] * pixel
            if held and held + size > self.batch_bytes:
                out.append([])
                held = 0
            out[-1].append(number)
            held += size
        return [tuple(batch) for batch in out]


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
    detail: dict[str, Any] = {"read_bytes": 0}
    settle: tuple[Any, Any] = (None, None)
    if job.want_view or job.plan.context:
        settle = _read_windows(job, detail)
    if job.label_site is not None:
        _keep_sample(job, job.label_site, settle)
    return detail


def _read_windows(job: ReadJob, detail: dict[str, Any]) -> tuple[Any, Any]:
    """Read context and site windows batch by batch; return shift and gain, and leave the view where it is wanted."""
    from inundate.pixels import scene_context
    from inundate.scenes import SceneReader

    plan, own = job.plan, job.plan.windows
    settle: tuple[Any, Any] = (None, None)
    with SceneReader(job.scene, plan.profile, plan.site.grid) as reader:
        batches: list[tuple[int, ...]] = plan.batches(len(reader.roles)) if job.want_view else [()]
        out = _empty(plan.site, reader.roles) if job.want_view else None
        for turn, batch in enumerate(batches):
            view = reader.read([*(own[i] for i in batch), *(() if turn else plan.context)])
            detail["read_bytes"] += int(sum(block.reflectance.nbytes for block in view.blocks))
            if turn == 0 and plan.reference is not None:
                settle = _place(plan, view, detail)
            if out is not None:
                _collect(plan, plan.site, batch, view, settle, out)
            del view  # before the next batch is read
        reader.check()
    if out is not None:
        reflectance, code = out
        detail["ground"] = [float(v) for v in scene_context(reflectance, reader.roles, code, plan.ground)]
        detail["clear"] = float(np.mean(code == ViewCode.CLEAR))
        detail["bytes"] = write_view(Archive(plan.out).view(job.scene.scene_id), reader.roles, reflectance, code)
    return settle


def _place(plan: ReadPlan, view: View, detail: dict[str, Any]) -> tuple[Any, Any]:
    """Return shift and gain (None unless asked for) of a view that holds the context windows; notes both."""
    from inundate.common.errors import InputError

    shift = plan.reference.shift(view)
    detail["shift"] = shift.as_dict()
    if shift.outcome == "beyond":
        message = f"scene {view.scene_id}: lies {np.hypot(shift.dx_px, shift.dy_px):.1f} pixels off the other scenes, over the limit of {plan.shift_limit_px:g}; it is set aside (key 'extent.shift_limit_px')"
        raise InputError(message)
    if not plan.normalise:
        return shift, None
    gain = plan.reference.gain(view, shift)
    detail["gain"] = gain.as_dict()
    return shift, gain


def _keep_sample(job: ReadJob, site: Site, settle: tuple[Any, Any]) -> None:
    """Read the pixels under a scene's labels, and write the scene's sample."""
    from inundate.scenes import read_view

    plan = job.plan
    view = read_view(job.scene, plan.profile, site.grid, grown(site, plan.reference is not None))
    reflectance, code = _empty(site, view.bands)
    _collect(plan, site, tuple(range(len(site.windows))), view, settle, (reflectance, code))
    write_view(Archive(plan.out).sample(job.scene.scene_id), view.bands, reflectance, code)


def _empty(site: Site, roles: tuple[str, ...]) -> tuple[np.ndarray, np.ndarray]:
    return np.full((len(roles), site.size), np.nan, np.float32), np.full(site.size, int(ViewCode.FILL), np.uint8)


def _collect(
    plan: ReadPlan,
    site: Site,
    numbers: tuple[int, ...],
    view: View,
    settle: tuple[Any, Any],
    out: tuple[np.ndarray, np.ndarray],
) -> None:
    """Settle the blocks of some of a site's windows one by one, and take the site's pixels out of each."""
    for number, block in zip(numbers, view.blocks, strict=False):
        (settled,) = _settled(type(view)(view.scene_id, view.bands, (block,)), plan.detail, *settle).blocks
        place = site.place(number)
        out[0][:, place] = site.pick(number, settled.window, settled.reflectance)
        out[1][place] = site.pick(number, settled.window, settled.code)


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
