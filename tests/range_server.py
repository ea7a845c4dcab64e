"""A small HTTP server with range requests, for tests: python range_server.py FOLDER.

Runs in a process of its own, because GDAL holds the interpreter's lock while it opens an address.
It prints its port. While FOLDER/fail exists every GET is answered with 503; FOLDER/fail_next
holds how many of the next ones are; FOLDER/sent grows by one number a GET, the bytes sent.
"""

from __future__ import annotations

import re
import sys
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path

FOLDER = Path(sys.argv[1])


def refuses() -> bool:
    """Whether this request is to fail."""
    counter = FOLDER / "fail_next"
    left = int(counter.read_text()) if counter.exists() else 0
    if left > 0:
        counter.write_text(str(left - 1))
    return left > 0 or (FOLDER / "fail").exists()


class Handler(BaseHTTPRequestHandler):
    """Answers HEAD and GET."""

    def log_message(self, *_: object) -> None:
        """Say nothing."""

    def do_HEAD(self) -> None:
        """Headers only."""
        self._answer(body=False)

    def do_GET(self) -> None:
        """A file or a range of it."""
        self._answer(body=True)

    def _answer(self, body: bool) -> None:
        path = FOLDER / self.path.lstrip("/")
        if not path.is_file():
            self.send_error(404)
            return
        if body and refuses():
            self.send_error(503)
            return
        data = path.read_bytes()
        first, last, status = 0, len(data) - 1, 200
        asked = re.fullmatch(r"bytes=(\d+)-(\d*)", self.headers.get("Range", ""))
        if asked:
            first, status = int(asked[1]), 206
            last = min(int(asked[2] or last), last)
        self.send_response(status)
        self.send_header("Content-Length", str(last - first + 1))
        self.send_header("Accept-Ranges", "bytes")
        self.send_header("ETag", f'"{path.stat().st_mtime_ns}"')
        if status == 206:
            self.send_header("Content-Range", f"bytes {first}-{last}/{len(data)}")
        self.end_headers()
        if body:
            with (FOLDER / "sent").open("a") as file:
                file.write(f"{last - first + 1}\n")
            self.wfile.write(data[first : last + 1])


if __name__ == "__main__":
    # GDAL opens several connections at once; a short queue would refuse some.
    ThreadingHTTPServer.request_queue_size = 128
    server = ThreadingHTTPServer(("127.0.0.1", 0), Handler)
    sys.stdout.write(f"{server.server_port}\n")
    sys.stdout.flush()
    server.serve_forever()
