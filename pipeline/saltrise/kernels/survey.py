"""What a block of an input holds."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.compiled import compiled

Cells = NDArray[Any]
"""float32 or float64"""
Whole = NDArray[np.int64]


@compiled
def extent(values: Cells) -> tuple[int, float, float, int, int]:
    """Of a block's values (rows, columns): how many are finite, the least and greatest of them,
    how many are negative and where the first of those is, row by row."""
    height, width = values.shape
    # By column, not one after the other: columns are compared side by side.
    valid = np.zeros(width, dtype=np.int64)
    low, high = np.full(width, np.inf), np.full(width, -np.inf)
    for i in range(height):
        for j in range(width):
            value = np.float64(values[i, j])
            held = value - value == 0.0
            valid[j] += held
            low[j] = min(low[j], value if held else np.inf)
            high[j] = max(high[j], value if held else -np.inf)
    negative, first = 0, -1
    if low.min() < 0.0:
        for i in range(height * width):
            value = np.float64(values[i // width, i % width])
            if -np.inf < value < 0.0:
                negative += 1
                if first < 0:
                    first = i
    return valid.sum(), low.min(), high.max(), negative, first


@compiled
def tally(values: Cells, counts: Whole, first: Whole) -> bool:
    """Count whole numbers by value and note where each comes first; whether all but NaN are whole
    numbers from 0 to below the size of `counts`."""
    for i in range(values.size):
        value = values[i]
        if math.isnan(value):
            continue
        if not 0.0 <= value < counts.size:
            return False
        code = int(value)
        if code != value:
            return False
        if counts[code] == 0:
            first[code] = i
        counts[code] += 1
    return True
