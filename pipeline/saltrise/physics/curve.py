"""Rise curves: maximum steady evaporation against depth, and back, as tables.

A profile is solved exactly at the nodes of its table, value and slope; see `table` for what a
cell costs, and `pieces` for columns whose curve is made of several.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.pieces import place_by_flux, place_by_start
from saltrise.kernels.tables import held_look_up
from saltrise.physics.column import Column
from saltrise.physics.pieces import Piece, marched
from saltrise.physics.profile import Profile
from saltrise.physics.table import Solved, Table, nodes_of, tabulate

Floats = NDArray[np.float64]
Indices = NDArray[np.int32]

SURFACE_DEPTH_M = 0.001
"""A water table at or above this depth is at the surface; its curve holds the value here."""

DEEPEST_M = 30.0
"""Deepest water table that is solved; beyond it the curve's end slope goes on."""

_DEPTH_OCTAVES, _COLUMN_OCTAVES = (-10, 12), (-10, 6)
_DEPTH_BITS, _STEEP_BITS = 5, 6
_RESPONSE_BITS = 4
_FLUX_BITS, _COLUMN_FLUX_BITS = 4, 5
_LEAST_OCTAVE = -100
"""The flux table ends at 2^-100 (1e-30) mm/day, whatever a soil lifts from 30 m."""

_COLUMN_SPAN, _COLUMN_LEAST = 12, -50
"""Octaves of flux below what each soil alone lifts from 30 m that columns are marched at; a flux
of 2^-50 (1e-15) mm/day counts as none where a finite suction ends the curve."""


@dataclass(frozen=True)
class Pieces:
    """How rows make up the curves of columns: arrays of (profiles x most pieces of any).

    See `pieces.Piece`; pieces that a profile lacks start nowhere.
    """

    start_m: Floats
    flux: Floats
    shift_m: Floats
    sign: Floats
    row: Indices

    def at_depth(self, profile: Indices, depth_m: Floats) -> tuple[Indices, Floats]:
        """Row of the evaporation table and argument for cells; masked ones stay negative."""
        place, argument = np.empty(depth_m.size, dtype=np.int32), np.empty(depth_m.size)
        place_by_start(
            profile.ravel(),
            depth_m.ravel(),
            SURFACE_DEPTH_M,
            self.start_m,
            self.row,
            self.sign,
            self.shift_m,
            place,
            argument,
        )
        return place.reshape(depth_m.shape), argument.reshape(depth_m.shape)

    def at_flux(self, profile: Indices, flux: Floats) -> Indices:
        """Row of the depth table for cells."""
        place = np.empty(flux.size, dtype=np.int32)
        place_by_flux(profile.ravel(), flux.ravel(), self.flux, self.row, place)
        return place.reshape(flux.shape)


@dataclass(frozen=True)
class RiseCurves:
    """Rise curves of a region's profiles, numbered from 0."""

    evaporation: Table
    depth: Table
    limits: Floats
    """Flux [mm/day] at `SURFACE_DEPTH_M` and at `DEEPEST_M`, a row a profile."""
    pieces: Pieces | None = None
    """How rows make up curves; without, row and profile are the same."""
    response: Table | None = None
    """Days to a steady rise, rows and arguments as in `evaporation`; None where not asked for."""

    def response_days(self, profile: Indices, depth_m: Floats) -> Floats:
        """Days until a steady rise is brought about, from the hydrostatic profile.

        Parameters
        ----------
        profile, depth_m : arrays
            As in `max_evaporation`.

        Returns
        -------
        float64 array
            Within 1 % where it exceeds a day; NaN where masked or NaN.
        """
        assert self.response is not None
        return self._by_depth(self.response, profile, depth_m)

    def _by_depth(self, table: Table, profile: Indices, depth_m: Floats) -> Floats:
        if self.pieces is None:
            return table.look_up(profile, depth_m, SURFACE_DEPTH_M)
        return table.look_up(*self.pieces.at_depth(profile, depth_m))

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
        return self._by_depth(self.evaporation, profile, depth_m)

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
        row = profile
        if self.pieces is not None:
            row = self.pieces.at_flux(profile, flux_mm_per_day)
        depth = np.empty(flux_mm_per_day.size)
        held_look_up(
            self.depth.parts(),
            profile.ravel(),
            row.ravel(),
            flux_mm_per_day.ravel(),
            self.limits,
            (SURFACE_DEPTH_M, DEEPEST_M),
            depth,
        )
        return depth.reshape(flux_mm_per_day.shape)


def build_curves(profiles: Sequence[Profile | Column], *, response: bool = False) -> RiseCurves:
    """Solve profiles at the nodes of their tables.

    Parameters
    ----------
    profiles : sequence of Profile or Column
        At least one; all of one kind.
    response : bool
        Tabulate response times too; every soil has to know its retention curve.

    Raises
    ------
    ArithmeticError
        A profile cannot be solved.
    """
    columns = [profile for profile in profiles if isinstance(profile, Column)]
    if columns:
        return _column_curves(columns, response=response)
    soils = [profile for profile in profiles if not isinstance(profile, Column)]
    limits = _limits(soils)
    octaves = _flux_octaves(limits)
    single = [Column((soil,)) for soil in soils]
    times = _column_curves(single, response=True).response if response else None
    bits = _STEEP_BITS if any(soil.steep for soil in soils) else _DEPTH_BITS
    return RiseCurves(
        tabulate(_DEPTH_OCTAVES, bits, [_with_end_slope(soil.evaporation) for soil in soils]),
        tabulate(octaves, _FLUX_BITS, [soil.depth for soil in soils]),
        limits,
        response=times,
    )


def _limits(soils: Sequence[Profile]) -> Floats:
    ends = np.array([SURFACE_DEPTH_M, DEEPEST_M])
    return np.array([soil.evaporation(ends)[0] for soil in soils])


def _flux_octaves(limits: Floats) -> tuple[int, int]:
    least = max(float(limits[:, 1].min()), 2.0**_LEAST_OCTAVE)
    most = int(np.floor(np.log2(limits[:, 0].max()))) + 1
    return int(np.floor(np.log2(least))), max(most, _LEAST_OCTAVE + 1)


def _column_curves(columns: Sequence[Column], *, response: bool) -> RiseCurves:
    """Curves of layered columns and of those with a finite suction at the top."""
    soils = list(dict.fromkeys(soil for column in columns for soil in column.layers))
    low, high = _flux_octaves(_limits(soils))
    low -= _COLUMN_SPAN
    if any(column.suction_m < DEEPEST_M for column in columns):
        low = min(low, _COLUMN_LEAST)
    octaves = (max(low, _LEAST_OCTAVE), high + 2)
    made = marched(columns, nodes_of(octaves, _COLUMN_FLUX_BITS), DEEPEST_M, response=response)
    rows = {piece.key: piece for pieces in made for piece in pieces}
    number = {key: row for row, key in enumerate(rows)}
    evaporation = [_with_end_slope(p.evaporation, p.shift_m, p.sign) for p in rows.values()]
    times = [piece.response for piece in rows.values() if piece.response is not None]
    return RiseCurves(
        tabulate(_COLUMN_OCTAVES, _STEEP_BITS, evaporation),
        tabulate(octaves, _COLUMN_FLUX_BITS, [piece.depth for piece in rows.values()]),
        np.array([[_flux(pieces, SURFACE_DEPTH_M), _flux(pieces, DEEPEST_M)] for pieces in made]),
        _arranged(made, number),
        tabulate(_COLUMN_OCTAVES, _RESPONSE_BITS, times) if times else None,
    )


def _flux(pieces: list[Piece], depth_m: float) -> float:
    """Flux of a column at a depth, exactly as its last piece that reaches there has it."""
    piece = [piece for piece in pieces if piece.start_m <= depth_m][-1]
    at = piece.shift_m + piece.sign * depth_m
    return float(piece.evaporation(np.array([at]))[0][0])


def _arranged(made: list[list[Piece]], number: dict[object, int]) -> Pieces:
    count = max(len(pieces) for pieces in made)

    def spread(values: list[list[float]], missing: float) -> Floats:
        return np.array([row + [missing] * (count - len(row)) for row in values])

    return Pieces(
        spread([[p.start_m for p in pieces] for pieces in made], np.inf),
        spread([[p.flux for p in pieces] for pieces in made], -np.inf),
        spread([[p.shift_m for p in pieces] for pieces in made], 0.0),
        spread([[p.sign for p in pieces] for pieces in made], 1.0),
        spread([[float(number[p.key]) for p in pieces] for pieces in made], 0.0).astype(np.int32),
    )


def _with_end_slope(solved: Solved, shift_m: float = 0.0, sign: float = 1.0) -> Solved:
    """Evaporation that goes on beyond `DEEPEST_M` as the power law of its slope there."""
    if sign < 0.0:
        return solved
    deepest = shift_m + DEEPEST_M

    def evaporation(depth: Floats) -> tuple[Floats, Floats]:
        flux, slope = solved(np.minimum(depth, deepest))
        beyond = depth > deepest
        if flux[-1] <= 0.0:
            flux[beyond] = slope[beyond] = 0.0
            return flux, slope
        power = slope[-1] * DEEPEST_M / flux[-1]
        far = depth[beyond] - shift_m
        flux[beyond] *= (far / DEEPEST_M) ** power
        slope[beyond] = power * flux[beyond] / far
        return flux, slope

    return evaporation
