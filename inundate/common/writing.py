"""Safe writing: a file or folder is whole under its name, or not there at all."""

from __future__ import annotations

import json
import os
import shutil
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np
import pandas as pd


@contextmanager
def replacing(path: Path) -> Iterator[Path]:
    """Give a scratch path beside ``path``; on success it takes the name ``path`` in one step, on error it vanishes."""
    path.parent.mkdir(parents=True, exist_ok=True)
    handle, name = tempfile.mkstemp(prefix=f".{path.stem}.", suffix=path.suffix, dir=path.parent)
    os.close(handle)
    scratch = Path(name)
    try:
        yield scratch
        scratch.chmod(0o644)
        scratch.replace(path)
    finally:
        scratch.unlink(missing_ok=True)


@contextmanager
def replacing_folder(path: Path) -> Iterator[Path]:
    """Give a scratch folder beside ``path``; on success it replaces ``path``, on error the old one stays whole."""
    path.parent.mkdir(parents=True, exist_ok=True)
    scratch = Path(tempfile.mkdtemp(prefix=f".{path.name}.", dir=path.parent))
    try:
        yield scratch
        scratch.chmod(0o755)
        old = path.with_name(f".{path.name}.old")
        shutil.rmtree(old, ignore_errors=True)
        if path.exists():
            path.replace(old)
        scratch.replace(path)
        shutil.rmtree(old, ignore_errors=True)
    finally:
        shutil.rmtree(scratch, ignore_errors=True)


def write_text(path: Path, text: str) -> None:
    """Write UTF-8 text safely."""
    with replacing(path) as scratch:
        scratch.write_text(text, encoding="utf-8")


def plain(value: object) -> object:
    """Turn numpy scalars, arrays, timestamps and non-finite numbers into what JSON can hold (NaN becomes null)."""
    if isinstance(value, dict):
        return {str(k): plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple | set | np.ndarray):
        return [plain(v) for v in value]
    if isinstance(value, np.bool_ | bool):
        return bool(value)
    if isinstance(value, np.integer | int):
        return int(value)
    if isinstance(value, np.floating | float):
        return float(value) if np.isfinite(value) else None
    if isinstance(value, pd.Timestamp | np.datetime64):
        stamp = pd.Timestamp(value)
        return None if stamp is pd.NaT else stamp.isoformat()
    return value if value is None or isinstance(value, str) else str(value)


def write_json(path: Path, value: object) -> None:
    """Write JSON safely: sorted keys, two-space indent, non-finite numbers as null."""
    write_text(path, json.dumps(plain(value), indent=2, sort_keys=True, ensure_ascii=False, allow_nan=False) + "\n")


def write_table(path: Path, table: pd.DataFrame) -> None:
    """Write a Parquet table safely, without the index, with the same bytes for the same rows."""
    with replacing(path) as scratch:
        table.to_parquet(scratch, index=False, engine="pyarrow", compression="zstd")
