"""A region as surveyed: grid, inputs, profiles, zones and doubts, before any tile runs."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING

from rasterio.errors import RasterioError

from saltrise.coverage import ZoneShapes, prepare_zones
from saltrise.engine import findings
from saltrise.engine.inputs import Inputs, is_soil, open_inputs
from saltrise.engine.plan import Plan
from saltrise.engine.schedule import on_threads
from saltrise.engine.soils import (
    Occurring,
    code_faults,
    occurring,
    soil_faults,
    soil_of,
)
from saltrise.engine.survey import BlockScan, first_look, scan
from saltrise.errors import InputError, RunError
from saltrise.grid import cell_areas
from saltrise.io.align import BlockReader
from saltrise.io.gdal import require_working_libraries
from saltrise.io.overlaps import disagreements
from saltrise.io.scheme_files import load_scheme
from saltrise.io.soil_tables import load_soil_set
from saltrise.io.vectors import Zones, read_zones
from saltrise.physics.soils import SoilSet
from saltrise.recipe import Recipe, Season
from saltrise.schemes import Scheme
from saltrise.settings.model import at_layer
from saltrise.units import depth_in_m, tds_in_g_per_l

if TYPE_CHECKING:
    from saltrise.settings import Settings


@dataclass(frozen=True)
class Region:
    """A surveyed region.

    `soils` are the stacks of texture classes that occur. `warnings` lack what only the ranges of
    whole inputs can tell, see `findings.warnings`.
    """

    settings: Settings
    inputs: Inputs
    found: BlockScan
    sets: tuple[SoilSet, ...]
    soils: Occurring
    scheme: Scheme
    zones: Zones | None
    warnings: tuple[str, ...]


@dataclass(frozen=True)
class Opened:
    """A region whose files are open and sound by their headers; nothing is scanned yet."""

    settings: Settings
    inputs: Inputs
    sets: tuple[SoilSet, ...]
    scheme: Scheme
    zones: Zones | None
    zone_faults: tuple[str, ...]


def open_region(settings: Settings, block: int) -> Opened:
    """Open everything a region names.

    Parameters
    ----------
    settings : Settings
        The region.
    block : int
        Edge of the unit of arithmetic [cells].

    Raises
    ------
    InputError
        Every fault of config references and raster headers.
    """
    require_working_libraries()
    sets, scheme = _references(settings)
    inputs = open_inputs(settings, block)
    zones: Zones | None = None
    faults: tuple[str, ...] = ()
    if settings.zones is not None:
        try:
            zones = read_zones(settings, inputs.grid)
        except InputError as error:
            faults = error.faults
    return Opened(settings, inputs, sets, scheme, zones, faults)


def survey_region(
    opened: Opened, done: Callable[[int, int], None], found: BlockScan | None, *, whole: bool
) -> Region:
    """Scan and check everything a run needs.

    Parameters
    ----------
    opened : Opened
        The region.
    done : callable
        Called with windows scanned and windows in all.
    found : BlockScan or None
        What an earlier scan of these very inputs found.
    whole : bool
        Scan every cell of every input, rather than what a run has to know beforehand.

    Raises
    ------
    InputError
        Every fault of inputs, codes and zones found together.
    """
    settings, inputs = opened.settings, opened.inputs
    try:
        found = found or _scan(inputs, settings, done, whole=whole)
        clashes = [text for m in inputs.mosaics().values() for text in disagreements(m)]
    except (RunError, RasterioError) as error:
        # Until tiles run, a broken raster is the user's to mend.
        raise InputError(*opened.zone_faults, str(error)) from error
    faults = [*opened.zone_faults, *findings.faults(settings, inputs, found)]
    if faults:
        raise InputError(*faults)
    soils = occurring(settings, inputs, found)
    if settings.soil.method == "classes":
        faults = soil_faults(settings, opened.sets, soils.textures)
    if faults:
        raise InputError(*faults)
    zones = opened.zones
    warnings = [*settings.warnings, *inputs.warnings, *clashes, *_clay(soils.textures)]
    warnings += zones.warnings if zones else ()
    return Region(
        settings, inputs, found, opened.sets, soils, opened.scheme, zones, tuple(warnings)
    )


def _clay(textures: tuple[str, ...]) -> list[str]:
    clays = [name for name in textures if name in ("sandy clay", "silty clay", "clay")]
    if not clays:
        return []
    return [
        f"soil: {', '.join(clays)}: parameters are of structureless soil; structured and swelling "
        "clays can lie far below them (McIntyre 1982: in wet clay cores rise beyond 0.3 m was "
        "very slow)"
    ]


def _references(settings: Settings) -> tuple[tuple[SoilSet, ...], Scheme]:
    faults: list[str] = code_faults(settings)
    sets: list[SoilSet] = []
    scheme = None
    for name in settings.soil.sets if settings.soil.method == "classes" else ():
        try:
            sets.append(load_soil_set(name, settings.base, settings.soil.conductivity))
        except InputError as error:
            faults += [settings.fault("soil.parameters", text) for text in error.faults]
    try:
        scheme = load_scheme(settings.hazard.scheme, settings.base)
    except InputError as error:
        faults += [settings.fault("hazard.scheme", text) for text in error.faults]
    if faults or scheme is None:
        raise InputError(*faults)
    return tuple(sets), scheme


def _scan(
    inputs: Inputs, settings: Settings, done: Callable[[int, int], None], *, whole: bool
) -> BlockScan:
    total = len(list(inputs.grid.tiles(settings.run.tile)))
    seen = 0

    def heard(_: BlockScan) -> None:
        nonlocal seen
        seen += 1
        done(seen, total)

    each = partial(on_threads, workers=settings.workers, done=heard)
    if whole:
        return scan(inputs, settings.run.tile, each)
    look = first_look(inputs)
    # Regressions have no classes to know beforehand; what cannot be a tile finds.
    by_class = settings.soil.method == "classes"
    soil = [role for role in inputs.rasters if by_class and is_soil(role)]
    soil += ["root_depth"] if inputs.stacked and "root_depth" in inputs.rasters else []
    if not soil:
        return look
    found = scan(inputs, settings.run.tile, each, roles=soil)
    return replace(
        look, codes=found.codes, wrong_fractions=found.wrong_fractions, stacks=found.stacks
    )


def make_plan(region: Region, work: Path, run: str) -> Plan:
    """Settle everything the tiles need: in the folder `work`, for the run of that name."""
    settings, grid = region.settings, region.inputs.grid
    middle = grid.block_at(grid.height // 2, grid.width // 2)
    nominal = float(cell_areas(grid, middle).flat[0])
    shapes: ZoneShapes = prepare_zones(region.zones.grid_geometries if region.zones else [], grid)
    return Plan(
        work=work,
        run=run,
        grid=grid,
        readers={role: BlockReader(aligned) for role, aligned in region.inputs.rasters.items()},
        recipe=make_recipe(region),
        zones=shapes,
        unit_m2=nominal * 2.0**-16,
        layers=settings.layers,
        compression=settings.output.compression,
        assembly=settings.output.assembly,
        rounded=settings.output.precision == "rounded",
        tile=settings.run.tile,
    )


def make_recipe(region: Region) -> Recipe:
    """The parameters of the physics, from settings, survey and soil sets."""
    settings = region.settings
    water, groundwater = settings.water_table, settings.groundwater
    curves, soil = soil_of(settings, region.inputs, region.soils, region.sets)
    return Recipe(
        curves=curves[0],
        other_curves=tuple(curves[1:]),
        soil=soil,
        seasons=seasons_of(settings),
        depth_factor=float(depth_in_m(1.0, water.unit)),
        tds_factor=float(tds_in_g_per_l(1.0, groundwater.unit, groundwater.tds_per_ec)),
        target_load=settings.hazard.target_load,
        scheme=region.scheme,
        constants=region.inputs.constants,
        layers=frozenset(settings.layers),
    )


def seasons_of(settings: Settings) -> tuple[Season, ...]:
    """The parts of the year, with where each takes its inputs from."""
    climate, mulch = settings.climate, 1.0 - settings.surface.mulch
    year = settings.days_per_year

    def factor(days: float, coefficient: float) -> float:
        """From potential evaporation in the config's unit to demand over the season [mm]."""
        share = days / year if climate.unit == "mm/year" else days
        return share * coefficient * mulch

    main = "depth" if settings.water_table.depth is not None else ""
    if not settings.seasons:
        return (
            Season(
                "",
                year,
                main,
                "salinity",
                "potential_evaporation",
                factor(year, climate.coefficient),
            ),
        )
    seasons = []
    for k, season in enumerate(settings.seasons):
        own = {
            role: f"{role}{at_layer(k)}" if getattr(season, role) is not None else ""
            for role in ("depth", "salinity", "potential_evaporation", "rain", "irrigation")
        }
        seasons.append(
            Season(
                season.name,
                season.days,
                own["depth"] or main,
                own["salinity"] or "salinity",
                own["potential_evaporation"] or "potential_evaporation",
                factor(season.days, season.coefficient or climate.coefficient),
                own["rain"],
                own["irrigation"],
            )
        )
    return tuple(seasons)
