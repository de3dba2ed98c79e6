"""From observed extents and stage to a delivery: relations, filled series, products, skill, report."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from inundate.batch.layout import Layout
from inundate.batch.work import Inputs, Work
from inundate.common.writing import write_table, write_text
from inundate.products import changes, write_daily_netcdf, write_draws_netcdf, write_product_table, write_wetlands_layer
from inundate.products.layer import month_summary

if TYPE_CHECKING:
    from inundate.leaves import LeafCalendar
    from inundate.relation import RelationSet
    from inundate.series import SeriesResult
    from inundate.stage import StageResult


@dataclass(frozen=True, slots=True)
class Findings:
    """Everything that a delivery is made of.

    Attributes
    ----------
    month : str
        ``YYYY-MM``.
    last : Timestamp
        Last day of the series.
    """

    month: str
    last: pd.Timestamp
    wetlands: pd.DataFrame
    observed: pd.DataFrame
    stage: StageResult | None
    relations: RelationSet
    pairs: pd.DataFrame
    series: SeriesResult
    calendar: LeafCalendar
    leaf_daily: pd.DataFrame


def last_day(month: str | None, observed: pd.DataFrame, stage: StageResult | None) -> tuple[str, pd.Timestamp]:
    """Return the delivered month and the last day of the series."""
    if month is not None:
        return month, pd.Period(month, "M").end_time.normalize()
    newest = [pd.to_datetime(observed["datetime"]).max()]
    if stage is not None and len(stage.daily):
        newest.append(pd.to_datetime(stage.daily["date"]).max())
    last = max(pd.Timestamp(t).tz_localize(None) if pd.Timestamp(t).tzinfo else pd.Timestamp(t) for t in newest)
    return f"{last:%Y-%m}", last.normalize()


def conclude(
    work: Work,
    inputs: Inputs,
    layout: Layout,
    calendar: LeafCalendar,
    found: tuple[pd.DataFrame, StageResult | None],
    month: str | None,
    lasting: tuple[float, float] = (0.0, 0.0),
) -> Findings:
    """Fit relations and fill the series."""
    from inundate.relation import (
        believed_outlets,
        best_pairs,
        fit_relations,
        lasting_parts,
        make_pairs,
        outlet_levels,
        through_outlets,
        with_outlets,
        with_shared_errors,
    )
    from inundate.series import FillOptions, SeriesInputs, fill_series

    observed, stage = found
    month, last = last_day(month, observed, stage)
    wetlands = layout.wetlands.assign(cover=layout.wetlands["wetland_id"].map(calendar.cover_).fillna("deciduous"))
    daily = None if stage is None else stage.daily
    settings = work.pipeline
    with work.progress.step("stage-area relations"):
        record = daily if daily is not None else _no_stage()
        pairs = make_pairs(observed, record)
        outlets = believed_outlets(outlet_levels(record), pairs, wetlands)
        ground = layout.hypsometry
        anchored = set() if ground is None else set(outlets["wetland_id"]) & set(ground["wetland_id"])
        told, full = through_outlets(best_pairs(pairs, anchored=anchored), outlets, wetlands, lasting[0])
        told = with_shared_errors(with_outlets(told, outlets, wetlands, ground), wetlands, lasting)
        relations = fit_relations(told, wetlands, ground, seed=settings.relation.seed)
        work.notes.extend(
            f"wetland {r['wetland_id']}: an outlet holds its level near {r['level_m']:.2f} m ({r['days']} days); its views then "
            f"show {100 * r['shown']:.0f} % of its water, and its relation is scaled by that"
            for r in full.to_dict("records")
        )
    first = min(
        t
        for t in (pd.to_datetime(observed["datetime"]).min(), None if daily is None else daily["date"].min())
        if t is not None and pd.notna(t)
    )
    dates = pd.date_range(pd.Timestamp(first).normalize(), last)
    leaf_daily = calendar.daily(dates)
    with work.progress.step("filling the series"):
        series = fill_series(
            SeriesInputs(
                wetlands,
                observed,
                daily,
                relations,
                layout.hypsometry,
                inputs.weather,
                leaf_daily,
                dates[0],
                last,
                lasting_parts(outlets, wetlands, ground, lasting),
            ),
            options=FillOptions(workers=settings.compute.workers, lasting=lasting),
            seed=settings.series.seed,
        )
    work.notes.extend(series.lacked)
    return Findings(month, last, wetlands, observed, stage, relations, pairs, series, calendar, leaf_daily)


def _no_stage() -> pd.DataFrame:
    return pd.DataFrame(
        {
            "wetland_id": pd.Series(dtype="str"),
            "date": pd.Series(dtype="datetime64[ns]"),
            "stage_m": pd.Series(dtype=float),
            "stage_sd_m": pd.Series(dtype=float),
            "quality": pd.Series(dtype="str"),
            "censored": pd.Series(dtype=bool),
            "period": pd.Series(dtype=int),
        }
    )


def write_tables(
    work: Work, inputs: Inputs, layout: Layout, found: Findings, folder: Path, before: Path | None
) -> dict[str, Any]:
    """Write every product table, the NetCDF and the layer into ``folder``; return what the summary shows."""
    from inundate.extent import widen_observed
    from inundate.relation import leaf_factors, widen_bands
    from inundate.series import hydroperiod, size_classes
    from inundate.stage import wetland_daily

    settings = work.pipeline.series
    daily = write_product_table(folder, "extent_daily", found.series.daily)
    lasting = found.series.lasting
    leafy = leaf_factors(found.pairs, found.relations, found.wetlands, lasting)
    seen = widen_observed(found.observed, found.wetlands, lasting, leafy)
    observed = write_product_table(folder, "extent_observed", seen)
    stage = wetland_daily(found.stage) if found.stage is not None else _no_stage()
    stage = stage[pd.to_datetime(stage["date"]) <= found.last]
    stage = write_product_table(folder, "stage_daily", stage)
    write_product_table(folder, "relations", found.relations.relations)
    bands = widen_bands(found.relations.table(), found.wetlands, lasting, found.series.lasting_part)
    write_product_table(folder, "relation_table", bands)
    write_product_table(folder, "hydroperiod", hydroperiod(found.series, settings.water_year_start_month))
    classes = size_classes(found.series, found.wetlands, settings.size_class_edges_ha)
    write_product_table(folder, "size_classes", classes)
    moved = changes(
        None if before is None else pd.read_parquet(before / "extent_daily.parquet"),
        daily,
        _fresh(before, "extent_observed", observed, ("wetland_id", "scene_id", "area_m2", "used")),
        _fresh(before, "stage_daily", stage, ("wetland_id", "date", "stage_m")),
    )
    write_product_table(folder, "changes", moved)
    place = {"crs": layout.grid.crs, "area": work.pipeline.area.name}
    write_daily_netcdf(folder / "extent_daily.nc", daily, found.wetlands, **place)
    if settings.draws:
        draws = found.series.draws(settings.draws)
        write_draws_netcdf(folder / "extent_draws.nc", draws, found.series.dates, found.wetlands, **place)
    columns = found.wetlands[["wetland_id", "area_max_m2", "cover"]].merge(
        month_summary(daily, found.month), on="wetland_id", how="left"
    )
    write_wetlands_layer(folder / "wetlands.gpkg", inputs.shapes, columns)
    return {"wetlands": len(found.wetlands), "days": int(daily["date"].nunique()), "changed_days": len(moved)}


def _rounded(table: pd.DataFrame) -> pd.DataFrame:
    """Return a table with numbers to a thousandth, so that a rewritten last digit is no news."""
    return table.assign(**{c: table[c].round(3) for c in table.columns if pd.api.types.is_float_dtype(table[c])})


def _fresh(before: Path | None, name: str, now: pd.DataFrame, keys: tuple[str, ...]) -> set[tuple[str, pd.Timestamp]]:
    """Return (wetland, day) of rows that were not there, or differ from, the last delivery."""
    if before is None or not (before / f"{name}.parquet").exists():
        return set()
    old = pd.read_parquet(before / f"{name}.parquet")
    when = "datetime" if "datetime" in now.columns else "date"
    mark = lambda t: pd.util.hash_pandas_object(_rounded(t[list(keys)]), index=False)  # noqa: E731
    new = now[~mark(now).isin(set(mark(old)))]
    days = pd.to_datetime(new[when], utc=True).dt.tz_localize(None).dt.normalize()
    return set(zip(new["wetland_id"], days, strict=True))


def keep_archive_tables(work: Work, found: Findings) -> None:
    """Keep what the report and the skill step need besides the products."""
    archive = work.archive
    write_table(archive.table("pairs"), found.pairs)
    write_table(archive.table("leaf_daily"), found.leaf_daily)
    write_table(archive.table("choices"), found.relations.choices)
    write_table(archive.table("shifts"), found.relations.shifts)
    write_table(archive.table("fill_reasons"), found.series.reasons)
    write_text(archive.folder / "relations.json", found.relations.to_json())
    if found.stage is not None:
        write_table(archive.table("stage_full"), found.stage.daily)
        write_table(archive.table("stage_corrections"), found.stage.corrections)


def month_of(day: np.datetime64) -> str:
    """Return ``YYYY-MM``."""
    return f"{pd.Timestamp(day):%Y-%m}"
