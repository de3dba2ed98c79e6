"""One scene: where its bands and mask stand, and how they are scaled and decoded; and the error of a bad scene."""

from __future__ import annotations

import hashlib
import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

import numpy as np

from inundate.common.errors import InputError
from inundate.scenes.masks import MaskRules
from inundate.scenes.places import file_stamp, is_remote
from inundate.scenes.sensors import SensorProfile, baseline_key


class SceneError(InputError):
    """A scene that cannot serve; the batch sets it aside with this one sentence.

    Attributes
    ----------
    scene_id : str
    kind : str
        ``broken`` (a file is missing, truncated or not as told), ``outside`` (the scene does not touch the area) or
        ``empty`` (it touches the area, but holds fill alone there).
    """

    def __init__(self, scene_id: str, reason: str, kind: Literal["broken", "outside", "empty"] = "broken") -> None:
        super().__init__(f"scene {scene_id}: {reason}")
        self.scene_id = scene_id
        self.reason = reason
        self.kind = kind

    def __reduce__(self) -> tuple[type[SceneError], tuple[str, str, str]]:
        """Let the error cross process borders."""
        return SceneError, (self.scene_id, self.reason, self.kind)


@dataclass(frozen=True, slots=True)
class BandSource:
    """One band of one file, with its scaling resolved: ``reflectance = scale * DN + offset``.

    ``fill`` (None where there is none, may be NaN) and ``valid`` (least, greatest) apply to the raw number.
    """

    href: str
    band: int
    scale: float
    offset: float
    fill: float | None
    valid: tuple[float, float]


@dataclass(frozen=True, slots=True)
class MaskSource:
    """The mask layer: file, band and rules."""

    href: str
    band: int
    rules: MaskRules


@dataclass(frozen=True, slots=True)
class Scene:
    """One scene of the catalog.

    Attributes
    ----------
    scene_id : str
    datetime : numpy.datetime64[ns]
        UTC.
    sensor : str
        Name of the sensor profile.
    bands : mapping of role to BandSource
    mask : MaskSource
    baseline : str or None
        Processing baseline, where told.
    sun_elevation_deg, sun_azimuth_deg, view_zenith_deg : float
        NaN where not told.
    cloud_cover : float
        Percent as told by the item, NaN where not.
    crs : str or None
        Coordinate reference system that the item tells; the files must agree.
    stamp : str
        Version of remote files as the item tells it.
    """

    scene_id: str
    datetime: np.datetime64
    sensor: str
    bands: Mapping[str, BandSource]
    mask: MaskSource
    baseline: str | None = None
    sun_elevation_deg: float = float("nan")
    sun_azimuth_deg: float = float("nan")
    view_zenith_deg: float = float("nan")
    cloud_cover: float = float("nan")
    crs: str | None = None
    stamp: str = field(default="")

    @property
    def files(self) -> tuple[str, ...]:
        """Distinct files, sorted."""
        return tuple(sorted({self.mask.href, *(one.href for one in self.bands.values())}))


def fingerprint(scene: Scene) -> str:
    """Return a short text that changes when a scene's files, scaling or mask rules change.

    Local files count by name, size and modification time, not by folder, so that an archive can be moved; remote ones by
    address and the stamp that the item tells.
    """
    parts = [scene.scene_id, str(scene.datetime), scene.stamp, repr(scene.mask.rules)]
    sources = {"mask": (scene.mask.href, scene.mask.band)}
    for role, one in sorted(scene.bands.items()):
        sources[role] = (one.href, one.band)
        parts.append(f"{role}:{one.scale}:{one.offset}:{one.fill}:{one.valid}")
    for role, (href, band) in sources.items():
        name = href if is_remote(href) else href.rsplit("/", 1)[-1]
        parts.append(f"{role}={name}:{band}:{file_stamp(href)}")
    return hashlib.blake2b("\n".join(parts).encode(), digest_size=16).hexdigest()


def find_baseline(scene_id: str, properties: Mapping[str, object], profile: SensorProfile) -> str | None:
    """Return the processing baseline told by a property or the scene id, None where neither has one that can be read."""
    for name in profile.scaling.baseline_properties:
        value = properties.get(name)
        if value is not None and re.fullmatch(r"[Nn]?\d{1,2}\.?\d{2}", str(value).strip()):
            return "{:02d}.{:02d}".format(*baseline_key(str(value)))
    if profile.scaling.baseline_in_id:
        found = re.search(profile.scaling.baseline_in_id, scene_id)
        if found:
            return f"{found[1]}.{found[2]}"
    return None


def band_source(
    place: tuple[str, int], role: str, profile: SensorProfile, offset: float, stated: Mapping[str, float]
) -> BandSource:
    """Resolve the scaling of one band.

    The asset's own metadata outrank the profile. Scale and offset go together: where an asset states either, the other
    takes the standard's default (scale 1, offset 0), so that an offset is never applied twice. ``nodata`` stands alone.

    Parameters
    ----------
    place : (href, band)
    role : str
    profile : SensorProfile
    offset : float
        The profile's offset for the scene's baseline.
    stated : mapping
        What the asset states: any of ``scale``, ``offset``, ``nodata``.
    """
    scaling, rule = profile.scaling, profile.bands[role]
    base_scale = scaling.scale if rule.scale is None else rule.scale
    base_offset = offset if rule.offset is None else rule.offset
    scale, shift = base_scale, base_offset
    if "scale" in stated or "offset" in stated:
        scale, shift = stated.get("scale", 1.0), stated.get("offset", 0.0)
    valid = scaling.valid
    if scale != base_scale:  # the profile's range, as the same reflectance
        ends = [(end * base_scale + base_offset - shift) / scale for end in valid]
        valid = (ends[0], ends[1])
    return BandSource(place[0], place[1], scale, shift, stated.get("nodata", scaling.fill), valid)
