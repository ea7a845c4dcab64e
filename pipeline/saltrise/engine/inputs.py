"""Open every raster a config names, settle the region's grid and bring the inputs onto it."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from saltrise.errors import InputError
from saltrise.grid import Grid
from saltrise.io.align import Aligned, align, extent
from saltrise.io.mosaic import Mosaic, open_mosaic
from saltrise.io.regrid import bounds_in, crs_text
from saltrise.physics.stacks import ClassCodes
from saltrise.physics.texture import class_of_fractions
from saltrise.settings.model import at_layer
from saltrise.soil_cells import fractions

if TYPE_CHECKING:
    from saltrise.settings import RasterInput, Settings

_KEYS = {
    "depth": "water_table.depth",
    "elevation": "water_table.elevation",
    "ground": "water_table.ground",
    "texture": "soil.texture",
    "sand": "soil.sand",
    "clay": "soil.clay",
    "silt": "soil.silt",
    "organic_matter": "soil.organic_matter",
    "bulk_density": "soil.bulk_density",
    "root_depth": "root_zone.depth",
    "salinity": "groundwater.salinity",
    "potential_evaporation": "climate.potential_evaporation",
}

_OF_LAYERS = ("texture", "sand", "clay", "silt")
_OF_SEASONS = ("depth", "salinity", "potential_evaporation", "rain", "irrigation")

FRACTIONS = ("sand", "clay", "silt")


def base_role(role: str) -> str:
    """What an input is, without the soil layer or season it belongs to ("depth@0": "depth")."""
    return role.partition("@")[0]


def key_of(role: str) -> str:
    """The config key that names an input, entries of lists counted from 1: `season[2].depth`."""
    base, _, number = role.partition("@")
    if not number:
        return _KEYS[base]
    table = "soil.layer" if base in _OF_LAYERS else "season"
    return f"{table}[{int(number) + 1}].{base}"


def is_soil(role: str) -> bool:
    """Whether an input decides the texture class of a cell."""
    return base_role(role) in _OF_LAYERS


_SAME_UNIT = {
    "m": {"m", "metre", "meter", "metres", "meters"},
    "cm": {"cm", "centimetre", "centimeter", "centimetres", "centimeters"},
    "ft": {"ft", "foot", "feet", "us survey foot", "international foot"},
    "dS/m": {"ds/m", "ds m-1", "ds.m-1", "ms/cm", "ms cm-1"},
    "mS/cm": {"ds/m", "ds m-1", "ms/cm", "ms cm-1"},
    "uS/cm": {"us/cm", "us cm-1", "µs/cm", "μs/cm"},
    "mg/L": {"mg/l", "mg l-1", "ppm", "g/m3", "g m-3"},
    "g/L": {"g/l", "g l-1", "kg/m3", "kg m-3"},
    "mm/year": {"mm/year", "mm year-1", "mm/a", "mm a-1", "mm/yr", "mm yr-1"},
    "%": {"%", "percent", "pct", "g/100g"},
    "g/kg": {"g/kg", "g kg-1", "per mille"},
    "mm/day": {"mm/day", "mm day-1", "mm/d", "mm d-1"},
    "mm": {"mm", "millimetre", "millimeter", "kg m-2", "l m-2"},
    "g/cm3": {"g/cm3", "g cm-3", "mg m-3", "mg/m3", "kg/dm3"},
}


@dataclass(frozen=True)
class Inputs:
    """A region's inputs on its grid.

    `rasters` and `constants` are by role; each role that the config gives and the run needs is in
    exactly one of them, in the config's own unit. `layers` are the endings of the roles of soil
    layers, from the top down; `codes` what texture codes mean.
    """

    grid: Grid
    rasters: dict[str, Aligned]
    constants: dict[str, float]
    warnings: tuple[str, ...]
    layers: tuple[str, ...]
    codes: ClassCodes
    fraction_divisor: float = 1.0
    """From the unit of sand, clay and silt to %."""

    @property
    def stacked(self) -> bool:
        """Whether cells have more than one layer of soil."""
        return len(self.layers) > 1

    def texture_number(self, values: Mapping[str, float], end: str) -> float:
        """Number of the texture class that one cell's fractions make; NaN without a value.

        Parameters
        ----------
        values : mapping of float
            Inputs of the cell by role.
        end : str
            Ending of the layer's roles.

        Raises
        ------
        InputError
            The fractions cannot be.
        """
        parts = fractions({role: np.array([value]) for role, value in values.items()}, end)
        classes, wrong = class_of_fractions(parts, self.fraction_divisor)
        if wrong[0]:
            given = ", ".join(f"{role} {part[0]:g}" for role, part in parts.items())
            raise InputError(f"fractions that cannot be: {given}; check soil.unit")
        return float(classes[0])

    def unit_of(self, settings: Settings, role: str) -> str:
        """Unit of an input as the config declares it; empty for codes."""
        return _given(settings)[role][2] or ""

    def mosaics(self) -> dict[str, Mosaic]:
        """The input behind each raster role."""
        return {role: aligned.mosaic for role, aligned in self.rasters.items()}


def open_inputs(settings: Settings, block: int = 512) -> Inputs:
    """Open and align all inputs of a region.

    Parameters
    ----------
    settings : Settings
        The region.
    block : int
        Edge of the unit of arithmetic [cells].

    Raises
    ------
    InputError
        Every missing or unusable file of every input at once, as `file:line: key: ...`.
    """
    faults: list[str] = []
    constants, mosaics = {}, {}
    for role, (raster, nodata, _) in _given(settings).items():
        if raster.constant is not None:
            constants[role] = raster.constant
            continue
        try:
            mosaics[role] = open_mosaic(key_of(role), raster, nodata)
        except InputError as error:
            faults += [settings.fault(key_of(role), fault) for fault in error.faults]
    if faults:
        raise InputError(*faults)
    grid = _region_grid(settings, mosaics, block)
    rasters = {}
    needed = {role: mosaic for role, mosaic in mosaics.items() if _is_needed(settings, role)}
    for role, mosaic in needed.items():
        try:
            rasters[role] = align(mosaic, grid, classes=base_role(role) == "texture")
        except InputError as error:
            files = ", ".join(t.file.path for t in mosaic.tiles[:3])
            more = f" and {len(mosaic.tiles) - 3} more" if len(mosaic.tiles) > 3 else ""
            faults += [
                settings.fault(key_of(role), f"{files}{more}: {text}") for text in error.faults
            ]
    if faults:
        raise InputError(*faults)
    divisor = 10.0 if settings.soil.unit == "g/kg" else 1.0
    return Inputs(
        grid,
        rasters,
        {role: value for role, value in constants.items() if _is_needed(settings, role)},
        tuple(_warnings(settings, needed)),
        tuple(settings.soil.parts),
        ClassCodes.of(settings.soil.codes),
        divisor,
    )


def _is_needed(settings: Settings, role: str) -> bool:
    """Whether a run reads an input; a main table's value that every season replaces it does not."""
    replaced_by = "depth" if role in ("elevation", "ground") else role
    return (
        replaced_by not in _OF_SEASONS
        or not settings.seasons
        or any(getattr(season, replaced_by) is None for season in settings.seasons)
    )


def _given(settings: Settings) -> dict[str, tuple[RasterInput, float | None, str | None]]:
    """Each role the config gives: its raster or constant, configured nodata and unit."""
    table, soil = settings.water_table, settings.soil
    groundwater, climate = settings.groundwater, settings.climate
    of_table: dict[str, tuple[float | None, str | None]] = {
        "depth": (table.nodata, table.unit),
        "salinity": (groundwater.nodata, groundwater.unit),
        "potential_evaporation": (climate.nodata, climate.unit),
        "rain": (climate.nodata, "mm"),
        "irrigation": (climate.nodata, "mm"),
    }
    roles: dict[str, tuple[RasterInput | None, float | None, str | None]] = {
        "depth": (table.depth, *of_table["depth"]),
        "elevation": (table.elevation, *of_table["depth"]),
        "ground": (table.ground, *of_table["depth"]),
    }
    for end, part in soil.parts.items():
        roles[f"texture{end}"] = (part.texture, soil.nodata, None)
        roles |= {f"{r}{end}": (getattr(part, r), soil.nodata, soil.unit) for r in FRACTIONS}
    roles["organic_matter"] = (soil.organic_matter, soil.nodata, "%")
    roles["bulk_density"] = (soil.bulk_density, soil.nodata, "g/cm3")
    if settings.root_zone is not None:
        roles["root_depth"] = (settings.root_zone.depth, settings.root_zone.nodata, "m")
    roles["salinity"] = (groundwater.salinity, *of_table["salinity"])
    roles["potential_evaporation"] = (
        climate.potential_evaporation,
        *of_table["potential_evaporation"],
    )
    for k, season in enumerate(settings.seasons):
        for role, rest in of_table.items():
            roles[f"{role}{at_layer(k)}"] = (getattr(season, role), *rest)
    return {r: (raster, nodata, unit) for r, (raster, nodata, unit) in roles.items() if raster}


def _region_grid(settings: Settings, mosaics: dict[str, Mosaic], block: int) -> Grid:
    wanted = settings.grid
    names = ("depth", "elevation", "ground", *(role for role in mosaics if "depth@" in role))
    water = next((mosaics[name] for name in names if name in mosaics), None)
    try:
        if wanted is None or wanted.like == "water_table":
            if water is None:
                raise InputError(
                    "the water table is a number, so it has no grid of its own; "
                    "name a raster in like, or give crs, resolution and bounds"
                )
            return _grid_of(water, block)
        if wanted.like is not None:
            return _grid_of(open_mosaic("grid.like", settings.like_input(), None), block)
        return _declared_grid(settings, water, block)
    except InputError as error:
        key = "grid.like" if wanted is not None and wanted.like else "grid.crs"
        key = key if wanted is not None else "water_table"
        raise InputError(*(settings.fault(key, fault) for fault in error.faults)) from error


def _grid_of(mosaic: Mosaic, block: int) -> Grid:
    return Grid(mosaic.crs_wkt, mosaic.transform, mosaic.width, mosaic.height, block)


def _declared_grid(settings: Settings, water: Mosaic | None, block: int) -> Grid:
    wanted = settings.grid
    assert wanted is not None
    assert wanted.crs is not None
    crs = crs_text(wanted.crs)
    dx, dy = wanted.cell_size()
    bounds = wanted.bounds
    if bounds is None:
        if water is None:
            raise InputError("bounds must be given where the water table is a number")
        seen = extent(water.transform, water.width, water.height)
        left, bottom, right, top = bounds_in(water.crs_wkt, crs, seen)
        left, top = math.floor(left / dx) * dx, math.ceil(top / dy) * dy
    else:
        left, bottom, right, top = bounds
    # A bound within a millionth of a cell of a grid line lies on it.
    width = max(1, math.ceil((right - left) / dx - 1e-6))
    height = max(1, math.ceil((top - bottom) / dy - 1e-6))
    return Grid(crs, (dx, 0.0, left, 0.0, -dy, top), width, height, block)


def _warnings(settings: Settings, mosaics: dict[str, Mosaic]) -> list[str]:
    warnings = []
    units = {role: unit for role, (_, _, unit) in _given(settings).items()}
    for role, mosaic in mosaics.items():
        warnings += [f"{key_of(role)}: {note}" for note in mosaic.notes]
        if mosaic.integer_without_nodata:
            warnings.append(
                f"{key_of(role)}: an integer raster without declared nodata, every value counts as "
                "valid; set nodata in its table if one marks missing cells"
            )
        unit = units[role]
        for said in sorted({t.file.unit for t in mosaic.tiles if t.file.unit}):
            if unit is not None and said.strip().lower() not in _SAME_UNIT[unit]:
                warnings.append(
                    f"{key_of(role)}: a file declares its unit as {said!r}, the config says "
                    f"{unit!r}; the config is followed"
                )
    return warnings
