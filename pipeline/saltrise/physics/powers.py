"""Powers and logarithms of cells with the same bits on every processor.

NumPy's exp, log and power differ in the last bits between instruction sets, so a cluster of unlike
machines would not agree on a map. These are sums and products alone, within 4e-16 relative.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels import tables

Floats = NDArray[np.float64]

LOG2_OF_10 = math.log2(10.0)
LOG2_OF_E = math.log2(math.e)


def exp2(x: Floats, factor: float = 1.0) -> Floats:
    """2 to the power x times a factor, for magnitudes of that below 1000."""
    found = np.empty(x.size)
    tables.exp2(x.ravel(), factor, found)
    return found.reshape(x.shape)


def log2(x: Floats, factor: float = 1.0) -> Floats:
    """Logarithm to base 2 times a factor, for x > 0 (subnormal numbers excepted)."""
    found = np.empty(x.size)
    tables.log2(x.ravel(), factor, found)
    return found.reshape(x.shape)


def ten_to(x: Floats) -> Floats:
    """10 to the power x."""
    return exp2(x, LOG2_OF_10)


def exp(x: Floats) -> Floats:
    """e to the power x."""
    return exp2(x, LOG2_OF_E)


def log(x: Floats) -> Floats:
    """Natural logarithm, for x > 0."""
    return log2(x, math.log(2.0))


def power(x: Floats, y: Floats | float) -> Floats:
    """x to the power y, for x > 0."""
    return exp2(log2(x) * y)
