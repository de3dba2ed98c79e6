"""A logger's field checks: matched with its record, and set aside where they can't be right."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from inundate.common.errors import InputError, Refusal
from inundate.stage.options import StageOptions
from inundate.stage.signals import HOUR_NS, interpolate, stamp

if TYPE_CHECKING:
    from inundate.stage.record import Prepared

UNUSED_CHECK = "unused check"
"""Kind of a field check that is right in itself, but falls in a hole of its logger's record."""


def told_sd(row: Mapping, name: str, default: float) -> float:
    """Return an sd of the registry's row, or the default where it tells none."""
    value = row.get(name, np.nan)
    return default if value is None or pd.isna(value) else float(value)


def gather_checks(made: Prepared, checks: pd.DataFrame, options: StageOptions) -> tuple[pd.DataFrame, list[Refusal]]:
    """Match checks with the record: add raw stage, depth and span; refuse what lies outside it."""
    time = checks["time"].to_numpy("datetime64[ns]").view(np.int64)
    usual = int(np.median(np.diff(made.hours.time[:5000]))) if made.hours.time.size > 2 else HOUR_NS
    reach = max(int(options.check_reach_h * HOUR_NS), int(1.5 * usual))
    order = np.argsort(time, kind="stable")
    checks, time = checks.iloc[order].reset_index(drop=True), time[order]
    depth = interpolate(time, made.hours.time, made.hours.mean, 2 * reach)
    near = np.clip(np.searchsorted(made.hours.time, time), 0, max(made.hours.time.size - 1, 0))
    edge = np.abs(made.hours.time[near] - time) <= HOUR_NS
    depth = np.where(np.isnan(depth) & edge, made.hours.mean[near], depth)
    out = checks.assign(depth_m=depth, raw_m=depth + made.height_m[near], span=made.span[near], ns=time)
    refused = []
    first, last = (stamp(t) for t in made.hours.time[[0, -1]])
    for row in out[out["depth_m"].isna()].to_dict("records"):
        line = row.get("line", "")
        within = first <= str(row["time"])[:16].replace(" ", "T") <= last
        where = "in a hole of" if within else "outside"
        refused.append(
            Refusal(
                UNUSED_CHECK if within else "check",
                str(line),
                f"field check{f' at line {line}' if line else ''} of logger {made.logger_id} at {row['time']}: it lies "
                f"{where} the logger's usable record ({first} to {last}), so it can't be compared; correct its time or "
                "leave it",
            )
        )
    return out[out["depth_m"].notna()].reset_index(drop=True), refused


#: A datum this far off (m, or times the sd told of the height) is no survey error. Common practice, no source.
GROSS_M = 1.0
GROSS_SDS = 10.0


def refuse_gross(made: Prepared, checks: pd.DataFrame, options: StageOptions) -> None:
    """Raise InputError where the middle one of a logger's checks stands too far off its record for any survey.

    A unit is then wrong, or the height, or the checks are another logger's; which of them the record can't tell, so no
    stage may be made of it.

    Parameters
    ----------
    made : Prepared
    checks : DataFrame
        From :func:`gather_checks`.
    options : StageOptions

    Raises
    ------
    InputError
    """
    for k in np.unique(checks["span"].to_numpy(np.int64)):
        rows = checks[checks["span"] == k]
        row = made.spans[k].row
        off = float((rows["stage_m"] - rows["raw_m"]).median())
        if abs(off) > max(GROSS_M, GROSS_SDS * told_sd(row, "height_sd_m", options.height_sd_m)):
            which = f"the middle one of its {len(rows)} field checks" if len(rows) > 1 else "its only field check"
            message = (
                f"logger {made.logger_id}: {which} stands {off:+.2f} m off the record with height_m {row['height_m']:g}; "
                "no survey is so wrong: correct height_m in the registry (metres above the wetland's lowest ground), the "
                "checks' stage_m (metres) or the logger they are told of"
            )
            raise InputError(message)


def doubtful_check(logger_id: str, row: pd.Series) -> Refusal:
    """Return the refusal of a check that the others contradict."""
    return Refusal(
        "check",
        str(row.get("line", "")),
        f"field check of logger {logger_id} at {row['time']}: {row['stage_m']:.3f} m is "
        f"{(row['stage_m'] - row['raw_m']) * 100:+.1f} cm off the raw record and contradicted by the checks about it; "
        "it is not used; look at the field notes",
    )


def own_checks(checks: pd.DataFrame | None, logger_id: str) -> pd.DataFrame:
    """Return one logger's checks with all columns, also where there are none."""
    if checks is None:
        checks = pd.DataFrame(columns=["logger_id", "time", "stage_m"])
    out = checks[checks["logger_id"] == logger_id].copy()
    if "sd_m" not in out:
        out["sd_m"] = np.nan
    return out.astype({"time": "datetime64[ns]", "stage_m": float, "sd_m": float})
