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
    """How many values are finite, the least and greatest of them, how many are negative and where
    the first of those is."""
    valid, low, high, negative, first = 0, np.inf, -np.inf, 0, -1
    for i in range(values.size):
        held = math.isfinite(values[i])
        valid += held
        value = np.float64(values[i])
        low = min(low, value if held else np.inf)
        high = max(high, value if held else -np.inf)
    if low < 0.0:
        for i in range(values.size):
            if math.isfinite(values[i]) and values[i] < 0.0:
                negative += 1
                if first < 0:
                    first = i
    return valid, low, high, negative, first


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
