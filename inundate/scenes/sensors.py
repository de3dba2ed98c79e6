"""Sensor profiles: how the bands and the mask of a scene are found, scaled and decoded. Shipped ones and a user's own."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import date, datetime
from importlib import resources
from pathlib import Path
from typing import Any, NoReturn

import numpy as np

from inundate.common.codes import BAND_ROLES
from inundate.common.errors import InputError
from inundate.scenes.masks import MASK_CODES, MaskRule, MaskRules

SHIPPED_PROFILES = ("sentinel-2-l2a", "landsat-c2-l2", "hls-v2", "visnir-4band")


@dataclass(frozen=True, slots=True)
class BaselineOffset:
    """Offset (reflectance) from a processing baseline on; by acquisition date where a scene tells no baseline."""

    start: str
    offset: float
    since: np.datetime64 | None = None


@dataclass(frozen=True, slots=True)
class Scaling:
    """From raw numbers to reflectance: ``reflectance = scale * DN + offset``, fill tested on the raw number first.

    Attributes
    ----------
    scale, offset : float
    fill : float or None
        Raw number that means no data.
    valid : tuple of float
        Least and greatest raw number that count as data, both included.
    baselines : tuple of BaselineOffset
        Offsets by processing baseline, ascending.
    baseline_properties : tuple of str
        Item properties that may tell the baseline.
    baseline_in_id : str or None
        Regular expression with two groups (major, minor) that finds the baseline in a scene id.
    """

    scale: float
    offset: float = 0.0
    fill: float | None = None
    valid: tuple[float, float] = (-np.inf, np.inf)
    baselines: tuple[BaselineOffset, ...] = ()
    baseline_properties: tuple[str, ...] = ()
    baseline_in_id: str | None = None

    def offset_for(self, baseline: str | None, when: np.datetime64) -> float:
        """Return the offset for a baseline such as ``05.09``; by date where the baseline is not told (None)."""
        offset = self.offset
        for rule in self.baselines:
            if baseline is not None:
                holds = baseline_key(baseline) >= baseline_key(rule.start)
            else:
                holds = rule.since is not None and bool(when >= rule.since)
            if holds:
                offset = rule.offset
        return offset


@dataclass(frozen=True, slots=True)
class BandRule:
    """Ways to find one band: asset keys, common names, names inside a multi-band asset, in order of preference."""

    assets: tuple[str, ...] = ()
    common_names: tuple[str, ...] = ()
    band_names: tuple[str, ...] = ()
    required: bool = True
    scale: float | None = None
    offset: float | None = None


@dataclass(frozen=True, slots=True)
class Variant:
    """Band names that count only for one instrument.

    Attributes
    ----------
    matches : tuple of str
        Texts, one of which stands in the scene's id, collection, platform or instruments (case ignored).
    has : tuple of str
        Asset keys that must all be there where no text matches any variant.
    names : mapping of role to tuple of str
        Asset keys or band names of the variant.
    """

    matches: tuple[str, ...]
    has: tuple[str, ...]
    names: Mapping[str, tuple[str, ...]]


@dataclass(frozen=True, slots=True)
class MaskLayer:
    """Ways to find the mask layer and the rules to decode it."""

    assets: tuple[str, ...]
    band_names: tuple[str, ...]
    rules: MaskRules


@dataclass(frozen=True, slots=True)
class SensorProfile:
    """All that must be known of a sensor's scenes.

    Attributes
    ----------
    name : str
    step_m : float
        Side of the finest pixels, metres: the step of the area's grid.
    bands : mapping of role to BandRule
    scaling : Scaling
    mask : MaskLayer
    variants : mapping of name to Variant
    """

    name: str
    step_m: float
    bands: Mapping[str, BandRule]
    scaling: Scaling
    mask: MaskLayer
    variants: Mapping[str, Variant] = field(default_factory=dict)

    @property
    def roles(self) -> tuple[str, ...]:
        """Band roles of the profile, in the order of ``common.codes.BAND_ROLES``."""
        return tuple(role for role in BAND_ROLES if role in self.bands)


def baseline_key(baseline: str) -> tuple[int, ...]:
    """Return a processing baseline such as ``04.00`` (or ``N0400``, ``4.0``) as numbers that compare in order."""
    text = baseline.strip().lstrip("Nn")
    if re.fullmatch(r"\d{4}", text):
        text = f"{text[:2]}.{text[2:]}"
    try:
        parts = tuple(int(part) for part in text.split("."))
    except ValueError:
        message = f"processing baseline {baseline!r}: must be numbers such as 04.00; correct the item or scenes.csv"
        raise InputError(message) from None
    return (*parts, 0, 0)[:2]


def load_profile(name_or_path: str | Path) -> SensorProfile:
    """Load a shipped sensor profile by name, or a user's own from a TOML file.

    Parameters
    ----------
    name_or_path : str or Path
        One of ``SHIPPED_PROFILES``, or the path of a TOML file.

    Notes
    -----
    Keys of a profile; the shipped files are examples of each:

    ``name``; ``step_m``, side of the finest pixels.
    ``[scaling]``: ``scale`` and ``offset`` (reflectance = scale x raw number + offset), ``fill`` (raw number, tested before
    scaling), ``valid = [least, greatest]`` (raw numbers), ``baselines = [{from = "04.00", since = 2022-01-25, offset = -0.1}]``
    (by processing baseline; by acquisition date from ``since`` where a scene tells none), ``baseline_properties`` (item
    properties that tell it), ``baseline_in_id`` (regular expression with two groups).
    ``[bands.<role>]``: ``assets`` (keys, in order of preference), ``common_names``, ``band_names`` (inside an asset of
    several bands), ``required`` (default true), own ``scale`` and ``offset``.
    ``[variants.<name>]``: ``matches`` (texts in id, collection or platform) or ``has`` (asset keys), and ``names`` (role =
    keys that count for this instrument alone).
    ``[mask]``: ``assets``, ``band_names``, ``rules`` and ``otherwise``. A rule gives ``code`` (clear, cloud, shadow, snow_ice
    or fill) and ``values`` (whole values), ``bit`` (one bit) or ``bits`` with ``at_least`` (a field of neighbouring bits).
    The first rule that holds decides.

    Returns
    -------
    SensorProfile

    Raises
    ------
    InputError
        Unknown name, missing or malformed file, unknown key (valid ones are named) or bad value.
    """
    text = str(name_or_path)
    if text in SHIPPED_PROFILES:
        source = (resources.files("inundate.scenes") / "profiles" / f"{text}.toml").read_text(encoding="utf-8")
        return parse_profile(source, f"profile {text}")
    path = Path(name_or_path)
    if not path.is_file():
        message = (
            f"sensor {text!r}: neither a file nor a shipped profile; use one of {', '.join(SHIPPED_PROFILES)} "
            "or the path of a TOML file"
        )
        raise InputError(message)
    try:
        source = path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        message = f"sensor profile {path}: cannot be read ({error}); give a UTF-8 TOML file"
        raise InputError(message) from error
    return parse_profile(source, str(path))


def parse_profile(source: str, place: str) -> SensorProfile:
    """Parse the TOML text of a profile; ``place`` names it in errors. Raises InputError as :func:`load_profile`."""
    try:
        raw = tomllib.loads(source)
    except tomllib.TOMLDecodeError as error:
        message = f"{place}: not valid TOML ({error}); correct the file"
        raise InputError(message) from error
    top = _Table(raw, place, ("name", "step_m", "scaling", "bands", "mask", "variants"))
    bands = {}
    for role, value in top.table("bands", required=True).items():
        if role not in BAND_ROLES:
            _fail(f"{place}: bands.{role}", role, f"must be a band role, one of {', '.join(BAND_ROLES)}")
        bands[role] = _band(_Table(value, f"{place}: bands.{role}", _BAND_KEYS))
    if not bands:
        _fail(f"{place}: bands", bands, "must name at least one band")
    variants = {
        name: _variant(_Table(value, f"{place}: variants.{name}", ("matches", "has", "names")), tuple(bands))
        for name, value in top.table("variants").items()
    }
    return SensorProfile(
        name=top.text("name"),
        step_m=top.number("step_m", above=0.0),
        bands=bands,
        scaling=_scaling(_Table(top.table("scaling", required=True), f"{place}: scaling", _SCALING_KEYS)),
        mask=_mask(_Table(top.table("mask", required=True), f"{place}: mask", _MASK_KEYS)),
        variants=variants,
    )


_BAND_KEYS = ("assets", "common_names", "band_names", "required", "scale", "offset")
_SCALING_KEYS = ("scale", "offset", "fill", "valid", "baselines", "baseline_properties", "baseline_in_id")
_MASK_KEYS = ("assets", "band_names", "rules", "otherwise", "fill")
_RULE_KEYS = ("code", "values", "bit", "bits", "at_least")


def _fail(place: str, value: object, rule: str) -> NoReturn:
    message = f"{place} = {value!r}: {rule}; correct the sensor profile"
    raise InputError(message)


class _Table:
    """One TOML table with checked access; unknown keys are refused at once."""

    def __init__(self, raw: Any, place: str, keys: tuple[str, ...]) -> None:
        if not isinstance(raw, dict):
            _fail(place, raw, "must be a table")
        for key in raw:
            if key not in keys:
                message = f"{place}: unknown key {key!r}; valid keys are {', '.join(keys)}"
                raise InputError(message)
        self.raw: dict[str, Any] = raw
        self.place = place

    def has(self, key: str) -> bool:
        return key in self.raw

    def need(self, key: str) -> Any:
        if key not in self.raw:
            message = f"{self.place}: key {key!r} is missing; add it to the sensor profile"
            raise InputError(message)
        return self.raw[key]

    def table(self, key: str, *, required: bool = False) -> dict[str, Any]:
        value = self.need(key) if required else self.raw.get(key, {})
        if not isinstance(value, dict):
            _fail(f"{self.place}.{key}", value, "must be a table")
        return value

    def text(self, key: str) -> str:
        value = self.need(key)
        if not isinstance(value, str) or not value.strip():
            _fail(f"{self.place}.{key}", value, "must be a text that is not empty")
        return value

    def number(self, key: str, *, above: float = -np.inf) -> float:
        value = self.need(key)
        if isinstance(value, bool) or not isinstance(value, int | float) or not np.isfinite(value) or value <= above:
            _fail(f"{self.place}.{key}", value, f"must be a finite number above {above:g}")
        return float(value)

    def integer(self, key: str, low: int, high: int) -> int:
        value = self.need(key)
        if isinstance(value, bool) or not isinstance(value, int) or not low <= value <= high:
            _fail(f"{self.place}.{key}", value, f"must be a whole number from {low} to {high}")
        return int(value)

    def texts(self, key: str) -> tuple[str, ...]:
        value = self.raw.get(key, [])
        if not isinstance(value, list) or not all(isinstance(one, str) and one for one in value):
            _fail(f"{self.place}.{key}", value, "must be a list of texts")
        return tuple(value)

    def optional(self, key: str) -> float | None:
        return self.number(key) if key in self.raw else None


def _band(table: _Table) -> BandRule:
    required = table.raw.get("required", True)
    if not isinstance(required, bool):
        _fail(f"{table.place}.required", required, "must be true or false")
    rule = BandRule(
        assets=table.texts("assets"),
        common_names=table.texts("common_names"),
        band_names=table.texts("band_names"),
        required=required,
        scale=table.number("scale", above=0.0) if table.has("scale") else None,
        offset=table.optional("offset"),
    )
    if not (rule.assets or rule.common_names or rule.band_names):
        _fail(table.place, table.raw, "must give assets, common_names or band_names")
    return rule


def _variant(table: _Table, roles: tuple[str, ...]) -> Variant:
    names = _Table(table.table("names", required=True), f"{table.place}.names", roles)
    return Variant(table.texts("matches"), table.texts("has"), {role: names.texts(role) for role in names.raw})


def _scaling(table: _Table) -> Scaling:
    valid = table.raw.get("valid", [-np.inf, np.inf])
    pair = isinstance(valid, list) and len(valid) == 2 and all(type(one) in (int, float) for one in valid)
    if not pair or not valid[0] < valid[1]:
        _fail(f"{table.place}.valid", valid, "must be two numbers, least and greatest")
    pattern = table.text("baseline_in_id") if table.has("baseline_in_id") else None
    if pattern is not None:
        try:
            groups = re.compile(pattern).groups
        except re.error:
            groups = 0
        if groups != 2:
            _fail(f"{table.place}.baseline_in_id", pattern, "must be a regular expression with two groups")
    return Scaling(
        scale=table.number("scale", above=0.0),
        offset=table.number("offset") if table.has("offset") else 0.0,
        fill=table.optional("fill"),
        valid=(float(valid[0]), float(valid[1])),
        baselines=_baselines(table),
        baseline_properties=table.texts("baseline_properties"),
        baseline_in_id=pattern,
    )


def _baselines(table: _Table) -> tuple[BaselineOffset, ...]:
    rules = []
    listed = table.raw.get("baselines", [])
    if not isinstance(listed, list):
        _fail(f"{table.place}.baselines", listed, "must be a list of tables")
    for number, value in enumerate(listed):
        row = _Table(value, f"{table.place}.baselines[{number}]", ("from", "since", "offset"))
        since = row.raw.get("since")
        if since is not None and not isinstance(since, date | datetime):
            _fail(f"{row.place}.since", since, "must be a date such as 2022-01-25")
        moment = None if since is None else np.datetime64(since.strftime("%Y-%m-%d"), "ns")
        start = row.text("from")
        baseline_key(start)
        rules.append(BaselineOffset(start, row.number("offset"), moment))
    return tuple(sorted(rules, key=lambda rule: baseline_key(rule.start)))


def _mask(table: _Table) -> MaskLayer:
    otherwise = _code(table, "otherwise") if table.has("otherwise") else MASK_CODES["fill"]
    listed = table.need("rules")
    if not isinstance(listed, list) or not listed:
        _fail(f"{table.place}.rules", listed, "must be a list of tables that is not empty")
    rules = tuple(_rule(_Table(one, f"{table.place}.rules[{n}]", _RULE_KEYS)) for n, one in enumerate(listed))
    fill = table.integer("fill", 0, 65535) if table.has("fill") else None
    layer = MaskLayer(table.texts("assets"), table.texts("band_names"), MaskRules(rules, otherwise, fill))
    if not layer.assets and not layer.band_names:
        _fail(table.place, table.raw, "must give assets or band_names")
    return layer


def _code(table: _Table, key: str) -> Any:
    value = table.text(key)
    if value not in MASK_CODES:
        _fail(f"{table.place}.{key}", value, f"must be one of {', '.join(MASK_CODES)}")
    return MASK_CODES[value]


def _rule(table: _Table) -> MaskRule:
    code = _code(table, "code")
    if sum(table.has(key) for key in ("values", "bit", "bits")) != 1:
        _fail(table.place, table.raw, "must have exactly one of values, bit, bits")
    if table.has("values"):
        values = table.raw["values"]
        good = isinstance(values, list) and values and all(type(v) is int and 0 <= v <= 65535 for v in values)
        if not good or table.has("at_least"):
            _fail(f"{table.place}.values", values, "must be a list of whole numbers 0..65535, without at_least")
        return MaskRule(code, values=tuple(values))
    if table.has("bit"):
        return MaskRule(code, low_bit=table.integer("bit", 0, 15), n_bits=1)
    bits = table.raw["bits"]
    whole = isinstance(bits, list) and bits and all(type(b) is int and 0 <= b <= 15 for b in bits)
    if not whole or bits != list(range(bits[0], bits[0] + len(bits))):
        _fail(f"{table.place}.bits", bits, "must be neighbouring bits 0..15, lowest first, such as [8, 9]")
    return MaskRule(code, low_bit=bits[0], n_bits=len(bits), at_least=table.integer("at_least", 1, 2 ** len(bits) - 1))
