"""Safe writing: a file or folder is whole under its name, or not there at all."""

from __future__ import annotations

import ctypes
import json
import os
import shutil
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from functools import lru_cache
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
        _to_disk(scratch)
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
        for file in sorted(scratch.rglob("*")):
            if file.is_file():
                _to_disk(file)
        if not path.exists():
            scratch.replace(path)
        elif not _exchange(scratch, path):
            old = path.with_name(f".{path.name}.old")
            shutil.rmtree(old, ignore_errors=True)
            path.replace(old)
            scratch.replace(path)
            shutil.rmtree(old, ignore_errors=True)
    finally:
        shutil.rmtree(scratch, ignore_errors=True)


def _to_disk(file: Path) -> None:
    """Wait until a file's bytes are on the disk, so that a name never stands for less than its file (loss of power)."""
    handle = os.open(file, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


@lru_cache(maxsize=1)
def _renamer() -> object | None:
    library = ctypes.CDLL(None, use_errno=True)
    return getattr(library, "renameat2", None)


def _exchange(one: Path, other: Path) -> bool:
    """Swap two names in one step where the system can (Linux ``renameat2`` with RENAME_EXCHANGE); False where not."""
    rename = _renamer()
    if rename is None:
        return False
    here, swap = -100, 2  # AT_FDCWD, RENAME_EXCHANGE in the Linux headers fcntl.h and fs.h
    return bool(rename(here, os.fsencode(one), here, os.fsencode(other), ctypes.c_uint(swap)) == 0)  # type: ignore[operator]


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
