"""Coarser versions of a layer's stored values: defined here, the same however a layer is cut.

Sizes halve, rounding up. A continuous cell is the mean of the valid stored cells among four,
rounded like them; a class cell is the most frequent valid class, ties to the more severe.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from saltrise.layers import CLASS_NODATA, NODATA
from saltrise.mantissa import round_mantissa

Stored = NDArray[np.float32] | NDArray[np.uint8]

_ROWS = 256
"""Rows treated at a time: few enough for the caches, enough for threads to work side by side."""


def level_sizes(width: int, height: int, block: int) -> list[tuple[int, int]]:
    """Width and height of every overview of a layer, finest first.

    Levels go on until both edges fit in one block.
    """
    sizes = []
    while max(width, height) > block:
        width, height = -(-width // 2), -(-height // 2)
        sizes.append((width, height))
    return sizes


def halve(stored: Stored, *, rounded: bool) -> Stored:
    """The next coarser level of a window whose first cell lies at even row and column.

    Parameters
    ----------
    stored : float32 or uint8 array
        Stored values; -9999 (float32) or 0 (uint8) is nodata.
    rounded : bool
        Whether the layer keeps 12 explicit mantissa bits.

    Returns
    -------
    array of the same type, each edge halved, rounding up
    """
    height, width = stored.shape
    if height % 2 or width % 2:
        nodata = NODATA if stored.dtype == np.float32 else CLASS_NODATA
        even = np.full((height + height % 2, width + width % 2), nodata, dtype=stored.dtype)
        even[:height, :width] = stored
        stored = even
    if stored.dtype == np.float32:
        return _mean(stored, rounded)
    coarse = np.empty((stored.shape[0] // 2, stored.shape[1] // 2), dtype=np.uint8)
    for top in range(0, len(coarse), _ROWS):
        part = stored[2 * top : 2 * (top + _ROWS)]
        four = (part[::2, ::2], part[::2, 1::2], part[1::2, ::2], part[1::2, 1::2])
        coarse[top : top + _ROWS] = _most_frequent(tuple(map(np.ascontiguousarray, four)))
    return coarse


def _mean(stored: Stored, rounded: bool) -> NDArray[np.float32]:
    height, width = stored.shape
    mean = np.empty((height // 2, width // 2), dtype=np.float32)
    for top in range(0, len(mean), _ROWS):
        part = stored[2 * top : 2 * (top + _ROWS)]
        valid = part != NODATA
        clean = np.where(valid, part, np.float32(0))
        # Rows first, which lie side by side in memory; float64 holds sums of four exactly unless
        # they differ by more than 2^27.
        pairs = clean[::2].astype(np.float64)
        pairs += clean[1::2]
        total = pairs[:, ::2] + pairs[:, 1::2]
        here = mean[top : top + _ROWS]
        if valid.all():
            np.multiply(total, 0.25, out=here, casting="same_kind")
            if rounded:
                round_mantissa(here)
            continue
        counts = valid[::2].astype(np.uint8) + valid[1::2]
        count = counts[:, ::2] + counts[:, 1::2]
        np.divide(total, np.maximum(count, 1), out=here, casting="same_kind")
        if rounded:
            round_mantissa(here)
        here[count == 0] = NODATA
    return mean


def _most_frequent(four: tuple[NDArray[np.uint8], ...]) -> NDArray[np.uint8]:
    same = {(i, j): four[i] == four[j] for i in range(4) for j in range(i + 1, 4)}
    best = np.zeros(four[0].shape, dtype=np.uint8)
    for k, part in enumerate(four):
        votes = np.zeros(four[0].shape, dtype=np.uint8)
        for j in range(4):
            if j != k:
                votes += same[min(j, k), max(j, k)]
        # Votes in the high bits, class in the low ones: the greatest key is the winner.
        votes <<= np.uint8(3)
        votes += part
        votes *= part != CLASS_NODATA
        np.maximum(best, votes, out=best)
    best &= np.uint8(7)
    return best
