"""How far a soil lifts a flux, by quadrature of the full integral, and back.

    L(E) = integral from 0 to the suction at the top of dh / (1 + E / K(h))

in log suction, by Gauss-Legendre panels whose edges meet the breaks of the law's slope.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from functools import lru_cache
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

_LEAST_M, _GREATEST_M = 1e-14, 1e16
"""Suctions between which the integral is by quadrature; below nothing, above a power law."""

_PANEL, _POINTS = 0.25, 10
"""Widest panel in log suction and Gauss-Legendre points in it: the integrand's poles lie pi/n
off the axis for K ~ h^-n, so up to n = 15 a panel errs by less than 1e-11 of itself."""

_LEAST_OCTAVE, _GREATEST_OCTAVE = -300, 60
_NEWTON_LIMIT, _NEWTON_STEP, _ROUNDING = 60, 1e-11, 1e-14


class Conductor(Protocol):
    """A soil's conductivity."""

    @property
    def anchor_m(self) -> float:
        """Suction [m] where the law's slope breaks, or any inside it where none does."""

    def conductivity(self, suction_m: Floats) -> Floats:
        """Conductivity [mm/day] at suctions [m] > 0."""

    def __hash__(self) -> int:
        """Equal laws have equal hashes: what is made of one is kept."""


_GAUSS = np.polynomial.legendre.leggauss(_POINTS)
POINTS, WEIGHTS = 0.5 + 0.5 * _GAUSS[0], 0.5 * _GAUSS[1]
"""Gauss-Legendre points and weights on a panel from 0 to 1."""


class Panels:
    """Panels in log suction that fit a soil, and the quadrature's nodes in them.

    A law with a second break of slope names it as `second_anchor_m`.
    """

    def __init__(self, soil: Conductor) -> None:
        second = getattr(soil, "second_anchor_m", None)
        self.width: float = _PANEL
        if second is not None:
            apart = math.log(second / soil.anchor_m)
            self.width = apart / math.ceil(apart / _PANEL)
        anchor = math.log(soil.anchor_m)
        self.first = anchor - self.width * math.ceil((anchor - math.log(_LEAST_M)) / self.width)
        self.count = math.ceil((math.log(_GREATEST_M) - self.first) / self.width)

    def edges(self) -> Floats:
        """All edges in log suction."""
        steps: Floats = np.arange(self.count + 1, dtype=np.float64)
        return self.first + self.width * steps

    def place(self, log: Floats) -> tuple[NDArray[np.intp], Floats]:
        """Panel of each log suction, and where that begins."""
        panel = np.clip((log - self.first) // self.width, 0, self.count - 1).astype(np.intp)
        start: Floats = self.first + self.width * panel.astype(np.float64)
        return panel, start

    def nodes(self, edges: Floats) -> tuple[Floats, Floats]:
        """Suctions [m] and weights of the quadrature between edges, a row a panel."""
        wide = np.diff(edges)[:, np.newaxis]
        head = np.exp(edges[:-1, np.newaxis] + wide * POINTS)
        return head, head * (wide * WEIGHTS)


@lru_cache(maxsize=64)
def nodes_in(soil: Conductor) -> tuple[Panels, Floats, Floats, Floats]:
    """Panels of a soil with the suctions of all nodes, their weights and conductivities."""
    panels = Panels(soil)
    head, area = panels.nodes(panels.edges())
    return panels, head, area, soil.conductivity(head)


@lru_cache(maxsize=256)
def tail(soil: Conductor, end_m: float) -> tuple[float, float]:
    """Power p of K ~ h^-p at a great suction, and the integral of K dh beyond it."""
    last, before = soil.conductivity(np.array([end_m, end_m / 2]))
    if last <= 0.0:
        return 2.0, 0.0
    power = math.log2(before / last)
    return power, end_m * float(last) / (power - 1.0)


def reach(
    soil: Conductor, flux_mm_per_day: Floats, suction_m: float = math.inf
) -> tuple[Floats, Floats]:
    """Depth [m] from which a soil lifts a flux, and its slope against the flux.

    Parameters
    ----------
    soil : Conductor
        Its law.
    flux_mm_per_day : float64 array
        Fluxes > 0.
    suction_m : float
        Suction at the top of the rise [m].

    Returns
    -------
    depth, slope : float64 arrays
        [m] and [m/(mm/day)]; within 1e-10 of exact for depths from 1 mm on.
    """
    flux = np.atleast_1d(np.asarray(flux_mm_per_day, dtype=np.float64))
    panels = Panels(soil)
    edges = panels.edges()
    if suction_m < math.inf:
        edges = np.minimum(edges, math.log(suction_m))
    head, area = (values.ravel() for values in panels.nodes(edges))
    conductivity = soil.conductivity(head)
    beyond = tail(soil, math.exp(edges[-1]))[1] if suction_m == math.inf else 0.0
    depth, slope = np.empty(flux.shape), np.empty(flux.shape)
    with np.errstate(divide="ignore", over="ignore"):
        for k, one in enumerate(flux):
            share = 1.0 / (1.0 + one / conductivity)
            part = area * share
            depth[k] = part.sum() + beyond / one
            # d/dE of 1 / (1 + E/K) is -(1/E) (1 - share) share.
            slope[k] = -(part @ (1.0 - share) + beyond / one) / one
    return depth, slope


def invert(
    depth_of: Callable[[Floats], tuple[Floats, Floats]],
    depth_m: Floats,
    most_m: float = math.inf,
    least_octave: int = _LEAST_OCTAVE,
) -> tuple[Floats, Floats]:
    """Flux [mm/day] that reaches depths, and its slope [mm/day/m]: the inverse of `depth_of`.

    Newton's method on log flux, bracketed: slopes may jump at interfaces.

    Parameters
    ----------
    depth_of : callable
        Depth [m] and slope of an array of fluxes, falling.
    depth_m : float64 array
        Depths > 0.
    most_m : float
        Depth from which on nothing rises.
    least_octave : int
        Fluxes are sought from 2 to this power on [mm/day].

    Raises
    ------
    ArithmeticError
        It did not settle.
    """
    wanted = np.atleast_1d(np.asarray(depth_m, dtype=np.float64))
    grid = np.ldexp(1.0, np.arange(least_octave, _GREATEST_OCTAVE))
    known = depth_of(grid)[0]
    lifts = wanted < most_m
    target = np.where(lifts, wanted, known[grid.size // 2])
    place = np.clip(np.searchsorted(-known, -target), 1, grid.size - 1)
    low, high = np.log(grid[place - 1]), np.log(grid[place])
    log = (low + high) / 2
    for _ in range(_NEWTON_LIMIT):
        found, slope = depth_of(np.exp(log))
        deeper = found > target
        low, high = np.where(deeper, log, low), np.where(deeper, high, log)
        moved = log - (found - target) / (np.exp(log) * slope)
        moved = np.where((moved >= low) & (moved <= high), moved, (low + high) / 2)
        settled = np.abs(moved - log) < _NEWTON_STEP
        settled |= np.abs(found - target) < _ROUNDING * target
        log = moved
        if settled.all():
            break
    else:
        raise ArithmeticError(f"no flux found for depth {target[~settled][0]!r} m")
    flux = np.exp(log)
    return np.where(lifts, flux, 0.0), np.where(lifts, 1.0 / slope, 0.0)
