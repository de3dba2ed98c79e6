"""What one run of the batch holds while it goes from step to step."""

from __future__ import annotations

import errno
import hashlib
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from functools import lru_cache
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pandas as pd

import inundate
from inundate.batch.archive import Archive
from inundate.batch.inputs import (
    read_decisions,
    read_labels,
    read_walked,
    read_weather,
    read_wetlands,
    stat_mark,
)
from inundate.batch.ledger import Ledger, file_mark, fingerprint, hold
from inundate.batch.pipeline import Pipeline
from inundate.batch.progress import Progress
from inundate.common.errors import InputError, InundateError, Refusal

if TYPE_CHECKING:
    import geopandas as gpd

    from inundate.scenes import Catalog, SensorProfile


FREE_BYTES = 256_000  # with less than this free, a failed write is put down to the full disk


@lru_cache(maxsize=16)
def code_mark(*parts: str) -> str:
    """Return a hash of the source of the named parts (folders or modules) of the package: the code version in fingerprints."""
    root = Path(inundate.__file__).parent
    digest = hashlib.blake2b(digest_size=8)
    for part in sorted({*parts, "common"}):
        place = root / part
        for file in [place] if place.is_file() else sorted(place.rglob("*")):
            if file.suffix in (".py", ".toml", ".parquet") and file.is_file():
                digest.update(file.name.encode())
                digest.update(file.read_bytes())
    return digest.hexdigest()


_LIBRARIES = (
    "numpy",
    "pandas",
    "scipy",
    "scikit-learn",
    "lightgbm",
    "rasterio",
    "numba",
    "xarray",
    "dask",
    "geopandas",
)


def software_versions() -> dict[str, str]:
    """Return versions of the package, Python and the libraries that results rest on."""
    import platform
    from importlib.metadata import version

    own = {"inundate": inundate.__version__, "python": platform.python_version()}
    return {**own, **{name: version(name) for name in _LIBRARIES}}


@dataclass
class Inputs:
    """Checked inputs of a run; what the pipeline does not name is None."""

    shapes: gpd.GeoDataFrame
    profile: SensorProfile
    catalog: Catalog
    labels: gpd.GeoDataFrame | None
    weather: pd.DataFrame | None
    decisions: pd.DataFrame | None
    walked: pd.DataFrame | None
    marks: dict[str, str] = field(default_factory=dict)


@dataclass
class Work:
    """One run: pipeline, archive, ledger, progress, and what was refused on the way."""

    pipeline: Pipeline
    archive: Archive
    ledger: Ledger
    progress: Progress
    refused: list[Refusal] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)

    def refuse(self, items: list[Refusal]) -> None:
        """Keep refusals, each once."""
        for item in items:
            if item not in self.refused:
                self.refused.append(item)


@contextmanager
def open_work(pipeline: Pipeline, progress: Progress) -> Iterator[Work]:
    """Hold the archive and open its ledger.

    Raises
    ------
    InputError
        When the output folder cannot be written.
    BusyError
        When another run holds the archive.
    """
    archive = Archive(pipeline.out)
    try:
        archive.folder.mkdir(parents=True, exist_ok=True)
        probe = archive.folder / ".probe"
        probe.write_text("x")
        probe.unlink()
    except OSError as err:
        message = f"{pipeline.file}: key 'output.folder' is {pipeline.out}, which cannot be written ({err.strerror}); choose a folder with write access and free space"
        raise InputError(message) from err
    with hold(archive.folder):
        sweep(archive)
        ledger = Ledger(archive.folder / "ledger.sqlite")
        try:
            yield Work(pipeline, archive, ledger, progress)
        except Exception as err:
            if is_full(err, archive.folder):
                message = f"{pipeline.out}: no space left; free some and run again (what is finished is kept, nothing is half-written)"
                raise InputError(message) from err
            raise
        finally:
            ledger.close()


FULL_WORDS = ("no space left", "disk is full", "disk quota", "file too large")


def is_full(error: BaseException, folder: Path) -> bool:
    """Tell whether an error came of a full disk: by its number, its words, or by what the disk says.

    Libraries underneath report a full disk each in their own way (some as a failed write without a reason), so the disk
    itself is asked too.
    """
    link: BaseException | None = error
    while link is not None:
        if isinstance(link, InundateError):
            return False
        if getattr(link, "errno", None) in (errno.ENOSPC, errno.EDQUOT, errno.EFBIG):
            return True
        if any(words in str(link).lower() for words in FULL_WORDS):
            return True
        link = link.__cause__ or link.__context__
    try:
        return shutil.disk_usage(folder).free < FREE_BYTES
    except OSError:
        return False


def sweep(archive: Archive) -> None:
    """Remove scratch files that a killed run left behind; put back a delivery that was being replaced."""
    for folder in (archive.folder, archive.models, archive.out / "maps", archive.out / "products"):
        if not folder.is_dir():
            continue
        for item in sorted(folder.rglob(".*")):
            if item.name.endswith(".old") and item.is_dir():
                whole = item.with_name(item.name[1:].removesuffix(".old"))
                if not whole.exists():
                    item.replace(whole)
                    continue
            if item.is_dir():
                shutil.rmtree(item, ignore_errors=True)
            else:
                item.unlink(missing_ok=True)


def open_inputs(work: Work) -> Inputs:
    """Read and check every input but logger readings and pixels.

    Raises
    ------
    InputError
        On the first input that is wrong as a whole.
    """
    from inundate.scenes import load_profile, open_catalog

    pipeline = work.pipeline
    files = pipeline.input_files()
    shapes = read_wetlands(files["area.wetlands"], pipeline.area.crs)
    sensor = pipeline.scenes.sensor
    own = pipeline.path(sensor) if sensor.endswith(".toml") else sensor
    profile = load_profile(own)
    catalog = open_catalog(files["scenes.catalog"], profile)
    work.refuse(list(catalog.refused))
    labels = None
    if "labels.examples" in files:
        labels, refused = read_labels(files["labels.examples"], pipeline.area.crs)
        work.refuse(refused)
    return Inputs(
        shapes,
        profile,
        catalog,
        labels,
        read_weather(files["weather.daily"]) if "weather.daily" in files else None,
        read_decisions(files["extent.decisions"]) if "extent.decisions" in files else None,
        read_walked(files["skill.walked_extents"]) if "skill.walked_extents" in files else None,
        input_marks(pipeline),
    )


def input_marks(pipeline: Pipeline) -> dict[str, str]:
    """Return marks of the input files (tables by content, larger files by size and time of change)."""
    files = pipeline.input_files()
    marks = {key: stat_mark(path) for key, path in files.items() if key != "scenes.catalog"}
    marks |= {k: file_mark(files[k]) for k in marks if Path(files[k]).suffix == ".csv" and "://" not in files[k]}
    sensor = pipeline.scenes.sensor
    marks["scenes.sensor"] = file_mark(pipeline.path(sensor)) if sensor.endswith(".toml") else sensor
    return marks


def settings_mark(pipeline: Pipeline, *sections: str) -> dict[str, Any]:
    """Return the settings of sections as plain values, for a fingerprint."""
    return {s: getattr(pipeline, s).model_dump(mode="json") for s in sections}


def table_mark(*tables: pd.DataFrame | None) -> str:
    """Return a hash of tables' contents."""
    parts = []
    for table in tables:
        if table is None:
            parts.append("none")
            continue
        plain_columns = pd.DataFrame(table).copy()
        for name in plain_columns.columns:
            if plain_columns[name].dtype == object:
                plain_columns[name] = plain_columns[name].astype(str)
        digest = pd.util.hash_pandas_object(plain_columns, index=False).to_numpy()
        parts.append(hashlib.blake2b(digest.tobytes(), digest_size=16).hexdigest() + ",".join(map(str, table.columns)))
    return fingerprint({"tables": parts})
