"""Blocks of stored numbers as the bytes that are compressed: TIFF's horizontal predictors."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.compiled import compiled

Bytes = NDArray[np.uint8]
Cells = NDArray[Any]
"""float32 or uint8"""


@compiled
def pack_singles(
    layer: Cells, top: int, left: int, edge: int, nodata: float, packed: Bytes
) -> None:
    """A block of `edge` x `edge` float32 cells from (top, left) on, `nodata` beyond the layer.

    Predictor 3 (Adobe Photoshop TIFF Technical Note 3, 2005): each row as four planes of bytes,
    the most significant first, then each byte less the one before it.
    """
    empty = np.float32(nodata).view(np.uint32)
    height, width = min(edge, layer.shape[0] - top), min(edge, layer.shape[1] - left)
    row = np.full(edge + 1, empty, dtype=np.uint32)
    for i in range(edge):
        if i == height:
            row[1:] = empty
        for j in range(width if i < height else 0):
            row[j + 1] = np.float32(layer[top + i, left + j]).view(np.uint32)
        for plane in range(4):
            shift, start = np.uint32(24 - 8 * plane), (4 * i + plane) * edge
            # Before a plane's first byte comes the last of the plane before.
            row[0] = np.uint32(row[edge] >> np.uint32(8)) if plane else 0
            for j in range(edge):
                byte = np.uint8(row[j + 1] >> shift)
                packed[start + j] = np.uint8(byte - np.uint8(row[j] >> shift))


@compiled
def pack_bytes(layer: Cells, top: int, left: int, edge: int, nodata: float, packed: Bytes) -> None:
    """As `pack_singles` of uint8 cells by predictor 2 (TIFF 6.0, section 14): differences."""
    height, width = min(edge, layer.shape[0] - top), min(edge, layer.shape[1] - left)
    for i in range(edge):
        before = np.uint8(0)
        for j in range(edge):
            inside = i < height and j < width
            value = np.uint8(layer[top + i, left + j]) if inside else np.uint8(nodata)
            packed[i * edge + j] = np.uint8(value - before)
            before = value
