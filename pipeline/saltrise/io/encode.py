"""Stored numbers as compressed bytes."""

from __future__ import annotations

import zlib
from collections.abc import Callable
from functools import lru_cache, partial
from typing import Any

import numpy as np
import zstandard
from rasterio.io import MemoryFile
from rasterio.transform import Affine

from saltrise.io import tiff
from saltrise.kernels.packing import pack_bytes, pack_singles
from saltrise.layers import Layer
from saltrise.stored import Stored

_ZSTD_LEVEL, _DEFLATE_LEVEL = 1, 6
"""Level 9 of zstd saves 2 % of the bytes for 3.5 times the time."""


def creation_options(layer: Layer, compression: str) -> dict[str, Any]:
    """GDAL creation options that fix a layer's codec, shared by tiles and final files."""
    options: dict[str, Any] = {"compress": compression, "predictor": 3 if layer.continuous else 2}
    if compression == "zstd":
        return options | {"zstd_level": _ZSTD_LEVEL}
    return options | {"zlevel": _DEFLATE_LEVEL}


def encode(stored: Stored, layer: Layer, compression: str, block: int) -> bytes:
    """One layer of one tile as a TIFF in memory, whole blocks, padded with nodata.

    GDAL says what the directory holds; predictor and codec are ours, for GDAL copies every block
    several times on the way and takes 1.6 times as long.
    """
    compress = _codec(compression)
    rows, columns = (-(-n // block) for n in stored.shape)
    pack = pack_singles if layer.continuous else pack_bytes
    packed = np.empty(block * block * stored.itemsize, dtype=np.uint8)
    blocks = []
    for top in range(0, rows * block, block):
        for left in range(0, columns * block, block):
            pack(stored, top, left, block, layer.nodata, packed)
            blocks.append(compress(packed))
    return _head(layer, compression, block, (rows, columns), blocks) + b"".join(blocks)


def _codec(compression: str) -> Callable[[Any], bytes]:
    if compression == "zstd":
        return zstandard.ZstdCompressor(level=_ZSTD_LEVEL).compress
    return partial(zlib.compress, level=_DEFLATE_LEVEL)


def _head(
    layer: Layer, compression: str, block: int, shape: tuple[int, int], blocks: list[bytes]
) -> bytes:
    """Header and directory before blocks that follow one after the other."""
    entries = dict(_directory(layer, compression, block))
    rows, columns = shape
    entries[tiff.IMAGE_WIDTH] = tiff.long_entry(tiff.IMAGE_WIDTH, columns * block)
    entries[tiff.IMAGE_LENGTH] = tiff.long_entry(tiff.IMAGE_LENGTH, rows * block)
    sizes = np.array([len(part) for part in blocks], dtype=np.int64)
    ends, big = np.cumsum(sizes), int(sizes.sum()) > tiff.CLASSIC_LIMIT
    entries[tiff.TILE_BYTE_COUNTS] = tiff.number_entry(tiff.TILE_BYTE_COUNTS, sizes, big=False)
    # A head's length does not depend on the places it names.
    start = 0
    for _ in range(2):
        places = start + ends - sizes
        entries[tiff.TILE_OFFSETS] = tiff.number_entry(tiff.TILE_OFFSETS, places, big=big)
        head = tiff.write_head([entries], b"", big=big)
        start = len(head)
    return head


@lru_cache
def _directory(layer: Layer, compression: str, block: int) -> dict[int, tiff.Entry]:
    """Directory of a layer of one block as GDAL writes it."""
    with MemoryFile() as memory:
        with memory.open(
            driver="GTiff",
            width=block,
            height=block,
            count=1,
            dtype=layer.dtype,
            # The tile's place is kept in its record; GDAL only warns without a transform.
            transform=Affine.translation(1, 1),
            tiled=True,
            blockxsize=block,
            blockysize=block,
            sparse_ok=True,
            **creation_options(layer, compression),
        ):
            pass
        return tiff.read_first_directory(memory.getbuffer())
