"""The pieces that a column's rise curve is made of.

A layered curve kinks where the water table passes an interface, so each layer in which it may
stand has a piece of its own, whose argument is the depth below that layer's top. Where the
suction at the top is finite, the curve ends at that depth: its last piece runs backwards from
there. Columns that share their upper layers share their pieces.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from saltrise.physics.column import Column, March, from_top, through, water_table
from saltrise.physics.heights import Heights
from saltrise.physics.profile import Campbell, Profile, VanGenuchten
from saltrise.physics.storage import Drainage, response_days
from saltrise.physics.table import Solved

Floats = NDArray[np.float64]

OFFSET_M = 2.0**-10
"""Argument at which a piece other than the first begins: the low end of the depth table."""

_APART = 1e-9
_CLOSE = 2.0 ** -np.arange(4.0, 20.0)
"""Fluxes just below that of an interface, as parts of it."""

_STRAIGHT_M = 1e-5


@dataclass(frozen=True)
class Piece:
    """Part of a curve from a depth on, up to the next piece.

    `start_m` is where it begins, `flux` the flux there; its argument is `shift_m` + `sign` x
    depth. `evaporation` takes that argument; `depth` a flux, and gives the depth itself. `key`
    tells equal pieces.
    """

    start_m: float
    flux: float
    shift_m: float
    sign: float
    evaporation: Solved
    depth: Solved
    key: object
    response: Solved | None = None
    """Days to a steady rise at an argument, where it was asked for."""


class Marches:
    """Marches down columns at the same fluxes, each prefix of layers once.

    A class because what it remembers makes thousands of stacks affordable.
    """

    def __init__(self, flux_mm_per_day: Floats, deepest_m: float, *, response: bool) -> None:
        self._flux, self._deepest, self._response = flux_mm_per_day, deepest_m, response
        self._drainage: dict[Profile, tuple[Drainage, Drainage]] = {}
        self._heights: dict[Profile, Heights] = {}
        self._marches: dict[object, March] = {}
        self._pieces: dict[object, Piece] = {}

    def pieces(self, column: Column) -> list[Piece]:
        """Pieces of a column from the top down.

        Raises
        ------
        ArithmeticError
            The column still lifts more than the least flux from the deepest water table.
        """
        ends = (*column.bottoms_m, math.inf)
        made: list[Piece] = []
        for k in range(len(column.layers)):
            start = 0.0 if k == 0 else column.bottoms_m[k - 1]
            if start >= min(column.suction_m, self._deepest):
                break
            piece = self._piece(column, k, made[-1] if made else None)
            made.append(piece)
            if column.suction_m <= min(ends[k], self._deepest):
                made.append(self._last(column, k, (start + column.suction_m) / 2))
        return made

    def _piece(self, column: Column, k: int, above: Piece | None) -> Piece:
        key = (column.layers[: k + 1], column.bottoms_m[:k], column.suction_m)
        if key in self._pieces:
            return self._pieces[key]
        depth, slope = self._found(column, k)
        top = 0.0 if k == 0 else column.bottoms_m[k - 1]
        reach = column.suction_m - _STRAIGHT_M
        known = np.column_stack((depth, self._flux, slope))
        known = known[(depth > top * (1.0 + _APART)) & (depth < reach)]
        start = math.inf
        if above is not None:
            edge = self._at_interface(column, k, above, top)
            start = edge[1]
            near = self._near(column, k, start)
            known = np.vstack((known[known[:, 1] < near[0, 1]], near, edge))
        if known[0, 0] < min(self._deepest, reach - 1e-3) and self._flux[0] > 2.0**-99:
            raise ArithmeticError(f"layered column: {self._flux[0]:g} mm/day rises from deeper")
        shift = 0.0 if k == 0 else OFFSET_M - top
        piece = Piece(
            top,
            start,
            shift,
            1.0,
            _evaporation(known, shift, 1.0),
            lambda _: (np.clip(depth, -1e6, 1e6), np.clip(np.nan_to_num(slope), -1e30, 0.0)),
            key,
            self._times(column, k, depth, shift, 1.0) if self._response else None,
        )
        self._pieces[key] = piece
        return piece

    def _at_interface(self, column: Column, k: int, above: Piece, top: float) -> Floats:
        """Depth, flux and slope where the water table enters a layer from above.

        Suction is continuous, so the slopes on both sides are as the two soils' 1 / (1 + E/K) at
        saturation.
        """
        flux, tilt = above.evaporation(np.array([above.shift_m + top]))
        at_rest = np.zeros(1)
        upper, lower = (
            soil.heights(flux).share(at_rest) for soil in (column.layers[k - 1], column.layers[k])
        )
        return np.array([top, flux[0], (lower / upper / tilt)[0]])

    def _near(self, column: Column, k: int, flux: float) -> Floats:
        """Depths, fluxes and slopes just below a layer's top, where some laws bend sharply."""
        close = flux * (1.0 - _CLOSE)
        key = (column.layers[:k], column.bottoms_m[:k], column.suction_m, "near")
        if key not in self._marches:
            march = from_top(close, column.suction_m)
            for soil, bottom in zip(column.layers[:k], column.bottoms_m[:k], strict=True):
                march = through(soil.heights(close), march, bottom)
            self._marches[key] = march
        depth, slope = water_table(column.layers[k].heights(close), self._marches[key])
        return np.column_stack((depth, close, slope))

    def _last(self, column: Column, k: int, start: float) -> Piece:
        """The end of a curve with finite suction, where the flux falls to nothing."""
        key = (column.layers[: k + 1], column.bottoms_m[:k], column.suction_m, "last")
        if key in self._pieces:
            return self._pieces[key]
        whole = self._piece(column, k, None if k == 0 else self._piece_above(column, k))
        depth, slope = self._found(column, k)
        known = np.column_stack((column.suction_m - depth, self._flux, -slope))
        top = 0.0 if k == 0 else column.bottoms_m[k - 1]
        known = known[(depth > top) & (known[:, 0] > _STRAIGHT_M)][::-1]
        shift = OFFSET_M + column.suction_m
        solved = _to_nothing(known)
        flux = float(whole.evaporation(np.array([whole.shift_m + start]))[0][0])
        times = self._times(column, k, depth, shift, -1.0) if self._response else None
        piece = Piece(start, flux, shift, -1.0, solved, whole.depth, key, times)
        self._pieces[key] = piece
        return piece

    def _piece_above(self, column: Column, k: int) -> Piece:
        return self._pieces[(column.layers[:k], column.bottoms_m[: k - 1], column.suction_m)]

    def _found(self, column: Column, k: int) -> tuple[Floats, Floats]:
        return water_table(self._heights_of(column.layers[k]), self._march(column, k))

    def _march(self, column: Column, k: int) -> March:
        """The march down to the top of layer k."""
        if k == 0:
            return from_top(self._flux, column.suction_m)
        key = (column.layers[:k], column.bottoms_m[:k], column.suction_m)
        if key not in self._marches:
            above, soil = self._march(column, k - 1), column.layers[k - 1]
            self._marches[key] = through(self._heights_of(soil), above, column.bottoms_m[k - 1])
        return self._marches[key]

    def _times(self, column: Column, k: int, depth: Floats, shift: float, sign: float) -> Solved:
        """Response time [days] at an argument, the water table standing in layer k."""
        tops = (0.0, *column.bottoms_m[:k])
        # Every other flux is enough for what is read as an order of magnitude.
        reach = column.suction_m - _STRAIGHT_M
        pick = np.flatnonzero((depth > tops[k] * (1.0 + _APART)) & (depth < reach))[::-2]
        stored, rest = np.zeros(pick.size), np.zeros(pick.size)
        still = np.zeros(pick.size, dtype=np.intp)
        for j in range(k + 1):
            moving, resting = self._drained(column.layers[j])
            stored += moving.to(self._march(column, j).suction_m[pick], pick)
            rest += resting.to(depth[pick] - tops[j], still)
            if j < k:
                stored -= moving.to(self._march(column, j + 1).suction_m[pick], pick)
                rest -= resting.to(depth[pick] - tops[j + 1], still)
        days = response_days(stored, rest, self._flux[pick])
        from scipy.interpolate import PchipInterpolator

        spline = PchipInterpolator(np.log(depth[pick]), days)
        least, most = depth[pick[0]], depth[pick[-1]]

        def solved(argument: Floats) -> tuple[Floats, Floats]:
            wanted = (argument - shift) / sign
            inside = np.clip(wanted, least, most)
            slope = spline(np.log(inside), 1) / inside * sign
            return spline(np.log(inside)), np.where(wanted == inside, slope, 0.0)

        return solved

    def _drained(self, soil: Profile) -> tuple[Drainage, Drainage]:
        """Drainage of a soil under the fluxes and at rest."""
        if soil not in self._drainage:
            assert isinstance(soil, Campbell | VanGenuchten)
            self._drainage[soil] = Drainage(soil, self._flux), Drainage(soil, np.zeros(1))
        return self._drainage[soil]

    def _heights_of(self, soil: Profile) -> Heights:
        if soil not in self._heights:
            self._heights[soil] = soil.heights(self._flux)
        return self._heights[soil]


def _evaporation(known: Floats, shift: float, sign: float) -> Solved:
    """Flux at an argument, from depths, fluxes and slopes dL/dE by falling depth."""
    depth, flux, slope = known[::-1].T
    from scipy.interpolate import CubicHermiteSpline

    spline = CubicHermiteSpline(np.log(depth), np.log(flux), depth / (flux * slope))

    def solved(argument: Floats) -> tuple[Floats, Floats]:
        wanted = (argument - shift) / sign
        inside = np.clip(wanted, depth[0], depth[-1])
        at = np.exp(spline(np.log(inside)))
        tilt = spline(np.log(inside), 1) * at / inside
        # Below the least flux that was marched nothing rises.
        gone = wanted > depth[-1]
        return np.where(gone, 0.0, at), np.where(gone, 0.0, tilt)

    return solved


def _to_nothing(known: Floats) -> Solved:
    """Flux against the distance from where it ends; straight over the last hair's breadth."""
    solved = _evaporation(known, OFFSET_M, 1.0)
    least = float(known[-1, 0])
    flux = float(known[-1, 1])

    def ending(argument: Floats) -> tuple[Floats, Floats]:
        value, slope = solved(argument)
        left = np.maximum(argument - OFFSET_M, 0.0)
        straight = left < least
        return np.where(straight, flux * left / least, value), np.where(
            straight, flux / least, slope
        )

    return ending


def marched(
    columns: Sequence[Column], flux_mm_per_day: Floats, deepest_m: float, *, response: bool
) -> list[list[Piece]]:
    """Pieces of several columns over the same fluxes, with response times if asked for."""
    marches = Marches(flux_mm_per_day, deepest_m, response=response)
    return [marches.pieces(column) for column in columns]
