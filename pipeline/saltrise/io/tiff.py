"""TIFF directories as data: read one, write a chain of them (TIFF 6.0 and BigTIFF, little-endian).

Only what a Cloud-Optimized GeoTIFF needs; pixel data never pass through here.
"""

from __future__ import annotations

import struct
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

NEW_SUBFILE_TYPE, IMAGE_WIDTH, IMAGE_LENGTH = 254, 256, 257
TILE_OFFSETS, TILE_BYTE_COUNTS = 324, 325

CLASSIC_LIMIT = 4_000_000_000
"""Bytes a classic TIFF's 32-bit offsets reach, with room to spare."""

_SIZES = {1: 1, 2: 1, 3: 2, 4: 4, 5: 8, 6: 1, 7: 1, 8: 2, 9: 4, 10: 8, 11: 4, 12: 8, 16: 8}
_SHORT, _LONG, _LONG8 = 3, 4, 16
_NUMBERS = {_SHORT: "<u2", _LONG: "<u4", _LONG8: "<u8"}


@dataclass(frozen=True)
class Entry:
    """One tag of a directory: its number, field type, count of values and their bytes."""

    tag: int
    kind: int
    count: int
    data: bytes

    def numbers(self) -> NDArray[np.uint64]:
        """The values of a SHORT, LONG or LONG8 tag."""
        return np.frombuffer(self.data, dtype=_NUMBERS[self.kind]).astype(np.uint64)


@dataclass(frozen=True)
class _Format:
    """Sizes that differ between TIFF and BigTIFF."""

    big: bool

    @property
    def header(self) -> int:
        return 16 if self.big else 8

    @property
    def word(self) -> int:
        return 8 if self.big else 4

    def pack_word(self, value: int) -> bytes:
        return struct.pack("<Q" if self.big else "<I", value)

    def pack_count(self, value: int) -> bytes:
        return struct.pack("<Q" if self.big else "<H", value)

    def directory_size(self, entries: int) -> int:
        return (8 if self.big else 2) + entries * (20 if self.big else 12) + self.word


def number_entry(tag: int, values: NDArray[np.integer] | Sequence[int], *, big: bool) -> Entry:
    """A tag of whole numbers, LONG or in a BigTIFF LONG8."""
    kind = _LONG8 if big else _LONG
    array = np.asarray(values, dtype=_NUMBERS[kind])
    return Entry(tag, kind, array.size, array.tobytes())


def long_entry(tag: int, value: int) -> Entry:
    """A tag of one LONG."""
    return Entry(tag, _LONG, 1, struct.pack("<I", value))


def read_first_directory(content: bytes | memoryview) -> dict[int, Entry]:
    """Entries of a file's first directory, by tag.

    Raises
    ------
    ValueError
        Not a little-endian TIFF.
    """
    if bytes(content[:4]) == b"II*\0":
        form, (start,) = _Format(False), struct.unpack_from("<I", content, 4)
        (count,) = struct.unpack_from("<H", content, start)
        at, step = start + 2, 12
    elif bytes(content[:4]) == b"II+\0":
        form, (start,) = _Format(True), struct.unpack_from("<Q", content, 8)
        (count,) = struct.unpack_from("<Q", content, start)
        at, step = start + 8, 20
    else:
        raise ValueError(f"not a little-endian TIFF: begins with {bytes(content[:4])!r}")
    entries = (_read_entry(content, at + i * step, form) for i in range(count))
    return {entry.tag: entry for entry in entries}


def _read_entry(content: bytes | memoryview, at: int, form: _Format) -> Entry:
    tag, kind = struct.unpack_from("<HH", content, at)
    (count,) = struct.unpack_from("<Q" if form.big else "<I", content, at + 4)
    size = count * _SIZES[kind]
    value = at + 4 + form.word
    if size > form.word:
        (value,) = struct.unpack_from("<Q" if form.big else "<I", content, value)
    return Entry(tag, kind, count, bytes(content[value : value + size]))


def write_head(directories: Sequence[dict[int, Entry]], ghost: bytes, *, big: bool) -> bytes:
    """Header, a ghost area and a chain of directories with all their values, in this order.

    The length depends only on the tags and counts, not on the values, so a first call with zero
    offsets tells where pixel data may begin.
    """
    form = _Format(big)
    start = _even(form.header + len(ghost))
    head = b"II+\0\x08\0\0\0" if big else b"II*\0"
    head += form.pack_word(start)
    parts = [head + ghost.ljust(start - form.header, b"\0")]
    for position, directory in enumerate(directories):
        block = _directory(directory, start, form, last=position == len(directories) - 1)
        parts.append(block)
        start += len(block)
    return b"".join(parts)


def _even(value: int) -> int:
    # Directories and values begin on a word boundary (TIFF 6.0, section 2); 8 suits both formats.
    return (value + 7) // 8 * 8


def _directory(directory: dict[int, Entry], start: int, form: _Format, *, last: bool) -> bytes:
    entries = [directory[tag] for tag in sorted(directory)]
    room = _even(start + form.directory_size(len(entries)))
    table, values = [form.pack_count(len(entries))], []
    for entry in entries:
        table.append(struct.pack("<HH", entry.tag, entry.kind) + form.pack_word(entry.count))
        if len(entry.data) <= form.word:
            table.append(entry.data.ljust(form.word, b"\0"))
        else:
            table.append(form.pack_word(room))
            padded = entry.data.ljust(_even(len(entry.data)), b"\0")
            values.append(padded)
            room += len(padded)
    table.append(form.pack_word(0 if last else room))
    fixed = b"".join(table)
    fill = _even(start + len(fixed)) - start - len(fixed)
    return fixed + b"\0" * fill + b"".join(values)
