"""Values as stored numbers, their moments, and coarser versions of them."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.compiled import compiled

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]
Singles = NDArray[Any]
"""float32"""
Bytes = NDArray[Any]
"""uint8"""

KEPT_BITS = 12
"""Explicit mantissa bits a rounded layer keeps: relative error at most 2^-13 (1.25e-4)."""

_DROPPED = np.uint32(23 - KEPT_BITS)
_BELOW_HALF = np.uint32((1 << (22 - KEPT_BITS)) - 1)
_KEPT = np.uint32(0xFFFFFFFF << (23 - KEPT_BITS) & 0xFFFFFFFF)

Moments = tuple[int, float, float, float, float]
"""Count, least, greatest, mean and sum of squared deviations."""


@compiled
def _rounded(value: np.float32) -> np.float32:
    """A finite number with `KEPT_BITS` explicit mantissa bits, ties to even."""
    bits = np.float32(value).view(np.uint32)
    odd = np.uint32(bits >> _DROPPED) & np.uint32(1)
    bits = np.uint32(bits + np.uint32(odd + _BELOW_HALF))
    return np.uint32(bits & _KEPT).view(np.float32)


@compiled
def _moments(columns: Floats, first: float, count: int) -> Moments:
    """Moments from sums by column, of deviations from a first value."""
    if count == 0:
        return 0, np.inf, -np.inf, 0.0, 0.0
    total, square, low, high = 0.0, 0.0, np.inf, -np.inf
    for j in range(columns.shape[1]):
        total += columns[0, j]
        square += columns[1, j]
        low, high = min(low, columns[2, j]), max(high, columns[3, j])
    shift = total / count
    return count, low, high, first + shift, max(square - count * shift * shift, 0.0)


@compiled
def store(
    values: Floats,
    valid: Flags,
    rounded: bool,
    nodata: float,
    layer: Singles,
    top: int,
    left: int,
) -> Moments:
    """Store values into part of a layer from (top, left) on; their moments as stored."""
    height, width = values.shape
    # Sums by column, not one sum: columns are added side by side.
    columns = np.zeros((4, width))
    columns[2], columns[3] = np.inf, -np.inf
    first, count, empty = 0.0, 0, np.float32(nodata)
    for i in range(height):
        for j in range(width):
            count += valid[i, j]
    for i in range(height * width if count else 0):
        if valid[i // width, i % width]:
            first = np.float64(np.float32(values[i // width, i % width]))
            break
    for i in range(height):
        for j in range(width):
            held = valid[i, j]
            value = np.float32(values[i, j])
            if rounded:
                value = _rounded(value)
            layer[top + i, left + j] = value if held else empty
            apart = np.float64(value) - first if held else 0.0
            columns[0, j] += apart
            columns[1, j] += apart * apart
            columns[2, j] = min(columns[2, j], np.float64(value) if held else np.inf)
            columns[3, j] = max(columns[3, j], np.float64(value) if held else -np.inf)
    return _moments(columns, first, count)


@compiled
def store_classes(classes: Bytes, valid: Flags, layer: Bytes, top: int, left: int) -> Moments:
    """Store classes, 0 where not valid, into part of a layer; moments of the valid ones."""
    height, width = classes.shape
    columns = np.zeros((4, width))
    columns[2], columns[3] = np.inf, -np.inf
    count = 0
    for i in range(height):
        for j in range(width):
            held, value = valid[i, j], classes[i, j]
            layer[top + i, left + j] = value
            count += held
            weight = np.float64(value) if held else 0.0
            columns[0, j] += weight
            columns[1, j] += weight * weight
            columns[2, j] = min(columns[2, j], np.float64(value) if held else np.inf)
            columns[3, j] = max(columns[3, j], np.float64(value) if held else -np.inf)
    return _moments(columns, 0.0, count)


@compiled
def halve_means(fine: Singles, rounded: bool, nodata: float, coarse: Singles) -> None:
    """Mean of the valid cells among four, for every cell of `coarse`."""
    empty = np.float32(nodata)
    for i in range(coarse.shape[0]):
        for j in range(coarse.shape[1]):
            a, b = fine[2 * i, 2 * j], fine[2 * i, 2 * j + 1]
            c, d = fine[2 * i + 1, 2 * j], fine[2 * i + 1, 2 * j + 1]
            # float64 holds sums of four exactly unless they differ by more than 2^27.
            left = (np.float64(a) if a != empty else 0.0) + (np.float64(c) if c != empty else 0.0)
            right = (np.float64(b) if b != empty else 0.0) + (np.float64(d) if d != empty else 0.0)
            count = np.float64(a != empty) + np.float64(b != empty)
            count += np.float64(c != empty) + np.float64(d != empty)
            mean = np.float32((left + right) / max(count, 1.0))
            if rounded:
                mean = _rounded(mean)
            coarse[i, j] = mean if count > 0.0 else empty


@compiled
def halve_classes(fine: Bytes, coarse: Bytes) -> None:
    """Most frequent valid (not 0) class of four, ties to the greater."""
    for i in range(coarse.shape[0]):
        for j in range(coarse.shape[1]):
            a, b = fine[2 * i, 2 * j], fine[2 * i, 2 * j + 1]
            c, d = fine[2 * i + 1, 2 * j], fine[2 * i + 1, 2 * j + 1]
            # Votes in the high bits, class in the low ones: the greatest key is the winner.
            of_a = np.uint8(((a == b) + (a == c) + (a == d)) << 3 | a) * np.uint8(a != 0)
            of_b = np.uint8(((b == a) + (b == c) + (b == d)) << 3 | b) * np.uint8(b != 0)
            of_c = np.uint8(((c == a) + (c == b) + (c == d)) << 3 | c) * np.uint8(c != 0)
            of_d = np.uint8(((d == a) + (d == b) + (d == c)) << 3 | d) * np.uint8(d != 0)
            coarse[i, j] = np.uint8(max(of_a, of_b, of_c, of_d) & 7)
