"""Profiles: all that decides the maximum evaporation of a cell except its water-table depth.

A rise curve is built from anything that answers as `Profile` does. A homogeneous soil is the
one kind there is.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from saltrise.physics import laws
from saltrise.physics.soils import SoilRow

Floats = NDArray[np.float64]


class Profile(Protocol):
    """A soil column solved exactly; both answers come with their slope."""

    def evaporation(self, depth_m: Floats) -> tuple[Floats, Floats]:
        """Maximum steady evaporation [mm/day] and its slope [mm/day/m] at depths [m] > 0."""
        ...  # pragma: no cover

    def depth(self, flux_mm_per_day: Floats) -> tuple[Floats, Floats]:
        """Depth [m] that lifts a flux [mm/day] > 0, and its slope [m/(mm/day)]."""
        ...  # pragma: no cover


@dataclass(frozen=True)
class Homogeneous:
    """One Campbell / Brooks-Corey soil from the surface down: a `Profile`.

    `air_entry_m` [m], `b` [-] and `ks_mm_per_day` [mm/day] as in `SoilRow`.
    """

    air_entry_m: float
    b: float
    ks_mm_per_day: float

    def evaporation(self, depth_m: Floats) -> tuple[Floats, Floats]:
        """See `Profile.evaporation`; by `laws.max_evaporation`."""
        flux = laws.max_evaporation(depth_m, *self._parameters)
        return flux, 1.0 / laws.rise_depth_slope(flux, *self._parameters)

    def depth(self, flux_mm_per_day: Floats) -> tuple[Floats, Floats]:
        """See `Profile.depth`; by `laws.rise_depth`."""
        slope = laws.rise_depth_slope(flux_mm_per_day, *self._parameters)
        return laws.rise_depth(flux_mm_per_day, *self._parameters), slope

    @property
    def _parameters(self) -> tuple[float, float, float]:
        return self.air_entry_m, self.b, self.ks_mm_per_day


def homogeneous(row: SoilRow) -> Homogeneous:
    """Profile of a single texture class."""
    return Homogeneous(row.air_entry_m, row.b, row.ks_mm_per_day)
