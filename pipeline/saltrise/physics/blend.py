"""Tables between whose rows one interpolates: a row a node of an axis, cubic along it."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.tables import AxisOf, TableOf, blend
from saltrise.physics.table import Table

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Axis:
    """Evenly spaced nodes from `low` on, four at least; what lies beyond the ends is held there."""

    low: float
    step: float
    count: int

    @classmethod
    def over(cls, low: float, high: float, step: float) -> Axis:
        """Nodes at most `step` apart that cover a range."""
        count = max(4, int(np.ceil((high - low) / step - 1e-9)) + 1)
        return cls(low, max(high - low, 1e-9) / (count - 1), count)

    def nodes(self) -> Floats:
        """Positions of the nodes."""
        steps: Floats = np.arange(self.count, dtype=np.float64)
        return self.low + self.step * steps


@dataclass(frozen=True)
class Blend:
    """A table with a row a node of an axis."""

    table: Table
    axis: Axis

    def parts(self) -> tuple[TableOf, AxisOf]:
        """The table and its axis as compiled loops take them."""
        _, _, octave, bits, low, high = self.table.parts()
        axis = (self.axis.low, 1.0 / self.axis.step, self.axis.count)
        return (self._side_by_side, self.axis.count, octave, bits, low, high), axis

    @cached_property
    def _side_by_side(self) -> Floats:
        """The table's cubics with the rows of an interval next to each other."""
        cubics = self.table.cubics.reshape(self.axis.count, self.table.intervals, 4)
        return np.ascontiguousarray(cubics.transpose(1, 0, 2)).reshape(-1, 4)

    def look_up(self, along: Floats, value: Floats) -> Floats:
        """Interpolate between what the rows hold at a value, by four rows (Lagrange).

        Parameters
        ----------
        along : float64 array
            Position of each cell on the axis.
        value : float64 array
            Argument of the rows.
        """
        found = np.empty(value.size)
        blend(*self.parts(), along.ravel(), value.ravel(), found)
        return found.reshape(value.shape)
