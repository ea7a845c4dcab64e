"""From evaporation to salt load, and from a target load back to a critical depth."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from saltrise.physics.curve import Indices, RiseCurves
from saltrise.units import DAYS_PER_YEAR

Floats = NDArray[np.float64]

_PER_HUNDRED = 100.0
"""1 mm over a hectare is 10 m3; at 1 g/L that is 10 kg: 100 mm x g/L are 1 t/ha."""


def salt_load(evaporation_mm_per_year: Floats, tds_g_per_l: Floats) -> Floats:
    """Gross yearly salt rise [t/ha/year] = evaporation [mm/year] x TDS [g/L] / 100."""
    load: Floats = evaporation_mm_per_year * tds_g_per_l / _PER_HUNDRED
    return load


def critical_flux(target_load: float, tds_g_per_l: Floats) -> Floats:
    """Flux [mm/day] that carries the target load [t/ha/year]; infinite for water without salt."""
    with np.errstate(divide="ignore"):
        flux: Floats = target_load * _PER_HUNDRED / DAYS_PER_YEAR / tds_g_per_l
    return flux


def critical_depth(
    curves: RiseCurves,
    profile: Indices,
    demand_mm_per_day: Floats,
    tds_g_per_l: Floats,
    target_load: float,
) -> Floats:
    """Shallowest water table [m] at which the load stays within the target load.

    Parameters
    ----------
    curves : RiseCurves
        The region's curves.
    profile : int array
        Profile of each cell.
    demand_mm_per_day : float64 array
        Evaporative demand [mm/day].
    tds_g_per_l : float64 array
        Total dissolved solids of the groundwater [g/L].
    target_load : float
        Target load [t/ha/year], > 0.

    Returns
    -------
    float64 array
        0 where even the demand carries no more than the target or the water holds no salt; else
        0.001 to 30 m. NaN where an argument is.
    """
    flux = critical_flux(target_load, tds_g_per_l)
    depth = curves.critical_depth(profile, flux)
    depth[demand_mm_per_day <= flux] = 0.0
    depth[np.isnan(demand_mm_per_day)] = np.nan
    return depth


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
    return loads * _PER_HUNDRED / drainage_g_per_l
