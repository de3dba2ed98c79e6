"""The ledger tells what must be redone and why; the lock lets one run in."""

import multiprocessing
import os
import signal

import pytest

from inundate.batch.ledger import Ledger, fingerprint, hold
from inundate.common.errors import BusyError, InputError


def test_why_names_what_changed(tmp_path):
    """New, changed and lost units are told apart; an unchanged one stands."""
    ledger = Ledger(tmp_path / "ledger.sqlite")
    parts = {"files": "a", "settings": {"x": 1.5}}
    out = tmp_path / "unit.parquet"
    assert ledger.why("read", "s1", parts) == "new"
    ledger.put("read", "s1", parts)
    out.write_text("x")
    assert ledger.why("read", "s1", parts, out) is None
    assert ledger.why("read", "s1", {"files": "b", "settings": {"x": 1.5}}, out) == "changed: files"
    out.unlink()
    assert ledger.why("read", "s1", parts, out) == "its file unit.parquet is gone"
    ledger.close()
    again = Ledger(tmp_path / "ledger.sqlite")
    assert again.why("read", "s1", parts) is None


def test_fingerprint_ignores_order_of_names():
    """Only names and values count."""
    assert fingerprint({"a": 1, "b": [1, 2]}) == fingerprint({"b": (1, 2), "a": 1})
    assert fingerprint({"a": 1}) != fingerprint({"a": 2})


def test_broken_ledger_says_what_to_do(tmp_path):
    """A file that is no data base is named, and left alone."""
    path = tmp_path / "ledger.sqlite"
    path.write_bytes(b"not a data base" * 100)
    with pytest.raises(InputError, match="move it away and run again"):
        Ledger(path)
    assert path.read_bytes().startswith(b"not a data base")


def _hold_and_wait(folder, ready):
    with hold(folder):
        ready.set()
        signal.pause()


def test_second_run_is_refused_and_a_dead_holder_frees_the_archive(tmp_path):
    """The refusal names the holder; after kill -9 the archive is free at once."""
    context = multiprocessing.get_context("spawn")
    ready = context.Event()
    holder = context.Process(target=_hold_and_wait, args=(tmp_path, ready))
    holder.start()
    assert ready.wait(60)
    with pytest.raises(BusyError, match=f"process {holder.pid} on "), hold(tmp_path):
        pass
    os.kill(holder.pid, signal.SIGKILL)
    holder.join()
    with hold(tmp_path):
        pass
