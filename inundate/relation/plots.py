"""Figures of relations: one a wetland, and a sheet of all."""

from __future__ import annotations

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from inundate.common.errors import InputError
from inundate.relation.pairs import need
from inundate.relation.relations import RelationSet

# Okabe & Ito (2008), Color Universal Design: hues told apart under common colour blindness; marks differ too.
_LEAF_MARK = {"leaf_off": "o", "green_up": "^", "leaf_on": "s", "leaf_fall": "v"}
_YEAR_HUES = ("#0072B2", "#E69F00", "#009E73", "#CC79A7", "#56B4E9", "#D55E00")
_CURVE, _BAND, _SEEN = "#222222", "#9aa5b1", "#e9edf2"


def _draw_curve(axes: Axes, table: pd.DataFrame, unit: float) -> None:
    seen = table.loc[table["seen"], "stage_m"]
    if len(seen):
        axes.axvspan(seen.min(), seen.max(), color=_SEEN, zorder=0, label="stages seen")
    axes.fill_between(
        table["stage_m"],
        table["area_lo_m2"] / unit,
        table["area_hi_m2"] / unit,
        color=_BAND,
        alpha=0.55,
        linewidth=0,
        label="90 % band",
    )
    axes.plot(table["stage_m"], table["area_m2"] / unit, color=_CURVE, linewidth=1.6, label="relation")


def _draw_pairs(axes: Axes, pairs: pd.DataFrame, unit: float, size: float) -> None:
    years = sorted(pd.to_datetime(pairs["date"]).dt.year.unique())
    for (year, leaf), rows in pairs.groupby([pd.to_datetime(pairs["date"]).dt.year, "leaf_state"], sort=True):
        axes.scatter(
            rows["stage_m"],
            rows["area_m2"] / unit,
            s=size,
            marker=_LEAF_MARK.get(str(leaf), "D"),
            facecolor=_YEAR_HUES[years.index(year) % len(_YEAR_HUES)] if leaf == "leaf_off" else "none",
            edgecolor=_YEAR_HUES[years.index(year) % len(_YEAR_HUES)],
            linewidth=0.9,
            zorder=3,
            label=f"{year} {str(leaf).replace('_', ' ')}",
        )


def _rows(found: RelationSet, wetland_id: str) -> tuple[pd.DataFrame, pd.DataFrame]:
    if wetland_id not in found.wetland_ids:
        message = f"wetland {wetland_id!r}: it has no relation to draw; ask for one of those in `relations`"
        raise InputError(message)
    table = found.table()
    table = table[table["wetland_id"] == wetland_id]
    return table, found.relations[found.relations["wetland_id"] == wetland_id]


def plot_relation(found: RelationSet, wetland_id: str, pairs: pd.DataFrame) -> Figure:
    """Draw one wetland: pairs by leaf state (mark) and year (hue), curve, band, stages seen, and shifts found.

    Parameters
    ----------
    found : RelationSet
    wetland_id : str
    pairs : DataFrame
        The pairs fitted to: wetland_id, date, stage_m, area_m2, leaf_state.

    Returns
    -------
    Figure

    Raises
    ------
    InputError
        When the wetland has no relation, or a column is missing.
    """
    need(pairs, "pairs", ("wetland_id", "date", "stage_m", "area_m2", "leaf_state"))
    table, relation = _rows(found, wetland_id)
    last = relation.iloc[-1]
    table = table[table["period"] == last["period"]]
    mine = pairs[pairs["wetland_id"] == wetland_id]
    figure = Figure(figsize=(7.2, 5.0), layout="constrained")
    axes = figure.add_subplot()
    _draw_curve(axes, table, 1.0)
    _draw_pairs(axes, mine, 1.0, 26)
    axes.set_xlabel("stage above lowest ground (m)")
    axes.set_ylabel("inundated area (m²)")
    axes.set_ylim(bottom=0)
    fit = "" if np.isnan(last["rmse_m2"]) else f", held-out RMSE {last['rmse_m2']:,.0f} m²"
    family = str(last["family"]).replace("_", " with ")
    axes.set_title(f"{wetland_id}: {family}, {last['n_pairs']} pairs{fit}", loc="left", fontsize=11)
    words = [w.split(":")[0] for w in found.shifts.loc[found.shifts["wetland_id"] == wetland_id, "words"]]
    if words:
        axes.text(
            0.02, 0.98, "\n".join(words), transform=axes.transAxes, va="top", fontsize=8, color="#8a3b00", wrap=True
        )
    axes.legend(loc="lower right", fontsize=7.5, frameon=False, ncols=2)
    axes.spines[["top", "right"]].set_visible(False)
    return figure


def plot_gallery(found: RelationSet, pairs: pd.DataFrame, *, columns: int = 6) -> Figure:
    """Draw all wetlands on one sheet, small: curve, band, stages seen, pairs.

    Parameters
    ----------
    found : RelationSet
    pairs : DataFrame
        As in :func:`plot_relation`.
    columns : int
        Panels in a row.

    Returns
    -------
    Figure
    """
    need(pairs, "pairs", ("wetland_id", "date", "stage_m", "area_m2", "leaf_state"))
    names = found.wetland_ids
    whole = found.table(0.02)
    rows = max(1, -(-len(names) // columns))
    figure = Figure(figsize=(2.3 * columns, 1.9 * rows + 0.5), layout="constrained")
    panels = np.atleast_1d(figure.subplots(rows, columns, squeeze=False)).ravel()
    moved = set(found.shifts["wetland_id"])
    latest = found.relations.groupby("wetland_id").last()
    for axes, name in zip(panels, names, strict=False):
        table = whole[(whole["wetland_id"] == name) & (whole["period"] == latest.loc[name, "period"])]
        _draw_curve(axes, table, 1e4)
        mine = pairs[pairs["wetland_id"] == name]
        axes.scatter(mine["stage_m"], mine["area_m2"] / 1e4, s=3, color=_YEAR_HUES[0], zorder=3)
        note = " shift?" if name in moved else ""
        family = str(latest.loc[name, "family"]).replace("_", " with ")
        axes.set_title(f"{name}  {family}{note}", fontsize=7.5, loc="left")
        axes.tick_params(labelsize=6.5)
        axes.set_ylim(bottom=0)
        axes.spines[["top", "right"]].set_visible(False)
    for axes in panels[len(names) :]:
        axes.set_visible(False)
    figure.supxlabel("stage above lowest ground (m)", fontsize=9)
    figure.supylabel("inundated area (ha)", fontsize=9)
    return figure
