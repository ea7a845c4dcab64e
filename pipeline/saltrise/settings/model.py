"""The tables of a config as frozen models; each field's docstring states its unit."""

from __future__ import annotations

import math
from collections.abc import Mapping
from pathlib import Path
from types import MappingProxyType
from typing import Annotated, Any, Literal

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, PlainSerializer, ValidationInfo

from saltrise.layers import BASIC
from saltrise.physics.soils import TEXTURES
from saltrise.units import TDS_PER_EC

Number = Annotated[float, Field(allow_inf_nan=False)]
Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
Text = Annotated[str, Field(min_length=1)]

BLOCK = 512


class _Table(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)


class RasterInput(_Table):
    """A raster input: a number for the whole region, or paths and patterns of files.

    `given` is what the config says, for the record; `paths` are absolute.
    """

    constant: float | None = None
    paths: tuple[str, ...] = ()
    given: Any = None


def _raster(value: Any, info: ValidationInfo) -> RasterInput:
    if isinstance(value, RasterInput):
        return value
    if isinstance(value, bool) or not isinstance(value, int | float | str | list):
        raise ValueError("must be a path, a list of paths, a pattern of files or a number")
    if isinstance(value, int | float):
        if not math.isfinite(value):
            raise ValueError("a number for the whole region must be finite")
        return RasterInput(constant=float(value), given=value)
    paths = [value] if isinstance(value, str) else value
    if not paths or not all(isinstance(path, str) and path.strip() for path in paths):
        raise ValueError("must name at least one file, and every path must be a non-empty text")
    base = (info.context or {}).get("base", Path())
    return RasterInput(paths=tuple(resolve(base, path) for path in paths), given=value)


def resolve(base: Path, path: str) -> str:
    """A path of a config, absolute; what GDAL resolves itself is left alone."""
    if path.startswith("/vsi") or "://" in path:
        return path
    return str(base / path)


Raster = Annotated[
    RasterInput, BeforeValidator(_raster), PlainSerializer(lambda raster: raster.given)
]


class GridTable(_Table):
    """`[grid]`: a raster whose grid is taken, or crs + resolution [CRS units] (+ bounds)."""

    like: Text | None = None
    crs: Text | None = None
    resolution: Positive | Annotated[list[Positive], Field(min_length=2, max_length=2)] | None = (
        None
    )
    bounds: Annotated[list[Number], Field(min_length=4, max_length=4)] | None = None

    def cell_size(self) -> tuple[float, float]:
        """Cell width and height [CRS units]."""
        size = self.resolution
        assert size is not None
        return (size[0], size[1]) if isinstance(size, list) else (size, size)


class WaterTable(_Table):
    """`[water_table]`: depth below ground, or ground minus elevation; `ground_accuracy` [m]."""

    depth: Raster | None = None
    elevation: Raster | None = None
    ground: Raster | None = None
    ground_accuracy: Annotated[float, Field(ge=0, allow_inf_nan=False)] | None = None
    accept_ground_error: bool = False
    unit: Literal["m", "cm", "ft"]
    date: Text | None = None
    nodata: Number | None = None


class SoilLayer(_Table):
    """`[[soil.layer]]`: texture or fractions of one layer, down to `bottom` [m below ground]."""

    bottom: Positive | None = None
    texture: Raster | None = None
    sand: Raster | None = None
    clay: Raster | None = None
    silt: Raster | None = None


class SoilTable(_Table):
    """`[soil]`: texture codes and their classes, or fractions in `unit`; the parameter sets.

    `organic_matter` [% by mass] and `bulk_density` [g/cm3] are for methods that need them.
    """

    texture: Raster | None = None
    sand: Raster | None = None
    clay: Raster | None = None
    silt: Raster | None = None
    layer: list[SoilLayer] = Field(default_factory=list)
    unit: Literal["%", "g/kg"] | None = None
    method: Literal["classes", "cosby1984", "saxton-rawls2006", "campbell1985"] = "classes"
    organic_matter: Raster | None = None
    bulk_density: Raster | None = None
    parameters: Text | Annotated[list[Text], Field(min_length=1)] = "rawls1982"
    conductivity: (
        Literal["campbell", "brooks-corey", "van-genuchten", "gardner-power", "gardner-exponential"]
        | None
    ) = None
    classes: Mapping[int | str, str] = Field(default_factory=dict)
    date: Text | None = None
    nodata: Number | None = None

    @property
    def from_fractions(self) -> bool:
        """Whether texture comes from sand and clay rather than from codes."""
        return all(part.texture is None for part in self.parts.values())

    @property
    def parts(self) -> Mapping[str, SoilLayer | SoilTable]:
        """Where texture or fractions stand, by the ending of their roles: the layers from the
        top down, or the table itself."""
        return {at_layer(k): part for k, part in enumerate(self.layer)} or {"": self}

    @property
    def bottoms(self) -> tuple[float, ...]:
        """Bottoms of all layers but the last [m]."""
        return tuple(part.bottom for part in self.layer if part.bottom is not None)

    @property
    def codes(self) -> Mapping[int, str]:
        """Texture class (or "not soil") by code; with fractions by the class's own number."""
        if not self.from_fractions:
            return {code: name for code, name in self.classes.items() if isinstance(code, int)}
        return {code: self.classes.get(name, name) for code, name in enumerate(TEXTURES)}

    @property
    def sets(self) -> tuple[str, ...]:
        """Parameter sets by name or path; the first gives the layers."""
        given = self.parameters
        return (given,) if isinstance(given, str) else tuple(given)


def at_layer(number: int) -> str:
    """Ending of the roles of a soil layer or season, counted from 0."""
    return f"@{number}"


class GroundwaterTable(_Table):
    """`[groundwater]`: salinity in `unit`; `tds_per_ec` [mg/L per dS/m]."""

    salinity: Raster
    unit: Literal["dS/m", "mS/cm", "uS/cm", "mg/L", "g/L"]
    tds_per_ec: Positive = TDS_PER_EC
    date: Text | None = None
    nodata: Number | None = None


class ClimateTable(_Table):
    """`[climate]`: potential evaporation in `unit`; `coefficient` [-] to evaporative demand."""

    potential_evaporation: Raster
    unit: Literal["mm/year", "mm/day"]
    basis: Literal["bare soil", "reference crop", "open water", "pan"] = "bare soil"
    coefficient: Positive = 1.0
    date: Text | None = None
    nodata: Number | None = None


class SeasonTable(_Table):
    """`[[season]]`: part of the year; `days`, `rain` and `irrigation` [mm over the season].

    What is left out is taken from the main tables; units are theirs.
    """

    name: Text
    days: Positive
    depth: Raster | None = None
    potential_evaporation: Raster | None = None
    coefficient: Positive | None = None
    salinity: Raster | None = None
    rain: Raster | None = None
    irrigation: Raster | None = None


class RootZoneTable(_Table):
    """`[root_zone]`: `depth` of its lower edge [m below ground] and `suction` there [m]."""

    depth: Raster
    suction: Positive = 150.0
    nodata: Number | None = None


class SurfaceTable(_Table):
    """`[surface]`: `mulch`, the fraction of the evaporative demand kept off the bare soil [-]."""

    mulch: Annotated[float, Field(ge=0, le=1, allow_inf_nan=False)] = 0.0


class HazardTable(_Table):
    """`[hazard]`: class scheme; `target_load` [t/ha/year]; what ranks zones."""

    scheme: Text = "salt_load"
    target_load: Positive = 2.0
    rank_by: Literal["mean", "total", "too_shallow"] = "mean"


class ZonesTable(_Table):
    """`[zones]`: polygon file, layer, and the fields of id and name."""

    file: Text
    layer: Text | None = None
    id: Text | None = None
    name: Text | None = None


class OutputTable(_Table):
    """`[output]`: folder, layers, precision and codec of the rasters; page and maps or not."""

    folder: Text
    layers: Annotated[list[str], Field(min_length=1)] = Field(default_factory=lambda: list(BASIC))
    precision: Literal["rounded", "full"] = "rounded"
    compression: Literal["zstd", "deflate"] = "zstd"
    assembly: Literal["copy", "gdal"] = "copy"
    season_layers: bool = False
    report: bool = True


class RunTable(_Table):
    """`[run]`: edge of a tile [cells], threads or processes at work, and where they run."""

    tile: Annotated[int, Field(gt=0, multiple_of=BLOCK)] = 2048
    workers: Annotated[int, Field(ge=1)] | None = None
    scheduler: Text = "threads"


class Tables(_Table):
    """A whole config."""

    title: Text | None = None
    abstract: Text | None = None
    grid: GridTable | None = None
    water_table: WaterTable
    soil: SoilTable
    groundwater: GroundwaterTable
    climate: ClimateTable
    season: list[SeasonTable] = Field(default_factory=list)
    root_zone: RootZoneTable | None = None
    surface: SurfaceTable = SurfaceTable()
    hazard: HazardTable = HazardTable()
    zones: ZonesTable | None = None
    output: OutputTable
    run: RunTable = RunTable()


TABLES: Mapping[str, type[_Table]] = MappingProxyType(
    {
        "grid": GridTable,
        "water_table": WaterTable,
        "soil": SoilTable,
        "groundwater": GroundwaterTable,
        "climate": ClimateTable,
        "season": SeasonTable,
        "root_zone": RootZoneTable,
        "surface": SurfaceTable,
        "hazard": HazardTable,
        "zones": ZonesTable,
        "output": OutputTable,
        "run": RunTable,
    }
)
"""Tables by name, for what a key may be."""
