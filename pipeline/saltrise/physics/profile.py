"""Profiles: all that decides the maximum evaporation of a cell except its water-table depth.

A rise curve is built from anything that answers as `Profile` does: a homogeneous soil under one
of the conductivity laws.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from saltrise.physics import laws, van_genuchten
from saltrise.physics.heights import ExponentialHeights, Heights, QuadratureHeights
from saltrise.physics.reach import invert, reach

Floats = NDArray[np.float64]


class Profile(Protocol):
    """A soil column solved exactly; both answers come with their slope."""

    @property
    def steep(self) -> bool:
        """Whether evaporation falls off faster than any power of depth (needs denser nodes)."""

    def heights(self, flux_mm_per_day: Floats) -> Heights:
        """Heights of suctions above the water table under fluxes [mm/day] > 0."""

    def evaporation(self, depth_m: Floats) -> tuple[Floats, Floats]:
        """Maximum steady evaporation [mm/day] and its slope [mm/day/m] at depths [m] > 0."""

    def depth(self, flux_mm_per_day: Floats) -> tuple[Floats, Floats]:
        """Depth [m] that lifts a flux [mm/day] > 0, and its slope [m/(mm/day)]."""


@dataclass(frozen=True)
class Campbell:
    """A Campbell / Brooks-Corey soil: K = Ks up to air entry, Ks (air_entry/h)^(2 + 3/b) beyond.

    `air_entry_m` [m] is the air-entry suction head, `b` [-] the retention slope (1 / lambda),
    `ks_mm_per_day` [mm/day] the saturated conductivity; `theta_s` and `theta_r` [-] saturated and
    residual water content, where they are known.
    """

    air_entry_m: float
    b: float
    ks_mm_per_day: float
    theta_s: float | None = None
    theta_r: float = 0.0

    steep = False

    @property
    def anchor_m(self) -> float:
        """See `reach.Conductor`."""
        return self.air_entry_m

    def conductivity(self, suction_m: Floats) -> Floats:
        """See `reach.Conductor`; by `laws.conductivity`."""
        return laws.conductivity(suction_m, *self._parameters)

    def drained(self, suction_m: Floats) -> Floats:
        """See `storage.Retainer`; saturation (air_entry/h)^(1/b) beyond air entry."""
        saturation = np.maximum(suction_m / self.air_entry_m, 1.0) ** (-1.0 / self.b)
        return _pores(self) * (1.0 - saturation)

    def heights(self, flux_mm_per_day: Floats) -> Heights:
        """See `Profile.heights`."""
        return QuadratureHeights(self, flux_mm_per_day)

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


@dataclass(frozen=True)
class VanGenuchten:
    """A van Genuchten-Mualem soil: `alpha_per_m` [1/m], `n` [-], `ks_mm_per_day` [mm/day];
    `theta_s` and `theta_r` [-] as in `Campbell`."""

    alpha_per_m: float
    n: float
    ks_mm_per_day: float
    theta_s: float | None = None
    theta_r: float = 0.0

    steep = False

    @property
    def anchor_m(self) -> float:
        """See `reach.Conductor`."""
        return 1.0 / self.alpha_per_m

    def conductivity(self, suction_m: Floats) -> Floats:
        """See `reach.Conductor`; by `van_genuchten.relative_conductivity`."""
        relative = van_genuchten.relative_conductivity(suction_m, self.alpha_per_m, self.n)
        return self.ks_mm_per_day * relative

    def drained(self, suction_m: Floats) -> Floats:
        """See `storage.Retainer`; saturation [1 + (alpha h)^n]^-m."""
        power = self.n * np.log(self.alpha_per_m * suction_m)
        return _pores(self) * -np.expm1(-(1.0 - 1.0 / self.n) * np.logaddexp(0.0, power))

    def heights(self, flux_mm_per_day: Floats) -> Heights:
        """See `Profile.heights`."""
        return QuadratureHeights(self, flux_mm_per_day)

    def evaporation(self, depth_m: Floats) -> tuple[Floats, Floats]:
        """See `Profile.evaporation`; by `reach.invert`."""
        return invert(self.depth, depth_m)

    def depth(self, flux_mm_per_day: Floats) -> tuple[Floats, Floats]:
        """See `Profile.depth`; by `reach.reach`."""
        return reach(self, flux_mm_per_day)


def _pores(soil: Campbell | VanGenuchten) -> float:
    """Water content between saturation and residual."""
    if soil.theta_s is None:
        raise ValueError(f"water contents are not known of {soil}")
    return soil.theta_s - soil.theta_r


@dataclass(frozen=True)
class GardnerPower:
    """Gardner's K = a / (h^n + c): `a` [mm/day m^n], `c` [m^n], `n` [-] > 1."""

    a: float
    c: float
    n: float

    steep = False

    @property
    def anchor_m(self) -> float:
        """See `reach.Conductor`."""
        return self.c ** (1.0 / self.n) if self.c > 0.0 else 1.0

    def conductivity(self, suction_m: Floats) -> Floats:
        """See `reach.Conductor`."""
        with np.errstate(over="ignore"):
            return self.a / (suction_m**self.n + self.c)

    def heights(self, flux_mm_per_day: Floats) -> Heights:
        """See `Profile.heights`."""
        return QuadratureHeights(self, flux_mm_per_day)

    def evaporation(self, depth_m: Floats) -> tuple[Floats, Floats]:
        """See `Profile.evaporation`; by `laws.gardner_max_evaporation`."""
        flux = laws.gardner_max_evaporation(depth_m, self.a, self.c, self.n)
        return flux, 1.0 / self.depth(flux)[1]

    def depth(self, flux_mm_per_day: Floats) -> tuple[Floats, Floats]:
        """See `Profile.depth`; by `laws.gardner_rise_depth`."""
        depth = laws.gardner_rise_depth(flux_mm_per_day, self.a, self.c, self.n)
        wet = flux_mm_per_day * self.c / self.a
        power = -1.0 / self.n + (1.0 / self.n - 1.0) * wet / (1.0 + wet)
        return depth, power * depth / flux_mm_per_day


@dataclass(frozen=True)
class GardnerExponential:
    """Gardner's K = Ks exp(-alpha h): `ks_mm_per_day` [mm/day], `alpha_per_m` [1/m]."""

    ks_mm_per_day: float
    alpha_per_m: float

    steep = True

    def heights(self, flux_mm_per_day: Floats) -> Heights:
        """See `Profile.heights`."""
        return ExponentialHeights(self.ks_mm_per_day, self.alpha_per_m, flux_mm_per_day)

    def evaporation(self, depth_m: Floats) -> tuple[Floats, Floats]:
        """See `Profile.evaporation`; by `laws.exponential_max_evaporation`."""
        with np.errstate(over="ignore"):
            flux = laws.exponential_max_evaporation(depth_m, self.alpha_per_m, self.ks_mm_per_day)
        return flux, -self.alpha_per_m * flux * (1.0 + flux / self.ks_mm_per_day)

    def depth(self, flux_mm_per_day: Floats) -> tuple[Floats, Floats]:
        """See `Profile.depth`; L = ln(1 + Ks/E) / alpha, the inverse of the same equation."""
        ratio = self.ks_mm_per_day / flux_mm_per_day
        depth = np.log1p(ratio) / self.alpha_per_m
        return depth, -1.0 / (self.alpha_per_m * flux_mm_per_day * (1.0 + 1.0 / ratio))


def retains(profile: Profile) -> bool:
    """Whether a soil's retention curve is known."""
    return isinstance(profile, Campbell | VanGenuchten) and profile.theta_s is not None
