"""Static figures for papers, PNG and SVG, the same bytes for the same tables."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import matplotlib as mpl
import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.dates import AutoDateLocator, ConciseDateFormatter
from matplotlib.figure import Figure

from inundate.common.writing import replacing
from inundate.products.report.details import Split
from inundate.products.report.index import lower_edge, skill_figures
from inundate.products.report.palettes import CLASS_COLOURS, FLAG_COLOURS, LEAF_COLOURS
from inundate.products.report.tables import ReportTables

_MARK = {"leaf_off": "o", "green_up": "^", "leaf_on": "s", "leaf_fall": "v"}
_ROWS_A_SHEET = 8
_STYLE = {
    "svg.hashsalt": "inundate",
    "svg.fonttype": "path",
    "font.size": 8.5,
    "axes.spines.top": False,
    "axes.spines.right": False,
}


def _save(figure: Figure, path: Path) -> list[Path]:
    """Write a figure as PNG (200 dpi) and SVG without any date."""
    out = []
    for suffix, extra in (
        (".png", {"dpi": 200, "metadata": {"Software": None}}),
        (".svg", {"metadata": {"Date": None}}),
    ):
        target = path.with_name(path.name + suffix)
        with replacing(target) as scratch:
            figure.savefig(scratch, format=suffix[1:], **extra)  # type: ignore[arg-type]
        out.append(target)
    return out


def _plain(text: str, most: int = 48) -> str:
    """Return text that matplotlib draws as it is: no formula, not endlessly long."""
    text = text if len(text) <= most else text[: most - 1] + "…"
    return text.replace("$", r"\$")


def _dates(axes: Axes) -> None:
    locator = AutoDateLocator()
    axes.xaxis.set_major_locator(locator)
    axes.xaxis.set_major_formatter(ConciseDateFormatter(locator))


def _series_panel(axes: Axes, split: Split, wetland_id: str) -> None:
    daily, seen = split.rows("daily", wetland_id), split.rows("observed", wetland_id)
    days = pd.to_datetime(daily["date"])
    axes.fill_between(
        days, daily["area_lo_m2"], daily["area_hi_m2"], color="#8fa3a8", alpha=0.45, lw=0, label="90 % interval"
    )
    axes.plot(days, daily["area_m2"], color="#1d2a2f", lw=0.9, label="daily estimate")
    if len(seen):
        used = seen[seen["used"].astype(bool)]
        when = pd.to_datetime(used["datetime"], utc=True).dt.tz_localize(None)
        for state, colour in LEAF_COLOURS.items():
            mine = (used["leaf_state"] == state).to_numpy()
            if mine.any():
                axes.errorbar(
                    when[mine],
                    used["area_m2"][mine],
                    yerr=used["area_sd_m2"][mine],
                    fmt=_MARK[state],
                    ms=2.8,
                    color=colour,
                    lw=0.6,
                    label=state.replace("_", "-"),
                )
    axes.set_title(_plain(wetland_id), loc="left", fontsize=8.5)
    axes.set_ylim(bottom=0)
    _dates(axes)


def _sheets(tables: ReportTables, split: Split) -> Iterator[tuple[str, Figure]]:
    """Yield sheets of eight wetlands each: daily series with views."""
    names = [w for w in sorted(tables.shapes["wetland_id"].astype(str)) if len(split.rows("daily", w))]
    for k in range(0, len(names), _ROWS_A_SHEET):
        part = names[k : k + _ROWS_A_SHEET]
        figure = Figure(figsize=(7.5, 1.45 * len(part) + 0.7), layout="constrained")
        for axes, name in zip(figure.subplots(len(part), 1, sharex=True, squeeze=False).ravel(), part, strict=True):
            _series_panel(axes, split, name)
        figure.supylabel("inundated area (m²)")
        figure.supxlabel("day (UTC)")
        figure.legend(*_labels(figure), loc="outside upper center", ncols=6, frameon=False, fontsize=7.5)
        yield f"series_{k // _ROWS_A_SHEET + 1:02d}", figure


def _labels(figure: Figure) -> tuple[list[Any], list[str]]:
    found: dict[str, Any] = {}
    for axes in figure.axes:
        for handle, label in zip(*axes.get_legend_handles_labels(), strict=True):
            found.setdefault(label, handle)
    return list(found.values()), list(found)


def _total(tables: ReportTables) -> Figure | None:
    parts = tables.size_classes[tables.size_classes["size_class"].astype(str) != "all"]
    if parts.empty:
        return None
    wide = parts.pivot_table(index="date", columns="size_class", values="area_m2", sort=True) / 1e4
    names: list[str] = sorted((str(c) for c in wide.columns), key=lower_edge)
    wide = wide[names]
    figure = Figure(figsize=(7.5, 3.4), layout="constrained")
    axes = figure.subplots()
    colours = [CLASS_COLOURS[i % len(CLASS_COLOURS)] for i in range(wide.shape[1])]
    axes.stackplot(
        pd.to_datetime(wide.index), wide.to_numpy().T, labels=[str(c) for c in wide.columns], colors=colours, lw=0
    )
    axes.set_ylabel("inundated area (ha)")
    axes.set_xlabel("day (UTC)")
    axes.legend(frameon=False, ncols=3, loc="upper left")
    _dates(axes)
    return figure


def _relations(tables: ReportTables, split: Split) -> Figure | None:
    names = [w for w in sorted(tables.shapes["wetland_id"].astype(str)) if len(split.rows("relation_table", w))]
    logged = [w for w in names if len(split.rows("pairs", w))]
    names = (logged or names)[:48]
    if not names:
        return None
    columns = min(6, len(names))
    rows = -(-len(names) // columns)
    figure = Figure(figsize=(2.0 * columns + 0.6, 1.7 * rows + 0.6), layout="constrained")
    panels = figure.subplots(rows, columns, squeeze=False).ravel()
    for axes, name in zip(panels, names, strict=False):
        table, pairs = split.rows("relation_table", name), split.rows("pairs", name)
        axes.fill_between(
            table["stage_m"], table["area_lo_m2"] / 1e4, table["area_hi_m2"] / 1e4, color="#8fa3a8", alpha=0.5, lw=0
        )
        axes.plot(table["stage_m"], table["area_m2"] / 1e4, color="#1d2a2f", lw=1.2)
        for state, colour in LEAF_COLOURS.items() if len(pairs) else ():
            mine = pairs[pairs["leaf_state"] == state]
            axes.plot(
                mine["stage_m"],
                mine["area_m2"] / 1e4,
                _MARK[state],
                ms=2.2,
                color=colour,
                label=state.replace("_", "-"),
            )
        axes.set_title(_plain(name, 24), loc="left", fontsize=7.5)
        axes.set_ylim(bottom=0)
        axes.tick_params(labelsize=6.5)
    for axes in panels[len(names) :]:
        axes.set_visible(False)
    figure.supxlabel("stage (m above lowest ground)")
    figure.supylabel("inundated area (ha)")
    handles, labels = _labels(figure)
    if handles:
        figure.legend(handles, labels, loc="outside upper center", ncols=4, frameon=False)
    return figure


def _loggers(tables: ReportTables, split: Split) -> Figure | None:
    if tables.loggers is None or tables.loggers.empty:
        return None
    names = sorted(tables.loggers["wetland_id"].astype(str).unique())[:24]
    figure = Figure(figsize=(7.5, 1.35 * len(names) + 0.7), layout="constrained")
    for axes, name in zip(figure.subplots(len(names), 1, sharex=True, squeeze=False).ravel(), names, strict=True):
        rows, checks = split.rows("loggers", name), split.rows("checks", name)
        for _, one in rows.groupby("logger_id", sort=True):
            good = one[one["flag"] == "good"]
            axes.plot(good["time"], good["level_m"], color=FLAG_COLOURS["as read"], lw=0.7, label="level as read")
            axes.plot(good["time"], good["stage_m"], color=FLAG_COLOURS["stage"], lw=0.9, label="stage")
        if len(checks):
            axes.errorbar(
                checks["time"],
                checks["stage_m"],
                yerr=2 * checks["sd_m"].fillna(0.0),
                fmt="D",
                ms=3.5,
                mfc="white",
                color=FLAG_COLOURS["check"],
                lw=0.8,
                label="field check (2 sd)",
            )
        axes.axhline(0.0, color="#1d2a2f", lw=0.5, ls=":")
        axes.set_title(_plain(name), loc="left", fontsize=8.5)
        _dates(axes)
    figure.supylabel("m above lowest ground")
    figure.supxlabel("time (UTC)")
    figure.legend(*_labels(figure), loc="outside upper center", ncols=3, frameon=False)
    return figure


def _skill(tables: ReportTables) -> Figure | None:
    found = skill_figures(tables)
    bins = [b for b in found["reliability"].get("all", []) if b.get("n")]
    cover = [r for r in found["coverage"] if r.get("coverage") is not None]
    if not bins and not cover:
        return None
    figure = Figure(figsize=(7.5, max(3.4, 0.2 * len(cover) + 1.0)), layout="constrained")
    left, right = figure.subplots(1, 2)
    left.plot([0, 1], [0, 1], ls="--", color="#55656b", lw=0.8)
    if bins:
        sd = np.array([b.get("gap_sd") or 0.0 for b in bins])
        left.errorbar(
            [b["mean_probability"] for b in bins],
            [b["share_water"] for b in bins],
            yerr=2 * sd,
            fmt="o-",
            color="#0072B2",
            ms=4,
            lw=1,
        )
    left.set(xlabel="water probability given (share)", ylabel="water among labels (share)", xlim=(0, 1), ylim=(0, 1))
    for kind, colour, mark in (("views", "#0072B2", "o"), ("logger", "#D55E00", "s")):
        mine = [(i, r) for i, r in enumerate(reversed(cover)) if r["kind"] == kind]
        right.plot([r["coverage"] for _, r in mine], [i for i, _ in mine], mark, color=colour, label=f"hidden {kind}")
    right.set_yticks(range(len(cover)), [_plain(str(r["name"]).replace("_", "-"), 30) for r in reversed(cover)])
    right.axvline(0.9, ls="--", color="#55656b", lw=0.8)
    right.set(xlabel="share covered by the 90 % interval", xlim=(0, 1.02))
    if cover:
        right.legend(frameon=False, loc="lower left")
    else:
        right.set_title("nothing was hidden and predicted", fontsize=8.5)
    return figure


def write_figures(folder: Path, tables: ReportTables, *, most_sheets: int = 12) -> list[Path]:
    """Write static figures as PNG and SVG.

    Parameters
    ----------
    folder : Path
        Folder for the figures; made where missing.
    tables : ReportTables
    most_sheets : int
        Sheets of eight wetlands' series at most, by name.

    Returns
    -------
    list of Path
        ``total``, ``relations``, ``loggers``, ``skill`` (those that there is something to draw for) and ``series_NN``.
    """
    folder.mkdir(parents=True, exist_ok=True)
    split = Split(tables)
    written: list[Path] = []
    single: dict[str, Callable[[], Figure | None]] = {
        "total": lambda: _total(tables),
        "relations": lambda: _relations(tables, split),
        "loggers": lambda: _loggers(tables, split),
        "skill": lambda: _skill(tables),
    }
    with mpl.rc_context(_STYLE):  # type: ignore[arg-type]
        for name, make in single.items():
            figure = make()
            if figure is not None:
                written += _save(figure, folder / name)
        for i, (name, sheet) in enumerate(_sheets(tables, split)):
            if i == most_sheets:
                break
            written += _save(sheet, folder / name)
    return written
