"""From evaporation to salt load, and from a target load back to a critical depth."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Protocol, TypeVar

import numpy as np
from numpy.typing import ArrayLike, NDArray

from saltrise.kernels.cells import settle_critical
from saltrise.physics.curve import DEEPEST_M, SURFACE_DEPTH_M
from saltrise.physics.year import Part, flux_of_load, full_load, last_break

Floats = NDArray[np.float64]
Cells_contra = TypeVar("Cells_contra", contravariant=True)

PER_HUNDRED = 100.0
"""1 mm over a hectare is 10 m3; at 1 g/L that is 10 kg: 100 mm x g/L are 1 t/ha."""

_ALL = 1.0 - 1e-12
"""Share of the full load from which every season counts as limited by its demand."""


class Curves(Protocol[Cells_contra]):
    """Rise curves of a region's cells, whatever a cell is to them."""

    def max_evaporation(self, cells: Cells_contra, depth_m: Floats) -> Floats:
        """Maximum steady evaporation [mm/day] over a rise [m]."""

    def critical_depth(self, cells: Cells_contra, flux_mm_per_day: Floats) -> Floats:
        """Rise [m] from which a flux [mm/day] is lifted: 0.001 to 30 m."""


def salt_load(evaporation_mm: Floats, tds_g_per_l: Floats) -> Floats:
    """Gross salt rise [t/ha] = evaporation [mm] x TDS [g/L] / 100, over one and the same time."""
    load: Floats = evaporation_mm * tds_g_per_l / PER_HUNDRED
    return load


def critical_depth(
    curves: Curves[Cells_contra],
    cells: Cells_contra,
    seasons: Sequence[Part],
    target_load: float,
    root_depth_m: Floats | None = None,
) -> Floats:
    """Shallowest constant water table [m] at which the load stays within the target load.

    Parameters
    ----------
    curves : Curves
        The region's curves.
    cells : what `curves` takes
        The cells' soils.
    seasons : sequence of Part
        The year's demands and salinities; one part where it has no seasons.
    target_load : float
        Target load [t/ha/year], > 0.
    root_depth_m : float64 array, optional
        Lower edge of the root zone [m below ground], where the rise ends.

    Returns
    -------
    float64 array
        0 where even the demand carries no more than the target or the water holds no salt; else
        0.001 to 30 m. NaN where an argument is.
    """
    most, target = full_load(seasons), target_load * PER_HUNDRED
    depth = depth_of_flux(curves, cells, flux_of_load(seasons, target), root_depth_m)
    settle_critical(most.ravel(), target, depth.reshape(-1))
    return depth


def effective_depth(
    curves: Curves[Cells_contra],
    cells: Cells_contra,
    seasons: Sequence[Part],
    rise_mm: Sequence[Floats],
    mean_depth_m: Floats,
    root_depth_m: Floats | None = None,
) -> Floats:
    """Constant water table [m] that brings the same load in a year as the seasons' own depths.

    Where every season is limited by its demand, many do: then the lesser of the mean depth and
    the deepest of them. It is shallower than the critical depth just where the load exceeds the
    target, which a mean depth is not.

    Parameters
    ----------
    curves, cells, seasons, root_depth_m
        As in `critical_depth`.
    rise_mm : sequence of float64 arrays
        Evaporation of each season [mm].
    mean_depth_m : float64 array
        Mean depth, by days [m].
    """
    load = np.zeros_like(mean_depth_m)
    for part, rise in zip(seasons, rise_mm, strict=True):
        load += rise * part.tds_g_per_l
    limited = load >= full_load(seasons) * _ALL
    flux = np.where(limited, last_break(seasons), flux_of_load(seasons, load))
    depth = depth_of_flux(curves, cells, flux, root_depth_m)
    least = np.where(flux > 0.0, np.minimum(mean_depth_m, depth), mean_depth_m)
    return np.where(limited, least, depth)


def depth_of_flux(
    curves: Curves[Cells_contra],
    cells: Cells_contra,
    flux_mm_per_day: Floats,
    root_depth_m: Floats | None,
) -> Floats:
    """Water table [m below ground] from which a flux is lifted to the surface or the roots."""
    rise = curves.critical_depth(cells, flux_mm_per_day)
    if root_depth_m is None:
        return rise
    # More than the soil lifts over the least rise: roots or not, any depth brings too little.
    return np.where(rise <= SURFACE_DEPTH_M, rise, np.minimum(rise + root_depth_m, DEEPEST_M))


def leaching_equivalent(load_t_per_ha: ArrayLike, ece_ds_per_m: float = 4.0) -> Floats:
    """Drainage [mm/year] at full leaching efficiency that carries a load [t/ha/year] away.

    Drainage leaves at about twice the salinity of the saturation extract, at 640 mg/L per dS/m
    (USDA Handbook 60, 1954: field water content is about half of saturation; common practice, no
    single source).

    Parameters
    ----------
    load_t_per_ha : array_like
        Salt to carry away [t/ha/year].
    ece_ds_per_m : float
        Salinity of the saturation extract to hold [dS/m].
    """
    drainage_g_per_l = 2.0 * ece_ds_per_m * 0.64
    loads: Floats = np.asarray(load_t_per_ha, dtype=np.float64)
    return loads * PER_HUNDRED / drainage_g_per_l
