"""The pipeline file: one validated TOML file that names every input and setting."""

from __future__ import annotations

import tomllib
from itertools import pairwise
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationError, field_validator

from inundate.common.errors import InputError

_DAY = r"^\d{2}-\d{2}$"


class _Section(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, validate_default=True)


class Area(_Section):
    """``[area]``: the landscape and its wetlands."""

    name: str = Field(min_length=1)
    crs: str
    wetlands: str
    elevation: str | None = None

    @field_validator("crs")
    @classmethod
    def _projected_metres(cls, value: str) -> str:
        from rasterio.crs import CRS
        from rasterio.errors import CRSError

        try:
            crs = CRS.from_user_input(value)
        except (CRSError, ValueError) as err:
            message = f"{value!r} is not a known coordinate reference system; give for example 'EPSG:32633'"
            raise ValueError(message) from err
        if not crs.is_projected or abs(crs.linear_units_factor[1] - 1.0) > 1e-9:
            message = f"{value!r} is not projected in metres; choose a projected system such as the local UTM zone"
            raise ValueError(message)
        return value


class Scenes(_Section):
    """``[scenes]``: the archive of scenes and the sensor profile that reads them."""

    catalog: str
    sensor: str = "sentinel-2-l2a"


class Labels(_Section):
    """``[labels]``: own examples of water and dry ground."""

    examples: str | None = None


class Loggers(_Section):
    """``[loggers]``: water-level loggers, barometer and field checks."""

    registry: str | None = None
    barometer: str | None = None
    checks: str | None = None


class Stage(_Section):
    """``[stage]``: from readings to stage; sds serve where the registry or the checks say nothing."""

    height_sd_m: float = Field(default=0.01, gt=0, le=1)
    sensor_sd_m: float = Field(default=0.005, gt=0, le=1)
    check_sd_m: float = Field(default=0.01, gt=0, le=1)
    barometer_elevation_m: float | None = Field(default=None, ge=-430, le=9000)
    barometer_hole_h: float = Field(default=3.0, gt=0, le=48)
    barometer_utc_offset: str = ""


class Weather(_Section):
    """``[weather]``: daily weather of the area."""

    daily: str | None = None


class Output(_Section):
    """``[output]``: where archive, models, maps and products are kept."""

    folder: str = "out"


class Leaves(_Section):
    """``[leaves]``: leaf state; four fixed month-day dates override what the greenness tells."""

    green_up: Annotated[str, Field(pattern=_DAY)] | None = None
    leaf_on: Annotated[str, Field(pattern=_DAY)] | None = None
    leaf_fall: Annotated[str, Field(pattern=_DAY)] | None = None
    leaf_off: Annotated[str, Field(pattern=_DAY)] | None = None

    def fixed(self) -> dict[str, str] | None:
        """Return the four fixed dates, or None where the greenness decides."""
        dates = {k: getattr(self, k) for k in ("green_up", "leaf_on", "leaf_fall", "leaf_off")}
        given = {k: v for k, v in dates.items() if v is not None}
        return {k: str(v) for k, v in given.items()} or None


class Classifier(_Section):
    """``[classifier]``: the water classifier."""

    seed: int = 20
    trees: int = Field(default=200, ge=10, le=2000)
    minimum_examples: int = Field(default=60, ge=2)
    starter_examples: Literal["auto", "always", "never"] = "auto"


class Extent(_Section):
    """``[extent]``: from pixels to observed extent."""

    co_registration: bool = True
    normalisation: bool = False
    shift_limit_px: float = Field(default=2.0, gt=0, le=10)
    decisions: str | None = None


class Relation(_Section):
    """``[relation]``: stage-area relations."""

    seed: int = 20


class Series(_Section):
    """``[series]``: gap filling, hydroperiod, size classes."""

    seed: int = 20
    water_year_start_month: int = Field(default=10, ge=1, le=12)
    size_class_edges_ha: tuple[float, ...] = (0.1, 0.3, 1.0, 3.0)
    draws: int = Field(default=0, ge=0, le=1000)

    @field_validator("size_class_edges_ha")
    @classmethod
    def _rising(cls, value: tuple[float, ...]) -> tuple[float, ...]:
        if any(b <= a for a, b in pairwise(value)) or any(v <= 0 for v in value):
            message = f"{list(value)} must be positive and rising; order the edges in hectares from small to large"
            raise ValueError(message)
        return value


class Skill(_Section):
    """``[skill]``: scores against the field."""

    walked_extents: str | None = None
    labels_are_probability_sample: bool = False


class Compute(_Section):
    """``[compute]``: workers and memory."""

    workers: int = Field(default=2, ge=1, le=1024)
    scheduler: str = "threads"
    memory_mb: int = Field(default=1000, ge=200)

    @field_validator("scheduler")
    @classmethod
    def _known(cls, value: str) -> str:
        if value in ("threads", "processes", "serial") or value.startswith(("tcp://", "tls://", "ucx://")):
            return value
        message = f"{value!r} is not a scheduler; use 'threads', 'processes', 'serial' or an address such as 'tcp://host:8786'"
        raise ValueError(message)


class Pipeline(_Section):
    """A whole pipeline file. Paths are text as written; :meth:`path` resolves them against the file's folder."""

    area: Area
    scenes: Scenes
    labels: Labels = Labels()
    loggers: Loggers = Loggers()
    stage: Stage = Stage()
    weather: Weather = Weather()
    output: Output = Output()
    leaves: Leaves = Leaves()
    classifier: Classifier = Classifier()
    extent: Extent = Extent()
    relation: Relation = Relation()
    series: Series = Series()
    skill: Skill = Skill()
    compute: Compute = Compute()
    file: Path = Field(default=Path("pipeline.toml"), exclude=True)

    def path(self, text: str) -> str:
        """Resolve a path of the file; remote addresses (``https://``, ``s3://``) stay as they are."""
        if "://" in text:
            return text
        return str((self.file.parent / text).resolve())

    @property
    def out(self) -> Path:
        """Output folder."""
        return Path(self.path(self.output.folder))

    def input_files(self) -> dict[str, str]:
        """Return ``section.key`` -> resolved path of every input file that the pipeline names."""
        named = {
            "area.wetlands": self.area.wetlands,
            "area.elevation": self.area.elevation,
            "scenes.catalog": self.scenes.catalog,
            "labels.examples": self.labels.examples,
            "loggers.registry": self.loggers.registry,
            "loggers.barometer": self.loggers.barometer,
            "loggers.checks": self.loggers.checks,
            "weather.daily": self.weather.daily,
            "extent.decisions": self.extent.decisions,
            "skill.walked_extents": self.skill.walked_extents,
        }
        return {key: self.path(text) for key, text in named.items() if text}


def _sentence(file: Path, data: dict[str, Any], err: ValidationError) -> str:
    """Turn the first validation error into one sentence with key, value, rule and remedy."""
    first = err.errors()[0]
    key = ".".join(str(p) for p in first["loc"])
    more = f" ({err.error_count() - 1} more after this)" if err.error_count() > 1 else ""
    if first["type"] == "extra_forbidden":
        model: Any = Pipeline
        for part in first["loc"][:-1]:
            model = model.model_fields[str(part)].annotation
        valid = ", ".join(sorted(k for k in model.model_fields if k != "file"))
        return f"{file}: unknown key '{key}'; valid keys here are {valid}{more}"
    if first["type"] == "missing":
        return f"{file}: key '{key}' is missing; add it{more}"
    value: Any = data
    for part in first["loc"]:
        value = value.get(str(part)) if isinstance(value, dict) else value
    rule = first["msg"].removeprefix("Value error, ")
    return f"{file}: key '{key}' is {value!r}: {rule}{more}"


def load_pipeline(file: str | Path) -> Pipeline:
    """Read and validate a pipeline file.

    Parameters
    ----------
    file : str or Path
        TOML file.

    Returns
    -------
    Pipeline

    Raises
    ------
    InputError
        When the file is missing, is no TOML, has an unknown or missing key or a wrong value, or names an input file
        that does not exist.
    """
    file = Path(file)
    if not file.is_file():
        message = f"{file}: no such pipeline file; give the path of a TOML file, or start from pipelines/monthly.toml"
        raise InputError(message)
    try:
        data = tomllib.loads(file.read_text(encoding="utf-8"))
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as err:
        message = f"{file}: not valid TOML ({err}); mend the line it names"
        raise InputError(message) from err
    try:
        pipeline = Pipeline(**{**data, "file": file.resolve()})
    except ValidationError as err:
        raise InputError(_sentence(file, data, err)) from err
    for key, path in pipeline.input_files().items():
        if "://" not in path and not Path(path).is_file():
            message = f"{file}: key '{key}' names {path}, which does not exist; correct the path or remove the key"
            raise InputError(message)
    return pipeline
