"""The co-registration reference of an area: chosen once, kept in the archive, used for every scene."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from inundate.batch.layout import Layout
from inundate.batch.work import Inputs, Work
from inundate.common.grid import Window

if TYPE_CHECKING:
    from inundate.scenes import Scene


@dataclass(frozen=True, slots=True)
class Registrar:
    """The reference (None without co-registration), its context windows and its fingerprint."""

    reference: Any = None
    context: tuple[Window, ...] = ()
    mark: str = "none"


def make_registrar(work: Work, inputs: Inputs, layout: Layout, scenes: list[Scene]) -> Registrar:
    """Choose or load the reference."""
    _ = (work, inputs, layout, scenes)
    return Registrar()
