"""Soil parameter sets: one row a USDA texture class, every row with its source."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

from saltrise.errors import InputError
from saltrise.physics.profile import (
    Campbell,
    GardnerExponential,
    GardnerPower,
    Profile,
    VanGenuchten,
)

TEXTURES: tuple[str, ...] = (
    "sand",
    "loamy sand",
    "sandy loam",
    "loam",
    "silt loam",
    "silt",
    "sandy clay loam",
    "clay loam",
    "silty clay loam",
    "sandy clay",
    "silty clay",
    "clay",
)
"""The twelve texture classes of the USDA triangle, from coarse to fine."""

NOT_SOIL = "not soil"
"""Class of raster codes that are no soil (water, rock, built-up): such cells are masked."""

CAMPBELL = "campbell"
"""The law taken where none is named."""

LAWS: Mapping[str, type[Profile]] = MappingProxyType(
    {
        CAMPBELL: Campbell,
        "brooks-corey": Campbell,
        "van-genuchten": VanGenuchten,
        "gardner-power": GardnerPower,
        "gardner-exponential": GardnerExponential,
    }
)
"""Conductivity laws by name. Campbell's and Brooks and Corey's are one law, with b = 1/lambda."""


@dataclass(frozen=True)
class SoilRow:
    """One texture class of a set: its homogeneous profile, and where the numbers are from."""

    texture: str
    profile: Profile
    source: str


@dataclass(frozen=True)
class SoilSet:
    """A named parameter set: `rows` by texture class, `conductivity` the law they are for."""

    name: str
    title: str
    conductivity: str
    rows: Mapping[str, SoilRow]


def soil_for(soil_set: SoilSet, texture: str) -> SoilRow:
    """Row of a texture class.

    Parameters
    ----------
    soil_set : SoilSet
        The set in use.
    texture : str
        One of `TEXTURES`.

    Raises
    ------
    InputError
        The set has no row for the class (many sets know no silt), or there is no such class.
    """
    row = soil_set.rows.get(texture)
    if row is not None:
        return row
    if texture not in TEXTURES:
        raise InputError(
            f"texture class: is {texture!r}, allowed: {', '.join(TEXTURES)} or {NOT_SOIL!r}"
        )
    raise InputError(
        f"texture class {texture!r}: the parameter set {soil_set.name!r} has no row for it (it has "
        f"{', '.join(soil_set.rows)}); map the code to a neighbouring class in [soil.classes]"
        f"{_neighbour(soil_set, texture)}, or give in soil.parameters a CSV of your own with a row "
        f"for {texture}"
    )


def _neighbour(soil_set: SoilSet, texture: str) -> str:
    place = TEXTURES.index(texture)
    near = sorted(soil_set.rows, key=lambda other: abs(TEXTURES.index(other) - place))
    return f', such as "{near[0]}"' if near else ""
