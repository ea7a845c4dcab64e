"""Tables between whose rows one interpolates: a row a node of an axis, cubic along it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

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

    def weights(self, values: Floats) -> tuple[NDArray[np.int64], tuple[Floats, ...]]:
        """First of the four nodes about each value, and their weights (Lagrange)."""
        at = np.clip((values - self.low) * (1.0 / self.step), 0.0, self.count - 1.0)
        first = np.clip(at.astype(np.int64) - 1, 0, self.count - 4)
        t = at - first
        a, b, c = t - 1.0, t - 2.0, t - 3.0
        outer, inner = a * b, t * c
        return first, (
            outer * c * (-1.0 / 6.0),
            b * inner * 0.5,
            a * inner * -0.5,
            outer * t * (1.0 / 6.0),
        )


Placed = tuple[NDArray[np.int64], tuple[Floats, ...]]
"""First node and weights of cells on an axis."""


@dataclass(frozen=True)
class Blend:
    """A table with a row a node of an axis."""

    table: Table
    axis: Axis

    def look_up(self, placed: Placed, value: Floats) -> Floats:
        """Interpolate between what the rows hold at a value.

        Parameters
        ----------
        placed : Placed
            Cells on the axis, by `Axis.weights`; the same for every table with that axis.
        value : float64 array
            Argument of the rows.
        """
        first, weights = placed
        index, inside = self.table.locate(value)
        index += first * self.table.intervals
        total = self.table.cubics(index, inside) * weights[0]
        for weight in weights[1:]:
            index += self.table.intervals
            total += self.table.cubics(index, inside) * weight
        return total
