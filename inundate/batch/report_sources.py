"""What the report needs besides the products: kept in the archive by a run, read again by ``inundate report``."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pandas as pd
import pyarrow.parquet as pq

from inundate.batch.archive import Archive
from inundate.batch.delivering import Findings
from inundate.batch.layout import Layout
from inundate.batch.work import Work
from inundate.common.codes import MAP_NOT_SEEN, ViewCode
from inundate.common.grid import Grid
from inundate.common.site import Site
from inundate.common.writing import write_json, write_table
from inundate.products.report import Thumbnail, choose_views, paint_view

LOGGER_POINTS = 1500
LEFT_OUT_POINTS = 300
MARGIN_PX = 2
VIEWS_IN_PAGE, VIEWS_IN_PAGES = 6, 4
Extras = dict[str, pd.DataFrame | None]
KEPT = {
    "pairs": "pairs",
    "shifts": "shifts",
    "reasons": "fill_reasons",
    "corrections": "stage_corrections",
    "heldout": "heldout",
    "loggers": "logger_record",
    "checks": "field_checks",
}
_WHEN = {
    "pairs": "date",
    "shifts": "date",
    "heldout": "date",
    "loggers": "time",
    "checks": "time",
    "corrections": "start",
}


def thin_record(flagged: pd.DataFrame, height_m: float) -> pd.DataFrame:
    """Thin one logger's readings to what a chart shows.

    Parameters
    ----------
    flagged : DataFrame
        The logger's frame of ``StageResult.flagged``.
    height_m : float
        Height of the sensor's zero above lowest ground, m.

    Returns
    -------
    DataFrame
        time, level_m (as read), stage_m, flag: of the sound readings the lowest and highest of each of 750 equal
        stretches of readings, of those left out every so many, 300 at most.
    """
    level = (flagged["depth_m"].astype(float) + height_m).to_numpy()
    out = pd.DataFrame({"time": flagged["time"].to_numpy("datetime64[ns]"), "level_m": level})
    out["stage_m"] = flagged["stage_m"].to_numpy(float)
    out["flag"] = flagged["flag"].array
    sound = out["flag"].isin(["good", "at_or_below_sensor"]).to_numpy()
    place = np.flatnonzero(sound)
    if place.size > LOGGER_POINTS:
        group = np.arange(place.size) * (LOGGER_POINTS // 2) // place.size
        values = pd.Series(level[place])
        lowest = values.fillna(np.inf).groupby(group).idxmin().to_numpy(int)
        highest = values.fillna(-np.inf).groupby(group).idxmax().to_numpy(int)
        place = place[np.unique(np.r_[lowest, highest])]
    left = np.flatnonzero(~sound)
    if left.size > LEFT_OUT_POINTS:
        left = left[np.unique(np.linspace(0, left.size - 1, LEFT_OUT_POINTS).astype(int))]
    out = out.iloc[np.sort(np.r_[place, left])].reset_index(drop=True)
    return out.assign(flag=out["flag"].astype(str))


def _field_tables(work: Work, found: Findings) -> tuple[pd.DataFrame | None, pd.DataFrame | None]:
    """Return thinned logger records and field checks, both with wetland_id; None without loggers."""
    from inundate.stage import read_checks, read_registry

    files = work.pipeline.input_files()
    if found.stage is None or "loggers.registry" not in files:
        return None, None
    registry = read_registry(files["loggers.registry"]).drop_duplicates("logger_id")
    wetland = dict(zip(registry["logger_id"], registry["wetland_id"].astype(str), strict=True))
    height = dict(zip(registry["logger_id"], registry["height_m"].astype(float), strict=True))
    parts = []
    for name, flagged in sorted(found.stage.flagged.items()):
        if flagged is not None and len(flagged):
            record = thin_record(flagged, height.get(name, 0.0))
            record.insert(0, "logger_id", str(name))
            record.insert(0, "wetland_id", wetland.get(name, ""))
            parts.append(record)
    loggers = pd.concat(parts, ignore_index=True) if parts else None
    checks = None
    if "loggers.checks" in files:
        table, _ = read_checks(files["loggers.checks"], read_registry(files["loggers.registry"]))
        checks = table.assign(wetland_id=table["logger_id"].map(wetland))
        checks = checks[["wetland_id", "logger_id", "time", "stage_m", "sd_m"]]
    return loggers, checks


def extras_of(work: Work, found: Findings) -> Extras:
    """Return the report's extra tables of a run."""
    loggers, checks = _field_tables(work, found)
    return {
        "pairs": found.pairs,
        "shifts": found.relations.shifts,
        "reasons": found.series.reasons,
        "corrections": None if found.stage is None else found.stage.corrections,
        "heldout": getattr(found.series, "heldout", None),
        "loggers": loggers,
        "checks": checks,
    }


def keep_extras(archive: Archive, extras: Extras, layout: Layout) -> None:
    """Keep in the archive what :func:`inundate.batch.delivering.keep_archive_tables` does not."""
    for name in ("heldout", "loggers", "checks"):
        table = extras[name]
        path = archive.table(KEPT[name])
        if table is None:
            path.unlink(missing_ok=True)
        else:
            write_table(path, table)
    grid = layout.grid
    write_table(archive.table("site"), pd.DataFrame({"row": layout.site.rows, "col": layout.site.cols}))
    names = ("crs", "west", "north", "step", "height", "width")
    write_json(archive.folder / "grid.json", {k: getattr(grid, k) for k in names})


def load_extras(archive: Archive) -> Extras:
    """Read the report's extra tables from the archive; None where one is not there."""
    out: Extras = {}
    for name, file in KEPT.items():
        path = archive.table(file)
        out[name] = pd.read_parquet(path) if path.exists() else None
    return out


def until(extras: Extras, last: pd.Timestamp) -> Extras:
    """Return the tables without what lies after the delivery's last day."""
    end = last.normalize() + pd.Timedelta(days=1)
    out: Extras = {}
    for name, table in extras.items():
        if table is not None and name in _WHEN and len(table):
            when = pd.to_datetime(table[_WHEN[name]])
            table = table[(when < end).to_numpy() | when.isna().to_numpy()].reset_index(drop=True)  # noqa: PLW2901
        out[name] = table
    return out


def load_site(archive: Archive) -> Site | None:
    """Read the site kept by :func:`keep_extras`; None where there is none."""
    path, note = archive.table("site"), archive.folder / "grid.json"
    if not (path.exists() and note.exists()):
        return None
    table = pd.read_parquet(path)
    grid = Grid(**json.loads(note.read_text(encoding="utf-8")))
    return Site(grid, table["row"].to_numpy(np.int32), table["col"].to_numpy(np.int32), ())


def paint_wetlands(archive: Archive, site: Site, shapes: Any, observed: pd.DataFrame) -> dict[str, list[Thumbnail]]:
    """Paint the chosen views of every wetland from the archive, scene by scene.

    Parameters
    ----------
    archive : Archive
    site : Site
        The pixels that the archived views hold.
    shapes : GeoDataFrame
        wetland_id, geometry.
    observed : DataFrame
        extent_observed of the delivery.

    Returns
    -------
    dict of str to list of Thumbnail
        By wetland_id, by time; views that are no longer in the archive are left out.
    """
    from inundate.products.report.page import MOST_IN_PAGE

    most = VIEWS_IN_PAGE if len(shapes) <= MOST_IN_PAGE else VIEWS_IN_PAGES
    wanted: dict[str, list[str]] = {}
    order: dict[str, list[str]] = {}
    for name, rows in observed.groupby("wetland_id", sort=True):
        order[str(name)] = choose_views(rows, most)
        for scene in order[str(name)]:
            wanted.setdefault(scene, []).append(str(name))
    boxes = _boxes(site, shapes)
    found: dict[tuple[str, str], Thumbnail] = {}
    for scene, names in sorted(wanted.items()):
        pixels = _read_scene(archive, scene, site.size)
        if pixels is None:
            continue
        bands, percent = pixels
        for name in names:
            if name in boxes:
                place, bounds = boxes[name]
                found[name, scene] = _paint(scene, bands, percent, place, bounds)
    return {w: kept for w, scenes in order.items() if (kept := [found[w, s] for s in scenes if (w, s) in found])}


def _boxes(site: Site, shapes: Any) -> dict[str, tuple[np.ndarray, tuple[float, float, float, float]]]:
    """Return each wetland's window of site positions (row, column), -1 where not in the site, and its bounds, m."""
    grid, out = site.grid, {}
    for name, shape in zip(shapes["wetland_id"].astype(str), shapes.geometry, strict=True):
        if shape is None or shape.is_empty:
            continue
        west, south, east, north = shape.bounds
        (top, bottom), (left, right) = grid.locate(np.array([west, east]), np.array([north, south]))
        rows = np.arange(max(int(top) - MARGIN_PX, 0), min(int(bottom) + MARGIN_PX + 1, grid.height))
        cols = np.arange(max(int(left) - MARGIN_PX, 0), min(int(right) + MARGIN_PX + 1, grid.width))
        if not rows.size or not cols.size:
            continue
        place = site.positions(*np.meshgrid(rows, cols, indexing="ij"))
        x0, y1 = grid.west + cols[0] * grid.step, grid.north - rows[0] * grid.step
        out[name] = (place, (x0, y1 - rows.size * grid.step, x0 + cols.size * grid.step, y1))
    return out


def _read_scene(archive: Archive, scene: str, size: int) -> tuple[dict[str, np.ndarray], np.ndarray] | None:
    """Return visible and near infrared reflectance and water probability of a scene over site pixels; None where gone."""
    view, score = archive.view(scene), archive.score(scene)
    if not (view.exists() and score.exists()):
        return None
    with pq.ParquetFile(view) as file:
        has = set(file.schema_arrow.names)
        near = "nir" if "nir" in has else "nir08"
        names = [b for b in ("blue", "green", "red", near) if b in has]
        table = file.read(columns=[*names, "code"], use_threads=False)
    with pq.ParquetFile(score) as file:
        percent = file.read(columns=["probability"], use_threads=False).column("probability").to_numpy()
    if table.num_rows != size or percent.size != size:
        return None
    code = table.column("code").to_numpy()
    unseen = (
        (code != ViewCode.CLEAR) & (code != ViewCode.CLOUD) & (code != ViewCode.SHADOW) & (code != ViewCode.SNOW_ICE)
    )
    bands = {}
    for name in names:
        raw = table.column(name).to_numpy()
        values = raw.astype(np.float32) * np.float32(1e-4)
        values[(raw == -32768) | unseen] = np.nan
        bands["nir" if name == near else name] = values
    return bands, percent


def _paint(
    scene: str,
    bands: dict[str, np.ndarray],
    percent: np.ndarray,
    place: np.ndarray,
    bounds: tuple[float, float, float, float],
) -> Thumbnail:
    off = place < 0
    part = {}
    for name, values in bands.items():
        part[name] = values[place]
        part[name][off] = np.nan
    seen = percent[place]
    seen[off] = MAP_NOT_SEEN
    return paint_view(scene, part, seen, bounds)
