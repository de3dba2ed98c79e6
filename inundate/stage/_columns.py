"""Columns of time and numbers out of the bytes of a delimited text: quick where all is well, row by row where not."""

from __future__ import annotations

import io
import re
from dataclasses import dataclass, field
from datetime import timedelta
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.csv as pc

from inundate.common.errors import InputError

_NULLS = ["", "NA", "N/A", "NaN", "nan", "null", "NULL", "-"]
_OFFSET = re.compile(r"(?:[Zz]|[+-]\d\d(?::?\d\d)?)$")
_TEXT = re.compile(rb"\S")
_HEADER_SEARCH = 200
Zone = float | ZoneInfo


@dataclass(slots=True)
class Columns:
    """Columns read from one text.

    Attributes
    ----------
    time : ndarray of datetime64[ns], shape (row,)
        UTC, in file order.
    values : dict of str to ndarray of float64, shape (row,)
        NaN where empty.
    n_rows : int
        Data rows in the text (blank lines not counted).
    n_refused : int
        Rows that could not be read.
    refused : list of (int, str)
        Line number and text of the first five of them.
    """

    time: np.ndarray
    values: dict[str, np.ndarray]
    n_rows: int = 0
    n_refused: int = 0
    refused: list[tuple[int, str]] = field(default_factory=list)


@dataclass(frozen=True, slots=True)
class Layout:
    """Where the table starts in a text and how it is cut.

    Attributes
    ----------
    start : int
        Byte position after the header line.
    header_line : int
        Line number of the header (first line is 1).
    names : tuple of str
    delimiter : str
    decimal : str
    """

    start: int
    header_line: int
    names: tuple[str, ...]
    delimiter: str
    decimal: str


def parse_zone(text: object, place: str) -> Zone:
    """Return hours east of UTC (float) or a named zone from a registry's ``utc_offset``.

    Raises
    ------
    InputError
        When the text is neither hours, ``+hh:mm`` nor a zone name.
    """
    word = "" if text is None else str(text).strip()
    if word.lower() in ("", "nan", "none", "utc", "z"):
        return 0.0
    found = re.fullmatch(r"(?:UTC)?([+-]?)(\d{1,2}):(\d\d)", word)
    hours = np.nan
    if found:
        hours = (int(found[2]) + int(found[3]) / 60) * (-1 if found[1] == "-" else 1)
    else:
        try:
            hours = float(word)
        except ValueError:
            try:
                return ZoneInfo(word)
            except (ZoneInfoNotFoundError, ValueError, OSError):
                pass
    if not -14 <= hours <= 14:
        message = (
            f"{place}: utc_offset {word!r} is not known; give hours east of UTC (-14..14), '+hh:mm' or a zone name"
        )
        raise InputError(message)
    return float(hours)


def to_utc(naive: np.ndarray, zone: Zone) -> np.ndarray:
    """Turn local clock times (datetime64[ns], file order) into UTC; an hour told twice is summer time first."""
    if isinstance(zone, float):
        return naive - np.timedelta64(round(zone * 3600e9), "ns") if zone else naive
    index = pd.DatetimeIndex(naive)
    local = index.tz_localize(zone, ambiguous=~index.duplicated(), nonexistent=timedelta(hours=1))
    return np.asarray(local.tz_convert("UTC").tz_localize(None), "datetime64[ns]")


def decode(raw: bytes) -> bytes:
    """Return UTF-8 bytes without a byte order mark (UTF-16 by its mark; anything else is left as it is)."""
    if raw.startswith((b"\xff\xfe", b"\xfe\xff")):
        return raw.decode("utf-16").encode()
    return raw[3:] if raw.startswith(b"\xef\xbb\xbf") else raw


def _split(line: str, delimiter: str) -> tuple[str, ...]:
    return tuple(cell.strip().strip('"').strip() for cell in line.split(delimiter))


def _match(names: tuple[str, ...], wanted: str) -> int:
    low = [n.casefold() for n in names]
    return low.index(wanted.casefold()) if wanted.casefold() in low else -1


def find_layout(raw: bytes, required: tuple[str, ...], place: str) -> Layout:
    """Find the header line that names every required column, whatever stands above it.

    Raises
    ------
    InputError
        When no line among the first 200 names them.
    """
    start, best = 0, ("", 0)
    for number in range(1, _HEADER_SEARCH + 1):
        stop = raw.find(b"\n", start)
        stop = len(raw) if stop < 0 else stop
        line = raw[start:stop].decode("utf-8", "replace").strip("\r")
        for delimiter in (",", ";", "\t", "|"):
            names = _split(line, delimiter)
            if len(names) > best[1]:
                best = (line, len(names))
            if all(_match(names, w) >= 0 for w in required):
                after = raw[stop + 1 : stop + 4000].decode("utf-8", "replace")
                comma = delimiter != "," and re.search(r"\d,\d", after) is not None
                return Layout(stop + 1, number, names, delimiter, "," if comma else ".")
        start = stop + 1
        if start >= len(raw):
            break
    message = (
        f"{place}: no line among the first {_HEADER_SEARCH} names the columns {', '.join(required)}; the likeliest "
        f"header reads {best[0][:120]!r}; name the file's columns in the registry (time_column, value_column)"
    )
    raise InputError(message)


def _arrow(
    raw: bytes, layout: Layout, types: dict[str, pa.DataType], bad: list[tuple[int, str]], quote: str | bool = '"'
) -> pa.Table:
    names = [f"{i}" for i in range(len(layout.names))]

    def note(row: pc.InvalidRow) -> str:
        bad.append((row.number, row.text))
        return "skip"

    return pc.read_csv(
        io.BytesIO(memoryview(raw)[layout.start :]),
        read_options=pc.ReadOptions(use_threads=False, column_names=names, block_size=1 << 22),
        parse_options=pc.ParseOptions(
            delimiter=layout.delimiter, quote_char=quote, ignore_empty_lines=False, invalid_row_handler=note
        ),
        convert_options=pc.ConvertOptions(
            column_types=types,
            include_columns=list(types),
            null_values=_NULLS,
            strings_can_be_null=True,
            decimal_point=layout.decimal,
            check_utf8=False,
        ),
    )


def _zoned(raw: bytes, layout: Layout, column: int) -> bool:
    sample = raw[layout.start : layout.start + 4000].decode("utf-8", "replace").splitlines()
    cells = [_split(line, layout.delimiter) for line in sample if line.strip()]
    texts = [c[column] for c in cells if len(c) > column]
    return bool(texts) and _OFFSET.search(texts[0][10:]) is not None


def _quick(raw: bytes, layout: Layout, places: dict[str, int], zone: Zone) -> Columns | None:
    """Read all rows with the compiled parser; None when any row is not as it should be."""
    zoned = _zoned(raw, layout, places["time"])
    stamp = pa.timestamp("ns", "UTC") if zoned else pa.timestamp("ns")
    types = {str(i): (stamp if name == "time" else pa.float64()) for name, i in places.items()}
    bad: list[tuple[int, str]] = []
    try:
        table = _arrow(raw, layout, types, bad)
    except pa.ArrowInvalid:
        return None
    first = table.column(str(places["time"]))
    if bad or first.null_count or _swallowed(raw, layout, len(first)):
        return None
    time = first.to_numpy().astype("datetime64[ns]", copy=False)
    values = {name: table.column(str(i)).to_numpy() for name, i in places.items() if name != "time"}
    return Columns(time if zoned else to_utc(time, zone), values, n_rows=len(time))


def _swallowed(raw: bytes, layout: Layout, rows: int) -> bool:
    """Whether fewer rows were read than there are lines: a quote that is never closed takes lines into its cell."""
    body = raw.count(b"\n", layout.start)
    return rows < body + (not raw.endswith(b"\n"))


def _times(texts: pd.Series, zone: Zone, time_format: str | None) -> np.ndarray:
    texts = texts.str.strip().str.strip('"')
    out = np.full(len(texts), np.datetime64("NaT"), "datetime64[ns]")
    zoned = texts.str.slice(10).str.contains(_OFFSET, na=False).to_numpy() & (time_format is None)
    plan = time_format or "ISO8601"
    if zoned.any():
        parsed = pd.to_datetime(texts[zoned], format=plan, utc=True, errors="coerce").dt.tz_localize(None)
        out[zoned] = parsed.to_numpy("datetime64[ns]")
    if not zoned.all():
        naive = pd.to_datetime(texts[~zoned], format=plan, errors="coerce").to_numpy("datetime64[ns]")
        good = ~np.isnat(naive)
        naive[good] = to_utc(naive[good], zone)
        out[~zoned] = naive
    return out


def _careful(raw: bytes, layout: Layout, places: dict[str, int], zone: Zone, time_format: str | None) -> Columns:
    """Read all rows as text, keep what can be understood and list what cannot."""
    bad: list[tuple[int, str]] = []
    types = {str(i): pa.string() for i in places.values()}
    table = _arrow(raw, layout, types, bad)
    if _swallowed(raw, layout, len(table) + len(bad)):
        bad.clear()
        table = _arrow(raw, layout, types, bad, False)
    frame = pd.DataFrame(
        {name: pd.Series(table.column(str(i)).to_pandas(), dtype="object") for name, i in places.items()}
    )
    number = np.arange(1, len(frame) + len(bad) + 1)
    if bad:
        number = np.delete(number, np.array([b[0] for b in bad]) - 1)
    blank = frame.isna().all(axis=1).to_numpy()
    time = _times(frame["time"].astype("string"), zone, time_format)
    wrong = np.isnat(time)
    values: dict[str, np.ndarray] = {}
    for name in places:
        if name == "time":
            continue
        texts = frame[name].astype("string").str.strip().str.strip('"')
        if layout.decimal == ",":
            texts = texts.str.replace(",", ".", regex=False)
        values[name] = pd.to_numeric(texts, errors="coerce").to_numpy(np.float64, na_value=np.nan)
        if name != "temperature_c":
            wrong |= np.isnan(values[name]) & texts.notna().to_numpy()
    wrong &= ~blank
    keep = ~(wrong | blank)
    lines = [(int(number[i]), " ".join(str(v) for v in frame.iloc[i])) for i in np.flatnonzero(wrong)[:5]]
    real = [b for b in bad if b[1].strip()]
    listed = sorted(lines + real[:5])[:5]
    return Columns(
        time[keep],
        {k: v[keep] for k, v in values.items()},
        int((~blank).sum()) + len(real),
        int(wrong.sum()) + len(real),
        [(n + layout.header_line, text[:80]) for n, text in listed],
    )


def read_columns(
    raw: bytes,
    columns: dict[str, str],
    zone: Zone,
    place: str,
    *,
    optional: tuple[str, ...] = (),
    time_format: str | None = None,
) -> Columns:
    """Read a time column and number columns from delimited text.

    Parameters
    ----------
    raw : bytes
        The file; byte order mark, lines above the header, ``,`` ``;`` tab or ``|`` between cells and a decimal comma
        are understood.
    columns : dict of str to str
        Our name to the file's name; ``time`` must be among them.
    zone : float or ZoneInfo
        For times without an offset.
    place : str
        The file's name for messages.
    optional : tuple of str
        Which of our names may be missing in the file.
    time_format : str, optional
        strptime pattern; ISO 8601 where None.

    Returns
    -------
    Columns

    Raises
    ------
    InputError
        When the columns are not there or no row can be read.
    """
    raw = decode(raw)
    if _TEXT.search(raw) is None:
        message = f"{place}: the file is empty; export it again or take it out of the registry"
        raise InputError(message)
    required = tuple(theirs for ours, theirs in columns.items() if ours not in optional)
    layout = find_layout(raw, required, place)
    places = {ours: _match(layout.names, theirs) for ours, theirs in columns.items()}
    places = {ours: at for ours, at in places.items() if at >= 0}
    if _TEXT.search(raw, layout.start) is None:
        message = f"{place}: none of its 0 rows can be read (nothing stands under the header line)"
        raise InputError(message)
    out = _quick(raw, layout, places, zone) if time_format is None else None
    pa.default_memory_pool().release_unused()
    if out is None:
        out = _careful(raw, layout, places, zone, time_format)
    usable = [v for k, v in out.values.items() if k != "temperature_c"]
    if len(out.time) == 0 or not any(np.isfinite(v).any() for v in usable):
        shown = "; ".join(f"line {n}: {text!r}" for n, text in out.refused[:2])
        message = (
            f"{place}: none of its {out.n_rows} rows can be read ({shown or 'no value in any row'}); a row needs an "
            "ISO 8601 time (or one as the registry's time_format says) and a number in the columns that the registry names"
        )
        raise InputError(message)
    return out
