"""Powers and logarithms of cells with the same bits on every processor.

NumPy's exp, log and power differ in the last bits between instruction sets, so a cluster of unlike
machines would not agree on a map. These are sums and products alone, within 4e-16 relative.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

_EXP = [math.log(2.0) ** k / math.factorial(k) for k in range(14)]
_LOG = [2.0 / math.log(2.0) / (2 * k + 1) for k in range(12)]
LOG2_OF_10 = math.log2(10.0)
LOG2_OF_E = math.log2(math.e)


def exp2(x: Floats) -> Floats:
    """2 to the power x, for |x| < 1000."""
    whole = np.rint(x)
    part = x - whole
    value = part * _EXP[-1]
    value += _EXP[-2]
    for coefficient in _EXP[-3::-1]:
        value *= part
        value += coefficient
    # A whole power of two is an exponent without a mantissa.
    bits = whole.astype(np.int64)
    bits += 1023
    bits <<= 52
    value *= bits.view(np.float64)
    return value


def log2(x: Floats) -> Floats:
    """Logarithm to base 2, for x > 0."""
    mantissa, exponent = np.frexp(x)
    low = mantissa < math.sqrt(0.5)
    mantissa = np.where(low, 2.0 * mantissa, mantissa)
    t = (mantissa - 1.0) / (mantissa + 1.0)
    square = t * t
    value = np.full_like(t, _LOG[-1])
    for coefficient in _LOG[-2::-1]:
        value *= square
        value += coefficient
    result: Floats = value * t + (exponent - low)
    return result


def ten_to(x: Floats) -> Floats:
    """10 to the power x."""
    return exp2(x * LOG2_OF_10)


def exp(x: Floats) -> Floats:
    """e to the power x."""
    return exp2(x * LOG2_OF_E)


def log(x: Floats) -> Floats:
    """Natural logarithm, for x > 0."""
    return log2(x) * math.log(2.0)


def power(x: Floats, y: Floats | float) -> Floats:
    """x to the power y, for x > 0."""
    return exp2(log2(x) * y)
