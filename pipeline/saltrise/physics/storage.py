"""Water that a steady rise takes out of a column, and how long the rise needs to bring it about.

Before anything evaporates, suction stands at its height above the water table (hydrostatic);
under a steady flux it is greater, so less water is held. The water between both profiles has to
leave before the rise is steady; over the flux it is a time (the retention curves are those of the
soils' own laws: Campbell 1974, Brooks & Corey 1964, van Genuchten 1980).
"""

from __future__ import annotations

import math
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from saltrise.physics.reach import POINTS, WEIGHTS, Conductor, nodes_in

Floats = NDArray[np.float64]

_MM_PER_M = 1000.0


class Retainer(Conductor, Protocol):
    """A soil with conductivity and retention."""

    def drained(self, suction_m: Floats) -> Floats:
        """Water content below saturation [-] at suctions [m] > 0."""


class Drainage:
    """Water drained between the water table and a suction, in one soil, for an array of fluxes.

    The integral of (theta_s - theta) dz from suction 0 to h, dz = dh / (1 + E/K); a flux of 0 is
    the hydrostatic profile. A class because what is summed up once serves every layer.
    """

    def __init__(self, soil: Retainer, flux_mm_per_day: Floats) -> None:
        self._soil, self._flux = soil, flux_mm_per_day
        panels, head, area, conductivity = nodes_in(soil)
        self._panels = panels
        drained = area * soil.drained(head)
        self._sum = np.zeros((flux_mm_per_day.size, panels.count + 1))
        with np.errstate(divide="ignore", over="ignore"):
            for k, flux in enumerate(flux_mm_per_day):
                part = (drained / (1.0 + flux / conductivity)).sum(axis=1)
                np.cumsum(part, out=self._sum[k, 1:])

    def to(self, suction_m: Floats, row: NDArray[np.intp]) -> Floats:
        """Water [m] drained between the water table and suctions [m] under the fluxes of some
        rows; none below it."""
        edges = self._panels.edges()
        inside = np.log(np.clip(suction_m, math.exp(edges[0]), math.exp(edges[-1])))
        panel, start = self._panels.place(inside)
        width = (inside - start)[:, np.newaxis]
        head = np.exp(start[:, np.newaxis] + width * POINTS)
        with np.errstate(divide="ignore", over="ignore"):
            share = 1.0 / (1.0 + self._flux[row, np.newaxis] / self._soil.conductivity(head))
        part = (head * (width * WEIGHTS) * self._soil.drained(head) * share).sum(axis=1)
        total: Floats = self._sum[row, panel] + part
        return total


def response_days(stored_m: Floats, hydrostatic_m: Floats, flux_mm_per_day: Floats) -> Floats:
    """Days that a flux [mm/day] needs to take the water [m] between two profiles."""
    return np.maximum(stored_m - hydrostatic_m, 0.0) * _MM_PER_M / flux_mm_per_day
