"""Tables of cubics that cost a look-up and + - x a number.

Nodes lie at 2^k (1 + j/m), so octave and node are the exponent and top mantissa bits of the
number looked up: no exp, log or power, and the same bits on every processor.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.tables import TableOf, look_up

Floats = NDArray[np.float64]
Indices = NDArray[np.int32]

Solved = Callable[[Floats], tuple[Floats, Floats]]
"""A row of a table before it is one: values and slopes at numbers."""

_PLUNGE = 0.1


@dataclass(frozen=True)
class Table:
    """Cubics of all rows over the same nodes.

    `cubics` is (rows x intervals, 4), constant first, in the interval's own position from 0 to 1;
    numbers from 2^`octaves[0]` to below 2^`octaves[1]`, 2^`bits` intervals an octave.
    """

    octaves: tuple[int, int]
    bits: int
    cubics: Floats

    @property
    def intervals(self) -> int:
        """Intervals of one row."""
        return (self.octaves[1] - self.octaves[0]) << self.bits

    def parts(self) -> TableOf:
        """The table as compiled loops take it."""
        low, high = (2.0**octave for octave in self.octaves)
        return (
            self.cubics,
            self.intervals,
            self.octaves[0],
            self.bits,
            low,
            float(np.nextafter(high, 0.0)),
        )

    def look_up(self, row: Indices, value: Floats, least: float = 0.0) -> Floats:
        """Interpolate; numbers below `least` or beyond the table count as the ends.

        NaN where the row is negative or the number is NaN.
        """
        found = np.empty(value.size)
        look_up(self.parts(), row.ravel(), value.ravel(), least, found)
        return found.reshape(value.shape)


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
    return Table(octaves, bits, np.ascontiguousarray(np.hstack(columns).T))
