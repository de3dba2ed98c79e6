"""The co-registration reference of an area: chosen once, kept in the archive, used for every scene."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from inundate.common.grid import Window


@dataclass(frozen=True, slots=True)
class Registrar:
    """The reference (None without co-registration), its context windows and its fingerprint."""

    reference: Any = None
    context: tuple[Window, ...] = ()
    mark: str = "none"
