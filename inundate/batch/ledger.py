"""The ledger: which unit of work was done from which inputs, in SQLite, and the lock of the archive."""

from __future__ import annotations

import fcntl
import hashlib
import json
import os
import socket
import sqlite3
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from inundate.common.errors import BusyError, InputError
from inundate.common.writing import plain

_SCHEMA = """
CREATE TABLE IF NOT EXISTS units (
    kind TEXT NOT NULL, name TEXT NOT NULL, fingerprint TEXT NOT NULL, parts TEXT NOT NULL,
    state TEXT NOT NULL, detail TEXT NOT NULL, PRIMARY KEY (kind, name)
);
CREATE TABLE IF NOT EXISTS skill_trend (month TEXT NOT NULL, measure TEXT NOT NULL, value REAL, PRIMARY KEY (month, measure));
"""


def fingerprint(parts: dict[str, Any]) -> str:
    """Return a short hash of named parts (any JSON-able values); the order of names does not matter."""
    text = json.dumps(plain(parts), sort_keys=True, ensure_ascii=False)
    return hashlib.blake2b(text.encode(), digest_size=16).hexdigest()


def file_mark(path: str | Path) -> str:
    """Return a hash of a file's bytes; for the small tables that people edit."""
    digest = hashlib.blake2b(digest_size=16)
    with Path(path).open("rb") as stream:
        while chunk := stream.read(1 << 20):
            digest.update(chunk)
    return digest.hexdigest()


@dataclass(frozen=True, slots=True)
class Unit:
    """One unit of work as the ledger holds it."""

    kind: str
    name: str
    fingerprint: str
    parts: dict[str, Any]
    state: str
    detail: dict[str, Any]


class Ledger:
    """Units of work by kind and name, each with the fingerprint of its inputs, settings and code version.

    States are ``done`` and ``set_aside`` (could not be done; the detail holds the reason).
    """

    def __init__(self, path: Path) -> None:
        path.parent.mkdir(parents=True, exist_ok=True)
        try:
            self._db = sqlite3.connect(path, timeout=30, check_same_thread=False)
            self._db.execute("PRAGMA journal_mode=WAL")
            self._db.execute("PRAGMA synchronous=NORMAL")
            self._db.executescript(_SCHEMA)
        except sqlite3.DatabaseError as err:
            message = f"{path}: the ledger cannot be opened ({err}); move it away and run again to rebuild it"
            raise InputError(message) from err

    def close(self) -> None:
        """Close the data base."""
        self._db.close()

    def get(self, kind: str, name: str) -> Unit | None:
        """Return a unit, or None where there is none."""
        row = self._db.execute(
            "SELECT kind, name, fingerprint, parts, state, detail FROM units WHERE kind=? AND name=?", (kind, name)
        ).fetchone()
        return None if row is None else Unit(row[0], row[1], row[2], json.loads(row[3]), row[4], json.loads(row[5]))

    def all(self, kind: str) -> dict[str, Unit]:
        """Return every unit of a kind by name."""
        rows = self._db.execute(
            "SELECT kind, name, fingerprint, parts, state, detail FROM units WHERE kind=? ORDER BY name", (kind,)
        )
        return {r[1]: Unit(r[0], r[1], r[2], json.loads(r[3]), r[4], json.loads(r[5])) for r in rows}

    def put(
        self, kind: str, name: str, parts: dict[str, Any], *, state: str = "done", detail: dict[str, Any] | None = None
    ) -> None:
        """Record that a unit was done (or set aside) from these parts; one transaction."""
        self.put_many([(kind, name, parts, state, detail or {})])

    def put_many(self, units: Iterable[tuple[str, str, dict[str, Any], str, dict[str, Any]]]) -> None:
        """Record several units in one transaction."""
        rows = [
            (k, n, fingerprint(p), json.dumps(plain(p), sort_keys=True), s, json.dumps(plain(d), sort_keys=True))
            for k, n, p, s, d in units
        ]
        with self._db:
            self._db.executemany("INSERT OR REPLACE INTO units VALUES (?,?,?,?,?,?)", rows)

    def drop(self, kind: str, names: Iterable[str]) -> None:
        """Forget units."""
        with self._db:
            self._db.executemany("DELETE FROM units WHERE kind=? AND name=?", [(kind, n) for n in names])

    def why(self, kind: str, name: str, parts: dict[str, Any], output: Path | None = None) -> str | None:
        """Say in words why a unit must be (re)done; None where it stands.

        Parameters
        ----------
        kind, name : str
        parts : dict
            The parts as they are now.
        output : Path, optional
            File that the unit leaves; when gone the unit is redone.
        """
        unit = self.get(kind, name)
        if unit is None:
            return "new"
        if unit.fingerprint != fingerprint(parts):
            now = plain(parts)
            changed = [k for k in sorted({*unit.parts, *parts}) if unit.parts.get(k) != now.get(k)]  # type: ignore[attr-defined]
            return "changed: " + ", ".join(changed)
        if unit.state == "done" and output is not None and not output.exists():
            return f"its file {output.name} is gone"
        return None

    def remember_skill(self, month: str, values: dict[str, float]) -> None:
        """Keep the month's headline scores for the trend."""
        with self._db:
            self._db.execute("DELETE FROM skill_trend WHERE month=?", (month,))
            self._db.executemany(
                "INSERT INTO skill_trend VALUES (?,?,?)", [(month, k, float(v)) for k, v in sorted(values.items())]
            )

    def skill_trend(self) -> list[tuple[str, str, float]]:
        """Return (month, measure, value), sorted."""
        return list(self._db.execute("SELECT month, measure, value FROM skill_trend ORDER BY month, measure"))


@contextmanager
def hold(archive: Path) -> Iterator[None]:
    """Hold the archive for one run.

    The lock is the operating system's (``flock``), so it ends with the process that holds it, however that ends; the
    file's text only names the holder.

    Raises
    ------
    BusyError
        When another run holds it; the message names process, machine and start.
    """
    archive.mkdir(parents=True, exist_ok=True)
    with (archive / "running.lock").open("a+") as stream:
        try:
            fcntl.flock(stream, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as err:
            stream.seek(0)
            holder = stream.read().strip() or "an unnamed run"
            message = f"{archive}: held by another run ({holder}); wait for it to end, or stop it, and run again"
            raise BusyError(message) from err
        stream.seek(0)
        stream.truncate()
        started = datetime.now(UTC).isoformat(timespec="seconds")
        stream.write(f"process {os.getpid()} on {socket.gethostname()} since {started}\n")
        stream.flush()
        try:
            yield
        finally:
            stream.seek(0)
            stream.truncate()
