"""The main job: everything new since last time, through a month's products."""

from __future__ import annotations

import json
import re
from pathlib import Path
from typing import Any

import pandas as pd

from inundate import __version__
from inundate.batch.delivering import Findings, conclude, keep_archive_tables, write_tables
from inundate.batch.field import stage_record
from inundate.batch.imagery import follow_leaves, lay_out, place_labels, read_new
from inundate.batch.observing import map_new, observe
from inundate.batch.pipeline import Pipeline, load_pipeline
from inundate.batch.progress import Progress
from inundate.batch.registering import Registrar, make_registrar
from inundate.batch.training import train
from inundate.batch.work import Inputs, Work, code_mark, open_inputs, open_work
from inundate.common.errors import InputError
from inundate.common.writing import plain, replacing_folder, write_json

ALL_PARTS = ("scenes", "leaves", "pixels", "extent", "stage", "relation", "series", "skill", "products", "batch")


def run_month(file: str | Path, *, month: str | None, progress: Progress) -> dict[str, Any]:
    """Run the pipeline through a month's products.

    Parameters
    ----------
    file : str or Path
        Pipeline file.
    month : str or None
        ``YYYY-MM``; scenes and readings after it are left out. None: the last month of the data.
    progress : Progress

    Returns
    -------
    dict
        month, products (folder), done (what was done), refused, notes, headline skill.

    Raises
    ------
    InputError
        On wrong input; products stay as they were.
    """
    if month is not None and not re.fullmatch(r"\d{4}-(0[1-9]|1[0-2])", month):
        message = f"--month is {month!r}; write a month as YYYY-MM, for example 2033-06"
        raise InputError(message)
    pipeline = load_pipeline(file)
    with open_work(pipeline, progress) as work:
        inputs = open_inputs(work)
        parts = delivery_parts(pipeline, inputs, month)
        known = work.ledger.get("delivery", month or "newest")
        standing = known is not None and work.archive.product(known.detail["month"]) / "run.json"
        if known is not None and standing and work.ledger.why("delivery", month or "newest", parts, standing) is None:
            progress.say("nothing new: the delivery stands as it is")
            return {**known.detail["summary"], "done": "nothing new"}
        found, layout = _findings(work, inputs, month)
        summary = _deliver(work, inputs, layout, found)
        work.ledger.put("delivery", month or "newest", parts, detail={"month": found.month, "summary": summary})
        return {**summary, "done": "delivered"}


def train_only(file: str | Path, *, progress: Progress) -> dict[str, Any]:
    """Read what is new and train the classifier; no products."""
    pipeline = load_pipeline(file)
    with open_work(pipeline, progress) as work:
        inputs = open_inputs(work)
        layout = lay_out(work, inputs)
        scenes = list(inputs.catalog.scenes)
        labels = place_labels(work, inputs, scenes)
        registrar = make_registrar(work, inputs, layout, scenes)
        places = read_new(work, inputs, layout, labels, scenes, registrar)
        leaves = follow_leaves(work, inputs, layout, places)
        trained = train(work, layout, labels, places, leaves)
        card = json.loads((work.archive.models / "water.json").read_text(encoding="utf-8"))
        return {
            "model": str(work.archive.models),
            "notes": trained.notes,
            "error_rates": card.get("error_rates"),
            "refused": [r.as_dict() for r in work.refused],
        }


def delivery_parts(pipeline: Pipeline, inputs: Inputs, month: str | None) -> dict[str, Any]:
    """Return all that a delivery depends on, as the ledger compares it."""
    from inundate.batch.field import logger_marks
    from inundate.scenes import fingerprint as scene_mark

    return {
        "scenes": {s.scene_id: scene_mark(s) for s in _until(inputs, month)},
        "inputs": {**inputs.marks, **logger_marks(pipeline)},
        "settings": pipeline.model_dump(mode="json", exclude={"file", "compute"}),
        "code": code_mark(*ALL_PARTS),
    }


def _until(inputs: Inputs, month: str | None) -> list[Any]:
    """Return the scenes up to the end of the month."""
    scenes = list(inputs.catalog.scenes)
    if month is None:
        return scenes
    end = pd.Period(month, "M").end_time
    kept = [s for s in scenes if pd.Timestamp(s.datetime) <= end]
    if not kept:
        first = min(pd.Timestamp(s.datetime) for s in scenes)
        message = f"--month is {month}, before the first scene ({first:%Y-%m-%d}); choose a later month"
        raise InputError(message)
    return kept


def _findings(work: Work, inputs: Inputs, month: str | None) -> tuple[Findings, Any]:
    scenes = _until(inputs, month)
    layout = lay_out(work, inputs)
    stage = stage_record(work, inputs, layout, month)
    labels = place_labels(work, inputs, scenes)
    registrar: Registrar = make_registrar(work, inputs, layout, scenes)
    places = read_new(work, inputs, layout, labels, scenes, registrar)
    leaves = follow_leaves(work, inputs, layout, places)
    trained = train(work, layout, labels, places, leaves)
    map_new(work, layout, places, leaves, trained)
    observed = observe(work, inputs, layout, places, leaves[0])
    return conclude(work, inputs, layout, leaves[0], (observed, stage), month), layout


def _deliver(work: Work, inputs: Inputs, layout: Any, found: Findings) -> dict[str, Any]:
    """Write the delivery aside, then give it its name."""
    from inundate.batch.reporting import write_skill_and_report

    target = work.archive.product(found.month)
    before = previous_delivery(work, found.month)
    with replacing_folder(target) as folder:
        with work.progress.step("products"):
            counts = write_tables(work, inputs, layout, found, folder, before)
        headline = write_skill_and_report(work, inputs, layout, found, folder, before)
        summary: dict[str, Any] = plain(  # type: ignore[assignment]
            {
                "month": found.month,
                "products": str(target),
                **counts,
                "headline": headline,
                "notes": list(dict.fromkeys(work.notes)),
                "refused": [r.as_dict() for r in work.refused],
            }
        )
        _write_run(work, inputs, found, folder, summary)
    with work.progress.step("archive tables"):
        keep_archive_tables(work, found)
    return summary


def previous_delivery(work: Work, month: str) -> Path | None:
    """Return the folder that changes are told against: this month's standing delivery, else the newest earlier one."""
    root = work.archive.out / "products"
    months = sorted(p.name for p in root.glob("????-??") if (p / "extent_daily.parquet").exists() and p.name <= month)
    return root / months[-1] if months else None


def _write_run(work: Work, inputs: Inputs, found: Findings, folder: Path, summary: dict[str, Any]) -> None:
    import platform
    from datetime import UTC, datetime
    from importlib.metadata import version

    libraries = (
        "numpy",
        "pandas",
        "scipy",
        "scikit-learn",
        "lightgbm",
        "rasterio",
        "numba",
        "xarray",
        "dask",
        "geopandas",
    )
    write_json(
        folder / "run.json",
        {
            **summary,
            "written": datetime.now(UTC).isoformat(timespec="seconds"),
            "versions": {
                "inundate": __version__,
                "python": platform.python_version(),
                **{n: version(n) for n in libraries},
            },
            "settings": work.pipeline.model_dump(mode="json", exclude={"file"}),
            "inputs": inputs.marks,
            "scenes": {"catalog": len(inputs.catalog.scenes), "views": int(found.observed["scene_id"].nunique())},
            "steps": work.progress.account,
            "last_day": found.last,
        },
    )


def run_lines(result: dict[str, Any]) -> list[str]:
    """Return what ``inundate run`` and ``inundate train`` print."""
    lines = []
    if "products" in result:
        lines.append(f"delivery {result['month']}: {result['products']} ({result['done']})")
        for key, value in sorted((result.get("headline") or {}).items()):
            lines.append(f"  {key}: {value:.3g}" if isinstance(value, float) else f"  {key}: {value}")
    else:
        lines.append(f"classifier: {result['model']}")
        for row in result.get("error_rates") or []:
            lines.append(
                "  " + ", ".join(f"{k} {v:.3g}" if isinstance(v, float) else f"{k} {v}" for k, v in row.items())
            )
    lines += [f"note: {note}" for note in result.get("notes", [])]
    return lines
