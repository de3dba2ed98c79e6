"""A web server on loopback for tests, in a process of its own: answers ranges, and fails the first try of some files.

Run: ``python faulty_server.py FOLDER TRIES NAME...``: the first TRIES requests for each path that ends in one of the names get
503. Prints the port, then one line a request: status and path.
"""

from __future__ import annotations

import os
import sys
from functools import partial
from http.server import SimpleHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path


class Handler(SimpleHTTPRequestHandler):
    """Serves files and ranges of them."""

    protocol_version = "HTTP/1.1"
    tries: int = 0
    names: tuple[str, ...] = ()
    failed: dict[str, int] = {}  # noqa: RUF012 - one table for the whole server

    def log_message(self, *words: object) -> None:
        """Keep quiet; see ``_answer``."""

    def do_HEAD(self) -> None:
        self._answer(body=False)

    def do_GET(self) -> None:
        self._answer(body=True)

    def _answer(self, *, body: bool) -> None:
        file = Path(self.translate_path(self.path))
        seen = self.failed.get(self.path, 0)
        if self.path.endswith(self.names or ("\0",)) and seen < self.tries:
            self.failed[self.path] = seen + 1
            self._send(503, b"", body)
        elif not file.is_file():
            self._send(404, b"", body)
        else:
            data, wanted = file.read_bytes(), self.headers.get("Range", "")
            if wanted.startswith("bytes="):
                first, _, last = wanted.removeprefix("bytes=").partition("-")
                low, high = int(first), min(int(last or len(data)), len(data) - 1)
                self._send(206, data[low : high + 1], body, f"bytes {low}-{high}/{len(data)}")
            else:
                self._send(200, data, body)

    def _send(self, status: int, data: bytes, body: bool, span: str = "") -> None:
        os.write(1, f"{status} {self.path}\n".encode())  # in one piece: threads write at the same time
        self.send_response(status)
        self.send_header("Accept-Ranges", "bytes")
        if span:
            self.send_header("Content-Range", span)
        self.send_header("Content-Length", str(len(data)))
        self.end_headers()
        if body:
            self.wfile.write(data)


if __name__ == "__main__":
    Handler.tries, Handler.names = int(sys.argv[2]), tuple(sys.argv[3:])
    server = ThreadingHTTPServer(("127.0.0.1", 0), partial(Handler, directory=sys.argv[1]))
    print(server.server_port, flush=True)
    server.serve_forever()
