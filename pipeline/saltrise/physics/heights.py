"""Height above a water table against suction, in one soil, for an array of steady fluxes.

In a column that lifts a steady flux E, suction h stands at the height

    F(h; E) = integral from 0 to h of dh' / (1 + E / K(h'))

above the water table: Darcy's law dz = dh / (1 + E/K) [1]. Layers are marched through with F and
its inverse; a suction below zero goes on as if the soil stayed saturated.

References
----------
.. [1] Gardner W.R. (1958) Some steady-state solutions of the unsaturated moisture flow equation
   with application to evaporation from a water table. Soil Science 85:228-232.
"""

from __future__ import annotations

import math
from functools import cached_property
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.panels import running_sums
from saltrise.physics.reach import POINTS, WEIGHTS, Conductor, nodes_in, tail

Floats = NDArray[np.float64]

_LEAST_M = 1e-14
"""Suction that counts as saturated."""

_NEWTON_LIMIT, _NEWTON_STEP = 12, 1e-14


class Heights(Protocol):
    """Heights in one soil, an entry a flux."""

    def at(self, suction_m: Floats) -> tuple[Floats, Floats]:
        """Height [m] of a suction [m], infinite allowed, and its slope against flux."""

    def share(self, suction_m: Floats) -> Floats:
        """1 / (1 + E/K): slope of height against suction."""

    def below(self, suction_m: Floats, distance_m: float) -> Floats:
        """Suction [m] at a distance below the place of another; below zero under water."""


class QuadratureHeights:
    """Heights of any law, by Gauss-Legendre quadrature in log suction.

    A class because what is summed up once serves every layer of the soil.
    """

    def __init__(self, soil: Conductor, flux_mm_per_day: Floats) -> None:
        self._soil, self._flux = soil, flux_mm_per_day
        panels = nodes_in(soil)[0]
        self._first, self._width, self._panels = panels.first, panels.width, panels.count
        # Beyond the last panel K is a power of h, and far below the flux.
        self._end = math.exp(self._first + self._width * self._panels)
        self._power, beyond = tail(soil, self._end)
        self._tail = beyond / flux_mm_per_day

    @cached_property
    def _sums(self) -> tuple[Floats, Floats]:
        """Height, and flux times its slope with the sign turned, at the edges of the panels."""
        _, _, area, conductivity = nodes_in(self._soil)
        shape = (self._flux.size, self._panels + 1)
        height, rest = np.empty(shape), np.empty(shape)
        points, laws = np.ascontiguousarray(area.T), np.ascontiguousarray(conductivity.T)
        running_sums(self._flux, points, laws, height, rest)
        return height, rest

    def at(self, suction_m: Floats) -> tuple[Floats, Floats]:
        """See `Heights.at`."""
        wet = suction_m <= 0.0
        inside = np.where(wet, math.exp(self._first), np.minimum(suction_m, self._end))
        panel, start = nodes_in(self._soil)[0].place(np.log(inside))
        rows = np.arange(inside.size)
        height, rest = self._part(np.log(inside), start)
        heights, rests = self._sums
        height += heights[rows, panel]
        rest += rests[rows, panel]
        with np.errstate(over="ignore", divide="ignore"):
            left = np.maximum(suction_m / self._end, 1.0) ** (1.0 - self._power)
        height += self._tail * (1.0 - left)
        rest += self._tail * (1.0 - left)
        share = self._saturated()
        flooded = np.where(wet, suction_m, 0.0) * share
        slope = np.where(wet, flooded * (1.0 - share), rest) / -self._flux
        return np.where(wet, flooded, height), slope

    def share(self, suction_m: Floats) -> Floats:
        """See `Heights.share`."""
        with np.errstate(divide="ignore", over="ignore"):
            conductivity = self._soil.conductivity(np.maximum(suction_m, _LEAST_M))
            share: Floats = 1.0 / (1.0 + self._flux / conductivity)
        return share

    def below(self, suction_m: Floats, distance_m: float) -> Floats:
        """See `Heights.below`; Newton's method inside one panel."""
        height = self.at(suction_m)[0] - distance_m
        wet = height <= 0.0
        wanted = np.where(wet, 0.0, height)
        heights = self._sums[0]
        panel = np.clip((heights <= wanted[:, np.newaxis]).sum(axis=1) - 1, 0, None)
        far = panel >= self._panels
        panel = np.minimum(panel, self._panels - 1)
        rows = np.arange(wanted.size)
        start = self._first + self._width * panel
        beyond = wanted - heights[rows, panel]
        whole = heights[rows, panel + 1] - heights[rows, panel]
        log = start + self._width * np.clip(beyond / whole, 0.0, 1.0)
        settled = far | wet
        for _ in range(_NEWTON_LIMIT):
            part = self._part(log, start)[0]
            step = (part - beyond) / (np.exp(log) * self.share(np.exp(log)))
            moved = np.clip(log - step, start, start + self._width)
            change = np.abs(moved - log)
            # What has settled stays: no flux's answer depends on which others are asked for.
            log = np.where(settled, log, moved)
            settled |= change < _NEWTON_STEP * np.maximum(1.0, np.abs(log))
            if settled.all():
                break
        suction = np.where(far, self._far(wanted), np.exp(log))
        return np.where(wet, height / self._saturated(), suction)

    def _far(self, height: Floats) -> Floats:
        left = np.maximum(self._sums[0][:, -1] + self._tail - height, 0.0)
        with np.errstate(divide="ignore", invalid="ignore"):
            far: Floats = self._end * (self._tail / left) ** (1.0 / (self._power - 1.0))
        return far

    def _saturated(self) -> Floats:
        return self.share(np.zeros(self._flux.size))

    def _part(self, log: Floats, start: Floats) -> tuple[Floats, Floats]:
        """The integrals from a panel's start to a log suction inside it."""
        width = (log - start)[:, np.newaxis]
        head = np.exp(start[:, np.newaxis] + width * POINTS)
        with np.errstate(divide="ignore", over="ignore"):
            share = 1.0 / (1.0 + self._flux[:, np.newaxis] / self._soil.conductivity(head))
        area = head * (width * WEIGHTS) * share
        return area.sum(axis=1), (area * (1.0 - share)).sum(axis=1)


class ExponentialHeights:
    """Heights for K = Ks exp(-alpha h), in closed form: F = ln[(1 + e)/(y + e)] / alpha with
    e = E/Ks and y = exp(-alpha h). Quadrature would miss how abruptly the flux ends."""

    def __init__(self, ks_mm_per_day: float, alpha_per_m: float, flux_mm_per_day: Floats) -> None:
        self._ks, self._alpha = ks_mm_per_day, alpha_per_m
        self._rate = flux_mm_per_day / ks_mm_per_day

    def at(self, suction_m: Floats) -> tuple[Floats, Floats]:
        """See `Heights.at`."""
        rate, y = self._rate, np.exp(-self._alpha * suction_m)
        height = (np.log1p(rate) - np.log(y + rate)) / self._alpha
        return height, (1.0 / (1.0 + rate) - 1.0 / (y + rate)) / (self._alpha * self._ks)

    def share(self, suction_m: Floats) -> Floats:
        """See `Heights.share`."""
        y = np.exp(-self._alpha * suction_m)
        share: Floats = y / (y + self._rate)
        return share

    def below(self, suction_m: Floats, distance_m: float) -> Floats:
        """See `Heights.below`; y grows to y exp(alpha d) + e (exp(alpha d) - 1)."""
        y = np.exp(-self._alpha * suction_m)
        with np.errstate(over="ignore"):
            growth = np.expm1(self._alpha * distance_m)
            suction: Floats = -np.log(y + (y + self._rate) * growth) / self._alpha
        return suction
