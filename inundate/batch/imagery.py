"""Steps from scenes to archived views: layout, reading, leaf calendar."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from inundate.batch.compute import run_units
from inundate.batch.layout import Layout, make_layout
from inundate.batch.reading import ReadJob, ReadPlan, read_scene
from inundate.batch.seasons import ScenePlace, update_greenness
from inundate.batch.work import Inputs, Work, code_mark, settings_mark, table_mark
from inundate.common.errors import InputError, Refusal
from inundate.common.grid import Grid
from inundate.common.site import Site, make_site
from inundate.common.writing import write_table, write_text

if TYPE_CHECKING:
    from inundate.leaves import LeafCalendar
    from inundate.scenes import Scene

LEAF_STEP = (
    0.1  # leaf share is given to the classifier in tenths, and a settled tenth moves only when it is off by more
)

BATCH_SHARE = 0.1  # of the memory setting, for blocks read together: they are sharpened and moved one by one beside it


@dataclass(frozen=True, slots=True)
class Settled:
    """Leaf share that each wetland is scored with in each scene, in tenths.

    Attributes
    ----------
    row : dict of scene_id to int
    tenths : ndarray of uint8, shape (scene, wetland)
    """

    row: dict[str, int]
    tenths: np.ndarray

    def share(self, scene_id: str) -> np.ndarray:
        """Return one scene's leaf shares, float32, shape (wetland,)."""
        return (self.tenths[self.row[scene_id]] / 10.0).astype(np.float32)


def array_mark(*arrays: np.ndarray) -> str:
    """Return a hash of arrays' bytes."""
    digest = hashlib.blake2b(digest_size=12)
    for array in arrays:
        digest.update(str(array.shape).encode())
        digest.update(np.ascontiguousarray(array).tobytes())
    return digest.hexdigest()


def lay_out(work: Work, inputs: Inputs) -> Layout:
    """Lay the wetlands out on the area's grid."""
    from inundate.scenes import area_grid

    with work.progress.step("layout"):
        grid = area_grid(
            inputs.catalog.scenes,
            inputs.profile,
            work.pipeline.area.crs,
            tuple(inputs.shapes.total_bounds),
            margin_m=10 * inputs.profile.step_m,
        )
        elevation = work.pipeline.input_files().get("area.elevation")
        layout = make_layout(inputs.shapes, grid, elevation)
        work.refuse(layout.refused)
        if elevation is not None and layout.cells is None:
            work.notes.append(f"{elevation}: the elevation model holds no value in any wetland; it is not used")
    return layout


@dataclass(frozen=True, slots=True)
class LabelPixels:
    """Labels on pixels and scenes: one row a labelled pixel (see pixels.match_scenes)."""

    table: pd.DataFrame
    grid: Grid

    def site(self, scene_id: str) -> Site | None:
        """Return the pixels under one scene's labels."""
        rows = self.table[self.table["scene_id"] == scene_id]
        if rows.empty:
            return None
        return make_site(self.grid, rows["grid_row"].to_numpy(), rows["grid_col"].to_numpy(), block=32)


def place_labels(work: Work, inputs: Inputs, scenes: list[Scene]) -> LabelPixels | None:
    """Put labels on pixels and scenes; None without labels."""
    from inundate.pixels import check_labels, label_pixels, match_scenes
    from inundate.scenes import area_grid

    if inputs.labels is None:
        return None
    bounds = tuple(inputs.labels.total_bounds)
    grid = area_grid(scenes, inputs.profile, work.pipeline.area.crs, bounds, margin_m=10 * inputs.profile.step_m)
    try:
        labels = _until_last(check_labels(inputs.labels), inputs, scenes)
        pixels, off = label_pixels(labels, grid)
        if pixels.empty:
            message = "labels: none lies inside the area of the scenes; check coordinates and reference system"
            raise InputError(message)
        times = pd.DataFrame({"scene_id": [s.scene_id for s in scenes], "datetime": [s.datetime for s in scenes]})
        matched, late = match_scenes(pixels, times)
    except InputError as err:
        message = f"{work.pipeline.input_files()['labels.examples']}: {err}"
        raise InputError(message) from err
    work.refuse([*off, *late])
    return LabelPixels(matched, grid)


def _until_last(labels: pd.DataFrame, inputs: Inputs, scenes: list[Scene]) -> pd.DataFrame:
    """Return checked labels without those of scenes after the delivered month; nothing is wrong with them."""
    known = {s.scene_id for s in scenes}
    later = [s for s in inputs.catalog.scenes if s.scene_id not in known]
    if not later:
        return labels
    first = min(pd.Timestamp(s.datetime).tz_localize(None) for s in later).normalize()
    out = labels["scene_id"].astype(str).isin([s.scene_id for s in later]) | (labels["date"] >= first)
    return labels[~out] if not out.all() else labels


def read_new(
    work: Work, inputs: Inputs, layout: Layout, labels: LabelPixels | None, scenes: list[Scene], registrar: Any
) -> list[ScenePlace]:
    """Read what is new or changed; return the scenes whose views stand in the archive, by time.

    ``registrar`` carries the co-registration reference (see :mod:`inundate.batch.registering`).
    """
    from inundate.scenes import fingerprint as scene_mark

    archive, ledger = work.archive, work.ledger
    plan = ReadPlan(
        inputs.profile,
        layout.site,
        layout.dry_ground(),
        archive.out,
        context=registrar.context,
        reference=registrar.reference,
        detail=registrar.detail,
        normalise=work.pipeline.extent.normalisation,
        shift_limit_px=work.pipeline.extent.shift_limit_px,
        batch_bytes=int(BATCH_SHARE * work.pipeline.compute.memory_mb * 1e6 / work.pipeline.compute.workers),
    )
    common = {
        "site": array_mark(
            layout.site.rows, layout.site.cols, np.array([layout.grid.west, layout.grid.north, layout.grid.step])
        ),
        "reference": registrar.mark,
        "normalisation": work.pipeline.extent.normalisation,
        "ground": array_mark(layout.dry_ground()),
        "code": code_mark("scenes", "batch/reading.py"),
    }
    jobs, parts_of = [], []
    for scene in scenes:
        mine = {**common, "scene": scene_mark(scene)}
        label_site = labels.site(scene.scene_id) if labels is not None else None
        sample = {
            **mine,
            "labels": ""
            if label_site is None
            else array_mark(label_site.rows, label_site.cols, np.array([label_site.grid.west, label_site.grid.north])),
        }
        stale = ledger.why("view", scene.scene_id, mine, archive.view(scene.scene_id))
        known = ledger.get("view", scene.scene_id)
        if stale is None and known is not None and known.state == "set_aside":
            continue  # tried again only when its files change
        bare = label_site is not None and ledger.why("sample", scene.scene_id, sample, archive.sample(scene.scene_id))
        if stale or bare:
            jobs.append(ReadJob(plan, scene, label_site if (bare or stale) else None, bool(stale)))
            parts_of.append((mine, sample))
    with work.progress.step("reading scenes", len(jobs)) as advance:
        for outcome in run_units(read_scene, jobs, work.pipeline.compute, work.progress.say):
            _record_reading(work, jobs[outcome.index], parts_of[outcome.index], outcome)
            advance(1, (outcome.result or {}).get("read_bytes", 0))
    return _standing(work, scenes)


def _record_reading(work: Work, job: ReadJob, parts: tuple[dict[str, Any], dict[str, Any]], outcome: Any) -> None:
    scene_id = job.scene.scene_id
    if outcome.error is not None:
        work.ledger.put("view", scene_id, parts[0], state="set_aside", detail={"reason": outcome.error})
        return
    units = []
    if job.want_view:
        units.append(("view", scene_id, parts[0], "done", outcome.result))
    if job.label_site is not None:
        units.append(("sample", scene_id, parts[1], "done", {}))
    work.ledger.put_many(units)


def _standing(work: Work, scenes: list[Scene]) -> list[ScenePlace]:
    units = work.ledger.all("view")
    places = []
    for scene in scenes:
        unit = units.get(scene.scene_id)
        if unit is None or unit.state != "done":
            reason = "was not read" if unit is None else unit.detail["reason"]
            work.refuse([Refusal("scene", scene.scene_id, reason)])
            continue
        sun = scene.sun_elevation_deg if np.isfinite(scene.sun_elevation_deg) else 40.0
        ground = tuple(np.nan if v is None else float(v) for v in unit.detail.get("ground") or ())
        places.append(ScenePlace(scene.scene_id, pd.Timestamp(scene.datetime), float(sun), unit.fingerprint, ground))
    if not places:
        message = f"{work.pipeline.input_files()['scenes.catalog']}: none of {len(scenes)} scenes could be read; the first says: {work.refused[-1].reason}"
        raise InputError(message)
    return sorted(places, key=lambda p: (p.datetime, p.scene_id))


def follow_leaves(work: Work, inputs: Inputs, layout: Layout, places: list[ScenePlace]) -> tuple[LeafCalendar, Settled]:
    """Fit the leaf calendar and settle each scene's leaf share.

    Returns
    -------
    calendar : LeafCalendar
    settled : Settled
    """
    from inundate.leaves import LeafCalendar

    archive, ledger = work.archive, work.ledger
    with work.progress.step("leaf states"):
        greenness = update_greenness(archive, layout, places)
        temperature = None
        if inputs.weather is not None and "air_temperature_c" in inputs.weather.columns:
            temperature = inputs.weather[["date", "air_temperature_c"]].dropna()
        path = archive.folder / "leaves.json"
        parts = {
            "greenness": table_mark(greenness[["wetland_id", "scene_id", "date", "ndvi", "weight"]]),
            "temperature": table_mark(temperature),
            "code": code_mark("leaves"),
            **settings_mark(work.pipeline, "leaves"),
        }
        if ledger.why("leaves", "calendar", parts, path) is None:
            calendar = LeafCalendar.from_json(path.read_text(encoding="utf-8"))
        else:
            seen = greenness[np.isfinite(greenness["ndvi"]) & (greenness["weight"] > 0.2)]
            calendar = LeafCalendar().fit(seen, temperature=temperature, fixed=work.pipeline.leaves.fixed())
            write_text(path, calendar.to_json())
            ledger.put("leaves", "calendar", parts)
        return calendar, _settle(work, layout, calendar, places)


def _settle(work: Work, layout: Layout, calendar: LeafCalendar, places: list[ScenePlace]) -> Settled:
    """Round each scene's leaf share to tenths; a tenth settled earlier stays unless it is off by more than a tenth.

    So a month of new views, which moves the calendar a little, does not make the whole archive be scored anew.
    """
    ids = layout.wetlands["wetland_id"].to_numpy()
    _, share = calendar.grid(ids, np.array([p.datetime.normalize() for p in places], "datetime64[ns]"))
    path = work.archive.table("leaf_tenths")
    old = pd.read_parquet(path).set_index("wetland_id").reindex(ids) if path.exists() else pd.DataFrame(index=ids)
    tenths = np.empty(share.shape, np.uint8)
    for i, place in enumerate(places):
        fresh = share[i].astype(np.float64)
        tenths[i] = (fresh / LEAF_STEP).round()
        if place.scene_id in old.columns:
            kept = old[place.scene_id].to_numpy(np.float64)
            stays = np.abs(kept / 10.0 - fresh) <= LEAF_STEP
            tenths[i, stays] = kept[stays]
    table = pd.DataFrame(tenths.T, columns=[p.scene_id for p in places])
    table.insert(0, "wetland_id", ids)
    write_table(path, table)
    return Settled({p.scene_id: i for i, p in enumerate(places)}, tenths)
