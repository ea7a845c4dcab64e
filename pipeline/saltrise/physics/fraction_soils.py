"""Soils of cells from their fractions, by one of the published regressions."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from saltrise.physics import powers
from saltrise.physics.fraction_curves import (
    FractionCells,
    FractionCurves,
    fraction_curves,
)
from saltrise.physics.profile import Campbell, Profile
from saltrise.physics.regressions import (
    M_PER_KPA,
    SaxtonRawlsCells,
    campbell,
    clamped,
    cosby,
    saxton_rawls,
)
from saltrise.physics.saxton_rawls import SaxtonRawls

Floats = NDArray[np.float64]

MOIST_M = 33.0 * M_PER_KPA
"""Suction head [m] of 33 kPa."""

_B_RANGES = {"cosby1984": (3.38, 12.14), "campbell1985": (1.15, 32.0)}
_INDEX_RANGE = (0.03, 0.8)
"""Pore-size index 1/B after Saxton & Rawls, over all textures and 0 to 8 % organic matter."""


@dataclass(frozen=True)
class FractionSoils:
    """Soils of some cells, and where inputs or results had to be held inside their range."""

    cells: FractionCells
    outside: NDArray[np.bool_]


def soils_of(method: str, given: Mapping[str, Floats]) -> FractionSoils:
    """Soils by a method of `regressions.METHODS`.

    Parameters
    ----------
    method : str
        Its name.
    given : mapping of float64 arrays
        `sand` and `clay` [%], and `organic_matter` [%] or `bulk_density` [g/cm3] where the method
        needs it; no NaN.
    """
    held, outside = clamped(method, given)
    if method == "saxton-rawls2006":
        found = saxton_rawls(held["sand"], held["clay"], held["organic_matter"])
        return FractionSoils(_saxton_rawls_cells(found), outside | found.held)
    if method == "campbell1985":
        air_entry, b, ks = campbell(held["sand"], held["clay"], held["bulk_density"])
    else:
        air_entry, b, ks = cosby(held["sand"], held["clay"])
    n = 2.0 + 3.0 / b
    return FractionSoils(FractionCells(air_entry, ks, n), outside)


def _saxton_rawls_cells(found: SaxtonRawlsCells) -> FractionCells:
    share, p = found.theta_33 / found.theta_s, 3.0 + 2.0 * found.b
    n = 2.0 + 3.0 / found.b
    return FractionCells(
        found.air_entry_m,
        found.ks_mm_per_day,
        n,
        np.full(share.shape, MOIST_M),
        powers.power(share, p),
        share,
        1.0 / p,
    )


def _exponents(method: str) -> tuple[float, float]:
    """Range of the exponents n = 2 + 3/b that a method can give."""
    if method == "saxton-rawls2006":
        low, high = _INDEX_RANGE
        return 2.0 + 3.0 * low, 2.0 + 3.0 * high
    low, high = _B_RANGES[method]
    return 2.0 + 3.0 / high, 2.0 + 3.0 / low


def curves_for(method: str, suction_m: float) -> FractionCurves:
    """Curves for all soils that a method can give, to a suction [m] at the top."""
    inverse = None
    if method == "saxton-rawls2006":
        ends = [1.0 / (3.0 + 2.0 / index) for index in _INDEX_RANGE]
        inverse = (ends[0], ends[1])
    return fraction_curves(_exponents(method), inverse, suction_m)


def profile_of_fractions(method: str, given: Mapping[str, float]) -> Profile:
    """Soil of a single cell, as the exact solution takes it; arguments as in `soils_of`."""
    arrays = {role: np.array([value]) for role, value in given.items()}
    if method != "saxton-rawls2006":
        cells = soils_of(method, arrays).cells
        b = 3.0 / (float(cells.n[0]) - 2.0)
        return Campbell(float(cells.air_entry_m[0]), b, float(cells.ks_mm_per_day[0]))
    held = clamped(method, arrays)[0]
    found = saxton_rawls(held["sand"], held["clay"], held["organic_matter"])
    return SaxtonRawls(
        float(found.air_entry_m[0]),
        float(found.b[0]),
        float(found.ks_mm_per_day[0]),
        float(found.theta_s[0]),
        float(found.theta_33[0]),
        MOIST_M,
    )
