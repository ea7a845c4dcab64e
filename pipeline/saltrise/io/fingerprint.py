"""What an input file was: its size and the hash of its bytes, or of the part of it that is read."""

from __future__ import annotations

import hashlib
import json
import urllib.error
import urllib.request
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import cache
from importlib import resources
from importlib.resources.abc import Traversable
from pathlib import Path

import rasterio
from rasterio.errors import RasterioError
from rasterio.windows import Window as RasterWindow

from saltrise.errors import BrokenInputError
from saltrise.io.sources import is_remote
from saltrise.io.vrt import Rect

WHOLE = "whole file"
PART = "size, header and the blocks read"

_HUGE = 1_000_000_000
"""Bytes from which on a file that is mostly not read is not hashed as a whole."""

_TIMEOUT_S = 20
_PART_BYTES = 1 << 20


@dataclass(frozen=True)
class Fingerprint:
    """A file's size [bytes], a SHA-256, and what that covers."""

    size: int
    sha256: str
    covers: str


def fingerprint(
    path: str,
    needed: Rect | None = None,
    share: float = 1.0,
    tick: Callable[[], None] = lambda: None,
) -> Fingerprint:
    """Fingerprint of an input.

    Parameters
    ----------
    path : str
        Local file or anything GDAL opens.
    needed : rectangle, optional
        Column, row, width and height of the cells that are read, for a raster.
    share : float
        Part of the raster's cells that `needed` holds.
    tick : callable
        Called between parts; what it raises ends the reading.

    Returns
    -------
    Fingerprint
        Of every byte; for a remote raster, or a huge one of which less than half is read, of its
        size, header and the decoded blocks that hold the needed cells.

    Raises
    ------
    BrokenInputError
        The file cannot be read.
    """
    if needed is not None and is_remote(path):
        return _of_blocks(path, _remote_size(path), needed, tick)
    try:
        size = Path(path).stat().st_size
        if needed is not None and size > _HUGE and share < 0.5:
            return _of_blocks(path, size, needed, tick)
        with Path(path).open("rb") as file:
            digest = hashlib.sha256()
            while part := file.read(_PART_BYTES):
                tick()
                digest.update(part)
            return Fingerprint(file.tell(), digest.hexdigest(), WHOLE)
    except OSError as error:
        raise BrokenInputError(f"{path}: cannot be read: {error.strerror or error}") from error


def _of_blocks(path: str, size: int, needed: Rect, tick: Callable[[], None]) -> Fingerprint:
    digest = hashlib.sha256(f"{size}\n".encode())
    try:
        with rasterio.open(path) as dataset:
            high, wide = dataset.block_shapes[0]
            header = (
                dataset.width,
                dataset.height,
                dataset.dtypes,
                dataset.nodatavals,
                dataset.crs.to_wkt() if dataset.crs else "",
                list(dataset.transform),
                (high, wide),
            )
            digest.update(json.dumps(header).encode())
            col, row, width, height = needed
            left, top = col // wide * wide, row // high * high
            right = min(-(-(col + width) // wide) * wide, dataset.width)
            bottom = min(-(-(row + height) // high) * high, dataset.height)
            for y in range(top, bottom, high):
                for x in range(left, right, wide):
                    tick()
                    window = RasterWindow(x, y, min(wide, right - x), min(high, bottom - y))
                    digest.update(dataset.read(1, window=window).tobytes())
    except RasterioError as error:
        reason = error.__cause__ or error.__context__ or error
        raise BrokenInputError(f"{path}: cannot be read: {reason}") from error
    return Fingerprint(size, digest.hexdigest(), PART)


def _remote_size(path: str) -> int:
    head = _head(path)
    return int(head.get("Content-Length", 0)) if head else 0


@cache
def code_print() -> str:
    """Short hash of this package's own source and data: a version number alone may lie."""
    root = resources.files("saltrise")
    digest = hashlib.sha256()
    for name, content in sorted(_sources(root, "")):
        digest.update(name.encode() + b"\0" + content)
    return digest.hexdigest()[:16]


def _sources(folder: Traversable, prefix: str) -> Iterator[tuple[str, bytes]]:
    for entry in folder.iterdir():
        name = f"{prefix}/{entry.name}"
        if entry.is_dir() and entry.name != "__pycache__":
            yield from _sources(entry, name)
        elif entry.name.endswith((".py", ".csv", ".toml")):
            yield name, entry.read_bytes()


def stamp(path: str) -> tuple[str, ...]:
    """What changes when a file changes, cheaply: its size and time, or a server's own marks.

    Only for comparison within and between runs; it enters no output. Empty where nothing can be
    told (and so nothing compared); `("gone",)` where a local file is not there.
    """
    if is_remote(path):
        head = _head(path)
        marks = ("ETag", "Last-Modified", "Content-Length")
        return tuple(f"{mark}={head[mark]}" for mark in marks if mark in head) if head else ()
    try:
        found = Path(path).stat()
    except OSError:
        return ("gone",)
    return str(found.st_size), str(found.st_mtime_ns)


def _head(path: str) -> dict[str, str] | None:
    url = path.removeprefix("/vsicurl/")
    if not url.startswith(("http://", "https://")):
        return None
    try:
        request = urllib.request.Request(url, method="HEAD")
        with urllib.request.urlopen(request, timeout=_TIMEOUT_S) as answer:
            return dict(answer.headers.items())
    except (urllib.error.URLError, OSError, ValueError):
        return None
