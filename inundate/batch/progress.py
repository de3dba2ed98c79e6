"""Progress of long work: a live bar a step on a terminal, plain lines otherwise; always on stderr."""

from __future__ import annotations

import ctypes
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any, TextIO


def give_back() -> None:
    """Return freed memory to the system where its C library can (``malloc_trim`` of glibc); else it stays with the process.

    Without this a run holds what its hungriest step needed, to its end.
    """
    trim = getattr(ctypes.CDLL(None), "malloc_trim", None)
    if trim is not None:
        trim(0)


def _moved() -> tuple[int, int]:
    """Return bytes that this process has read and written so far; zeros where the system does not tell."""
    import psutil

    if not hasattr(psutil.Process, "io_counters"):
        return 0, 0
    count = psutil.Process().io_counters()
    read, written = (getattr(count, f"{k}_chars", getattr(count, f"{k}_bytes")) for k in ("read", "write"))
    return int(read), int(written)


class Progress:
    """Reports steps and keeps their account.

    Of each step: ``seconds``; ``items`` done; ``bytes_read`` and ``bytes_written`` by this process, as the system counts
    them; ``bytes`` that its items held (pixels decoded, scores left), wherever they were done, or else read and written.

    Parameters
    ----------
    stream : text stream, optional
        Where lines go; stderr by default.
    quiet : bool
        Keep the account only.
    """

    def __init__(self, stream: TextIO | None = None, *, quiet: bool = False) -> None:
        self.stream = stream or sys.stderr
        self.quiet = quiet
        self.account: dict[str, dict[str, Any]] = {}

    def say(self, text: str) -> None:
        """Print one line."""
        if not self.quiet:
            print(text, file=self.stream, flush=True)

    @contextmanager
    def step(self, name: str, total: int | None = None) -> Iterator[Any]:
        """Account one step; yields ``advance(n=1, nbytes=0)``."""
        start = time.perf_counter()
        blank = {"seconds": 0.0, "items": 0, "bytes": 0, "bytes_read": 0, "bytes_written": 0}
        entry = self.account.setdefault(name, blank)
        before = _moved()
        live = None if self.quiet or not self.stream.isatty() or not total else self._bar(name, total)
        last = [start]

        def advance(n: int = 1, nbytes: int = 0) -> None:
            entry["items"] += n
            entry["bytes"] += nbytes
            if live is not None:
                live[0].update(live[1], advance=n)
            elif total and not self.quiet and time.perf_counter() - last[0] > 5:
                last[0] = time.perf_counter()
                done = entry["items"]
                left = (last[0] - start) / max(done, 1) * (total - done)
                self.say(f"{name}: {done} of {total}, about {left:.0f} s left")

        try:
            yield advance
        finally:
            if live is not None:
                live[0].stop()
            give_back()
            now = _moved()
            entry["bytes_read"] += now[0] - before[0]
            entry["bytes_written"] += now[1] - before[1]
            if not total:
                entry["bytes"] = entry["bytes_read"] + entry["bytes_written"]
            entry["seconds"] = round(entry["seconds"] + time.perf_counter() - start, 3)
            count = f", {entry['items']} items" if entry["items"] else ""
            self.say(f"{name}: {entry['seconds']:.1f} s{count}")

    def _bar(self, name: str, total: int) -> tuple[Any, Any]:
        from rich.console import Console
        from rich.progress import BarColumn, MofNCompleteColumn, TextColumn, TimeRemainingColumn
        from rich.progress import Progress as RichProgress

        bar = RichProgress(
            TextColumn("{task.description:>18}"),
            BarColumn(),
            MofNCompleteColumn(),
            TimeRemainingColumn(),
            console=Console(file=self.stream),
            transient=True,
        )
        bar.start()
        return bar, bar.add_task(name, total=total)
