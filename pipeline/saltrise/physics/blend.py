"""Tables between whose rows one interpolates: a row a node of some axes, cubic along each."""

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


@dataclass(frozen=True)
class Blend:
    """A table with a row a node of the axes, the last axis running fastest."""

    table: Table
    axes: tuple[Axis, ...]

    def look_up(self, coordinates: tuple[Floats, ...], value: Floats) -> Floats:
        """Interpolate along the axes between what the rows hold at a value."""
        placed = [axis.weights(c) for axis, c in zip(self.axes, coordinates, strict=True)]
        located = self.table.locate(value)
        return self._sum(placed, np.zeros(value.shape, dtype=np.int64), located)

    def _sum(
        self,
        placed: list[tuple[NDArray[np.int64], tuple[Floats, ...]]],
        row: NDArray[np.int64],
        located: tuple[NDArray[np.int64], Floats],
    ) -> Floats:
        if not placed:
            return self.table.at(row, located)
        axis = self.axes[len(self.axes) - len(placed)]
        first, weights = placed[0]
        row = row * axis.count + first
        total = self._sum(placed[1:], row, located) * weights[0]
        for k in (1, 2, 3):
            total += self._sum(placed[1:], row + k, located) * weights[k]
        return total
