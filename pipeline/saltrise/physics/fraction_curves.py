"""Rise of soils whose parameters vary from cell to cell, as regressions give them.

The depth that lifts a flux is explicit. With e = E/Ks, a tail K = k Ks (t/h)^n beyond a suction t
and, after Saxton & Rawls, a middle part in which water content is linear in suction,

    L = he/(1+e) + (t - he)/(1-r) [P(e; p) - r P(e/k; p)] + tail
    tail = t [x(e/k; n) - 1/(1+e/k)]            where the top dries without limit,
         = s V(e/k (s/t)^n; n) - t V(e/k; n)    where its suction is s

with x Campbell's scaled depth (`laws.rise_depth`), P(q; p) the integral of u^p/(u^p + q) and
V(q; n) that of 1/(1 + q u^n) over u from 0 to 1, r the water content at t over that at saturation
and p = 3 + 2B. Each of the three depends on one number and one exponent, so a table with a row an
exponent serves every cell and no fraction is rounded. The flux of a depth follows by Newton's
method.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import hyp2f1

from saltrise.physics import powers
from saltrise.physics.blend import Axis, Blend, Placed
from saltrise.physics.curve import DEEPEST_M, SURFACE_DEPTH_M
from saltrise.physics.profile import Campbell
from saltrise.physics.table import tabulate

Floats = NDArray[np.float64]

_SCALED_OCTAVES, _RATE_OCTAVES, _WIDE_OCTAVES = (-14, 17), (-60, 30), (-70, 100)
_DEPTH_BITS, _RATE_BITS = 5, 4
_EXPONENT_STEP, _INVERSE_STEP = 0.0175, 0.004
_NEWTON_LIMIT, _NEWTON_STEP = 60, 1e-7
_LEAST_LOG = -180.0
"""Base-2 logarithm of a flux that counts as none."""


@dataclass(frozen=True)
class FractionCells:
    """Soils of some cells.

    `air_entry_m` [m], `ks_mm_per_day`, exponent `n` of the tail and where it lies on the axis of
    exponents (`placed`, the same for every table). For soils with a middle part:
    `tail_m` [m] where the tail begins, `tail_share` = K/Ks there, `theta_share` r and
    `inverse_p` 1/p; None for Campbell's, whose tail begins at air entry.
    """

    air_entry_m: Floats
    ks_mm_per_day: Floats
    n: Floats
    placed: Placed
    tail_m: Floats | None = None
    tail_share: Floats | None = None
    theta_share: Floats | None = None
    inverse_p: Floats | None = None

    def each(self, change: Callable[[Any], Any]) -> FractionCells:
        """The cells with every array changed alike."""
        middle = (self.tail_m, self.tail_share, self.theta_share, self.inverse_p)
        first, weights = self.placed
        return FractionCells(
            change(self.air_entry_m),
            change(self.ks_mm_per_day),
            change(self.n),
            (change(first), tuple(change(weight) for weight in weights)),
            *(None if values is None else change(values) for values in middle),
        )


@dataclass(frozen=True)
class FractionCurves:
    """Rise curves of cells; see the module for the functions."""

    flux: Blend
    depth: Blend
    limited: Blend | None
    middle: Blend | None
    suction_m: float

    def max_evaporation(self, cells: FractionCells, depth_m: Floats) -> Floats:
        """Maximum steady evaporation [mm/day] over a rise [m]; NaN where it is."""
        rise = np.maximum(depth_m, SURFACE_DEPTH_M)
        cells = self._within(cells)
        guess = self._guess(cells, rise)
        if self.limited is not None or self.middle is not None:
            guess = self._solved(cells, rise, guess)
        flux = guess * cells.ks_mm_per_day
        flux[np.isnan(depth_m)] = np.nan
        return flux

    def critical_depth(self, cells: FractionCells, flux_mm_per_day: Floats) -> Floats:
        """Rise [m] from which a flux [mm/day] is lifted: 0.001 to 30 m; NaN where it is."""
        rate = flux_mm_per_day / cells.ks_mm_per_day
        known = np.clip(np.nan_to_num(rate, nan=1.0), 2.0 ** _RATE_OCTAVES[0], 2.0**60)
        if self.limited is None and self.middle is None:
            # Campbell's soil from end to end: the parts add up to its own scaled depth.
            depth = self.depth.look_up(cells.placed, known) * cells.air_entry_m
        else:
            depth = self.reach(self._within(cells), known)[0]
        depth = np.clip(depth, SURFACE_DEPTH_M, DEEPEST_M)
        depth[np.isnan(rate)] = np.nan
        return depth

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
            return self.flux.look_up(cells.placed, rise / cells.air_entry_m)
        return self.flux.look_up(cells.placed, rise / cells.tail_m) * cells.tail_share

    def reach(self, cells: FractionCells, rate: Floats) -> tuple[Floats, Floats]:
        """Depth [m] that lifts E/Ks = `rate`, and its slope against log rate [m]."""
        wet = cells.air_entry_m / (1.0 + rate)
        depth, slope = wet, -wet * (rate / (1.0 + rate))
        start, tail_rate = cells.air_entry_m, rate
        if self.middle is not None:
            assert cells.tail_m is not None
            assert cells.tail_share is not None
            assert cells.theta_share is not None
            assert cells.inverse_p is not None
            tail_rate, start = rate / cells.tail_share, cells.tail_m
            span = (start - cells.air_entry_m) / (1.0 - cells.theta_share)
            middle = self.middle.axis.weights(cells.inverse_p)
            whole = self.middle.look_up(middle, rate)
            rest = self.middle.look_up(middle, tail_rate) * cells.theta_share
            depth = depth + span * (whole - rest)
            # d P / d log q = (P - 1/(1+q)) / p, by parts.
            ends = 1.0 / (1.0 + rate) - cells.theta_share / (1.0 + tail_rate)
            slope = slope + span * cells.inverse_p * (whole - rest - ends)
        tail, tilt = self._tail(cells, start, tail_rate)
        return depth + tail, slope + tilt

    def _tail(self, cells: FractionCells, start: Floats, rate: Floats) -> tuple[Floats, Floats]:
        """Depth beyond the suction where the tail begins, and its slope against log rate [m]."""
        inside = 1.0 / (1.0 + rate)
        if self.limited is None:
            scaled = self.depth.look_up(cells.placed, rate)
            return start * (scaled - inside), start * (-scaled / cells.n)
        dried = rate * powers.power(self.suction_m / start, cells.n)
        far = self.limited.look_up(cells.placed, dried) * self.suction_m
        near = self.limited.look_up(cells.placed, rate) * start
        # d V / d log q = (1/(1+q) - V) / n, by parts.
        ends = self.suction_m / (1.0 + dried) - start * inside
        return far - near, (ends - (far - near)) / cells.n

    def _solved(self, cells: FractionCells, rise: Floats, guess: Floats) -> Floats:
        """E/Ks by Newton's method on logarithms; a cell that has settled is left alone."""
        shape = rise.shape
        cells = cells.each(np.ravel)
        target = np.nan_to_num(rise, nan=1.0).ravel()
        ends = target >= self.suction_m
        target = np.where(ends, 0.5 * self.suction_m, target) if ends.any() else target
        log = powers.log2(np.maximum(np.nan_to_num(guess, nan=1.0).ravel(), 2.0**_LEAST_LOG))
        open_cells = np.arange(target.size)
        for _ in range(_NEWTON_LIMIT):
            depth, slope = self.reach(cells, powers.exp2(log[open_cells]))
            step = powers.log2(depth / target[open_cells]) * depth / slope
            step = np.clip(step, -12.0, 12.0)
            log[open_cells] = np.clip(log[open_cells] - step, _LEAST_LOG, 60.0)
            moving = (np.abs(step) > _NEWTON_STEP) & (log[open_cells] > _LEAST_LOG)
            if not moving.any():
                break
            open_cells, cells = open_cells[moving], cells.each(partial(_some, moving))
        rate = powers.exp2(log)
        rate[ends] = 0.0
        return rate.reshape(shape)


def exponent_axis(exponents: tuple[float, float]) -> Axis:
    """Axis of the exponents n within a range."""
    return Axis.over(*exponents, _EXPONENT_STEP)


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
    axis = exponent_axis(exponents)
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


def _some(which: NDArray[np.bool_], values: Floats) -> Floats:
    return values[which]


_Row = Callable[[Floats], tuple[Floats, Floats]]


def _limited(n: float) -> _Row:
    """V(q; n) and its slope."""

    def solved(q: Floats) -> tuple[Floats, Floats]:
        value = hyp2f1(1.0, 1.0 / n, 1.0 + 1.0 / n, -q)
        return value, (1.0 / (1.0 + q) - value) / (n * q)

    return solved


def _middle(inverse: float) -> _Row:
    """P(q; 1/inverse) and its slope."""

    def solved(q: Floats) -> tuple[Floats, Floats]:
        # 1 - V(1/q) of the same form: P = 1 - q-part, each where nothing cancels.
        low = 1.0 - hyp2f1(1.0, inverse, 1.0 + inverse, -1.0 / np.minimum(q, 1.0))
        share = 1.0 / (1.0 / inverse + 1.0)
        high = share / q * hyp2f1(1.0, 1.0 + inverse, 2.0 + inverse, -1.0 / np.maximum(q, 1.0))
        value = np.where(q < 1.0, low, high)
        return value, (value - 1.0 / (1.0 + q)) * inverse / q

    return solved
