"""Tiles on disk: one file a tile with everything it made, and one small record that says so.

The record's existence is the journal of an unfinished run: it is written after its tile's file,
names the run it belongs to and holds the file's checksum, so that nothing half-written or
foreign counts as done. Neither is forced to the disk: what a power cut takes is computed anew.
"""

from __future__ import annotations

import io
import zlib
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from saltrise.engine.survey import Range
from saltrise.errors import RunError
from saltrise.grid import Window
from saltrise.io import durable
from saltrise.io.blocks import block_places

_NUMBERS = "numbers"


@dataclass(frozen=True)
class ComputedTile:
    """A tile ready to be written.

    `counts` are numbers of cells; `ranges` what each input held; `sections` the encoded layers by
    `section` name; `numbers` its sums by name.
    """

    counts: dict[str, int]
    ranges: dict[str, Range]
    sections: dict[str, bytes]
    numbers: dict[str, NDArray[np.generic]]


@dataclass(frozen=True)
class Record:
    """One finished tile.

    `run` names the run it belongs to; `checksum` is the CRC-32 of its file; `sections` maps a
    part's name to its first byte and length, `blocks` that of each compressed block in it.
    """

    index: int
    run: str
    checksum: int
    window: tuple[int, int, int, int]
    counts: dict[str, int]
    ranges: dict[str, Range]
    sections: dict[str, tuple[int, int]]
    blocks: dict[str, list[tuple[int, int]]]


def section(layer: str, level: int) -> str:
    """Name of the part that holds a layer at an overview level (0: full resolution)."""
    return f"{layer}@{level}" if level else layer


def tile_file(work: Path, index: int) -> Path:
    """File of a tile."""
    return work / "tiles" / f"{index:06d}.bin"


def _record_file(work: Path, index: int) -> Path:
    return work / "records" / f"{index:06d}.json"


def write_tile(work: Path, run: str, index: int, window: Window, tile: ComputedTile) -> None:
    """Keep one tile: its file first, then the small record that says it is whole."""
    buffer = io.BytesIO()
    np.savez(buffer, **tile.numbers)  # type: ignore[arg-type]
    parts = tile.sections | {_NUMBERS: buffer.getvalue()}
    places, blocks, start, checksum = {}, {}, 0, 0
    for name, part in parts.items():
        places[name] = (start, len(part))
        checksum = zlib.crc32(part, checksum)
        if name != _NUMBERS:
            blocks[name] = [(start + int(a), int(n)) for a, n in block_places(part)]
        start += len(part)
    durable.write_whole(tile_file(work, index), parts.values(), sync=False)
    place = (window.row, window.col, window.height, window.width)
    record = Record(index, run, checksum, place, tile.counts, tile.ranges, places, blocks)
    ranges = {role: (r.valid, r.nodata, r.low, r.high) for role, r in tile.ranges.items()}
    content = vars(record) | {"ranges": ranges}
    durable.write_json(_record_file(work, index), content, indent=None, sync=False)


def read_record(work: Path, index: int) -> Record:
    """The record of a finished tile.

    Raises
    ------
    RunError
        It is unreadable.
    """
    raw = durable.read_json(_record_file(work, index))
    return Record(
        raw["index"],
        raw["run"],
        raw["checksum"],
        tuple(raw["window"]),
        raw["counts"],
        {role: Range(v, n, low, high, None) for role, (v, n, low, high) in raw["ranges"].items()},
        {name: (start, size) for name, (start, size) in raw["sections"].items()},
        {name: [(a, n) for a, n in found] for name, found in raw["blocks"].items()},
    )


def is_done(work: Path, run: str, index: int) -> bool:
    """Whether a tile of this very run is on disk, whole: its record, its file, every byte."""
    if not _record_file(work, index).exists():
        return False
    try:
        record = read_record(work, index)
        if record.run != run:
            return False
        return durable.checksum(tile_file(work, index)) == record.checksum
    except (RunError, KeyError, TypeError, ValueError):
        return False


def section_path(work: Path, record: Record, name: str) -> str:
    """A part of a tile's file as a path GDAL opens."""
    start, size = record.sections[name]
    return f"/vsisubfile/{start}_{size},{tile_file(work, record.index)}"


def read_numbers(work: Path, record: Record) -> dict[str, NDArray[np.generic]]:
    """The sums a tile kept, by name."""
    start, size = record.sections[_NUMBERS]
    part = durable.read_slice(tile_file(work, record.index), start, size)
    with np.load(io.BytesIO(part)) as archive:
        return dict(archive)
