"""A stage plot of one logger: what was read, what was made of it, and why."""

from __future__ import annotations

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.dates import AutoDateLocator, ConciseDateFormatter
from matplotlib.figure import Figure

# colours that people with any kind of colour vision tell apart (Okabe and Ito, 2008)
_RAW, _MADE, _CHECK, _STEP, _DRY = "#999999", "#0072B2", "#D55E00", "#CC79A7", "#E69F00"
_MARKS = {
    "spike": ("x", "#000000"),
    "out_of_water": ("v", "#009E73"),
    "flat": ("s", "#E69F00"),
    "ice": ("*", "#56B4E9"),
    "noise": ("P", "#CC79A7"),
    "implausible": ("d", "#000000"),
}
_MOST_POINTS = 20_000


def _thin(frame: pd.DataFrame) -> pd.DataFrame:
    """Keep enough rows for a line: the lowest and highest of each of many short stretches."""
    if len(frame) <= _MOST_POINTS:
        return frame
    group = np.arange(len(frame)) * (_MOST_POINTS // 2) // len(frame)
    level = frame["level_m"]
    lowest = level.fillna(np.inf).groupby(group).idxmin().to_numpy(int)
    highest = level.fillna(-np.inf).groupby(group).idxmax().to_numpy(int)
    keep = np.unique(np.r_[lowest, highest])
    return frame.iloc[keep]


def _broken(frame: pd.DataFrame, column: str) -> tuple[np.ndarray, np.ndarray]:
    """Times and values with a NaN in every hole, so that no line is drawn across it."""
    time, value = frame["time"].to_numpy(), frame[column].to_numpy(float)
    if len(time) < 3:
        return time, value
    step = np.diff(time)
    hole = np.flatnonzero(step > max(np.median(step) * 5, np.timedelta64(6, "h"))) + 1
    return np.insert(time, hole, time[hole - 1]), np.insert(value, hole, np.nan)


def _levels(axes: Axes, flagged: pd.DataFrame, height_m: float) -> None:
    frame = flagged.reset_index(drop=True)
    frame["level_m"] = frame["depth_m"].astype(float) + height_m
    shown = frame[frame["flag"].isin(["good", "at_or_below_sensor"])].reset_index(drop=True)
    axes.plot(*_broken(_thin(shown), "level_m"), color=_RAW, lw=0.8, label="as read", zorder=2)
    made = shown.assign(level_m=shown["stage_m"].astype(float))
    wet = made.assign(level_m=made["level_m"].where(made["flag"] == "good"))
    axes.plot(*_broken(_thin(wet), "level_m"), color=_MADE, lw=1.1, label="stage", zorder=3)
    dry = made.assign(level_m=made["level_m"].where(made["flag"] == "at_or_below_sensor"))
    if dry["level_m"].notna().any():
        axes.plot(
            *_broken(_thin(dry), "level_m"), color=_DRY, lw=2.2, ls=(0, (2, 1)), label="at or below sensor", zorder=3
        )
    low, high = np.nanpercentile(frame["level_m"], [0.2, 99.8])
    room = 0.15 * max(high - low, 0.05)
    bottom, top = low - room, high + room
    for name, (mark, colour) in _MARKS.items():
        part = frame[frame["flag"] == name]
        if len(part):
            label = f"{name.replace('_', ' ')} ({len(part)})"
            level = part["level_m"].clip(bottom, top)
            axes.scatter(
                part["time"], level, marker=mark, s=22, color=colour, lw=1.0, label=label, zorder=4, clip_on=False
            )
    axes.set_ylim(bottom, top)


def _steps(axes: Axes, added: Axes, corrections: pd.DataFrame) -> None:
    for row in corrections[corrections["kind"] == "step"].to_dict("records"):
        for one in (axes, added):
            one.axvline(row["start"], color=_STEP, lw=1.2, ls="--", zorder=1)
        axes.annotate(
            f"moved {-row['value_m'] * 100:+.1f} cm",
            (row["start"], 1.0),
            xycoords=("data", "axes fraction"),
            xytext=(3, -3),
            textcoords="offset points",
            va="top",
            fontsize=8,
            color=_STEP,
        )
    for row in corrections[corrections["kind"] == "clock"].to_dict("records"):
        axes.axvspan(row["start"], row["end"], color="#F0E442", alpha=0.25, lw=0, zorder=0)
        axes.annotate(
            f"clock: {row['why'].split(' h ')[0]} h",
            (row["start"], 0.0),
            xycoords=("data", "axes fraction"),
            xytext=(3, 3),
            textcoords="offset points",
            fontsize=8,
        )


def plot_logger(
    flagged: pd.DataFrame,
    checks: pd.DataFrame | None = None,
    corrections: pd.DataFrame | None = None,
    *,
    height_m: float | None = None,
    title: str = "",
) -> Figure:
    """Plot one logger: level as read, stage, checks, flags and corrections.

    Parameters
    ----------
    flagged : DataFrame
        The logger's frame of ``StageResult.flagged``.
    checks : DataFrame, optional
        The logger's checks: time, stage_m [, sd_m].
    corrections : DataFrame, optional
        The logger's rows of ``StageResult.corrections``.
    height_m : float, optional
        Height of the sensor in the registry, m; guessed from the frame's first good reading where None.
    title : str

    Returns
    -------
    matplotlib Figure
        Above: stage (m above lowest ground); below: what was added to the level as read (cm).
    """
    if height_m is None:
        first = (flagged["stage_m"] - flagged["depth_m"])[flagged["flag"] == "good"]
        height_m = float(first.iloc[0]) if len(first) else 0.0
    figure = Figure(figsize=(11, 5.6), layout="constrained")
    axes, added = figure.subplots(2, 1, sharex=True, height_ratios=[3, 1])
    _levels(axes, flagged, height_m)
    if checks is not None and len(checks):
        sd = checks["sd_m"].fillna(0.0) if "sd_m" in checks else 0.0
        axes.errorbar(
            checks["time"],
            checks["stage_m"],
            yerr=2 * sd,
            fmt="o",
            ms=6,
            mfc="white",
            mec=_CHECK,
            ecolor=_CHECK,
            capsize=3,
            label="field check (2 sd)",
            zorder=5,
        )
        lowest, highest = axes.get_ylim()
        axes.set_ylim(min(lowest, checks["stage_m"].min() - 0.03), max(highest, checks["stage_m"].max() + 0.03))
    good = flagged[flagged["flag"] == "good"].reset_index(drop=True)
    change = good.assign(level_m=(good["stage_m"] - good["depth_m"]).astype(float) * 100 - height_m * 100)
    added.plot(*_broken(_thin(change), "level_m"), color=_MADE, lw=1.2)
    added.axhline(0.0, color="#000000", lw=0.6)
    if corrections is not None:
        _steps(axes, added, corrections)
    axes.axhline(0.0, color="#000000", lw=0.6, ls=":")
    axes.set_ylabel("stage, m above lowest ground")
    added.set_ylabel("added, cm")
    added.set_xlabel("time, UTC")
    locator = AutoDateLocator()
    added.xaxis.set_major_locator(locator)
    added.xaxis.set_major_formatter(ConciseDateFormatter(locator))
    for one in (axes, added):
        one.grid(color="#dddddd", lw=0.5)
        one.set_axisbelow(True)
    axes.legend(loc="upper left", bbox_to_anchor=(1.0, 1.0), fontsize=8, frameon=False)
    axes.set_title(title, loc="left", fontsize=11)
    return figure
