"""The files of a stage record: registry, logger readings, barometer, field checks. The only module here that opens files."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pandas as pd

from inundate.common.errors import InputError, Refusal
from inundate.stage._columns import Columns, Zone, parse_zone, read_columns
from inundate.stage.registry import check_periods, moment, number, registry_row

_REQUIRED = ("logger_id", "wetland_id", "file", "kind", "unit", "height_m")
_TEXT = ("time_column", "value_column", "temperature_column", "time_format", "utc_offset")
_CLOCK_BACK = (np.timedelta64(25, "m"), np.timedelta64(190, "m"))


@dataclass(frozen=True, slots=True)
class Readings:
    """What one logger recorded, sorted by time, each time once.

    Attributes
    ----------
    name : str
        The file or files, for messages.
    time : ndarray of datetime64[ns], shape (reading,)
        UTC, strictly increasing.
    value : ndarray of float64, shape (reading,)
        In the registry's unit; NaN where the row had no number.
    temperature_c : ndarray of float32, shape (reading,), or None
        Water temperature; NaN where missing.
    n_rows : int
        Data rows in all files together.
    n_refused : int
        Rows that could not be read.
    refused_rows : tuple of (str, int, str)
        File, line number and text of the first five of them.
    n_repeated : int
        Rows dropped since another had the same time and value.
    n_conflicting : int
        Rows dropped since another had the same time and a different value (the first in file order is kept).
    clock_back : ndarray of datetime64[ns]
        Times at which a file's clock goes back by half an hour to three hours and runs on (as in an hour told twice).
    """

    name: str
    time: np.ndarray
    value: np.ndarray
    temperature_c: np.ndarray | None = None
    n_rows: int = 0
    n_refused: int = 0
    refused_rows: tuple[tuple[str, int, str], ...] = ()
    n_repeated: int = 0
    n_conflicting: int = 0
    clock_back: np.ndarray = field(default_factory=lambda: np.empty(0, "datetime64[ns]"))


@dataclass(frozen=True, slots=True)
class Barometer:
    """Air pressure in time.

    Attributes
    ----------
    name : str
    time : ndarray of datetime64[ns], shape (reading,)
        UTC, strictly increasing.
    pressure_kpa : ndarray of float64, shape (reading,)
    n_refused : int
        Rows that could not be read or lay outside 40..112 kPa.
    refused_rows : tuple of (str, int, str)
    """

    name: str
    time: np.ndarray
    pressure_kpa: np.ndarray
    n_refused: int = 0
    refused_rows: tuple[tuple[str, int, str], ...] = ()


def _open(path: Path, what: str) -> bytes:
    try:
        return path.read_bytes()
    except OSError as fault:
        message = f"{what} {path}: the file can't be opened ({fault.strerror}); check the path and the rights"
        raise InputError(message) from fault


def _table(path: Path, what: str, required: tuple[str, ...]) -> pd.DataFrame:
    _open(path, what)
    try:
        table = pd.read_csv(path, dtype=str, keep_default_na=False, sep=None, engine="python", encoding="utf-8-sig")
    except (ValueError, UnicodeDecodeError) as fault:
        message = (
            f"{what} {path.name}: not a readable CSV ({str(fault)[:120]}); save it as UTF-8 text with a header line"
        )
        raise InputError(message) from fault
    table.columns = table.columns.str.strip().str.strip('"')
    missing = [c for c in required if c not in table.columns]
    if missing:
        message = (
            f"{what} {path.name}: column {missing[0]!r} is missing (columns seen: {', '.join(table.columns)}); "
            f"it must have {', '.join(required)}"
        )
        raise InputError(message)
    return table.apply(lambda c: c.str.strip())


def read_registry(path: str | Path) -> pd.DataFrame:
    """Read and check ``loggers.csv``.

    Parameters
    ----------
    path : str or Path
        Columns logger_id, wetland_id, file, kind, unit, height_m and optionally valid_from, valid_to, utc_offset,
        time_column, value_column, temperature_column, time_format (strptime), height_sd_m, sensor_sd_m, elevation_m
        (of the logger above sea level). ``file`` may hold several paths or patterns, separated by ``;``, relative to
        the registry. One logger may have several rows (periods of validity) that don't overlap.

    Returns
    -------
    DataFrame
        One row a logger and period, sorted by logger_id and valid_from: the columns above; ``file`` with absolute
        paths, height_m etc. float64 (NaN where absent), valid_from/valid_to datetime64[ns] UTC (NaT where open;
        half-open ``[from, to)``), utc_offset as text.

    Raises
    ------
    InputError
        For a missing column, an unknown kind or unit, a bad number or time, overlapping periods.
    """
    path = Path(path)
    table = _table(path, "logger registry", _REQUIRED)
    for name in (*_TEXT, "valid_from", "valid_to", "height_sd_m", "sensor_sd_m", "elevation_m"):
        if name not in table:
            table[name] = ""
    if table.empty:
        message = f"logger registry {path.name}: it has no rows; list at least one logger"
        raise InputError(message)
    rows = [registry_row(row, i + 2, path) for i, row in enumerate(table.to_dict("records"))]
    out = (
        pd.DataFrame(rows)
        .astype({"valid_from": "datetime64[ns]", "valid_to": "datetime64[ns]"})
        .sort_values(["logger_id", "valid_from"], na_position="first", ignore_index=True)
    )
    check_periods(out, path)
    return out


def _paths(path: str | Path) -> list[Path]:
    found: list[Path] = []
    for one in str(path).split(";"):
        text = one.strip()
        if not text:
            continue
        if any(c in text for c in "*?[") and not Path(text).exists():
            base = Path(text).anchor or "."
            hits = sorted(Path(base).glob(str(Path(text).relative_to(base))))
            if not hits:
                message = f"logger readings {text}: no file matches the pattern; check the registry's file column"
                raise InputError(message)
            found += hits
        else:
            found.append(Path(text))
    return found


def logger_paths(registry: pd.DataFrame) -> list[Path]:
    """Return every readings file that a registry names (lists and patterns resolved), sorted, each once.

    Parameters
    ----------
    registry : DataFrame
        From :func:`read_registry`.

    Returns
    -------
    list of Path
        Files named one by one are listed also where they do not exist.

    Raises
    ------
    InputError
        When a pattern matches no file.
    """
    return sorted({path for entry in registry["file"] for path in _paths(entry)})


def _tidy(parts: list[tuple[str, Columns]], value: str) -> dict:
    """Join the files of one sensor, sort by time, and keep one row a time."""
    time = np.concatenate([c.time for _, c in parts])
    number = np.concatenate([c.values[value] for _, c in parts])
    with_t = any("temperature_c" in c.values for _, c in parts)
    warmth = None
    if with_t:
        blank = [c.values.get("temperature_c", np.full(len(c.time), np.nan)) for _, c in parts]
        warmth = np.concatenate(blank).astype(np.float32)
    repeated = conflicting = 0
    step = np.diff(time)
    if not (step > np.timedelta64(0, "ns")).all():
        order = np.lexsort((np.isnan(number), time))
        time, number = time[order], number[order]
        warmth = warmth[order] if warmth is not None else None
        same = np.r_[False, time[1:] == time[:-1]]
        first = np.maximum.accumulate(np.where(same, 0, np.arange(len(time))))
        alike = (number == number[first]) | np.isnan(number)
        repeated, conflicting = int((same & alike).sum()), int((same & ~alike).sum())
        time, number = time[~same], number[~same]
        warmth = warmth[~same] if warmth is not None else None
    refused = [(name, n, text) for name, c in parts for n, text in c.refused]
    return {
        "time": time,
        "number": number,
        "temperature_c": warmth,
        "n_rows": sum(c.n_rows for _, c in parts),
        "n_refused": sum(c.n_refused for _, c in parts),
        "refused_rows": tuple(refused[:5]),
        "n_repeated": repeated,
        "n_conflicting": conflicting,
    }


def _clock_back(parts: list[tuple[str, Columns]]) -> np.ndarray:
    marks = []
    for _, columns in parts:
        step = np.diff(columns.time)
        if len(step) and (step < np.timedelta64(0, "ns")).any():
            usual = (
                np.median(step[step > np.timedelta64(0, "ns")]) if (step > np.timedelta64(0, "ns")).any() else step[0]
            )
            back = usual - step
            hit = (step <= np.timedelta64(0, "ns")) & (back >= _CLOCK_BACK[0]) & (back <= _CLOCK_BACK[1])
            marks.append(columns.time[1:][hit])
    return np.sort(np.concatenate(marks)) if marks else np.empty(0, "datetime64[ns]")


def read_readings(path: str | Path, row: Mapping | pd.Series | None = None) -> Readings:
    """Read one logger's files.

    Parameters
    ----------
    path : str or Path
        One file, or several paths and patterns separated by ``;``.
    row : mapping or Series, optional
        The registry's row: utc_offset, time_column, value_column, temperature_column, time_format; defaults where empty.

    Returns
    -------
    Readings

    Raises
    ------
    InputError
        When a file can't be opened, lacks the columns, or has no row that can be read.
    """
    entry = {} if row is None else {k: str(row[k]).strip() for k in _TEXT if k in row and not pd.isna(row[k])}
    zone = parse_zone(entry.get("utc_offset", ""), f"logger {'' if row is None else row.get('logger_id', '')}")
    columns = {
        "time": entry.get("time_column") or "time",
        "value": entry.get("value_column") or "value",
        "temperature_c": entry.get("temperature_column") or "temperature_c",
    }
    parts = []
    for one in _paths(path):
        place = f"logger readings {one.name}"
        parts.append(
            (
                one.name,
                read_columns(
                    _open(one, "logger readings"),
                    columns,
                    zone,
                    place,
                    optional=() if entry.get("temperature_column") else ("temperature_c",),
                    time_format=entry.get("time_format") or None,
                ),
            )
        )
    name = ", ".join(n for n, _ in parts)
    marks = _clock_back(parts)
    tidy = _tidy(parts, "value")
    return Readings(name, value=tidy.pop("number"), clock_back=marks, **tidy)


class LoggerFiles(Mapping[str, Readings]):
    """Readings of every logger of a registry, read when asked for and not kept: a mapping of logger_id to Readings.

    Parameters
    ----------
    registry : DataFrame
        From :func:`read_registry`. Rows of one logger that name the same file are read once.
    """

    def __init__(self, registry: pd.DataFrame) -> None:
        self.registry = registry
        self._ids = list(dict.fromkeys(registry["logger_id"]))

    def __getitem__(self, logger_id: str) -> Readings:
        rows = self.registry[self.registry["logger_id"] == logger_id]
        if rows.empty:
            raise KeyError(logger_id)
        rows = rows.drop_duplicates(["file", *_TEXT])
        parts = [read_readings(row["file"], row) for _, row in rows.iterrows()]
        return parts[0] if len(parts) == 1 else _join(parts)

    def __contains__(self, logger_id: object) -> bool:
        return logger_id in self._ids

    def __iter__(self) -> Iterator[str]:
        return iter(self._ids)

    def __len__(self) -> int:
        return len(self._ids)


def _join(parts: list[Readings]) -> Readings:
    columns = []
    for p in parts:
        values = {"value": p.value}
        if p.temperature_c is not None:
            values["temperature_c"] = p.temperature_c
        columns.append((p.name, Columns(p.time, values, p.n_rows, p.n_refused)))
    tidy = _tidy(columns, "value")
    tidy["refused_rows"] = tuple(r for p in parts for r in p.refused_rows)[:5]
    tidy["n_repeated"] += sum(p.n_repeated for p in parts)
    tidy["n_conflicting"] += sum(p.n_conflicting for p in parts)
    marks = np.sort(np.concatenate([p.clock_back for p in parts]))
    return Readings(", ".join(p.name for p in parts), value=tidy.pop("number"), clock_back=marks, **tidy)


def read_barometer(path: str | Path, utc_offset: object = None) -> Barometer:
    """Read ``barometer.csv`` (columns time, pressure_kpa).

    Parameters
    ----------
    path : str or Path
        One file, or several paths and patterns separated by ``;``.
    utc_offset : object, optional
        Offset of times that carry none: hours, ``+hh:mm`` or a zone name; UTC where None.

    Returns
    -------
    Barometer

    Raises
    ------
    InputError
        When nothing can be read, or the values can't be air pressure in kPa.
    """
    zone = parse_zone(utc_offset, "barometer")
    parts = []
    for one in _paths(path):
        raw = _open(one, "barometer")
        place = f"barometer {one.name}"
        parts.append((one.name, read_columns(raw, {"time": "time", "value": "pressure_kpa"}, zone, place)))
    tidy = _tidy(parts, "value")
    number, time = tidy["number"], tidy["time"]
    middle = float(np.nanmedian(number))
    name = ", ".join(n for n, _ in parts)
    if not 40 <= middle <= 112:
        likely = " (it looks like hPa: divide by 10)" if 400 <= middle <= 1120 else ""
        message = (
            f"barometer {name}: pressure_kpa has a median of {middle:.4g}, but air is 40..112 kPa{likely}; give kPa"
        )
        raise InputError(message)
    good = (number >= 40) & (number <= 112)
    odd = int((np.isfinite(number) & ~good).sum())
    return Barometer(name, time[good], number[good], tidy["n_refused"] + odd, tidy["refused_rows"])


def read_checks(path: str | Path, registry: pd.DataFrame | None = None) -> tuple[pd.DataFrame, list[Refusal]]:
    """Read ``checks.csv``: field readings of stage.

    Parameters
    ----------
    path : str or Path
        Columns logger_id, time, stage_m and optionally sd_m.
    registry : DataFrame, optional
        For times without an offset (the logger's utc_offset; UTC without it) and to refuse unknown loggers.

    Returns
    -------
    DataFrame, list of Refusal
        logger_id, time (datetime64[ns], UTC), stage_m, sd_m (NaN where not given), line, sorted; and the rows set aside.

    Raises
    ------
    InputError
        When the file can't be opened or lacks a column.
    """
    path = Path(path)
    table = _table(path, "field checks", ("logger_id", "time", "stage_m"))
    zones: dict[str, Zone] = {}
    if registry is not None:
        for row in registry.to_dict("records"):
            zones[row["logger_id"]] = parse_zone(row["utc_offset"], f"logger {row['logger_id']}")
    rows, refused = [], []
    for i, row in enumerate(table.to_dict("records")):
        place = f"field checks {path.name}, line {i + 2}:"
        try:
            if registry is not None and row["logger_id"] not in zones:
                message = f"{place} logger_id {row['logger_id']!r} is not in the registry; correct it or add the logger"
                raise InputError(message)
            stamp = moment(row["time"], zones.get(row["logger_id"], 0.0), f"{place} time")
            if stamp is pd.NaT:
                message = f"{place} time is empty; every check needs one"
                raise InputError(message)
            stage = number(row["stage_m"], f"{place} stage_m", "give metres above the wetland's lowest ground")
            sd = number(row["sd_m"], f"{place} sd_m", "give metres") if row.get("sd_m") else np.nan
            if sd <= 0:
                message = f"{place} sd_m {row['sd_m']} is not above 0; give metres or leave it empty"
                raise InputError(message)
        except InputError as fault:
            refused.append(Refusal("check", str(i + 2), str(fault)))
            continue
        rows.append((row["logger_id"], stamp, stage, sd, i + 2))
    out = pd.DataFrame(rows, columns=["logger_id", "time", "stage_m", "sd_m", "line"])
    out = out.astype({"time": "datetime64[ns]", "stage_m": float, "sd_m": float})
    return out.sort_values(["logger_id", "time"], ignore_index=True), refused
