"""Skill and report of a delivery: scored and written by a run, shown and written again from what stands."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pandas as pd

from inundate.batch.archive import Archive
from inundate.batch.delivering import Findings
from inundate.batch.layout import Layout
from inundate.batch.pipeline import load_pipeline
from inundate.batch.progress import Progress
from inundate.batch.report_sources import Extras, extras_of, keep_extras, load_extras, load_site, paint_wetlands, until
from inundate.batch.work import Inputs, Work, open_work, software_versions
from inundate.common.errors import InputError
from inundate.common.site import Site
from inundate.common.writing import plain, write_json

_TABLES = (
    ("daily", "extent_daily"),
    ("observed", "extent_observed"),
    ("stage", "stage_daily"),
    ("relations", "relations"),
    ("relation_table", "relation_table"),
    ("hydroperiod", "hydroperiod"),
    ("size_classes", "size_classes"),
    ("changes", "changes"),
)


def write_skill_and_report(
    work: Work, inputs: Inputs, layout: Layout, found: Findings, folder: Path, before: Path | None
) -> dict[str, Any]:
    """Score the delivery and write its page.

    Parameters
    ----------
    work : Work
    inputs : Inputs
    layout : Layout
    found : Findings
    folder : Path
        Where the delivery is being written; holds the product tables already.
    before : Path or None
        The delivery that changes are told against.

    Returns
    -------
    dict of str to float
        The headline scores.
    """
    from inundate.skill import headline, score_all, unusual

    _ = before  # what changed is told by the changes table in ``folder``
    extras = extras_of(work, found)
    with work.progress.step("skill"):
        skill = plain(score_all(_skill_inputs(work, inputs, found, extras)))
        write_json(folder / "skill.json", skill)
        scores = headline(skill)  # type: ignore[arg-type]
        work.ledger.remember_skill(found.month, scores)
        work.notes.extend(unusual(scores, work.ledger.skill_trend(), found.month))
    with work.progress.step("report"):
        keep_extras(work.archive, extras, layout)
        run = {
            "month": found.month,
            "last_day": found.last,
            "notes": list(dict.fromkeys(work.notes)),
            "refused": [r.as_dict() for r in work.refused],
            "settings": work.pipeline.model_dump(mode="json", exclude={"file"}),
            "versions": software_versions(),
            "inputs": inputs.marks,
        }
        _write_pages(work, folder, run, extras, layout.site)
    return scores


def _mapped_water(work: Work) -> float | None:
    """Return the mean share of water in the maps, weighed by pixels seen."""
    units = [u.detail for u in work.ledger.all("score").values() if u.detail.get("water_share") is not None]
    seen = sum(u["seen"] for u in units)
    return sum(u["seen"] * u["water_share"] for u in units) / seen if seen else None


def _skill_inputs(work: Work, inputs: Inputs, found: Findings, extras: Extras) -> Any:
    from inundate.skill import SkillInputs

    card = work.archive.models / "water.json"
    return SkillInputs(
        wetlands=found.wetlands,
        observed=found.observed,
        daily=found.series.daily,
        stage=None if found.stage is None else found.stage.daily,
        relations=found.relations.relations,
        choices=found.relations.choices,
        heldout=extras["heldout"],
        walked=inputs.walked,
        card=json.loads(card.read_text(encoding="utf-8")) if card.exists() else {},
        probability_sample=work.pipeline.skill.labels_are_probability_sample,
        mapped_water_share=_mapped_water(work),
    )


def _write_pages(
    work: Work, folder: Path, run: dict[str, Any], extras: Extras, site: Site | None, figures: bool = False
) -> list[Path]:
    """Write page and methods sheet (and figures) of the delivery in ``folder``; the one way for a run and for a report."""
    from inundate.products.report import write_figures, write_methods, write_report

    tables = _report_tables(work, folder, run, extras, site)
    written = [*write_report(folder, tables), write_methods(folder, tables)]
    if figures:
        written += write_figures(folder / "figures", tables)
    return written


def _report_tables(work: Work, folder: Path, run: dict[str, Any], extras: Extras, site: Site | None) -> Any:
    import geopandas as gpd

    from inundate.products.report import ReportTables
    from inundate.skill import headline, unusual

    kept = ("month", "last_day", "notes", "refused", "settings", "versions", "inputs")
    facts: dict[str, Any] = {k: v for k, v in plain(run).items() if k in kept}  # type: ignore[attr-defined]
    facts["area"] = (facts.get("settings") or {}).get("area", {}).get("name", "")
    month = facts["month"]
    shapes = gpd.read_file(folder / "wetlands.gpkg")
    tables = {key: pd.read_parquet(folder / f"{file}.parquet") for key, file in _TABLES}
    skill_file = folder / "skill.json"
    skill = json.loads(skill_file.read_text(encoding="utf-8")) if skill_file.exists() else {}
    trend = [t for t in work.ledger.skill_trend() if t[0] <= month]
    pictures = {} if site is None else paint_wetlands(work.archive, site, shapes, tables["observed"])
    return ReportTables(
        run=facts,
        shapes=shapes,
        skill=skill,
        trend=trend,
        warnings=unusual(headline(skill), trend, month) if skill else [],
        thumbnails=pictures,
        **tables,
        **until(extras, pd.Timestamp(facts["last_day"])),  # type: ignore[arg-type]
    )


def _standing(archive: Archive, month: str | None) -> Path:
    """Return the folder of a delivery.

    Raises
    ------
    InputError
        When there is none.
    """
    root = archive.out / "products"
    months = sorted(p.name for p in root.glob("????-??") if (p / "run.json").exists())
    if not months:
        message = f"{root}: no delivery yet; run `inundate run` with this pipeline file first"
        raise InputError(message)
    if month is None:
        return root / months[-1]
    if month not in months:
        message = f"--month is {month!r}, which {root} does not hold; choose one of {', '.join(months[-12:])}, or run `inundate run` for it"
        raise InputError(message)
    return root / month


def show_skill(pipeline: str | Path, month: str | None, progress: Progress) -> dict[str, Any]:
    """Return the skill of a standing delivery.

    Parameters
    ----------
    pipeline : str or Path
        Pipeline file.
    month : str or None
        ``YYYY-MM``; None: the newest delivery.
    progress : Progress

    Returns
    -------
    dict
        month, headline, unusual (sentences), skill (all of skill.json).

    Raises
    ------
    InputError
        When there is no such delivery, or it holds no scores.
    """
    from inundate.batch.ledger import Ledger
    from inundate.skill import headline, unusual

    loaded = load_pipeline(pipeline)
    archive = Archive(loaded.out)
    folder = _standing(archive, month)
    file = folder / "skill.json"
    if not file.exists():
        message = f"{folder}: holds no skill.json; run `inundate run` again to score this delivery"
        raise InputError(message)
    skill = json.loads(file.read_text(encoding="utf-8"))
    ledger = Ledger(archive.folder / "ledger.sqlite")
    try:
        trend = ledger.skill_trend()
    finally:
        ledger.close()
    scores = headline(skill)
    progress.say(f"skill of {folder}")
    return {"month": folder.name, "headline": scores, "unusual": unusual(scores, trend, folder.name), "skill": skill}


def skill_lines(result: dict[str, Any]) -> list[str]:
    """Return what ``inundate skill`` prints."""
    lines = [f"delivery {result['month']}"]
    lines += [f"  {name}: {value:.3f}" for name, value in sorted(result["headline"].items())]
    wet = result["skill"].get("wet_dry")
    if wet:
        lines.append("scenes against loggers, by leaf state (days, agreement, missed wet, false wet):")
        for state, row in wet["by_leaf_state"].items():
            told = (_percent(row.get(k)) for k in ("accuracy", "omission", "commission"))
            lines.append(f"  {state.replace('_', '-'):<10}{row.get('n', 0):>6}  {'  '.join(told)}")
    lines += [f"unusual: {text}" for text in result["unusual"]]
    return lines


def _percent(value: float | None) -> str:
    return "     -" if value is None else f"{100 * value:5.1f}%"


def write_report_again(pipeline: str | Path, month: str | None, figures: bool, progress: Progress) -> dict[str, Any]:
    """Write page, methods sheet and, if wanted, figures of a standing delivery from its products and the archive.

    Parameters
    ----------
    pipeline : str or Path
        Pipeline file.
    month : str or None
        ``YYYY-MM``; None: the newest delivery.
    figures : bool
        Also write static figures into ``figures/``.
    progress : Progress

    Returns
    -------
    dict
        month, report (path), written (paths).

    Raises
    ------
    InputError
        When there is no such delivery, or a product of it is gone.
    """
    loaded = load_pipeline(pipeline)
    folder = _standing(Archive(loaded.out), month)
    gone = [f for _, f in _TABLES if not (folder / f"{f}.parquet").exists()]
    if gone or not (folder / "wetlands.gpkg").exists():
        name = f"{gone[0]}.parquet" if gone else "wetlands.gpkg"
        message = f"{folder}: {name} is gone; run `inundate run --month {folder.name}` to make the delivery anew"
        raise InputError(message)
    with open_work(loaded, progress) as work, progress.step("report"):
        run = json.loads((folder / "run.json").read_text(encoding="utf-8"))
        written = _write_pages(work, folder, run, load_extras(work.archive), load_site(work.archive), figures)
    return {"month": folder.name, "report": str(written[0]), "written": [str(p) for p in written]}


def report_lines(result: dict[str, Any]) -> list[str]:
    """Return what ``inundate report`` prints."""
    more = len(result["written"]) - 1
    return [f"report of {result['month']}: {result['report']}", f"{more} more files beside it" if more else ""]
