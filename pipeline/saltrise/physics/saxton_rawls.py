"""The conductivity of Saxton & Rawls (2006) through its own retention curve."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from saltrise.physics.heights import Heights, QuadratureHeights
from saltrise.physics.reach import invert, reach

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class SaxtonRawls:
    """K = Ks (theta/theta_s)^(3 + 2B), theta falling with suction in three parts.

    Saturated up to `air_entry_m` [m]; linear in suction to `theta_33` [-] at `moist_m` (33 kPa as
    head [m]); beyond, theta = theta_33 (moist/h)^(1/B), B = `b`. Saxton K.E., Rawls W.J. (2006)
    Soil Science Society of America Journal 70:1569-1578, Table 1. `ks_mm_per_day` [mm/day].
    """

    air_entry_m: float
    b: float
    ks_mm_per_day: float
    theta_s: float
    theta_33: float
    moist_m: float

    steep = False

    @property
    def anchor_m(self) -> float:
        """See `reach.Conductor`."""
        return self.air_entry_m

    @property
    def second_anchor_m(self) -> float:
        """Suction [m] of the second break of slope."""
        return self.moist_m

    def conductivity(self, suction_m: Floats) -> Floats:
        """See `reach.Conductor`."""
        span = self.moist_m - self.air_entry_m
        along = np.clip((suction_m - self.air_entry_m) / span, 0.0, 1.0)
        linear = self.theta_s + along * (self.theta_33 - self.theta_s)
        beyond = np.maximum(suction_m / self.moist_m, 1.0) ** (-1.0 / self.b)
        return self.ks_mm_per_day * (linear * beyond / self.theta_s) ** (3.0 + 2.0 * self.b)

    def heights(self, flux_mm_per_day: Floats) -> Heights:
        """See `Profile.heights`."""
        return QuadratureHeights(self, flux_mm_per_day)

    def depth(self, flux_mm_per_day: Floats) -> tuple[Floats, Floats]:
        """See `Profile.depth`."""
        return reach(self, flux_mm_per_day)

    def evaporation(self, depth_m: Floats) -> tuple[Floats, Floats]:
        """See `Profile.evaporation`."""
        return invert(self.depth, depth_m)
