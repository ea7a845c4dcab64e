"""A finished run's folder as an object."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

from saltrise.engine.workdir import FINISHED
from saltrise.io import durable
from saltrise.io.finished import read_layer, read_zone_layer

if TYPE_CHECKING:
    import geopandas
    import numpy as np
    from affine import Affine


@dataclass(frozen=True)
class Result:
    """A finished run: `record` is its run.json, layers and zones are read when asked for."""

    folder: Path

    @cached_property
    def record(self) -> dict[str, Any]:
        """Content of run.json."""
        content: dict[str, Any] = durable.read_json(self.folder / FINISHED)
        return content

    @property
    def zones(self) -> geopandas.GeoDataFrame:
        """Zone table with polygons; FileNotFoundError where the run had no zones."""
        return read_zone_layer(self.folder / "zones.gpkg")

    def layer(self, name: str) -> tuple[np.ma.MaskedArray[Any, Any], Affine]:
        """A layer's cells, nodata masked, and its affine transform."""
        return read_layer(self.folder / "layers" / f"{name}.tif")
