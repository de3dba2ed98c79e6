"""Skill and report of a delivery."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from inundate.batch.delivering import Findings
from inundate.batch.layout import Layout
from inundate.batch.work import Inputs, Work


def write_skill_and_report(
    work: Work, inputs: Inputs, layout: Layout, found: Findings, folder: Path, before: Path | None
) -> dict[str, Any]:
    """Score the delivery and write its page."""
    _ = (work, inputs, layout, found, folder, before)
    return {}
