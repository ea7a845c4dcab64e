"""Stored values of many tiles read back as full-width strips."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import rasterio
from rasterio.crs import CRS
from rasterio.windows import Window as RasterWindow

from saltrise.grid import Window
from saltrise.io.vrt import dataset_xml, plain_band_xml
from saltrise.layers import Layer
from saltrise.stored import Stored


def read_strips(
    tiles: Sequence[tuple[str, Window]], layer: Layer, width: int, height: int, rows: int
) -> Iterator[Stored]:
    """Strips of `rows` rows (the last may be shorter) of a layer that lies in tiles.

    Raises
    ------
    rasterio.errors.RasterioError
        A tile cannot be decoded.
    """
    # The place on earth does not matter here; any CRS keeps GDAL content.
    band = plain_band_xml(layer, tiles, "")
    virtual = dataset_xml(width, height, CRS.from_epsg(3857).to_wkt(), (1, 0, 0, 0, -1, 0), band)
    with rasterio.open(virtual) as dataset:
        for top in range(0, height, rows):
            window = RasterWindow(0, top, width, min(rows, height - top))
            yield dataset.read(1, window=window)
