"""The main job: everything new since last time, through a month's products."""

from __future__ import annotations

import json
import re
from pathlib import Path
from typing import Any

import pandas as pd

from inundate.batch.delivering import Findings, conclude, keep_archive_tables, write_tables
from inundate.batch.field import stage_record
from inundate.batch.imagery import follow_leaves, lay_out, place_labels, read_new
from inundate.batch.ledger import fingerprint
from inundate.batch.observing import map_new, observe
from inundate.batch.pipeline import Pipeline, load_pipeline
from inundate.batch.progress import Progress
from inundate.batch.registering import Registrar, make_registrar
from inundate.batch.training import train
from inundate.batch.work import Inputs, Work, code_mark, open_inputs, open_work, software_versions
from inundate.common.errors import InputError
from inundate.common.writing import plain, replacing_folder, write_json

SUMMARY = ("month", "products", "wetlands", "days", "changed_days", "headline", "notes", "refused")
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
        standing = standing_delivery(work, parts, month)
        if standing is not None:
            progress.say("nothing new: the delivery stands as it is")
            return {**standing, "done": "nothing new"}
        found, layout = _findings(work, inputs, month)
        summary = _deliver(work, inputs, layout, found, fingerprint(parts))
        work.ledger.put("delivery", month or "newest", parts, detail={"month": found.month, "summary": summary})
        return {**summary, "done": "delivered"}


def standing_delivery(work: Work, parts: dict[str, Any], month: str | None) -> dict[str, Any] | None:
    """Return the summary of the delivery that stands for exactly these parts; None where it is to be made.

    Each delivery carries the fingerprint of what it was made from. One that took its name just before its run was
    killed, so that the ledger does not know it yet, is found by that and entered, never made a second time: its table
    of changes would else be told against itself.
    """
    name, mark = month or "newest", fingerprint(parts)
    known = work.ledger.get("delivery", name)
    months = [month] if month is not None else _delivered_months(work)[-1:]
    months += [known.detail["month"]] if known is not None else []
    for one in dict.fromkeys(months):
        file = work.archive.product(str(one)) / "run.json"
        told = json.loads(file.read_text(encoding="utf-8")) if file.exists() else {}
        if told.get("made_from") == mark:
            summary = {k: v for k, v in told.items() if k in SUMMARY}
            if known is None or known.fingerprint != mark:
                work.ledger.put("delivery", name, parts, detail={"month": one, "summary": summary})
            return {**summary, "products": str(work.archive.product(str(one)))}
    return None


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
        "month": month or "newest",
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
    return conclude(work, inputs, layout, leaves[0], (observed, stage), month, trained.lasting), layout


def _deliver(work: Work, inputs: Inputs, layout: Any, found: Findings, made_from: str) -> dict[str, Any]:
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
        with work.progress.step("archive tables"):
            keep_archive_tables(work, found)
        _write_run(work, inputs, found, folder, {**summary, "made_from": made_from})
    return summary


def previous_delivery(work: Work, month: str) -> Path | None:
    """Return the folder that changes are told against: this month's standing delivery, else the newest earlier one."""
    months = [m for m in _delivered_months(work) if m <= month]
    return work.archive.product(months[-1]) if months else None


def _delivered_months(work: Work) -> list[str]:
    root = work.archive.out / "products"
    return sorted(p.name for p in root.glob("????-??") if (p / "extent_daily.parquet").exists())


def _write_run(work: Work, inputs: Inputs, found: Findings, folder: Path, summary: dict[str, Any]) -> None:
    from datetime import UTC, datetime

    write_json(
        folder / "run.json",
        {
            **summary,
            "written": datetime.now(UTC).isoformat(timespec="seconds"),
            "versions": software_versions(),
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
