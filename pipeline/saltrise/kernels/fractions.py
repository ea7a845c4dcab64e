"""Fractions of sand, silt and clay in every cell."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.compiled import compiled

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]
Cells = NDArray[Any]
"""float32 or float64"""


@compiled
def percent(
    sand: Cells,
    clay: Cells,
    silt: Cells,
    divisor: float,
    tolerance: float,
    digits: float,
    found: tuple[Floats, Floats, Flags],
) -> None:
    """Sand and clay [%], scaled to a sum of 100 with `silt` where that is given (not empty), and
    where they cannot be; sums are compared in steps of 1 / `digits`."""
    sands, clays, wrong = found
    for i in range(sand.size):
        a, b = sand[i] / divisor, clay[i] / divisor
        bad = a < 0.0 or b < 0.0
        if silt.size:
            c = silt[i] / divisor
            total = a + b + c
            apart = abs(np.rint((total - 100.0) * digits) / digits)
            bad = bad or c < 0.0 or apart > tolerance
            a, b = a * 100.0 / total, b * 100.0 / total
        else:
            bad = bad or np.rint((a + b) * digits) / digits > 100.0
        sands[i], clays[i], wrong[i] = a, b, bad


@compiled
def squares(
    sand: Floats,
    clay: Floats,
    table: Floats,
    per_percent: int,
    across: int,
    classes: Floats,
    near: Flags,
) -> int:
    """Class of the square of the triangle that holds each cell; where that is NaN because an edge
    may be near, or the cell outside, `near` says so; how many are."""
    count = 0
    for i in range(sand.size):
        a, b = sand[i], clay[i]
        classes[i], near[i] = np.nan, False
        if math.isnan(a) or math.isnan(b):
            continue
        if a >= 0.0 and b >= 0.0 and a + b <= 100.0:
            classes[i] = table[int(b * per_percent) * across + int(a * per_percent)]
        near[i] = math.isnan(classes[i])
        count += near[i]
    return count
