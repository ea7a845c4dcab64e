"""Rise of soils whose parameters vary from cell to cell, as regressions give them.

The depth that lifts a flux is explicit. With e = E/Ks, a tail K = k Ks (t/h)^n beyond a suction t
and, after Saxton & Rawls, a middle part in which water content is linear in suction,

    L = he/(1+e) + (t - he)/(1-r) [P(e; p) - r P(e/k; p)] + tail
    tail = t [x(e/k; n) - 1/(1+e/k)]            where the top dries without limit,
         = s V(e/k (s/t)^n; n) - t V(e/k; n)    where its suction is s

with x Campbell's scaled depth (`laws.rise_depth`), P(q; p) the integral of u^p/(u^p + q) and
V(q; n) that of 1/(1 + q u^n) over u from 0 to 1, r the water content at t over that at saturation
and p = 3 + 2B. Each of the three depends on one number and one exponent, so a table with a row an
exponent serves every cell and no fraction is rounded. The flux of a depth follows by Halley's
method.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.tables import MOST_STEPS, AxisOf, CellsOf, FractionTables, reach, solve
from saltrise.physics import powers
from saltrise.physics.blend import Axis, Blend
from saltrise.physics.curve import DEEPEST_M, SURFACE_DEPTH_M
from saltrise.physics.profile import Campbell
from saltrise.physics.table import tabulate

Floats = NDArray[np.float64]

_SCALED_OCTAVES, _RATE_OCTAVES, _WIDE_OCTAVES = (-14, 17), (-60, 30), (-70, 100)
_DEPTH_BITS, _RATE_BITS = 5, 4
_EXPONENT_STEP, _INVERSE_STEP = 0.0175, 0.004
_LEAST_LOG = -180.0
"""Base-2 logarithm of a flux that counts as none."""


@dataclass(frozen=True)
class FractionCells:
    """Soils of some cells.

    `air_entry_m` [m], `ks_mm_per_day`, exponent `n` of the tail. For soils with a middle part:
    `tail_m` [m] where the tail begins, `tail_share` = K/Ks there, `theta_share` r and
    `inverse_p` 1/p; None for Campbell's, whose tail begins at air entry.
    """

    air_entry_m: Floats
    ks_mm_per_day: Floats
    n: Floats
    tail_m: Floats | None = None
    tail_share: Floats | None = None
    theta_share: Floats | None = None
    inverse_p: Floats | None = None

    def parts(self) -> CellsOf:
        """The cells as compiled loops take them; what is missing stands for itself unused."""
        middle = (self.tail_m, self.tail_share, self.theta_share, self.inverse_p)
        given = [self.air_entry_m if values is None else values for values in middle]
        air_entry, *rest, n = (v.ravel() for v in (self.air_entry_m, *given, self.n))
        return (air_entry, rest[0], rest[1], rest[2], rest[3], n)


@dataclass(frozen=True)
class FractionCurves:
    """Rise curves of cells; see the module for the functions."""

    flux: Blend
    depth: Blend
    limited: Blend | None
    middle: Blend | None
    suction_m: float

    def max_evaporation(self, cells: FractionCells, depth_m: Floats) -> Floats:
        """Maximum steady evaporation [mm/day] over a rise [m]; NaN where it is.

        Raises
        ------
        ArithmeticError
            No flux was found for some cell.
        """
        rise = np.maximum(depth_m, SURFACE_DEPTH_M)
        cells = self._within(cells)
        rate = self._guess(cells, rise)
        if self.limited is not None or self.middle is not None:
            steps = solve(
                cells.parts(),
                self.suction_m,
                *self._tables(),
                rise.ravel(),
                _LEAST_LOG,
                rate.reshape(-1),
            )
            if steps == MOST_STEPS:
                raise ArithmeticError(f"fractions: no flux found after {steps} steps")
        flux = rate * cells.ks_mm_per_day
        flux[np.isnan(depth_m)] = np.nan
        return flux

    def critical_depth(self, cells: FractionCells, flux_mm_per_day: Floats) -> Floats:
        """Rise [m] from which a flux [mm/day] is lifted: 0.001 to 30 m; NaN where it is."""
        rate = flux_mm_per_day / cells.ks_mm_per_day
        known = np.clip(np.nan_to_num(rate, nan=1.0), 2.0 ** _RATE_OCTAVES[0], 2.0**60)
        if self.limited is None and self.middle is None:
            # Campbell's soil from end to end: the parts add up to its own scaled depth.
            depth = self.depth.look_up(cells.n, known) * cells.air_entry_m
        else:
            depth = np.empty(known.shape)
            parts = self._within(cells).parts()
            reach(parts, self.suction_m, *self._tables(), known.ravel(), depth.reshape(-1))
        depth = np.clip(depth, SURFACE_DEPTH_M, DEEPEST_M)
        depth[np.isnan(rate)] = np.nan
        return depth

    def _tables(self) -> tuple[FractionTables, tuple[AxisOf, AxisOf]]:
        """Tables and their axes as compiled loops take them; a missing one is not looked at."""
        depth, on_n = self.depth.parts()
        limited = depth if self.limited is None else self.limited.parts()[0]
        if self.middle is None:
            return (depth, limited, depth, False), (on_n, on_n)
        middle, on_inverse = self.middle.parts()
        return (depth, limited, middle, True), (on_n, on_inverse)

    def _within(self, cells: FractionCells) -> FractionCells:
        """The cells with no part of their curve beyond the suction at the top."""
        most = self.suction_m
        air_entry = cells.air_entry_m
        if most < math.inf:
            air_entry = np.minimum(air_entry, most)
        if cells.tail_m is None or cells.inverse_p is None or cells.theta_share is None:
            return replace(cells, air_entry_m=air_entry)
        if not (cells.tail_m > most).any():
            return replace(cells, air_entry_m=air_entry)
        # The middle part ends where the suction does, on its straight line.
        tail = np.minimum(cells.tail_m, most)
        along = (tail - cells.air_entry_m) / (cells.tail_m - cells.air_entry_m)
        share = 1.0 - np.clip(along, 1e-9, 1.0) * (1.0 - cells.theta_share)
        bare = np.maximum(tail, air_entry * (1.0 + 1e-9))
        return replace(
            cells,
            air_entry_m=air_entry,
            tail_m=bare,
            theta_share=share,
            tail_share=powers.power(share, 1.0 / cells.inverse_p),
        )

    def _guess(self, cells: FractionCells, rise: Floats) -> Floats:
        """E/Ks if the soil were Campbell's with its own tail throughout: exact for Campbell's."""
        if cells.tail_m is None or cells.tail_share is None:
            return self.flux.look_up(cells.n, rise / cells.air_entry_m)
        return self.flux.look_up(cells.n, rise / cells.tail_m) * cells.tail_share


def fraction_curves(
    exponents: tuple[float, float],
    inverse_p: tuple[float, float] | None,
    suction_m: float,
) -> FractionCurves:
    """Tables for soils within ranges of their exponents.

    Parameters
    ----------
    exponents : pair of float
        Least and greatest exponent n of the tails.
    inverse_p : pair of float or None
        Least and greatest 1/p of middle parts; None for Campbell's law.
    suction_m : float
        Suction at the top of the rise [m]; infinite for a bare surface.
    """
    axis = Axis.over(*exponents, _EXPONENT_STEP)
    soils = [Campbell(1.0, 3.0 / (n - 2.0), 1.0) for n in axis.nodes()]
    flux = tabulate(_SCALED_OCTAVES, _DEPTH_BITS, [soil.evaporation for soil in soils])
    depth = tabulate(_RATE_OCTAVES, _RATE_BITS, [soil.depth for soil in soils])
    limited = middle = None
    if suction_m < math.inf:
        rows = [_limited(float(n)) for n in axis.nodes()]
        limited = Blend(tabulate(_WIDE_OCTAVES, _RATE_BITS, rows), axis)
    if inverse_p is not None:
        inverse = Axis.over(*inverse_p, _INVERSE_STEP)
        rows = [_middle(float(i)) for i in inverse.nodes()]
        middle = Blend(tabulate(_WIDE_OCTAVES, _RATE_BITS, rows), inverse)
    return FractionCurves(Blend(flux, axis), Blend(depth, axis), limited, middle, suction_m)


_Row = Callable[[Floats], tuple[Floats, Floats]]


def _limited(n: float) -> _Row:
    """V(q; n) and its slope."""
    from scipy.special import hyp2f1

    def solved(q: Floats) -> tuple[Floats, Floats]:
        value = hyp2f1(1.0, 1.0 / n, 1.0 + 1.0 / n, -q)
        return value, (1.0 / (1.0 + q) - value) / (n * q)

    return solved


def _middle(inverse: float) -> _Row:
    """P(q; 1/inverse) and its slope."""
    from scipy.special import hyp2f1

    def solved(q: Floats) -> tuple[Floats, Floats]:
        # 1 - V(1/q) of the same form: P = 1 - q-part, each where nothing cancels.
        low = 1.0 - hyp2f1(1.0, inverse, 1.0 + inverse, -1.0 / np.minimum(q, 1.0))
        share = 1.0 / (1.0 / inverse + 1.0)
        high = share / q * hyp2f1(1.0, 1.0 + inverse, 2.0 + inverse, -1.0 / np.maximum(q, 1.0))
        value = np.where(q < 1.0, low, high)
        return value, (value - 1.0 / (1.0 + q)) * inverse / q

    return solved
