"""Read a finished run's outputs back."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pyproj
import rasterio
from affine import Affine

from saltrise.grid import Grid
from saltrise.io.ground import on_grid

if TYPE_CHECKING:
    import geopandas
    from shapely.geometry.base import BaseGeometry


def read_layer(path: Path) -> tuple[np.ma.MaskedArray[Any, Any], Affine]:
    """A layer's cells with nodata masked, and its affine transform."""
    with rasterio.open(path) as dataset:
        return dataset.read(1, masked=True), dataset.transform


def read_reduced(path: Path, step: int) -> np.ma.MaskedArray[Any, Any]:
    """A layer at one cell in `step` (a power of two) each way, from its overviews."""
    with rasterio.open(path) as dataset:
        shape = (-(-dataset.height // step), -(-dataset.width // step))
        values: np.ma.MaskedArray[Any, Any] = dataset.read(1, masked=True, out_shape=shape)
        return values


def read_zone_layer(path: Path) -> geopandas.GeoDataFrame:
    """The zone table with its polygons."""
    import geopandas

    if not path.is_file():
        raise FileNotFoundError(f"{path}: the run had no [zones]")
    return geopandas.read_file(path, layer="zones")


def zones_on(folder: Path, grid: Grid) -> tuple[list[str], list[str], list[BaseGeometry]] | None:
    """Ids, names and polygons in the grid's CRS of a finished run's zones; None without zones."""
    path = folder / "zones.gpkg"
    if not path.is_file():
        return None
    frame = read_zone_layer(path)
    crs = pyproj.CRS(frame.crs)
    shapes = [on_grid(geometry, crs, grid) for geometry in frame.geometry]
    return [str(v) for v in frame["zone_id"]], [str(v) for v in frame["name"]], shapes
