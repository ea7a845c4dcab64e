"""Files that are whole or absent: written under another name, synced, then renamed."""

from __future__ import annotations

import errno
import json
import os
import pickle
import shutil
import uuid
import zlib
from collections.abc import Callable, Iterable
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any, BinaryIO

from saltrise.errors import RunError

observers: list[Callable[[str], None]] = []
"""Called with a name after every durable step, so that tests can end a run at each of them."""


def step(name: str) -> None:
    """Say that a durable step is complete."""
    for observer in observers:
        observer(name)


def write_whole(path: Path, parts: Iterable[bytes], *, sync: bool = True) -> None:
    """Write a file so that it is there whole or not at all, also after a power cut.

    Without `sync` that holds for a killed process alone: after a power cut it may be there in
    part. For scratch whose checksum is looked at before it is used, and which may then be gone
    before it ever reaches the disk.

    Raises
    ------
    RunError
        The disk is full, the folder cannot be written or a quota is met; names the file.
    """
    # A name of its own: on a cluster two workers may hold the same tile for a moment.
    temporary = path.with_name(f"{path.name}.partial-{uuid.uuid4().hex[:12]}")
    try:
        with temporary.open("wb") as file:
            for part in parts:
                file.write(part)
            file.flush()
            if sync:
                os.fsync(file.fileno())
        temporary.replace(path)
    except OSError as error:
        temporary.unlink(missing_ok=True)
        raise RunError(explain(path, error)) from error
    step(path.name)


def append(path: Path, part: bytes) -> int:
    """Append to a scratch file that need not survive the run; return the bytes added.

    Raises
    ------
    RunError
        The disk is full or the folder cannot be written.
    """
    try:
        with path.open("ab") as file:
            return file.write(part)
    except OSError as error:
        raise RunError(explain(path, error)) from error


def explain(path: Path, error: OSError) -> str:
    """A message for a failed write: what, why, what to do."""
    if error.errno in (errno.ENOSPC, errno.EDQUOT, errno.EFBIG):
        return (
            f"{path}: no room left to write ({error.strerror}); free disk space and run the same "
            "command again"
        )
    return f"{path}: cannot be written: {error.strerror or error}"


def write_json(path: Path, content: Any, indent: int | None = 2, *, sync: bool = True) -> None:
    """Write JSON, keys in the order given, numbers in full."""
    text = json.dumps(content, indent=indent, ensure_ascii=False, allow_nan=False)
    write_whole(path, [text.encode(), b"\n"], sync=sync)


def read_json(path: Path) -> Any:
    """Read a JSON file this program wrote.

    Raises
    ------
    RunError
        The file is unreadable or no JSON.
    """
    try:
        return json.loads(path.read_text("utf-8"))
    except (OSError, ValueError) as error:
        raise RunError(f"{path}: cannot be read: {error}") from error


def read_slice(path: Path, start: int, size: int) -> bytes:
    """Read `size` bytes from byte `start` of a file this program wrote.

    Raises
    ------
    RunError
        The file is unreadable or shorter than that.
    """
    try:
        with path.open("rb") as file:
            return read_part(file, start, size)
    except OSError as error:
        raise RunError(f"{path}: cannot be read: {error.strerror or error}") from error


def read_part(file: BinaryIO, start: int, size: int) -> bytes:
    """Read `size` bytes from byte `start` of an open file.

    Raises
    ------
    RunError
        The file is shorter than that.
    """
    file.seek(start)
    part = file.read(size)
    if len(part) != size:
        raise RunError(f"{file.name}: ends before byte {start + size}; delete it and run again")
    return part


def checksum(path: Path) -> int:
    """CRC-32 of a file's bytes.

    Raises
    ------
    RunError
        The file is unreadable.
    """
    found = 0
    try:
        with path.open("rb") as file:
            while part := file.read(1 << 20):
                found = zlib.crc32(part, found)
    except OSError as error:
        raise RunError(f"{path}: cannot be read: {error.strerror or error}") from error
    return found


def write_pickle(path: Path, content: object) -> None:
    """Write an object for workers of this very run."""
    write_whole(path, [pickle.dumps(content)])


def read_pickle(path: Path) -> Any:
    """Read what `write_pickle` wrote; only ever from the run's own folder."""
    return pickle.loads(path.read_bytes())


def sync_file(path: Path) -> None:
    """Make a file that another library wrote durable."""
    descriptor = os.open(path, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def sync_folder(path: Path) -> None:
    """Make the renames inside a folder durable, where the system can."""
    if os.name == "posix":
        sync_file(path)


def remove_tree(path: Path) -> None:
    """Remove a folder and all in it; absent is fine."""
    if path.exists():
        # A large file takes as long to drop as to copy; several go side by side.
        with ThreadPoolExecutor(_HANDS) as pool:
            list(pool.map(Path.unlink, [file for file in path.rglob("*") if file.is_file()]))
        shutil.rmtree(path)


_HANDS = 4
