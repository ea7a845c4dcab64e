"""A year of seasons: what each brings, and the constant flux that would bring as much.

The rise of a season is the lesser of what the soil can lift and the season's evaporative demand;
the year's load is a sum over seasons. Evaporation is convex in depth, so a mean depth would not
do: every season is computed at its own.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels import cells

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Part:
    """One season's cells: `days` long, evaporative `demand_mm` over it, groundwater TDS."""

    days: float
    demand_mm: Floats
    tds_g_per_l: Floats


def net_demand(
    potential_mm: Floats, rain_mm: Floats | None, irrigation_mm: Floats | None
) -> tuple[Floats, Floats]:
    """Evaporative demand that rain and irrigation leave, and what they bring beyond it.

    Parameters
    ----------
    potential_mm : float64 array
        Evaporative demand over the season [mm], >= 0, coefficient and mulch applied.
    rain_mm, irrigation_mm : float64 arrays or None
        Effective depths over the season [mm].

    Returns
    -------
    demand, percolation : float64 arrays
        [mm] over the season, >= 0; one of them is 0.
    """
    if rain_mm is None and irrigation_mm is None:
        return potential_mm, np.zeros_like(potential_mm)
    balance = potential_mm
    for water in (rain_mm, irrigation_mm):
        if water is not None:
            balance = balance - water
    return np.maximum(balance, 0.0), np.maximum(-balance, 0.0)


def full_load(parts: Sequence[Part]) -> Floats:
    """Salt that the demands of all seasons would carry [mm g/L], the most a year can bring."""
    total = parts[0].demand_mm * parts[0].tds_g_per_l
    for part in parts[1:]:
        total = total + part.demand_mm * part.tds_g_per_l
    return total


def flux_of_load(parts: Sequence[Part], load: Floats | float) -> Floats:
    """Constant flux [mm/day] that, capped by each season's demand, brings a load in a year.

    Solves sum of min(E days, demand) TDS = load, which is piecewise linear in E, exactly: from
    the greatest flux at which a season's demand is met and the load not yet reached, in a
    straight line.

    Parameters
    ----------
    parts : sequence of Part
        The seasons.
    load : float64 array or float
        [mm g/L] over the year: t/ha times 100.

    Returns
    -------
    float64 array
        Infinite where no flux brings the load.
    """
    shape = parts[0].demand_mm.shape
    days = np.array([part.days for part in parts])
    demand, tds = _stacked([p.demand_mm for p in parts]), _stacked([p.tds_g_per_l for p in parts])
    wanted = np.broadcast_to(load, shape).ravel()
    flux = np.empty(wanted.size)
    cells.flux_of_load(days, demand, tds, wanted, flux)
    return flux.reshape(shape)


def _stacked(seasons: Sequence[Floats]) -> Floats:
    """A row a season."""
    if len(seasons) == 1:
        return seasons[0].reshape(1, -1)
    return np.array([values.ravel() for values in seasons])


def last_break(parts: Sequence[Part]) -> Floats:
    """Least flux [mm/day] that meets the demand of every season with salt in its water."""
    found = np.zeros_like(parts[0].demand_mm)
    for part in parts:
        found = np.maximum(found, np.where(part.tds_g_per_l > 0, part.demand_mm / part.days, 0.0))
    return found
