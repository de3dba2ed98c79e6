"""The catalog of an archive: a static STAC catalog, or a table of scenes."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from rasterio.errors import RasterioError

from inundate.common.codes import BAND_ROLES
from inundate.common.errors import InputError, Refusal
from inundate.scenes.files import open_file
from inundate.scenes.places import file_stamp, is_remote, resolve_href
from inundate.scenes.scene import BandSource, MaskSource, Scene, SceneError, band_source, find_baseline
from inundate.scenes.sensors import SHIPPED_PROFILES, SensorProfile, load_profile
from inundate.scenes.stac import stac_scenes

_NEEDED = ("scene_id", "datetime", "mask")
_OPTIONAL = ("sensor", "image", "baseline", "sun_elevation", "sun_azimuth", "view_zenith", "updated")


@dataclass(frozen=True, slots=True)
class Catalog:
    """Scenes of an archive by time and id, and those set aside.

    Attributes
    ----------
    scenes : tuple of Scene
        Sorted by datetime, then scene_id.
    refused : tuple of Refusal
    """

    scenes: tuple[Scene, ...]
    refused: tuple[Refusal, ...]


def open_catalog(path: str | Path, profile: SensorProfile) -> Catalog:
    """Open a catalog of scenes.

    Parameters
    ----------
    path : str or Path
        A static STAC catalog, collection, item collection or item (1.0 or 1.1, local or remote), or a table
        ``scenes.csv`` with ``scene_id, datetime, mask``, a multi-band ``image`` or one column a band role, and optional
        ``sensor`` (a shipped profile or the path of one's own), ``baseline, sun_elevation, sun_azimuth, view_zenith,
        updated``. The bands of an ``image`` are found by their descriptions, else they stand in the profile's order.
    profile : SensorProfile
        Of scenes that name no other sensor.

    Returns
    -------
    Catalog

    Raises
    ------
    InputError
        The catalog cannot be read, or no scene is left.
    """
    href = str(path)
    if not is_remote(href):
        href = str(Path(href).absolute())
        if not Path(href).is_file():
            message = f"catalog {path}: no such file; correct [scenes] catalog"
            raise InputError(message)
    read = _table_scenes if href.lower().endswith(".csv") else stac_scenes
    scenes, refused = read(href, profile)
    kept: dict[str, Scene] = {}
    for scene in scenes:
        if scene.scene_id in kept:
            reason = f"scene_id {scene.scene_id!r} stands twice in the catalog; the first is used, rename or remove the other"
            refused.append(Refusal("scene", scene.scene_id, reason))
            continue
        missing = [one for one in scene.files if file_stamp(one) == "absent"]
        if missing:
            reason = f"file {missing[0]} does not exist; restore it or correct the catalog"
            refused.append(Refusal("scene", scene.scene_id, reason))
            continue
        kept[scene.scene_id] = scene
    if not kept:
        why = f"; first reason: {refused[0].reason}" if refused else ", it has no items"
        message = f"catalog {path}: no scene can be used ({len(refused)} refused){why}"
        raise InputError(message)
    ordered = sorted(kept.values(), key=lambda scene: (scene.datetime, scene.scene_id))
    return Catalog(tuple(ordered), tuple(refused))


def _table_scenes(href: str, profile: SensorProfile) -> tuple[list[Scene], list[Refusal]]:
    try:
        table = pd.read_csv(href, dtype=str, keep_default_na=False, skipinitialspace=True)
    except (OSError, ValueError) as error:
        message = f"catalog {href}: cannot be read as a table ({error}); give a comma-separated UTF-8 file"
        raise InputError(message) from error
    known = (*_NEEDED, *_OPTIONAL, *BAND_ROLES)
    for column in table.columns:
        if column not in known:
            message = f"catalog {href}: unknown column {column!r}; valid columns are {', '.join(known)}"
            raise InputError(message)
    for column in _NEEDED:
        if column not in table:
            message = f"catalog {href}: column {column!r} is missing; add it"
            raise InputError(message)
    scenes, refused = [], []
    profiles: dict[str, SensorProfile] = {"": profile, profile.name: profile}
    for number, row in enumerate(table.to_dict("records"), 2):
        name = str(row["scene_id"]).strip()
        try:
            if not name:
                reason = "scene_id is empty; give each scene a name"
                raise SceneError(name, reason)
            scenes.append(_row_scene({str(k): str(v).strip() for k, v in row.items()}, href, profiles))
        except SceneError as error:
            refused.append(Refusal("scene", name or f"row {number}", f"row {number}: {error.reason}"))
        except InputError as error:
            refused.append(Refusal("scene", name, f"row {number}: {error}"))
    return scenes, refused


def _row_scene(row: dict[str, str], href: str, profiles: dict[str, SensorProfile]) -> Scene:
    name = row["scene_id"]
    sensor = row.get("sensor", "")
    if sensor not in profiles:
        profiles[sensor] = load_profile(sensor if sensor in SHIPPED_PROFILES else resolve_href(sensor, href))
    profile = profiles[sensor]
    when = pd.to_datetime(row["datetime"], utc=True, errors="coerce", format="ISO8601")
    if when is pd.NaT:
        raise SceneError(
            name, f"datetime {row['datetime']!r} is no ISO 8601 time; write for example 2024-03-01T10:30:00Z"
        )
    moment = when.tz_localize(None).to_datetime64().astype("datetime64[ns]")
    told = {key: row[key] for key in ("baseline",) if row.get(key)}
    baseline = told.get("baseline") or find_baseline(name, {}, profile)
    offset = profile.scaling.offset_for(baseline, moment)
    if not row["mask"]:
        raise SceneError(name, "mask is empty; give the path of the mask layer")
    places = _row_places(row, href, profile)
    bands: dict[str, BandSource] = {
        role: band_source(place, role, profile, offset, {}) for role, place in places.items()
    }
    return Scene(
        scene_id=name,
        datetime=moment,
        sensor=profile.name,
        bands=bands,
        mask=MaskSource(resolve_href(row["mask"], href), 1, profile.mask.rules),
        baseline=baseline,
        sun_elevation_deg=_number(row, "sun_elevation"),
        sun_azimuth_deg=_number(row, "sun_azimuth"),
        view_zenith_deg=_number(row, "view_zenith"),
        stamp=row.get("updated", ""),
    )


def _number(row: Mapping[str, Any], key: str) -> float:
    text = row.get(key, "")
    try:
        return float(text) if text else float("nan")
    except ValueError:
        raise SceneError(row["scene_id"], f"{key} = {text!r} must be a number of degrees; correct it") from None


def _row_places(row: dict[str, str], href: str, profile: SensorProfile) -> dict[str, tuple[str, int]]:
    places = {}
    if row.get("image"):
        image = resolve_href(row["image"], href)
        places = {role: (image, number) for role, number in _image_bands(row["scene_id"], image, profile).items()}
    for role in profile.roles:
        if row.get(role):
            places[role] = (resolve_href(row[role], href), 1)
    for role in profile.roles:
        if profile.bands[role].required and role not in places:
            raise SceneError(row["scene_id"], f"no band {role}; give an image that holds it or a column {role}")
    return {role: places[role] for role in profile.roles if role in places}


def _image_bands(name: str, image: str, profile: SensorProfile) -> dict[str, int]:
    """Return the band number of each role in a multi-band image: by band descriptions, else in the profile's order."""
    try:
        with open_file(image) as data:
            told = [str(one or "").lower() for one in data.descriptions]
            count = data.count
    except RasterioError as error:
        raise SceneError(name, f"image {image} cannot be opened ({error}); restore the file") from error
    if any(told):
        out = {}
        for role in profile.roles:
            rule = profile.bands[role]
            for wanted in (role, *rule.common_names, *rule.assets, *rule.band_names):
                if wanted.lower() in told:
                    out[role] = told.index(wanted.lower()) + 1
                    break
        return out
    needed = [role for role in profile.roles if profile.bands[role].required]
    for roles in (profile.roles, needed):
        if count == len(roles):
            return {role: number for number, role in enumerate(roles, 1)}
    message = (
        f"image {image} has {count} bands without descriptions, the sensor has {len(profile.roles)} "
        f"({', '.join(profile.roles)}); describe the bands or give one column a role"
    )
    raise SceneError(name, message)


def scene_times(scenes: tuple[Scene, ...]) -> np.ndarray:
    """Return acquisition times (datetime64[ns], shape (scene,))."""
    return np.array([scene.datetime for scene in scenes], "datetime64[ns]")
