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
from saltrise.physics.texture import class_of_fractions

if TYPE_CHECKING:
    from saltrise.settings import RasterInput, Settings

ROLES = {
    "depth": "water_table.depth",
    "elevation": "water_table.elevation",
    "ground": "water_table.ground",
    "texture": "soil.texture",
    "sand": "soil.sand",
    "clay": "soil.clay",
    "silt": "soil.silt",
    "salinity": "groundwater.salinity",
    "potential_evaporation": "climate.potential_evaporation",
}
"""What an input stands for, and the config key that names it."""

SOIL_ROLES = ("texture", "sand", "clay", "silt")
"""Inputs that decide the texture class."""

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
}


@dataclass(frozen=True)
class Inputs:
    """A region's inputs on its grid.

    `rasters` and `constants` share the keys of `ROLES`; each role that the config gives is in
    exactly one of them, in the config's own unit.
    """

    grid: Grid
    rasters: dict[str, Aligned]
    constants: dict[str, float]
    warnings: tuple[str, ...]
    fraction_divisor: float = 1.0
    """From the unit of sand, clay and silt to %."""

    def texture_number(self, values: Mapping[str, float]) -> int | None:
        """Number of the texture class that one cell's fractions make; None without a value.

        Raises
        ------
        InputError
            The fractions cannot be.
        """
        parts = {r: np.array([values[r]]) for r in ("sand", "clay", "silt") if r in values}
        if not all(np.isfinite(part[0]) for part in parts.values()):
            return None
        classes, wrong = class_of_fractions(parts, self.fraction_divisor)
        if wrong[0]:
            given = ", ".join(f"{role} {part[0]:g}" for role, part in parts.items())
            raise InputError(f"fractions that cannot be: {given}; check soil.unit")
        return int(classes[0])

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
            mosaics[role] = open_mosaic(ROLES[role], raster, nodata)
        except InputError as error:
            faults += [settings.fault(ROLES[role], fault) for fault in error.faults]
    if faults:
        raise InputError(*faults)
    grid = _region_grid(settings, mosaics, block)
    rasters = {}
    for role, mosaic in mosaics.items():
        try:
            rasters[role] = align(mosaic, grid, classes=role == "texture")
        except InputError as error:
            files = ", ".join(t.file.path for t in mosaic.tiles[:3])
            more = f" and {len(mosaic.tiles) - 3} more" if len(mosaic.tiles) > 3 else ""
            faults += [
                settings.fault(ROLES[role], f"{files}{more}: {text}") for text in error.faults
            ]
    if faults:
        raise InputError(*faults)
    divisor = 10.0 if settings.soil.unit == "g/kg" else 1.0
    return Inputs(grid, rasters, constants, tuple(_warnings(settings, mosaics)), divisor)


def _given(settings: Settings) -> dict[str, tuple[RasterInput, float | None, str | None]]:
    """Each role the config gives: its raster or constant, configured nodata and unit."""
    table, soil = settings.water_table, settings.soil
    groundwater, climate = settings.groundwater, settings.climate
    roles = {
        "depth": (table.depth, table.nodata, table.unit),
        "elevation": (table.elevation, table.nodata, table.unit),
        "ground": (table.ground, table.nodata, table.unit),
        "texture": (soil.texture, soil.nodata, None),
        "sand": (soil.sand, soil.nodata, soil.unit),
        "clay": (soil.clay, soil.nodata, soil.unit),
        "silt": (soil.silt, soil.nodata, soil.unit),
        "salinity": (groundwater.salinity, groundwater.nodata, groundwater.unit),
        "potential_evaporation": (
            climate.potential_evaporation,
            climate.nodata,
            climate.unit,
        ),
    }
    return {r: (raster, nodata, unit) for r, (raster, nodata, unit) in roles.items() if raster}


def _region_grid(settings: Settings, mosaics: dict[str, Mosaic], block: int) -> Grid:
    wanted = settings.grid
    water = mosaics.get("depth") or mosaics.get("elevation") or mosaics.get("ground")
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
        warnings += [f"{ROLES[role]}: {note}" for note in mosaic.notes]
        if mosaic.integer_without_nodata:
            warnings.append(
                f"{ROLES[role]}: an integer raster without declared nodata, every value counts as "
                "valid; set nodata in its table if one marks missing cells"
            )
        unit = units[role]
        for said in sorted({t.file.unit for t in mosaic.tiles if t.file.unit}):
            if unit is not None and said.strip().lower() not in _SAME_UNIT[unit]:
                warnings.append(
                    f"{ROLES[role]}: a file declares its unit as {said!r}, the config says "
                    f"{unit!r}; the config is followed"
                )
    return warnings
