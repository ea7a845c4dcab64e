"""Rise curves: maximum steady evaporation against depth, and back, as tables.

A profile is solved exactly at the nodes of its table, value and slope; between nodes a cubic
(Hermite) serves. Nodes lie at 2^k (1 + j/m), so octave and node are the exponent and top mantissa
bits of the number looked up: a cell costs a look-up and + - x, no exp, log or power, and comes
out with the same bits on every processor.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from saltrise.physics.profile import Profile

Floats = NDArray[np.float64]
Indices = NDArray[np.int32]

SURFACE_DEPTH_M = 0.001
"""A water table at or above this depth is at the surface; its curve holds the value here."""

DEEPEST_M = 30.0
"""Deepest water table that is solved; beyond it the curve's end slope goes on."""

_DEPTH_OCTAVES = (-10, 12)
_DEPTH_BITS, _STEEP_BITS = 5, 6
_FLUX_BITS = 4
_PLUNGE = 0.1
_LEAST_OCTAVE = -100
"""The flux table ends at 2^-100 (1e-30) mm/day, whatever a soil lifts from 30 m."""

_MANTISSA = 52
_ONE = np.int64(1023 << _MANTISSA)


@dataclass(frozen=True)
class Table:
    """Cubics of all profiles over the same nodes.

    `coefficients` is (4, profiles x intervals), constant first, in the interval's own position
    from 0 to 1; numbers from 2^`octaves[0]` to below 2^`octaves[1]`, 2^`bits` intervals an octave.
    """

    octaves: tuple[int, int]
    bits: int
    coefficients: Floats

    @property
    def intervals(self) -> int:
        """Intervals of one profile."""
        return (self.octaves[1] - self.octaves[0]) << self.bits

    def look_up(self, profile: Indices, value: Floats) -> Floats:
        """Interpolate; numbers beyond the table count as its ends, NaN as its low end."""
        low, high = (2.0**octave for octave in self.octaves)
        inside = np.where(value > low, value, low)
        np.minimum(inside, np.nextafter(high, 0.0), out=inside)
        bits = inside.view(np.int64)
        index = bits >> np.int64(_MANTISSA - self.bits)
        index -= np.int64((self.octaves[0] + 1023) << self.bits)
        index += np.maximum(profile, 0).astype(np.int64) * self.intervals
        bits &= np.int64((1 << (_MANTISSA - self.bits)) - 1)
        bits <<= np.int64(self.bits)
        bits |= _ONE
        inside -= 1.0
        result: Floats = self.coefficients[3].take(index)
        for k in (2, 1, 0):
            result *= inside
            result += self.coefficients[k].take(index)
        return result


@dataclass(frozen=True)
class RiseCurves:
    """Rise curves of a region's profiles, numbered from 0."""

    evaporation: Table
    depth: Table
    limits: Floats
    """Flux [mm/day] at `SURFACE_DEPTH_M` and at `DEEPEST_M`, a row a profile."""

    def max_evaporation(self, profile: Indices, depth_m: Floats) -> Floats:
        """Maximum steady evaporation [mm/day] of cells.

        Parameters
        ----------
        profile : int array
            Profile of each cell; negative is masked.
        depth_m : float64 array, same shape
            Depth to water table [m]; up to 0.001 m the value at 0.001 m holds, beyond 30 m the
            logarithmic end slope goes on (to 4096 m).

        Returns
        -------
        float64 array
            Within a relative 1e-5 of exact from 0.001 to 30 m (6e-5 under the exponential law,
            where the flux exceeds 1e-6 mm/day); NaN where masked or NaN.
        """
        flux = self.evaporation.look_up(profile, np.maximum(depth_m, SURFACE_DEPTH_M))
        flux[(profile < 0) | np.isnan(depth_m)] = np.nan
        return flux

    def critical_depth(self, profile: Indices, flux_mm_per_day: Floats) -> Floats:
        """Depth to water table [m] from which a profile lifts a flux: 0.001 to 30 m.

        Parameters
        ----------
        profile : int array
            Profile of each cell; negative is masked.
        flux_mm_per_day : float64 array, same shape
            Flux [mm/day], > 0.

        Returns
        -------
        float64 array
            Within a relative 1e-5 of exact; 0.001 for more than the profile lifts from there, 30
            for less than it lifts from 30 m; NaN where masked or NaN.
        """
        depth = self.depth.look_up(profile, flux_mm_per_day)
        most, least = (self.limits[:, k].take(np.maximum(profile, 0)) for k in (0, 1))
        depth[flux_mm_per_day <= least] = DEEPEST_M
        depth[flux_mm_per_day >= most] = SURFACE_DEPTH_M
        np.clip(depth, SURFACE_DEPTH_M, DEEPEST_M, out=depth)
        depth[(profile < 0) | np.isnan(flux_mm_per_day)] = np.nan
        return depth


def build_curves(profiles: Sequence[Profile]) -> RiseCurves:
    """Solve profiles at the nodes of their tables.

    Parameters
    ----------
    profiles : sequence of Profile
        At least one.

    Raises
    ------
    ArithmeticError
        A profile cannot be solved.
    """
    ends = np.array([SURFACE_DEPTH_M, DEEPEST_M])
    limits = np.array([profile.evaporation(ends)[0] for profile in profiles])
    least = max(float(limits[:, 1].min()), 2.0**_LEAST_OCTAVE)
    octaves = (
        int(np.floor(np.log2(least))),
        max(int(np.floor(np.log2(limits[:, 0].max()))) + 1, _LEAST_OCTAVE + 1),
    )
    bits = _STEEP_BITS if any(profile.steep for profile in profiles) else _DEPTH_BITS
    return RiseCurves(
        _table(_DEPTH_OCTAVES, bits, [_with_end_slope(p) for p in profiles]),
        _table(octaves, _FLUX_BITS, [profile.depth for profile in profiles]),
        limits,
    )


_Solved = Callable[[Floats], tuple[Floats, Floats]]


def _with_end_slope(profile: Profile) -> _Solved:
    """A profile's evaporation, going on beyond `DEEPEST_M` as the power law of its slope there."""

    def evaporation(depth: Floats) -> tuple[Floats, Floats]:
        flux, slope = profile.evaporation(np.minimum(depth, DEEPEST_M))
        beyond = depth > DEEPEST_M
        if flux[-1] <= 0.0:
            flux[beyond] = slope[beyond] = 0.0
            return flux, slope
        power = slope[-1] * DEEPEST_M / flux[-1]
        flux[beyond] *= (depth[beyond] / DEEPEST_M) ** power
        slope[beyond] = power * flux[beyond] / depth[beyond]
        return flux, slope

    return evaporation


def _table(octaves: tuple[int, int], bits: int, solved: Sequence[_Solved]) -> Table:
    per_octave = 1 << bits
    steps = np.arange((octaves[1] - octaves[0]) * per_octave + 1)
    octave, step = np.divmod(steps, per_octave)
    nodes = np.ldexp(1.0 + step / per_octave, octave + octaves[0])
    width = np.diff(nodes)
    columns = []
    for solve in solved:
        value, slope = solve(nodes)
        rise, left, right = np.diff(value), slope[:-1] * width, slope[1:] * width
        cubic = np.stack((value[:-1], left, 3 * rise - 2 * left - right, left + right - 2 * rise))
        # Where values fall away within one interval, a cubic would swing below zero.
        plunge = value[1:] < _PLUNGE * value[:-1]
        cubic[1, plunge], cubic[2:, plunge] = rise[plunge], 0.0
        columns.append(cubic)
    return Table(octaves, bits, np.ascontiguousarray(np.hstack(columns)))
