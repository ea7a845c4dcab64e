"""Rounding of stored numbers to fewer mantissa bits, so that they compress to half the bytes."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

KEPT_BITS = 12
"""Explicit mantissa bits a rounded layer keeps: relative error at most 2^-13 (1.25e-4)."""

_DROPPED = 23 - KEPT_BITS


def round_mantissa(values: NDArray[np.float32]) -> None:
    """Round finite float32 values in place to `KEPT_BITS` explicit mantissa bits, ties to even."""
    bits = values.view(np.uint32)
    odd = (bits >> np.uint32(_DROPPED)) & np.uint32(1)
    odd += np.uint32((1 << (_DROPPED - 1)) - 1)
    bits += odd
    bits &= np.uint32(0xFFFFFFFF << _DROPPED & 0xFFFFFFFF)
