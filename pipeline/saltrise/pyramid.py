"""Coarser versions of a layer's stored values: defined here, the same however a layer is cut.

Sizes halve, rounding up. A continuous cell is the mean of the valid stored cells among four,
rounded like them; a class cell is the most frequent valid class, ties to the more severe.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.stored import halve_classes, halve_means
from saltrise.layers import CLASS_NODATA, NODATA
from saltrise.stored import Stored


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
    fine: NDArray[Any] = np.ascontiguousarray(stored)
    shape = (fine.shape[0] // 2, fine.shape[1] // 2)
    if stored.dtype == np.float32:
        means = np.empty(shape, dtype=np.float32)
        halve_means(fine, rounded, NODATA, means)
        return means
    classes = np.empty(shape, dtype=np.uint8)
    halve_classes(fine, classes)
    return classes
