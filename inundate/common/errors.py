"""The error family of the package, and refusals of single items."""

from __future__ import annotations

from dataclasses import asdict, dataclass


class InundateError(Exception):
    """Root of every error that the package raises on purpose."""


class InputError(InundateError, ValueError):
    """Bad input: one clear sentence with place, value, rule and remedy. The command line exits with status 2."""


class BusyError(InundateError, RuntimeError):
    """Another run holds the archive."""


@dataclass(frozen=True, slots=True)
class Refusal:
    """One item that was set aside while the rest went on.

    Attributes
    ----------
    kind : str
        What was refused: ``scene``, ``wetland``, ``logger``, ``label``, ``check`` or ``row``.
    name : str
        Its id (scene_id, wetland_id, logger_id or row number).
    reason : str
        One clear sentence: place, value, rule, remedy.
    """

    kind: str
    name: str
    reason: str

    def as_dict(self) -> dict[str, str]:
        """Return the refusal as a plain dictionary, for JSON."""
        return asdict(self)
