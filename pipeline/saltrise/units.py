"""Units a config may declare, and what turns them into the units used inside.

Inside: depths in m, evaporation in mm/day, groundwater salinity as total dissolved solids (TDS)
in g/L. A year has 365 days.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from types import MappingProxyType

import numpy as np
from numpy.typing import ArrayLike, NDArray

from saltrise.errors import InputError

DAYS_PER_YEAR = 365.0
"""Days in a year wherever a yearly rate meets a daily one."""

TDS_PER_EC = 640.0
"""Usual TDS per electrical conductivity, mg/L per dS/m (USDA Handbook 60, 1954); about 800
above 5 dS/m."""

DEPTH_UNITS: Mapping[str, float] = MappingProxyType({"m": 1.0, "cm": 0.01, "ft": 0.3048})
"""Metres in one unit of depth (`ft` is the international foot)."""

CONDUCTIVITY_UNITS: Mapping[str, float] = MappingProxyType(
    {"dS/m": 1.0, "mS/cm": 1.0, "uS/cm": 1e-3}
)
"""dS/m in one unit of electrical conductivity at 25 C."""

CONCENTRATION_UNITS: Mapping[str, float] = MappingProxyType({"mg/L": 1e-3, "g/L": 1.0})
"""g/L in one unit of TDS."""

SALINITY_UNITS: tuple[str, ...] = (*CONDUCTIVITY_UNITS, *CONCENTRATION_UNITS)
"""Every unit of groundwater salinity: conductivities first, then concentrations."""

EVAPORATION_UNITS: Mapping[str, float] = MappingProxyType({"mm/year": DAYS_PER_YEAR, "mm/day": 1.0})
"""Days over which one unit of evaporation is counted."""


def is_conductivity(unit: str) -> bool:
    """Whether a salinity unit is a conductivity, so that it needs a TDS factor."""
    return unit in CONDUCTIVITY_UNITS


def depth_in_m(depth: ArrayLike, unit: str) -> NDArray[np.float64]:
    """Depths in m.

    Parameters
    ----------
    depth : array_like
        Depths in `unit`, any shape.
    unit : str
        A key of `DEPTH_UNITS`.

    Raises
    ------
    InputError
        Unknown unit.
    """
    return np.asarray(depth, dtype=np.float64) * _factor(unit, DEPTH_UNITS, "depth")


def tds_in_g_per_l(
    salinity: ArrayLike, unit: str, tds_per_ec: float = TDS_PER_EC
) -> NDArray[np.float64]:
    """Total dissolved solids in g/L.

    Parameters
    ----------
    salinity : array_like
        Conductivities at 25 C or concentrations in `unit`, any shape.
    unit : str
        One of `SALINITY_UNITS`.
    tds_per_ec : float
        TDS per conductivity, mg/L per dS/m; used with a conductivity only.

    Raises
    ------
    InputError
        Unknown unit.
    """
    values = np.asarray(salinity, dtype=np.float64)
    if is_conductivity(unit):
        return values * (CONDUCTIVITY_UNITS[unit] * tds_per_ec * CONCENTRATION_UNITS["mg/L"])
    if unit in CONCENTRATION_UNITS:
        return values * CONCENTRATION_UNITS[unit]
    raise _unknown(unit, SALINITY_UNITS, "salinity")


def evaporation_in_mm_per_day(evaporation: ArrayLike, unit: str) -> NDArray[np.float64]:
    """Evaporation rates in mm/day.

    Parameters
    ----------
    evaporation : array_like
        Rates in `unit`, any shape.
    unit : str
        A key of `EVAPORATION_UNITS`; a year has 365 days.

    Raises
    ------
    InputError
        Unknown unit.
    """
    return np.asarray(evaporation, dtype=np.float64) / _factor(
        unit, EVAPORATION_UNITS, "evaporation"
    )


def _factor(unit: str, units: Mapping[str, float], quantity: str) -> float:
    if unit not in units:
        raise _unknown(unit, units, quantity)
    return units[unit]


def _unknown(unit: str, units: Iterable[str], quantity: str) -> InputError:
    return InputError(f"{quantity} unit: is {unit!r}, allowed: {', '.join(units)}")
