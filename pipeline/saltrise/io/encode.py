"""Stored numbers as compressed bytes."""

from __future__ import annotations

from typing import Any

import numpy as np
from rasterio.io import MemoryFile
from rasterio.transform import Affine

from saltrise.layers import Layer
from saltrise.stored import Stored


def creation_options(layer: Layer, compression: str) -> dict[str, Any]:
    """GDAL creation options that fix a layer's codec, shared by tiles and final files."""
    options: dict[str, Any] = {"compress": compression, "predictor": 3 if layer.continuous else 2}
    # Level 9 saves 2 % of the bytes for 3.5 times the time.
    options["zstd_level" if compression == "zstd" else "zlevel"] = 1 if compression == "zstd" else 6
    return options


def encode(stored: Stored, layer: Layer, compression: str, block: int) -> bytes:
    """One layer of one tile as a GeoTIFF in memory, whole blocks, padded with nodata."""
    height, width = (-(-n // block) * block for n in stored.shape)
    padded = stored
    if (height, width) != stored.shape:
        padded = np.full((height, width), layer.nodata, dtype=layer.dtype)
        padded[: stored.shape[0], : stored.shape[1]] = stored
    with MemoryFile() as memory:
        with memory.open(
            driver="GTiff",
            width=width,
            height=height,
            count=1,
            dtype=layer.dtype,
            # The tile's place is kept in its record; GDAL only warns without a transform.
            transform=Affine.translation(1, 1),
            tiled=True,
            blockxsize=block,
            blockysize=block,
            **creation_options(layer, compression),
        ) as dataset:
            # Three axes: rasterio would copy a plain matrix first.
            dataset.write(padded[np.newaxis])
        return bytes(memory.getbuffer())
