"""The job on arrays of cells: inputs and parameters in, layer values out.

Pure NumPy: no files, no grid, no tiles. Each layer's values are bound to their function here and
nowhere else.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from saltrise.physics.curve import RiseCurves
from saltrise.physics.demand import at_surface, groundwater_evaporation
from saltrise.physics.salt import critical_depth, salt_load
from saltrise.physics.texture import class_of_fractions
from saltrise.schemes import SURFACE_CLASS, Scheme
from saltrise.units import DAYS_PER_YEAR
from saltrise.zonal import ZoneValues

Array = NDArray[np.float64]


class UnmappedCodeError(ValueError):
    """A texture code that no profile was made for."""


@dataclass(frozen=True)
class Recipe:
    """Everything but the rasters that decides a cell's answer.

    Attributes
    ----------
    curves : RiseCurves
        Rise curves of the region's profiles.
    other_curves : tuple of RiseCurves
        Those of the same profiles under other parameter sets, for comparison.
    first_code : int
        Texture code of the first entry of `profile_of_code`.
    profile_of_code : int array
        Profile of each code from `first_code` on; -1 masks the cell, -2 is no known code.
    depth_factor, tds_factor, evaporation_factor : float
        From the config's units to m, g/L and mm/day.
    coefficient : float
        Potential evaporation to evaporative demand [-], mulch taken off.
    target_load : float
        Target load [t/ha/year].
    scheme : Scheme
        Breaks of the hazard classes.
    constants : dict
        Inputs given as numbers, by role, in the config's units.
    fraction_divisor : float
        From the unit of sand, clay and silt to %.
    """

    curves: RiseCurves
    other_curves: tuple[RiseCurves, ...]
    first_code: int
    profile_of_code: NDArray[np.int32]
    depth_factor: float
    tds_factor: float
    evaporation_factor: float
    coefficient: float
    target_load: float
    scheme: Scheme
    constants: dict[str, float]
    fraction_divisor: float = 1.0


@dataclass(frozen=True)
class CellResult:
    """Answer of an array of cells before rounding.

    `values` holds the continuous layers by name; where not `valid` their content is finite but
    means nothing. `counts` are numbers of cells; `other_loads` are salt loads [t/ha/year] under
    the recipe's other parameter sets.
    """

    values: dict[str, Array]
    hazard_class: NDArray[np.uint8]
    valid: NDArray[np.bool_]
    depth: Array
    counts: dict[str, int]
    other_loads: tuple[Array, ...]

    def zone_values(self) -> ZoneValues:
        """The cells as the zone sums take them."""
        return ZoneValues(
            depth_m=self.depth.ravel(),
            evaporation_mm_per_year=self.values["evaporation"].ravel(),
            salt_load=self.values["salt_load"].ravel(),
            critical_depth=self.values["critical_depth"].ravel(),
            depth_margin=self.values["depth_margin"].ravel(),
            hazard_class=self.hazard_class.ravel(),
            other_loads=tuple(load.ravel() for load in self.other_loads),
        )


def compute_cells(
    recipe: Recipe,
    inputs: Mapping[str, NDArray[np.float32] | Array],
    shape: tuple[int, int],
) -> CellResult:
    """Every layer of some cells.

    Parameters
    ----------
    recipe : Recipe
        Parameters of the region.
    inputs : dict of float arrays, each of `shape`
        Raster inputs by role (`depth`, or `ground` and `elevation`; `texture`, or `sand`, `clay`
        and perhaps `silt`; `salinity`; `potential_evaporation`) in the config's units, NaN where
        there is no value.
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
    given: dict[str, Array] = {role: values.astype(np.float64) for role, values in inputs.items()}
    given |= {role: np.full(shape, value) for role, value in recipe.constants.items()}
    depth, tds, demand = converted(recipe, given)
    profile, no_texture = _profiles(recipe, _texture(recipe, given))
    missing = {
        "no_depth": ~np.isfinite(depth),
        "no_texture": no_texture,
        "not_soil": profile < 0,
        "no_salinity": ~np.isfinite(tds),
        "no_potential_evaporation": ~np.isfinite(demand),
    }
    valid, counts = _masked(missing, shape)
    if not valid.all():
        # Harmless numbers where there is no answer, so that sums may weigh them with 0.
        gone = ~valid
        profile[gone], depth[gone], tds[gone], demand[gone] = 0, 1.0, 0.0, 0.0
    values = _layers(recipe, profile, depth, tds, demand)
    others = tuple(_load(curves, profile, depth, tds, demand)[2] for curves in recipe.other_curves)
    if others:
        loads = (values["salt_load"], *others)
        values["salt_load_lowest_set"] = np.minimum.reduce(loads)
        values["salt_load_highest_set"] = np.maximum.reduce(loads)
    classes = recipe.scheme.classify(values[recipe.scheme.layer])
    surface = at_surface(depth)
    limited = valid & ~surface & (values["max_evaporation"] >= demand)
    classes[surface] = SURFACE_CLASS
    classes[~valid] = 0
    counts["at_surface"] = int(np.count_nonzero(valid & surface))
    counts["assessed"] = int(np.count_nonzero(valid)) - counts["at_surface"]
    counts["demand_limited"] = int(np.count_nonzero(limited))
    return CellResult(values, classes, valid, depth, counts, others)


def converted(recipe: Recipe, given: Mapping[str, Array]) -> tuple[Array, Array, Array]:
    """Depth [m], TDS [g/L] and evaporative demand [mm/day] from inputs in the config's units."""
    depth = given["depth"] if "depth" in given else given["ground"] - given["elevation"]
    demand = given["potential_evaporation"] * (recipe.evaporation_factor * recipe.coefficient)
    return depth * recipe.depth_factor, given["salinity"] * recipe.tds_factor, demand


def _texture(recipe: Recipe, given: dict[str, Array]) -> Array:
    """Texture codes: as given, or the number of the class that the fractions make."""
    if "texture" in given:
        return given["texture"]
    classes, wrong = class_of_fractions(given, recipe.fraction_divisor)
    if wrong.any():
        raise UnmappedCodeError("sand, clay and silt do not add up")
    return classes


def _profiles(recipe: Recipe, texture: Array) -> tuple[NDArray[np.int32], NDArray[np.bool_]]:
    """Profile of each cell, -1 where masked or without texture; and where there is no texture."""
    missing = np.isnan(texture)
    known = np.where(missing, recipe.first_code, texture)
    position = known.astype(np.int64)
    position -= recipe.first_code
    size = recipe.profile_of_code.size
    if position.min() < 0 or position.max() >= size:
        raise UnmappedCodeError(f"texture code {known.min():g} or {known.max():g} is not mapped")
    profile: NDArray[np.int32] = recipe.profile_of_code[position]
    if profile.min() < -1:
        raise UnmappedCodeError(
            f"texture code {known.flat[int(np.argmin(profile))]:g} is not mapped"
        )
    profile[missing] = -1
    return profile, missing


def _masked(
    missing: dict[str, NDArray[np.bool_]], shape: tuple[int, int]
) -> tuple[NDArray[np.bool_], dict[str, int]]:
    """Valid cells, and how many each reason masks; a cell counts under its first reason."""
    valid = np.ones(shape, dtype=bool)
    counts = {"cells": valid.size}
    for reason, where in missing.items():
        counts[reason] = int(np.count_nonzero(valid & where))
        if counts[reason]:
            valid &= ~where
    return valid, counts


def _load(
    curves: RiseCurves, profile: NDArray[np.int32], depth: Array, tds: Array, demand: Array
) -> tuple[Array, Array, Array]:
    """Maximum evaporation [mm/day], evaporation [mm/year] and salt load [t/ha/year]."""
    maximum = curves.max_evaporation(profile, depth)
    evaporation = groundwater_evaporation(maximum, demand, depth) * DAYS_PER_YEAR
    return maximum, evaporation, salt_load(evaporation, tds)


def _layers(
    recipe: Recipe, profile: NDArray[np.int32], depth: Array, tds: Array, demand: Array
) -> dict[str, Array]:
    maximum, evaporation, load = _load(recipe.curves, profile, depth, tds, demand)
    critical = critical_depth(recipe.curves, profile, demand, tds, recipe.target_load)
    return {
        "max_evaporation": maximum,
        "evaporation": evaporation,
        "salt_load": load,
        "critical_depth": critical,
        "depth_margin": depth - critical,
    }
