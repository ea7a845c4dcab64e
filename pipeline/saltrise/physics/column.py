"""Layered soil columns, and columns whose top stops at a finite suction.

The column is marched down from its top at a fixed flux: suction is continuous from layer to layer
(Willis 1960, Soil Science Society of America Proceedings 24:239-242, in concept), so the depth
that lifts a flux is explicit whatever the layers are. The order of layers matters, and a layered
column can lift more or less than either of its soils alone.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from saltrise.physics.heights import Heights
from saltrise.physics.profile import Profile
from saltrise.physics.reach import invert

Floats = NDArray[np.float64]


_LEAST_OCTAVE = -100
"""Below 1e-30 mm/day a march would run out of numbers."""


@dataclass(frozen=True)
class Column:
    """Soils from the top down to the water table, wherever it stands.

    `bottoms_m` [m below the column's top] end every layer but the last. `suction_m` [m] is the
    suction at the top: infinite for a bare surface that dries without limit.
    """

    layers: tuple[Profile, ...]
    bottoms_m: tuple[float, ...] = ()
    suction_m: float = math.inf

    def __post_init__(self) -> None:
        edges = (0.0, *self.bottoms_m)
        if len(edges) != len(self.layers) or any(np.diff(edges) <= 0) or self.suction_m <= 0:
            raise ValueError(f"a column needs one bottom less than layers, increasing: {self}")

    @property
    def steep(self) -> bool:
        """See `Profile.steep`."""
        return any(soil.steep for soil in self.layers)

    def depth(self, flux_mm_per_day: Floats) -> tuple[Floats, Floats]:
        """See `Profile.depth`; by marching down."""
        flux = np.atleast_1d(np.asarray(flux_mm_per_day, dtype=np.float64))
        march = from_top(flux, self.suction_m)
        depth, slope = np.full(flux.shape, np.nan), np.full(flux.shape, np.nan)
        for soil, bottom in zip(self.layers, (*self.bottoms_m, math.inf), strict=True):
            heights = soil.heights(flux)
            found, tilt = water_table(heights, march)
            here = np.isnan(depth) & (found <= bottom)
            depth[here], slope[here] = found[here], tilt[here]
            if here.all() or bottom == math.inf:
                break
            march = through(heights, march, bottom)
        return depth, slope

    def evaporation(self, depth_m: Floats) -> tuple[Floats, Floats]:
        """See `Profile.evaporation`; by `reach.invert`.

        Nothing rises where the water table lies deeper than the suction at the top reaches.

        Raises
        ------
        ArithmeticError
            It did not settle.
        """
        return invert(self.depth, depth_m, self.suction_m, _LEAST_OCTAVE)


@dataclass(frozen=True)
class March:
    """Where a march stands: top of the next layer [m], suction there [m] and its slope."""

    top_m: float
    suction_m: Floats
    slope: Floats


def from_top(flux_mm_per_day: Floats, suction_m: float) -> March:
    """The top of a column that dries to a suction [m], infinite where it has no limit."""
    return March(0.0, np.full(flux_mm_per_day.shape, suction_m), np.zeros(flux_mm_per_day.shape))


def through(heights: Heights, march: March, bottom_m: float) -> March:
    """March through one layer down to its bottom [m below the column's top].

    From F(top) - F(bottom) = thickness, the slope of suction against flux follows by implicit
    differentiation.
    """
    suction = heights.below(march.suction_m, bottom_m - march.top_m)
    slope = _place(heights, march)[1] - heights.at(suction)[1]
    return March(bottom_m, suction, slope / heights.share(suction))


def water_table(heights: Heights, march: March) -> tuple[Floats, Floats]:
    """Depth [m] of the water table if the layer went on, and its slope against flux."""
    height, slope = _place(heights, march)
    return march.top_m + height, slope


def _place(heights: Heights, march: March) -> tuple[Floats, Floats]:
    """Height F(h(E); E) [m] of the top of a layer, and its slope against flux."""
    height, own = heights.at(march.suction_m)
    finite = np.isfinite(march.suction_m)
    moved = np.where(finite, march.suction_m, 1.0)
    return height, own + np.where(finite, heights.share(moved) * march.slope, 0.0)
