"""Read a finished run's outputs back."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import rasterio
from affine import Affine

if TYPE_CHECKING:
    import geopandas


def read_layer(path: Path) -> tuple[np.ma.MaskedArray[Any, Any], Affine]:
    """A layer's cells with nodata masked, and its affine transform."""
    with rasterio.open(path) as dataset:
        return dataset.read(1, masked=True), dataset.transform


def read_zone_layer(path: Path) -> geopandas.GeoDataFrame:
    """The zone table with its polygons."""
    import geopandas

    if not path.is_file():
        raise FileNotFoundError(f"{path}: the run had no [zones]")
    return geopandas.read_file(path, layer="zones")
