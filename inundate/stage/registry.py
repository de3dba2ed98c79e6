"""Rows of a logger registry, checked one by one: kinds, units, numbers, times, periods that don't overlap."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
from pandas.api.typing import NaTType

from inundate.common.errors import InputError
from inundate.stage._columns import Zone, parse_zone, to_utc
from inundate.stage.physics import METRE, UNITS

KINDS = ("absolute", "vented", "level")


def moment(text: str, zone: Zone, place: str) -> pd.Timestamp | NaTType:
    """Return a time of the registry or of a check in UTC; NaT where empty, InputError where it is none."""
    if not text:
        return pd.NaT
    try:
        stamp = pd.Timestamp(text)
    except ValueError as fault:
        message = f"{place} {text!r} is not an ISO 8601 time; write it as 2024-05-31T12:00"
        raise InputError(message) from fault
    if stamp.tzinfo is not None:
        return stamp.tz_convert("UTC").tz_localize(None)
    return pd.Timestamp(to_utc(np.array([stamp.to_datetime64()], "datetime64[ns]"), zone)[0])


def number(text: str, place: str, rule: str) -> float:
    """Return a number (decimal comma understood); InputError with place and rule where it is none."""
    try:
        value = float(text.replace(",", "."))
    except ValueError:
        value = np.nan
    if not np.isfinite(value):
        message = f"{place} {text!r} is not a number; {rule}"
        raise InputError(message)
    return value


def registry_row(row: dict, line: int, path: Path) -> dict:
    """Check one row and turn its texts into numbers, times and absolute paths; InputError where it can't be."""
    place = f"logger registry {path.name}, line {line}:"
    for name in ("logger_id", "wetland_id", "file"):
        if not row[name]:
            message = f"{place} {name} is empty; every row needs one"
            raise InputError(message)
    out = dict(row)
    if row["kind"] not in KINDS:
        message = f"{place} kind {row['kind']!r} is not known; use one of {', '.join(KINDS)}"
        raise InputError(message)
    if row["unit"] not in UNITS:
        message = f"{place} unit {row['unit']!r} is not known; use one of {', '.join(UNITS)}"
        raise InputError(message)
    if row["kind"] == "level" and row["unit"] not in METRE:
        message = f"{place} kind level with the pressure unit {row['unit']!r}; use m, cm or ft, or kind vented"
        raise InputError(message)
    out["height_m"] = number(row["height_m"], f"{place} height_m", "give the sensor's height in metres")
    for name in ("height_sd_m", "sensor_sd_m", "elevation_m"):
        out[name] = number(row[name], f"{place} {name}", "give metres or leave it empty") if row[name] else np.nan
    for name in ("height_sd_m", "sensor_sd_m"):
        if out[name] <= 0:
            message = f"{place} {name} {row[name]} is not above 0; give metres or leave it empty"
            raise InputError(message)
    zone = parse_zone(row["utc_offset"], place)
    out["valid_from"] = moment(row["valid_from"], zone, f"{place} valid_from")
    out["valid_to"] = moment(row["valid_to"], zone, f"{place} valid_to")
    if out["valid_to"] <= out["valid_from"]:
        message = f"{place} valid_to {row['valid_to']} is not after valid_from {row['valid_from']}; correct one of them"
        raise InputError(message)
    paths = [p.strip() for p in row["file"].split(";") if p.strip()]
    out["file"] = ";".join(str((path.parent / p).absolute()) for p in paths)
    return out


def check_periods(table: pd.DataFrame, path: Path) -> None:
    """Raise InputError where two periods of one logger overlap."""
    for logger_id, rows in table.groupby("logger_id"):
        starts = rows["valid_from"].fillna(pd.Timestamp("1700-01-01")).to_numpy()
        stops = rows["valid_to"].fillna(pd.Timestamp("2250-01-01")).to_numpy()
        clash = np.flatnonzero(starts[1:] < stops[:-1])
        if clash.size:
            message = (
                f"logger registry {path.name}: periods of logger {logger_id!r} overlap "
                f"(to {pd.Timestamp(stops[clash[0]])}, from {pd.Timestamp(starts[clash[0] + 1])}); "
                "end one before the next begins"
            )
            raise InputError(message)
