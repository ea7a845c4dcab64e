"""A finished run's folder as an object."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from html import escape
from pathlib import Path
from typing import TYPE_CHECKING, Any

from saltrise.engine.workdir import FINISHED
from saltrise.io import durable
from saltrise.io.finished import read_layer, read_zone_layer
from saltrise.zone_table import CLASS_COLUMNS

if TYPE_CHECKING:
    import geopandas
    import numpy as np
    from affine import Affine


@dataclass(frozen=True)
class Result:
    """A finished run: `record` is its run.json, layers and zones are read when asked for.

    In a notebook it shows its summary.

    Examples
    --------
    Numbers may stand for rasters, so a region can be made of nothing else:

    >>> import tempfile, saltrise
    >>> folder = tempfile.TemporaryDirectory()
    >>> result = saltrise.run({
    ...     "title": "One field",
    ...     "grid": {"crs": "EPSG:32740", "resolution": 30, "bounds": [0, 6000000, 90, 6000060]},
    ...     "water_table": {"depth": 1.5, "unit": "m"},
    ...     "soil": {"texture": 4, "classes": {"4": "loam"}},
    ...     "groundwater": {"salinity": 5, "unit": "g/L"},
    ...     "climate": {"potential_evaporation": 1650, "unit": "mm/year"},
    ...     "output": {"folder": folder.name + "/field", "report": False},
    ... })
    >>> load, transform = result.layer("salt_load")
    >>> load.shape, round(float(load[0, 0]), 1)
    ((2, 3), 11.0)
    >>> folder.cleanup()
    """

    folder: Path

    def _repr_html_(self) -> str:
        """Summary for a notebook."""
        region, scheme = self.record["region"], self.record["hazard_scheme"]
        rows = "".join(
            f"<tr><td>{escape(name)}</td><td>{region[column]:,.1f}</td></tr>"
            for name, column in zip(scheme["names"], (*CLASS_COLUMNS, "at_surface_ha"), strict=True)
        )
        warnings = "".join(f"<li>{escape(text)}</li>" for text in self.record["warnings"])
        return (
            f"<h4>{escape(self.record['title'])}</h4><p>{escape(scheme['title'])}; gross salt rise "
            f"{region['salt_load_t_per_year']:,.0f} t/year on {region['assessed_ha']:,.0f} ha</p>"
            f"<table><tr><th>class</th><th>ha</th></tr>{rows}</table><ul>{warnings}</ul>"
            f"<p>{escape(self.record['use_limits'][0])}</p>"
        )

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
