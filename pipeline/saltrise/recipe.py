"""The job on arrays of cells: inputs and parameters in, layer values out.

Arrays alone: no files, no grid, no tiles. Each layer's values are bound to their function here and
nowhere else.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.cells import mark, scale
from saltrise.layers import season_layer
from saltrise.physics.curve import RiseCurves
from saltrise.physics.demand import at_surface, capped
from saltrise.physics.salt import Curves, critical_depth, effective_depth, salt_load
from saltrise.physics.year import Part, net_demand
from saltrise.schemes import SURFACE_CLASS, Scheme
from saltrise.soil_cells import Soil
from saltrise.zonal import ZoneValues

Array = NDArray[np.float64]
Values = NDArray[np.float32] | NDArray[np.float64]


@dataclass(frozen=True)
class Season:
    """Part of the year: where its inputs come from and how they are converted.

    `demand_factor` turns potential evaporation in the config's unit into evaporative demand over
    the season [mm]; `rain` and `irrigation` [mm] are roles, empty where not given; `depth` is
    empty where it is ground minus elevation.
    """

    name: str
    days: float
    depth: str
    salinity: str
    potential_evaporation: str
    demand_factor: float
    rain: str = ""
    irrigation: str = ""


@dataclass(frozen=True)
class Recipe:
    """Everything but the rasters that decides a cell's answer.

    Attributes
    ----------
    curves : Curves
        Rise curves of the region's soils.
    other_curves : tuple of Curves
        Those of the same soils under other parameter sets, for comparison.
    soil : Soil
        How soil inputs choose a curve.
    seasons : tuple of Season
        Parts of the year; one where the config has none.
    depth_factor, tds_factor : float
        From the config's units to m and g/L.
    target_load : float
        Target load [t/ha/year].
    scheme : Scheme
        Breaks of the hazard classes.
    constants : dict
        Inputs given as numbers, by role, in the config's units.
    layers : frozenset of str
        Layers of single seasons that are wanted, and others that cost.
    """

    curves: Curves[Any]
    other_curves: tuple[Curves[Any], ...]
    soil: Soil
    seasons: tuple[Season, ...]
    depth_factor: float
    tds_factor: float
    target_load: float
    scheme: Scheme
    constants: dict[str, float]
    layers: frozenset[str] = field(default_factory=frozenset)

    @property
    def days(self) -> float:
        """Days of the year."""
        return sum(season.days for season in self.seasons)

    @property
    def extra_sums(self) -> tuple[str, ...]:
        """What zones sum up beside their fixed figures."""
        waters = ("net_demand", "percolation") if self.seasonal else ()
        return (*(f"salt_load_set_{k}" for k in range(len(self.other_curves))), *waters)

    @property
    def seasonal(self) -> bool:
        """Whether the config gives seasons."""
        return bool(self.seasons[0].name)


@dataclass(frozen=True)
class CellResult:
    """Answer of an array of cells before rounding.

    `values` holds the continuous layers by name; where not `valid` their content is finite but
    means nothing. `counts` are numbers of cells; `extras` the values of `Recipe.extra_sums`.
    """

    values: dict[str, Array]
    hazard_class: NDArray[np.uint8]
    valid: NDArray[np.bool_]
    depth: Array
    tds: Array
    counts: dict[str, int]
    extras: tuple[Array, ...]

    def zone_values(self) -> ZoneValues:
        """The cells as the zone sums take them."""
        return ZoneValues(
            depth_m=self.depth.ravel(),
            evaporation_mm_per_year=self.values["evaporation"].ravel(),
            salt_load=self.values["salt_load"].ravel(),
            critical_depth=self.values["critical_depth"].ravel(),
            depth_margin=self.values["depth_margin"].ravel(),
            hazard_class=self.hazard_class.ravel(),
            tds_g_per_l=self.tds.ravel(),
            extras=tuple(values.ravel() for values in self.extras),
        )


@dataclass
class _Water:
    """One season's cells in the units used inside."""

    depth: Array
    tds: Array
    demand: Array
    percolation: Array


@dataclass(frozen=True)
class _Year:
    """Sums over the seasons, and what each season brought."""

    maximum: Array
    rises: list[Array]
    evaporation: Array
    load: Array
    limited: NDArray[np.bool_]
    maxima: list[Array]
    response: Array | None
    slow: NDArray[np.bool_]


def compute_cells(
    recipe: Recipe,
    inputs: Mapping[str, Values],
    shape: tuple[int, int],
) -> CellResult:
    """Every layer of some cells.

    Parameters
    ----------
    recipe : Recipe
        Parameters of the region.
    inputs : dict of float arrays, each of `shape`
        Raster inputs by role, in the config's units, NaN where there is no value.
    shape : (int, int)
        Rows and columns.

    Returns
    -------
    CellResult
        A cell with NaN in any needed input is not valid in any layer.

    Raises
    ------
    UnmappedCodeError
        A texture code has no profile, or fractions do not add up.
    """
    given: dict[str, Values] = dict(inputs)
    given |= {role: np.full(shape, value) for role, value in recipe.constants.items()}
    soil = recipe.soil.cells(given)
    waters = converted(recipe, given)
    root = _doubled(given.get("root_depth"))
    missing: dict[str, list[Array] | NDArray[np.bool_]] = {
        "no_depth": [water.depth for water in waters],
        "no_texture": soil.missing,
        "not_soil": soil.not_soil,
        "no_salinity": [water.tds for water in waters],
        "no_potential_evaporation": [water.demand for water in waters],
    }
    if root is not None:
        missing["no_root_depth"] = [root]
    valid, counts = _masked(missing, shape)
    counts |= soil.counts
    if not valid.all():
        # Harmless numbers where there is no answer, so that sums may weigh them with 0.
        gone = ~valid
        for water in waters:
            water.depth[gone], water.tds[gone], water.demand[gone] = 1.0, 0.0, 0.0
            water.percolation[gone] = 0.0
        if root is not None:
            root[gone] = 0.0
    return _answer(recipe, soil.cells, waters, root, valid, counts)


def _answer(
    recipe: Recipe,
    cells: Any,
    waters: list[_Water],
    root: Array | None,
    valid: NDArray[np.bool_],
    counts: dict[str, int],
) -> CellResult:
    depth = _mean(recipe, [water.depth for water in waters])
    year = _year(recipe, recipe.curves, cells, waters, root)
    values = _layers(recipe, cells, waters, root, year, depth)
    others = [_year(recipe, c, cells, waters, root).load for c in recipe.other_curves]
    if others:
        loads = (values["salt_load"], *others)
        values["salt_load_lowest_set"] = np.minimum.reduce(loads)
        values["salt_load_highest_set"] = np.maximum.reduce(loads)
    classes = recipe.scheme.classify(values[recipe.scheme.layer])
    surface = _flooded(waters)
    classes[surface] = SURFACE_CLASS
    classes[~valid] = 0
    counts["at_surface"] = int(np.count_nonzero(valid & surface))
    counts["assessed"] = int(np.count_nonzero(valid)) - counts["at_surface"]
    counts["demand_limited"] = int(np.count_nonzero(valid & ~surface & year.limited))
    waters_sums = [values[name] for name in recipe.extra_sums[len(others) :]]
    if "response_time" in recipe.layers:
        counts["slower_than_season"] = int(np.count_nonzero(valid & year.slow))
    tds = _mean(recipe, [water.tds for water in waters])
    return CellResult(values, classes, valid, depth, tds, counts, (*others, *waters_sums))


def converted(recipe: Recipe, given: Mapping[str, Values]) -> list[_Water]:
    """Depth [m], TDS [g/L], demand and percolation [mm] of each season from the config's units."""
    waters = []
    for season in recipe.seasons:
        if season.depth:
            depth = _scaled(given[season.depth], recipe.depth_factor)
        else:
            apart = np.subtract(given["ground"], given["elevation"], dtype=np.float64)
            depth = apart * recipe.depth_factor
        demand, percolation = net_demand(
            _scaled(given[season.potential_evaporation], season.demand_factor),
            _doubled(given.get(season.rain)),
            _doubled(given.get(season.irrigation)),
        )
        tds = _scaled(given[season.salinity], recipe.tds_factor)
        waters.append(_Water(depth, tds, demand, percolation))
    return waters


def _scaled(values: Values, factor: float) -> Array:
    scaled = np.empty(values.size)
    scale(values.ravel(), factor, scaled)
    return scaled.reshape(values.shape)


def _doubled(values: Values | None) -> Array | None:
    """A copy in float64 that may be changed."""
    return None if values is None else values.astype(np.float64)


def _flooded(waters: list[_Water]) -> NDArray[np.bool_]:
    """Where water stands at or above the surface in every season."""
    surface = at_surface(waters[0].depth)
    for water in waters[1:]:
        surface &= at_surface(water.depth)
    return surface


def _masked(
    missing: dict[str, list[Array] | NDArray[np.bool_]], shape: tuple[int, int]
) -> tuple[NDArray[np.bool_], dict[str, int]]:
    """Valid cells, and how many each reason masks; a cell counts under its first reason.

    A reason is where it holds, or values of which some is not finite.
    """
    reasons = np.zeros(shape, dtype=np.uint8)
    counts = {"cells": reasons.size}
    for number, (name, where) in enumerate(missing.items(), start=1):
        if isinstance(where, list):
            counts[name] = sum(mark(v.ravel(), number, reasons.reshape(-1)) for v in where)
            continue
        counts[name] = 0
        if where.any():
            found = where & (reasons == 0)
            counts[name] = int(np.count_nonzero(found))
            reasons[found] = number
    return reasons == 0, counts


def _mean(recipe: Recipe, seasons: list[Array]) -> Array:
    """Mean over the year, by days."""
    if len(seasons) == 1:
        return seasons[0]
    total = np.zeros_like(seasons[0])
    for season, values in zip(recipe.seasons, seasons, strict=True):
        total += values * (season.days / recipe.days)
    return total


def _year(
    recipe: Recipe, curves: Curves[Any], cells: Any, waters: list[_Water], root: Array | None
) -> _Year:
    maxima, rises = [], []
    shape = waters[0].depth.shape
    limited, slow = np.ones(shape, dtype=bool), np.zeros(shape, dtype=bool)
    response = None
    for season, water in zip(recipe.seasons, waters, strict=True):
        rise_m = water.depth if root is None else water.depth - root
        maximum = curves.max_evaporation(cells, rise_m)
        if isinstance(curves, RiseCurves) and curves.response is not None:
            days = curves.response_days(cells, rise_m)
            slow |= (days > season.days) & ~at_surface(water.depth)
            response = days if response is None else np.maximum(response, days)
        rise = capped(maximum * season.days, water.demand, water.depth)
        limited &= rise >= water.demand
        maxima.append(maximum)
        rises.append(rise)
    evaporation, load = rises[0], salt_load(rises[0], waters[0].tds)
    for water, rise in zip(waters[1:], rises[1:], strict=True):
        evaporation, load = evaporation + rise, load + salt_load(rise, water.tds)
    mean = _mean(recipe, maxima)
    return _Year(mean, rises, evaporation, load, limited, maxima, response, slow)


def _layers(
    recipe: Recipe,
    cells: Any,
    waters: list[_Water],
    root: Array | None,
    year: _Year,
    depth: Array,
) -> dict[str, Array]:
    parts = [
        Part(season.days, water.demand, water.tds)
        for season, water in zip(recipe.seasons, waters, strict=True)
    ]
    critical = critical_depth(recipe.curves, cells, parts, recipe.target_load, root)
    effective = depth
    if len(parts) > 1:
        found = effective_depth(recipe.curves, cells, parts, year.rises, depth, root)
        # Where some season's water lies below ground, no constant depth above it brings the same.
        effective = np.where(_flooded(waters), depth, np.maximum(found, 0.0))
    values = {
        "max_evaporation": year.maximum,
        "evaporation": year.evaporation,
        "salt_load": year.load,
        "critical_depth": critical,
        "depth_margin": effective - critical,
    }
    if year.response is not None and "response_time" in recipe.layers:
        values["response_time"] = year.response
    if recipe.seasonal:
        values["net_demand"] = np.add.reduce([water.demand for water in waters])
        values["percolation"] = np.add.reduce([water.percolation for water in waters])
        values |= _season_layers(recipe, waters, year)
    return values


def _season_layers(recipe: Recipe, waters: list[_Water], year: _Year) -> dict[str, Array]:
    """Layers of single seasons, where they are wanted."""
    layers: dict[str, Array] = {}
    for k, (season, water) in enumerate(zip(recipe.seasons, waters, strict=True)):
        found = {
            "max_evaporation": year.maxima[k],
            "evaporation": year.rises[k],
            "salt_load": salt_load(year.rises[k], water.tds),
            "net_demand": water.demand,
            "percolation": water.percolation,
        }
        layers |= {season_layer(season.name, layer): values for layer, values in found.items()}
    return {name: values for name, values in layers.items() if name in recipe.layers}
