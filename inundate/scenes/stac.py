"""Static STAC catalogs, 1.0 and 1.1: items to scenes."""

from __future__ import annotations

import json
import math
from collections.abc import Iterator, Mapping
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
import pystac

from inundate.common.errors import InputError, Refusal
from inundate.scenes.places import is_remote, read_text, resolve_href
from inundate.scenes.scene import MaskSource, Scene, SceneError, band_source, find_baseline
from inundate.scenes.sensors import SensorProfile, Variant

_PICTURES = ("thumbnail", "overview", "visual")
_OFFSET_DONE = "boa_offset_applied"
_REMOTE_READERS = 8


@dataclass(frozen=True, slots=True)
class _Found:
    """An item's dictionary, or why it could not be read."""

    href: str
    item: dict[str, Any] | None
    reason: str = ""


def stac_scenes(href: str, profile: SensorProfile) -> tuple[list[Scene], list[Refusal]]:
    """Read all items below a STAC catalog, collection, item collection or item.

    Returns
    -------
    scenes, refused : list of Scene, list of Refusal
        In the catalog's order.

    Raises
    ------
    InputError
        The root cannot be read or is no STAC object.
    """
    root = _load(href)
    scenes: list[Scene] = []
    refused: list[Refusal] = []
    for found in _items(root, href):
        name = found.href
        if found.item is not None:
            name = str(found.item.get("id") or found.href)
            try:
                scenes.append(scene_from_item(found.item, found.href, profile))
                continue
            except SceneError as error:
                reason = error.reason
            except InputError as error:
                reason = str(error)
        else:
            reason = found.reason
        refused.append(Refusal("scene", name, reason))
    return scenes, refused


def _load(href: str) -> dict[str, Any]:
    try:
        value = json.loads(read_text(href))
    except (OSError, UnicodeDecodeError) as error:
        message = f"catalog {href}: cannot be read ({error}); correct the path"
        raise InputError(message) from error
    except json.JSONDecodeError as error:
        message = f"catalog {href}: not valid JSON ({error}); write it again"
        raise InputError(message) from error
    if not isinstance(value, dict) or value.get("type") not in (
        "Catalog",
        "Collection",
        "FeatureCollection",
        "Feature",
    ):
        kind = value.get("type") if isinstance(value, dict) else type(value).__name__
        message = f"catalog {href}: type {kind!r} is no STAC catalog, collection or item; give a static STAC file"
        raise InputError(message)
    return value


def _items(root: dict[str, Any], href: str) -> Iterator[_Found]:
    """Walk links depth first, in their order; each file once."""
    if root["type"] == "Feature":
        yield _Found(href, root)
        return
    if root["type"] == "FeatureCollection":
        for feature in root.get("features", []):
            yield _Found(href, feature)
        return
    seen = {href}
    stack = [(href, root)]
    while stack:
        base, node = stack.pop()
        links = [link for link in node.get("links", []) if isinstance(link, dict) and isinstance(link.get("href"), str)]
        wanted = [resolve_href(link["href"], base) for link in links if link.get("rel") == "item"]
        fresh = [one for one in dict.fromkeys(wanted) if one not in seen]
        seen.update(fresh)
        yield from _read_items(fresh)
        below = []
        for link in links:
            child = resolve_href(link["href"], base)
            if link.get("rel") == "child" and child not in seen:
                seen.add(child)
                try:
                    below.append((child, _load(child)))
                except InputError as error:
                    yield _Found(child, None, str(error))
        stack.extend(reversed(below))


def _read_items(hrefs: list[str]) -> Iterator[_Found]:
    if any(is_remote(href) for href in hrefs):
        with ThreadPoolExecutor(_REMOTE_READERS) as pool:
            yield from pool.map(_read_item, hrefs)
    else:
        yield from map(_read_item, hrefs)


def _read_item(href: str) -> _Found:
    try:
        value = json.loads(read_text(href))
    except (OSError, UnicodeDecodeError) as error:
        return _Found(href, None, f"item {href}: cannot be read ({error}); correct the link or restore the file")
    except json.JSONDecodeError as error:
        return _Found(href, None, f"item {href}: not valid JSON ({error}); write it again")
    if not isinstance(value, dict) or value.get("type") != "Feature":
        return _Found(href, None, f"item {href}: not a STAC item (its type must be 'Feature'); correct the link")
    return _Found(href, value)


def scene_from_item(raw: Mapping[str, Any], href: str, profile: SensorProfile) -> Scene:
    """Turn one STAC item into a scene.

    Parameters
    ----------
    raw : mapping
        The item, STAC 1.0 or 1.1.
    href : str
        Where it was read; relative asset addresses count from there.
    profile : SensorProfile

    Raises
    ------
    SceneError
        No id or time, a required band or the mask missing, bad scale, offset or nodata.
    """
    name = str(raw.get("id") or href)
    try:
        item = pystac.Item.from_dict(dict(raw), href=href, migrate=False, preserve_dict=True)
    except Exception as error:
        raise SceneError(name, f"item {href} is not a valid STAC item ({error!r}); correct it") from error
    properties = item.properties
    when = _moment(item, name)
    assets = {key: asset.to_dict() for key, asset in item.assets.items()}
    variant = _variant(item, assets, profile)
    baseline = find_baseline(item.id, properties, profile)
    done = any(key.endswith(_OFFSET_DONE) and value is True for key, value in properties.items())
    offset = profile.scaling.offset if done else profile.scaling.offset_for(baseline, when)
    bands = {}
    for role in profile.roles:
        rule = profile.bands[role]
        names = (*(variant.names.get(role, ()) if variant else ()), *rule.assets)
        place = _find(assets, names, rule.common_names, (*names, *rule.band_names))
        if place is None:
            if rule.required:
                tried = ", ".join((*names, *rule.common_names))
                raise SceneError(
                    name, f"no asset for band {role} (looked for {tried}); add it or adapt the sensor profile"
                )
            continue
        stated = _stated(assets[place[0]], place[1], name, place[0])
        if done:
            stated.pop("offset", None)
        target = (resolve_href(str(assets[place[0]]["href"]), href), place[1])
        bands[role] = band_source(target, role, profile, offset, stated)
    place = _find(assets, profile.mask.assets, (), profile.mask.band_names)
    if place is None:
        tried = ", ".join(profile.mask.assets)
        raise SceneError(name, f"no mask asset (looked for {tried}); add it or adapt the sensor profile")
    return Scene(
        scene_id=item.id,
        datetime=when,
        sensor=profile.name,
        bands=bands,
        mask=MaskSource(resolve_href(str(assets[place[0]]["href"]), href), place[1], profile.mask.rules),
        baseline=baseline,
        sun_elevation_deg=_number(properties, "view:sun_elevation"),
        sun_azimuth_deg=_number(properties, "view:sun_azimuth"),
        view_zenith_deg=_number(properties, "view:off_nadir"),
        cloud_cover=_number(properties, "eo:cloud_cover"),
        crs=_crs(properties),
        stamp=_stamp(properties, assets),
    )


def _moment(item: pystac.Item, name: str) -> np.datetime64:
    when = item.datetime or item.common_metadata.start_datetime
    if when is None:
        raise SceneError(name, "no datetime; give the item the time of acquisition")
    stamp = pd.Timestamp(when)
    return (
        (stamp.tz_convert("UTC").tz_localize(None) if stamp.tzinfo else stamp).to_datetime64().astype("datetime64[ns]")
    )


def _number(properties: Mapping[str, Any], key: str) -> float:
    value = properties.get(key)
    return float(value) if isinstance(value, int | float) and not isinstance(value, bool) else float("nan")


def _crs(properties: Mapping[str, Any]) -> str | None:
    if isinstance(properties.get("proj:code"), str):
        return str(properties["proj:code"])
    return f"EPSG:{properties['proj:epsg']}" if isinstance(properties.get("proj:epsg"), int) else None


def _stamp(properties: Mapping[str, Any], assets: Mapping[str, Mapping[str, Any]]) -> str:
    told = [str(properties.get("updated", ""))]
    for key in sorted(assets):
        told += [str(assets[key][one]) for one in ("file:checksum", "updated") if one in assets[key]]
    return "|".join(told)


def _variant(item: pystac.Item, assets: Mapping[str, Any], profile: SensorProfile) -> Variant | None:
    told = [item.id, item.collection_id, item.properties.get("platform"), item.properties.get("constellation")]
    text = " ".join(str(one) for one in told if one).lower()
    for variant in profile.variants.values():
        if any(match.lower() in text for match in variant.matches):
            return variant
    for variant in profile.variants.values():
        if variant.has and all(key in assets for key in variant.has):
            return variant
    return None


def _find(
    assets: Mapping[str, Mapping[str, Any]],
    keys: tuple[str, ...],
    common_names: tuple[str, ...],
    band_names: tuple[str, ...],
) -> tuple[str, int] | None:
    """Return the asset key and band number: by key, then by common name, then by name inside an asset."""
    lower = {key.lower(): key for key in reversed(list(assets))}
    for key in keys:
        hit = key if key in assets else lower.get(key.lower())
        if hit is not None:
            inner = _bands(assets[hit])
            if len(inner) <= 1:
                return hit, 1
            number = _band_number(inner, common_names, band_names)
            if number:
                return hit, number
    data = {key: one for key, one in assets.items() if not _is_picture(key, one)}
    for wanted in common_names:
        for key, asset in data.items():
            number = _band_number(_bands(asset), (wanted,), ())
            if number:
                return key, number
    for wanted in band_names:
        for key, asset in data.items():
            number = _band_number(_bands(asset), (), (wanted,))
            if number:
                return key, number
    return None


def _is_picture(key: str, asset: Mapping[str, Any]) -> bool:
    return key.lower() in _PICTURES or any(role in _PICTURES for role in asset.get("roles") or [])


def _bands(asset: Mapping[str, Any]) -> list[Mapping[str, Any]]:
    for name in ("bands", "eo:bands", "raster:bands"):
        value = asset.get(name)
        if isinstance(value, list) and value:
            return [one if isinstance(one, dict) else {} for one in value]
    return []


def _band_number(bands: list[Mapping[str, Any]], common: tuple[str, ...], names: tuple[str, ...]) -> int:
    """Return the 1-based number of the first band with a wanted common name or name; 0 where there is none."""
    for wanted in common:
        for number, band in enumerate(bands, 1):
            if wanted in (band.get("eo:common_name"), band.get("common_name")):
                return number
    for wanted in names:
        for number, band in enumerate(bands, 1):
            if str(band.get("name", "")).lower() == wanted.lower():
                return number
    return 0


def _stated(asset: Mapping[str, Any], number: int, name: str, key: str) -> dict[str, float]:
    """Collect scale, offset and nodata that an asset states for a band (STAC 1.1 ``bands`` or 1.0 ``raster:bands``)."""
    levels: list[Mapping[str, Any]] = [asset]
    for inner in ("raster:bands", "bands"):
        listed = asset.get(inner)
        if isinstance(listed, list) and len(listed) >= number and isinstance(listed[number - 1], dict):
            levels.append(listed[number - 1])
    out: dict[str, float] = {}
    for level in levels:
        for field in ("scale", "offset", "nodata"):
            for told in (f"raster:{field}", field):
                if level.get(told) is not None:
                    out[field] = _stated_number(level[told], field, name, key)
    if not 0.0 < out.get("scale", 1.0) < math.inf:
        raise SceneError(name, f"asset {key}: scale = {out['scale']!r} must be a number above 0; correct the item")
    if not abs(out.get("offset", 0.0)) <= 2.0:
        raise SceneError(
            name,
            f"asset {key}: offset = {out['offset']!r} is no reflectance; it is added after scaling (for example -0.1); "
            "correct the item",
        )
    return out


def _stated_number(value: Any, field: str, name: str, key: str) -> float:
    if isinstance(value, str) and field == "nodata" and value in ("nan", "inf", "-inf"):
        return float(value)
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise SceneError(name, f"asset {key}: {field} = {value!r} must be a number; correct the item")
    return float(value)
