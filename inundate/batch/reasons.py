"""Why the next run would do what it will do, in words: ``inundate check --why``."""

from __future__ import annotations

from typing import Any

from inundate.batch.archive import Archive
from inundate.batch.pipeline import Pipeline

_EXTENTS = "observed extents, relations and series are made again"
_SERIES = "relations and series are made again"
DEPENDS = {
    "area.wetlands": f"scenes are read again where their pixels differ; {_EXTENTS}",
    "area.elevation": f"no scene is read or mapped again; {_EXTENTS}",
    "scenes.sensor": "scenes whose scaling or mask rules differ by it are read again, each named here",
    "labels.examples": "pixels under new labels are read, the classifier is trained again, scenes are mapped again",
    "loggers.registry": f"the stage record is built again; {_SERIES}",
    "loggers.barometer": f"the stage record is built again; {_SERIES}",
    "loggers.checks": f"the stage record is built again; {_SERIES}",
    "weather.daily": "the leaf calendar is fitted again where it rests on temperature; series are made again",
    "extent.decisions": _EXTENTS,
    "skill.walked_extents": "scores and report are made again",
}
SECTIONS = {
    "scenes": DEPENDS["scenes.sensor"],
    "leaves": "the leaf calendar is fitted again; scenes whose leaf share differs are mapped again",
    "classifier": "the classifier is trained again, scenes are mapped again",
    "extent": f"scenes are read again where registration or normalisation differ; {_EXTENTS}",
    "stage": f"the stage record is built again; {_SERIES}",
    "relation": _SERIES,
    "series": "series are made again",
    "skill": "scores and report are made again",
}
_ELSE = "what depends on it is done again"


def why_lines(pipeline: Pipeline, catalog: Any) -> list[str]:
    """Return, in words, what the next run would do and why."""
    from inundate.batch.ledger import Ledger
    from inundate.scenes import fingerprint as scene_mark

    archive = Archive(pipeline.out)
    if not (archive.folder / "ledger.sqlite").exists():
        return [f"{len(catalog.scenes)} scenes to read: nothing was done yet"]
    ledger = Ledger(archive.folder / "ledger.sqlite")
    try:
        lines = []
        for scene in catalog.scenes:
            unit = ledger.get("view", scene.scene_id)
            if unit is None:
                lines.append(f"scene {scene.scene_id}: new, to be read")
            elif unit.parts.get("scene") != scene_mark(scene):
                lines.append(f"scene {scene.scene_id}: its files, scaling or mask rules changed, to be read again")
            elif unit.state == "done" and not archive.view(scene.scene_id).exists():
                lines.append(f"scene {scene.scene_id}: its view is gone from the archive, to be read again")
            elif unit.state == "set_aside":
                lines.append(
                    f"scene {scene.scene_id}: stays set aside until its files change: {unit.detail.get('reason')}"
                )
        lines += _reference(pipeline, ledger, {s.scene_id: scene_mark(s) for s in catalog.scenes})
        lines += _changed_inputs(pipeline, ledger, [s.scene_id for s in catalog.scenes])
        return lines or ["nothing changed: a run would leave the delivery as it stands"]
    finally:
        ledger.close()


def _reference(pipeline: Pipeline, ledger: Any, marks: dict[str, str]) -> list[str]:
    from inundate.batch.registering import outdated

    unit = ledger.get("reference", "all")
    if unit is None or not pipeline.extent.co_registration:
        return []
    reason = outdated(unit, marks, len(marks))
    return [f"co-registration reference: {reason}; it is built again and every scene is read again"] if reason else []


def _turn(key: str, now: dict[str, str], old: dict[str, str]) -> str:
    return "changed" if key in now and key in old else "new" if key in now else "gone"


def _consequence(key: str) -> str:
    return DEPENDS["loggers.registry"] if key.startswith("logger file ") else DEPENDS.get(key, _ELSE)


def _changed_inputs(pipeline: Pipeline, ledger: Any, scene_ids: list[str]) -> list[str]:
    from inundate.batch.field import logger_marks
    from inundate.batch.run import ALL_PARTS
    from inundate.batch.work import code_mark, input_marks

    unit = ledger.get("delivery", "newest")
    if unit is None:
        return ["no delivery was finished yet"]
    listed = set(scene_ids)
    lines = [f"scene {s}: no longer in the catalog, left out" for s in unit.parts.get("scenes", {}) if s not in listed]
    now = {**input_marks(pipeline), **logger_marks(pipeline)}
    old = unit.parts.get("inputs", {})
    lines += [
        f"{key}: {_turn(key, now, old)}; {_consequence(key)}"
        for key in sorted({*now, *old})
        if now.get(key) != old.get(key)
    ]
    settings = pipeline.model_dump(mode="json", exclude={"file", "compute"})
    for section in sorted(settings):
        if settings[section] != unit.parts.get("settings", {}).get(section):
            lines.append(f"settings of [{section}]: changed; {SECTIONS.get(section, _ELSE)}")
    if unit.parts.get("code") != code_mark(*ALL_PARTS):
        lines.append("the program's own code changed; steps whose code differs are done again")
    return lines
