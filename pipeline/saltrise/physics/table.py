"""Tables of cubics that cost a look-up and + - x a number.

Nodes lie at 2^k (1 + j/m), so octave and node are the exponent and top mantissa bits of the
number looked up: no exp, log or power, and the same bits on every processor.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Indices = NDArray[np.int32]

Solved = Callable[[Floats], tuple[Floats, Floats]]
"""A row of a table before it is one: values and slopes at numbers."""

_PLUNGE = 0.1
_MANTISSA = 52
_ONE = np.int64(1023 << _MANTISSA)


@dataclass(frozen=True)
class Table:
    """Cubics of all rows over the same nodes.

    `coefficients` is (4, rows x intervals), constant first, in the interval's own position
    from 0 to 1; numbers from 2^`octaves[0]` to below 2^`octaves[1]`, 2^`bits` intervals an octave.
    """

    octaves: tuple[int, int]
    bits: int
    coefficients: Floats

    @property
    def intervals(self) -> int:
        """Intervals of one row."""
        return (self.octaves[1] - self.octaves[0]) << self.bits

    def look_up(self, row: Indices, value: Floats) -> Floats:
        """Interpolate; numbers beyond the table count as its ends, NaN as its low end."""
        return self.at(row, self.locate(value))

    def locate(self, value: Floats) -> tuple[NDArray[np.int64], Floats]:
        """Interval of each number in any row, and its position there from 0 to 1."""
        low, high = (2.0**octave for octave in self.octaves)
        inside = np.where(value > low, value, low)
        np.minimum(inside, np.nextafter(high, 0.0), out=inside)
        bits = inside.view(np.int64)
        index = bits >> np.int64(_MANTISSA - self.bits)
        index -= np.int64((self.octaves[0] + 1023) << self.bits)
        bits &= np.int64((1 << (_MANTISSA - self.bits)) - 1)
        bits <<= np.int64(self.bits)
        bits |= _ONE
        inside -= 1.0
        return index, inside

    def at(
        self, row: Indices | NDArray[np.int64], located: tuple[NDArray[np.int64], Floats]
    ) -> Floats:
        """Values of rows where `locate` has placed the numbers."""
        index, inside = located
        return self.cubics(index + row.astype(np.int64, copy=False) * self.intervals, inside)

    def cubics(self, index: NDArray[np.int64], inside: Floats) -> Floats:
        """Values of intervals, counted through all rows, at positions in them."""
        result: Floats = self.coefficients[3].take(index)
        for k in (2, 1, 0):
            result *= inside
            result += self.coefficients[k].take(index)
        return result


def nodes_of(octaves: tuple[int, int], bits: int) -> Floats:
    """All nodes of a table, its high end included."""
    per_octave = 1 << bits
    steps = np.arange((octaves[1] - octaves[0]) * per_octave + 1)
    octave, step = np.divmod(steps, per_octave)
    nodes: Floats = np.ldexp(1.0 + step / per_octave, octave + octaves[0])
    return nodes


def tabulate(octaves: tuple[int, int], bits: int, rows: Sequence[Solved]) -> Table:
    """Solve every row at the nodes, value and slope; cubics (Hermite) lie between."""
    nodes = nodes_of(octaves, bits)
    width = np.diff(nodes)
    columns = []
    for solve in rows:
        value, slope = solve(nodes)
        rise, left, right = np.diff(value), slope[:-1] * width, slope[1:] * width
        cubic = np.stack((value[:-1], left, 3 * rise - 2 * left - right, left + right - 2 * rise))
        # Where values fall away within one interval, a cubic would swing below zero.
        plunge = (value[1:] < _PLUNGE * value[:-1]) & (value[1:] >= 0.0)
        cubic[1, plunge], cubic[2:, plunge] = rise[plunge], 0.0
        columns.append(cubic)
    return Table(octaves, bits, np.ascontiguousarray(np.hstack(columns)))
