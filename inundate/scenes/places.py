"""Where files stand: local paths and remote addresses, their GDAL names, and retries of remote reads."""

from __future__ import annotations

import os
import time
from collections.abc import Callable
from pathlib import Path
from typing import TypeVar
from urllib.parse import unquote, urljoin, urlsplit

Result = TypeVar("Result")

REMOTE_SCHEMES = {"http": "/vsicurl/", "https": "/vsicurl/", "s3": "/vsis3/", "gs": "/vsigs/"}
_TRIES = 4
_FIRST_WAIT_S = 0.5


def is_remote(href: str) -> bool:
    """Tell whether a file is reached over a network."""
    return href.partition("://")[0] in REMOTE_SCHEMES


def resolve_href(href: str, base: str) -> str:
    """Return an absolute path or address.

    Parameters
    ----------
    href : str
        Absolute or relative path, ``file://`` address or remote address.
    base : str
        Path or address of the file that holds ``href``.
    """
    if is_remote(href):
        return href
    if href.startswith("file://"):
        return unquote(urlsplit(href).path)
    if is_remote(base):
        if base.startswith(("http://", "https://")):
            return urljoin(base, href)
        scheme, _, rest = base.partition("://")
        return f"{scheme}://{os.path.normpath(os.path.join(os.path.dirname(rest), href))}"  # noqa: PTH118, PTH120
    return os.path.normpath(os.path.join(os.path.dirname(base), href))  # noqa: PTH118, PTH120


def gdal_name(href: str) -> str:
    """Return the name under which GDAL opens a file: remote addresses through its virtual file systems."""
    scheme, found, rest = href.partition("://")
    if not found or scheme not in REMOTE_SCHEMES:
        return href
    prefix = REMOTE_SCHEMES[scheme]
    return f"{prefix}{href}" if prefix == "/vsicurl/" else f"{prefix}{rest}"


def read_text(href: str) -> str:
    """Read a small text file, local or remote (retried); raises OSError or UnicodeDecodeError."""
    if not is_remote(href):
        return Path(href).read_text(encoding="utf-8")
    return with_retries(lambda: _read_remote(href), href)


def _read_remote(href: str) -> str:
    if href.startswith(("http://", "https://")):
        from pystac.stac_io import DefaultStacIO

        try:
            return DefaultStacIO().read_text(href)
        except Exception as error:  # the reader wraps network faults in its own classes
            message = f"{href}: {error}"
            raise OSError(message) from error
    import fsspec

    with fsspec.open(href, "rt", encoding="utf-8") as file:
        return str(file.read())


def with_retries(
    action: Callable[[], Result], href: str, *, tries: int = _TRIES, wait_s: float = _FIRST_WAIT_S
) -> Result:
    """Run ``action``; where ``href`` is remote, run again after an OSError, waiting twice as long each time."""
    last = tries if is_remote(href) else 1
    for attempt in range(1, last + 1):
        try:
            return action()
        except OSError:
            if attempt == last:
                raise
            time.sleep(wait_s * 2 ** (attempt - 1))
    message = "unreachable"
    raise AssertionError(message)


def file_stamp(href: str) -> str:
    """Return size and modification time (ns) of a local file, ``absent`` where there is none, '' for remote ones."""
    if is_remote(href):
        return ""
    try:
        state = os.stat(href)  # noqa: PTH116
    except OSError:
        return "absent"
    return f"{state.st_size}:{state.st_mtime_ns}"
