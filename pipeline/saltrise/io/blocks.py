"""A COG assembled by copying blocks that are compressed already: nothing is encoded twice."""

from __future__ import annotations

import struct
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

import numpy as np
from numpy.typing import NDArray
from rasterio.crs import CRS
from rasterio.io import MemoryFile
from rasterio.transform import Affine

from saltrise.grid import Grid
from saltrise.io import durable, tiff
from saltrise.io.encode import creation_options
from saltrise.layers import Layer

_LEADER = struct.Struct("<I")
_FRAME = 8
"""Bytes around each block: its size before it, its last four bytes again after it."""

_GHOST_LINES = (
    b"LAYOUT=IFDS_BEFORE_DATA\n"
    b"BLOCK_ORDER=ROW_MAJOR\n"
    b"BLOCK_LEADER=SIZE_AS_UINT4\n"
    b"BLOCK_TRAILER=LAST_4_BYTES_REPEATED\n"
    b"KNOWN_INCOMPATIBLE_EDITION=NO\n "
)
_GHOST = b"GDAL_STRUCTURAL_METADATA_SIZE=%06d bytes\n" % len(_GHOST_LINES) + _GHOST_LINES

# Tags an overview shares with its layer: how pixels are stored, palette and nodata, not place.
_OVERVIEW_TAGS = (258, 259, 262, 277, 284, 317, 320, 322, 323, 339, 42113)


@dataclass(frozen=True)
class Level:
    """One resolution of a layer: its size [cells] and where each compressed block lies.

    `file` (index into `paths`), `start` and `size` [bytes] have one entry a block, row by row.
    """

    width: int
    height: int
    paths: Sequence[Path]
    file: NDArray[np.int64]
    start: NDArray[np.int64]
    size: NDArray[np.int64]


def block_places(encoded: bytes) -> NDArray[np.int64]:
    """First byte and length of each block of a tiled TIFF, row by row: shape (blocks, 2)."""
    entries = tiff.read_first_directory(encoded)
    columns = (entries[tiff.TILE_OFFSETS].numbers(), entries[tiff.TILE_BYTE_COUNTS].numbers())
    return np.stack(columns, axis=1).astype(np.int64)


def template(
    grid: Grid,
    layer: Layer,
    compression: str,
    tags: Mapping[str, str],
    band_tags: Mapping[str, str],
    colours: Mapping[int, tuple[int, int, int]],
) -> dict[int, tiff.Entry]:
    """Directory of a layer as GDAL writes it: every tag but the blocks' places."""
    with MemoryFile() as memory:
        with memory.open(
            driver="GTiff",
            width=grid.width,
            height=grid.height,
            count=1,
            dtype=layer.dtype,
            crs=CRS.from_wkt(grid.crs_wkt),
            transform=Affine(*grid.transform),
            nodata=layer.nodata,
            tiled=True,
            blockxsize=grid.block,
            blockysize=grid.block,
            sparse_ok=True,
            **({"photometric": "palette"} if colours else {}),
            **creation_options(layer, compression),
        ) as dataset:
            dataset.update_tags(**tags)
            dataset.update_tags(1, **band_tags)
            dataset.set_band_description(1, layer.meaning)
            dataset.units = (layer.unit,)
            if colours:
                clear = dict.fromkeys(range(256), (0, 0, 0, 0))
                dataset.write_colormap(1, clear | {k: (*c, 255) for k, c in colours.items()})
        entries = tiff.read_first_directory(memory.getbuffer())
    for tag in (tiff.TILE_OFFSETS, tiff.TILE_BYTE_COUNTS):
        del entries[tag]
    return entries


def write_assembled(
    path: Path,
    base: dict[int, tiff.Entry],
    levels: Sequence[Level],
    tick: Callable[[], None] = lambda: None,
) -> None:
    """Write a Cloud-Optimized GeoTIFF from blocks that lie in other files.

    Parameters
    ----------
    path : Path
        File to write, whole or not at all.
    base : dict of Entry
        From `template`.
    levels : sequence of Level
        Full resolution first, then overviews, finest first.
    tick : callable
        Called between blocks; what it raises ends the writing.

    Raises
    ------
    RunError
        The disk is full, or a block's file is gone or shorter than it was.
    """
    data = sum(int(level.size.sum()) + _FRAME * level.size.size for level in levels)
    big = data + 64 * sum(level.size.size for level in levels) > tiff.CLASSIC_LIMIT
    empty = [np.zeros(level.size.size, dtype=np.int64) for level in levels]
    start = len(tiff.write_head(_directories(base, levels, empty, big), _GHOST, big=big))
    offsets: list[NDArray[np.int64]] = [np.empty(0)] * len(levels)  # type: ignore[list-item]
    # Coarsest first: a reader that zooms out finds all it needs at the front.
    for k in reversed(range(len(levels))):
        framed = levels[k].size + _FRAME
        ends = start + np.cumsum(framed)
        offsets[k] = ends - framed + _LEADER.size
        start = int(ends[-1])
    head = tiff.write_head(_directories(base, levels, offsets, big), _GHOST, big=big)
    durable.write_whole(path, _parts(head, levels, tick))


def _directories(
    base: dict[int, tiff.Entry],
    levels: Sequence[Level],
    offsets: Sequence[NDArray[np.int64]],
    big: bool,
) -> list[dict[int, tiff.Entry]]:
    directories = []
    for k, (level, places) in enumerate(zip(levels, offsets, strict=True)):
        entries = dict(base)
        if k:
            entries = {tag: base[tag] for tag in _OVERVIEW_TAGS if tag in base}
            entries[tiff.NEW_SUBFILE_TYPE] = tiff.long_entry(tiff.NEW_SUBFILE_TYPE, 1)
        entries[tiff.IMAGE_WIDTH] = tiff.long_entry(tiff.IMAGE_WIDTH, level.width)
        entries[tiff.IMAGE_LENGTH] = tiff.long_entry(tiff.IMAGE_LENGTH, level.height)
        entries[tiff.TILE_OFFSETS] = tiff.number_entry(tiff.TILE_OFFSETS, places, big=big)
        counts = tiff.number_entry(tiff.TILE_BYTE_COUNTS, level.size, big=False)
        entries[tiff.TILE_BYTE_COUNTS] = counts
        directories.append(entries)
    return directories


def _parts(head: bytes, levels: Sequence[Level], tick: Callable[[], None]) -> Iterator[bytes]:
    yield head
    for level in reversed(levels):
        for block in read_blocks(level):
            tick()
            yield _LEADER.pack(len(block)) + block + block[-4:]


def read_blocks(level: Level) -> Iterator[bytes]:
    """Compressed blocks of a level, row by row."""
    opened: dict[int, BinaryIO] = {}
    try:
        for file, start, size in zip(level.file, level.start, level.size, strict=True):
            if file not in opened:
                if len(opened) >= 256:
                    opened.pop(next(iter(opened))).close()
                opened[file] = level.paths[file].open("rb")
            yield durable.read_part(opened[file], int(start), int(size))
    finally:
        for handle in opened.values():
            handle.close()
