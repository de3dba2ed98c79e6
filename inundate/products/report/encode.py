"""Compact values for the page: base64 of little-endian arrays, runs of codes, JSON that is safe inside a script element."""

from __future__ import annotations

import base64
import json
from typing import Any

import numpy as np
import pandas as pd

from inundate.common.writing import plain

DAY = np.timedelta64(1, "D")


def floats(values: Any) -> dict[str, str]:
    """Return float32 values as base64; NaN stays NaN."""
    return {"f": base64.b64encode(np.asarray(values, "<f4").tobytes()).decode()}


def bytes_(values: Any) -> dict[str, str]:
    """Return uint8 values as base64."""
    return {"b": base64.b64encode(np.asarray(values, np.uint8).tobytes()).decode()}


def whole(values: Any) -> dict[str, str]:
    """Return int32 values as base64."""
    return {"i": base64.b64encode(np.asarray(values, "<i4").tobytes()).decode()}


def runs(codes: np.ndarray) -> list[int]:
    """Return runs of equal codes as [code, length, code, length, ...]."""
    codes = np.asarray(codes)
    if not codes.size:
        return []
    start = np.r_[0, np.flatnonzero(np.diff(codes)) + 1]
    length = np.diff(np.r_[start, codes.size])
    return np.column_stack([codes[start], length]).ravel().astype(int).tolist()


def day_numbers(dates: Any) -> np.ndarray:
    """Return whole days since 1970-01-01 (int64) of dates, UTC."""
    stamps = pd.to_datetime(pd.Series(np.asarray(dates)), utc=True).dt.tz_localize(None)
    return stamps.to_numpy("datetime64[D]").astype(np.int64)


def codes_of(values: Any, names: tuple[str, ...]) -> np.ndarray:
    """Return positions (uint8) of texts in ``names``; 255 where none fits."""
    place = pd.Index(names).get_indexer(pd.Index(np.asarray(values, object).astype(str)))
    return np.where(place < 0, 255, place).astype(np.uint8)


def script_json(value: Any) -> str:
    """Return JSON that cannot end or open an element: ``<``, ``>``, ``&`` and line separators are escaped."""
    text = json.dumps(plain(value), separators=(",", ":"), sort_keys=True, ensure_ascii=False, allow_nan=False)
    for sign in "<>&\u2028\u2029":
        text = text.replace(sign, f"\\u{ord(sign):04x}")
    return text
