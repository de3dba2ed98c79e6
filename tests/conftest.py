"""Fixtures that several parts' tests share."""

from pathlib import Path

import pytest


@pytest.fixture(scope="session")
def small_reserve(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Folder of a small Sallow Reserve (seed 7): ``inputs/`` and ``truth/``; made once a session, to be read only."""
    from inundate.reserve import make_reserve

    folder = tmp_path_factory.mktemp("reserve")
    make_reserve(folder, seed=7, size="small")
    return folder
