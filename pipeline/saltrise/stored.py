"""Layer values as the numbers that are stored, and the moments of those."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels import stored
from saltrise.layers import NODATA

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]
Stored = NDArray[np.float32] | NDArray[np.uint8]


def store(
    values: NDArray[Any],
    valid: Flags,
    layer: Stored,
    corner: tuple[int, int],
    *,
    rounded: bool,
) -> Floats:
    """Write a strip of cells into a layer.

    Parameters
    ----------
    values : float64 or uint8 array (rows, columns)
        Values of a continuous layer in its unit, or classes (0 where not valid).
    valid : bool array, same shape
        Cells that have a value; the others become nodata.
    layer : float32 or uint8 array
        The tile's layer, changed in place.
    corner : (int, int)
        Row and column of the strip's first cell in the layer.
    rounded : bool
        Keep 12 explicit mantissa bits (rounded to nearest, ties to even) instead of all 23.

    Returns
    -------
    float64 array
        Count, least, greatest, mean and sum of squared deviations of the valid stored numbers.
    """
    if layer.dtype == np.uint8:
        found = stored.store_classes(values, valid, layer, *corner)
    else:
        found = stored.store(values, valid, rounded, NODATA, layer, *corner)
    return np.array(found, dtype=np.float64)


def single(values: Floats, valid: Flags, *, rounded: bool) -> NDArray[np.float32]:
    """Values of a continuous layer as they are stored, of any two-dimensional shape."""
    layer = np.empty(values.shape, dtype=np.float32)
    store(values, valid, layer, (0, 0), rounded=rounded)
    return layer
