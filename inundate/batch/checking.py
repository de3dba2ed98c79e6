"""Look at a pipeline and all its inputs before any work: what is there, what is missing, what is odd."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from inundate.batch.inputs import read_decisions, read_labels, read_walked, read_weather, read_wetlands
from inundate.batch.pipeline import Pipeline, load_pipeline
from inundate.batch.progress import Progress
from inundate.common.errors import InputError, Refusal


class _Report:
    """Rows of what was found, and refusals."""

    def __init__(self) -> None:
        self.rows: list[dict[str, str]] = []
        self.refused: list[Refusal] = []

    def good(self, item: str, words: str) -> None:
        self.rows.append({"item": item, "state": "good", "words": words})

    def odd(self, item: str, words: str) -> None:
        self.rows.append({"item": item, "state": "odd", "words": words})

    def none(self, item: str, words: str) -> None:
        self.rows.append({"item": item, "state": "not given", "words": words})


def check_pipeline(file: str | Path, *, why: bool, progress: Progress) -> dict[str, Any]:
    """Read a pipeline and all its inputs; nothing is written.

    Parameters
    ----------
    file : str or Path
    why : bool
        Also tell what the next run would read again, and why.
    progress : Progress

    Returns
    -------
    dict
        rows (item, state: ``good`` / ``odd`` / ``not given``, words), refused, and ``why`` where asked for.

    Raises
    ------
    InputError
        On the first input that is wrong as a whole.
    """
    from inundate.scenes import load_profile, open_catalog

    pipeline = load_pipeline(file)
    files = pipeline.input_files()
    report = _Report()
    with progress.step("checking"):
        shapes = read_wetlands(files["area.wetlands"], pipeline.area.crs)
        sensor = pipeline.scenes.sensor
        profile = load_profile(pipeline.path(sensor) if sensor.endswith(".toml") else sensor)
        catalog = open_catalog(files["scenes.catalog"], profile)
        report.refused += list(catalog.refused)
        _check_wetlands(report, shapes, profile.step_m)
        times = _check_scenes(report, catalog)
        _check_elevation(report, pipeline, shapes)
        _check_labels(report, pipeline, catalog, shapes)
        _check_loggers(report, pipeline, shapes, times)
        _check_rest(report, pipeline, times)
        _check_output(report, pipeline)
    result: dict[str, Any] = {
        "pipeline": str(file),
        "rows": report.rows,
        "refused": [r.as_dict() for r in report.refused],
    }
    if why:
        from inundate.batch.reasons import why_lines

        result["why"] = why_lines(pipeline, catalog)
    return result


def _check_wetlands(report: _Report, shapes: Any, step_m: float) -> None:
    area = shapes["area_max_m2"]
    report.good("wetlands", f"{len(shapes)} polygons, {area.min() / 1e4:.2f} to {area.max() / 1e4:.2f} ha")
    small = shapes.loc[area < step_m**2, "wetland_id"]
    if len(small):
        report.odd(
            "wetlands",
            f"{len(small)} smaller than one pixel ({', '.join(small[:3])}): their extents will be very uncertain",
        )
    cover = shapes.geometry.union_all().area
    if cover < 0.999 * area.sum():
        report.odd(
            "wetlands",
            f"polygons overlap ({(area.sum() - cover) / 1e4:.2f} ha counted twice): totals of the landscape will be too large",
        )


def _check_scenes(report: _Report, catalog: Any) -> tuple[pd.Timestamp, pd.Timestamp]:
    times = pd.to_datetime([s.datetime for s in catalog.scenes]).sort_values()
    gaps = times.to_series().diff().max()
    report.good("scenes", f"{len(times)} scenes, {times[0]:%Y-%m-%d} to {times[-1]:%Y-%m-%d}")
    if len(times) > 1 and gaps > pd.Timedelta(days=60):
        end = times.to_series().diff().idxmax()
        report.odd("scenes", f"no scene for {gaps.days} days before {end:%Y-%m-%d}")
    dark = sum(not np.isfinite(s.sun_elevation_deg) for s in catalog.scenes)
    if dark:
        report.odd("scenes", f"{dark} scenes do not tell the sun's elevation: 40 degrees is assumed")
    if catalog.refused:
        report.odd("scenes", f"{len(catalog.refused)} items cannot be used, each named below")
    return times[0], times[-1]


def _check_elevation(report: _Report, pipeline: Pipeline, shapes: Any) -> None:
    from inundate.scenes import read_elevation

    path = pipeline.input_files().get("area.elevation")
    if path is None:
        report.none("elevation", "relations and fills will rest on views and loggers alone")
        return
    empty = []
    for wetland_id, shape in zip(shapes["wetland_id"], shapes.geometry, strict=True):
        values, _, _ = read_elevation(path, pipeline.area.crs, shape.bounds)
        if not np.isfinite(values).any():
            empty.append(wetland_id)
    if empty:
        report.odd("elevation", f"no value in {len(empty)} of {len(shapes)} wetlands ({', '.join(empty[:3])})")
    else:
        report.good("elevation", "covers every wetland")


def _check_labels(report: _Report, pipeline: Pipeline, catalog: Any, shapes: Any) -> None:
    path = pipeline.input_files().get("labels.examples")
    if path is None:
        report.none("labels", "the starter examples will serve")
        return
    labels, refused = read_labels(path, pipeline.area.crs)
    report.refused += refused
    water = int((labels["label"] == "water").sum())
    report.good("labels", f"{len(labels)} labels, {water} water, {len(labels) - water} dry")
    days = np.sort(np.unique(pd.to_datetime([s.datetime for s in catalog.scenes]).normalize().to_numpy()))
    own = labels["scene_id"].isin([s.scene_id for s in catalog.scenes]).to_numpy()
    place = np.clip(np.searchsorted(days, labels["date"].to_numpy()), 1, max(days.size - 1, 1))
    near = np.minimum(
        np.abs(labels["date"].to_numpy() - days[place - 1]),
        np.abs(labels["date"].to_numpy() - days[min(days.size, 1) * place - (days.size == 1)]),
    )
    lost = ~own & ~(near <= np.timedelta64(1, "D"))
    if lost.any():
        report.odd(
            "labels",
            f"{int(lost.sum())} labels have no scene within a day (first: row {int(labels['row'][lost].iloc[0])}); they will be left out",
        )
    west, south, east, north = shapes.total_bounds
    bounds = labels.geometry.bounds
    away = (
        (bounds["maxx"] < west - 100)
        | (bounds["minx"] > east + 100)
        | (bounds["maxy"] < south - 100)
        | (bounds["miny"] > north + 100)
    )
    if away.any():
        report.odd(
            "labels",
            f"{int(away.sum())} labels lie outside the area of the wetlands (first: row {int(labels['row'][away].iloc[0])})",
        )


def _check_loggers(report: _Report, pipeline: Pipeline, shapes: Any, times: tuple[pd.Timestamp, pd.Timestamp]) -> None:
    files = pipeline.input_files()
    if "loggers.registry" not in files:
        report.none("loggers", "no wetland has stage; fills rest on views, weather and season")
        return
    from inundate.batch.field import latitudes_of, make_stage
    from inundate.stage import UNUSED_CHECK, read_checks, read_registry

    registry = read_registry(files["loggers.registry"])
    logged = registry["wetland_id"].nunique()
    report.good("loggers", f"{registry['logger_id'].nunique()} loggers in {logged} of {len(shapes)} wetlands")
    _check_barometer(report, pipeline, registry)
    weather = read_weather(files["weather.daily"]) if "weather.daily" in files else None
    stage = make_stage(pipeline, latitudes_of(shapes), weather)
    for logger_id, days in stage.daily.groupby("logger_id")["date"]:
        first, last = days.min(), days.max()
        report.good("stage", f"{logger_id}: {len(days)} days, {first:%Y-%m-%d} to {last:%Y-%m-%d}")
        if last < times[0] or first > times[1]:
            report.odd("stage", f"{logger_id}: its readings lie outside the scenes' dates")
    for words in (*stage.notes, *(r.reason for r in stage.refused if r.kind == UNUSED_CHECK)):
        report.odd("stage", words)
    report.refused += [r for r in stage.refused if r.kind != UNUSED_CHECK]
    if "loggers.checks" in files:
        checks, _ = read_checks(files["loggers.checks"], registry)
        bare = sorted(set(registry["logger_id"]) - set(checks["logger_id"]))
        report.good("field checks", f"{len(checks)} readings of {checks['logger_id'].nunique()} loggers")
        if bare:
            report.odd("field checks", f"none for {', '.join(bare[:5])}: their datum and drift cannot be checked")
    else:
        report.none("field checks", "datum and drift of loggers cannot be checked")


def _check_barometer(report: _Report, pipeline: Pipeline, registry: pd.DataFrame) -> None:
    from inundate.stage import read_barometer

    files = pipeline.input_files()
    absolute = registry[registry["kind"] == "absolute"]
    if "loggers.barometer" not in files:
        if len(absolute):
            names = ", ".join(absolute["logger_id"].unique()[:5])
            message = f"{files['loggers.registry']}: loggers {names} measure absolute pressure, and the pipeline names no barometer; add key 'loggers.barometer'"
            raise InputError(message)
        report.none("barometer", "not needed: no logger measures absolute pressure")
        return
    barometer = read_barometer(files["loggers.barometer"], pipeline.stage.barometer_utc_offset)
    time = pd.to_datetime(pd.Series(barometer.time)).reset_index(drop=True)
    gap = time.diff()
    hours = pipeline.stage.barometer_hole_h
    holes = gap > pd.Timedelta(hours=hours)
    report.good("barometer", f"{len(time)} readings, {time.min():%Y-%m-%d} to {time.max():%Y-%m-%d}")
    if holes.any():
        longest = gap.max() / pd.Timedelta(days=1)
        report.odd(
            "barometer",
            f"{int(holes.sum())} holes over {hours:g} h, the longest {longest:.1f} days: no stage there for absolute loggers",
        )


def _check_rest(report: _Report, pipeline: Pipeline, times: tuple[pd.Timestamp, pd.Timestamp]) -> None:
    files = pipeline.input_files()
    if "weather.daily" in files:
        weather = read_weather(files["weather.daily"])
        first, last = weather["date"].iloc[0], weather["date"].iloc[-1]
        report.good("weather", f"{len(weather)} days, {first:%Y-%m-%d} to {last:%Y-%m-%d}")
        missing = (
            int(weather[["precipitation_mm", "pet_mm"]].isna().any(axis=1).sum())
            + (last - first).days
            + 1
            - len(weather)
        )
        if missing:
            report.odd("weather", f"{missing} days without value")
        if first > times[0] or last < times[1].normalize():
            report.odd("weather", "does not cover all scenes' dates")
    else:
        report.none("weather", "wetlands without logger will be filled by season and neighbours alone")
    if "extent.decisions" in files:
        report.good("decisions", f"{len(read_decisions(files['extent.decisions']))} decisions on views")
    if "skill.walked_extents" in files:
        report.good(
            "walked extents", f"{len(read_walked(files['skill.walked_extents']))} extents measured on the ground"
        )


def _check_output(report: _Report, pipeline: Pipeline) -> None:
    products = pipeline.out / "products"
    months = sorted(p.name for p in products.glob("????-??")) if products.is_dir() else []
    report.good(
        "output", f"{pipeline.out}: " + (f"deliveries {months[0]} to {months[-1]}" if months else "no delivery yet")
    )


def check_lines(result: dict[str, Any]) -> list[str]:
    """Return the table that ``inundate check`` prints."""
    width = max((len(r["item"]) for r in result["rows"]), default=0)
    lines = [f"{r['item']:<{width}}  {r['state']:<9}  {r['words']}" for r in result["rows"]]
    odd = sum(r["state"] == "odd" for r in result["rows"])
    lines.append(f"{odd} odd, {len(result['refused'])} refused" if odd or result["refused"] else "all good")
    if "why" in result:
        lines += ["", "the next run:", *(f"  {line}" for line in result["why"])]
    return lines
