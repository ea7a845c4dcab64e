"""Values as stored numbers, their moments, and coarser versions of them."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.compiled import compiled

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]
Cells = NDArray[Any]
"""float32, or uint8 for classes"""

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
def _add_moments(row: Cells, valid: Flags, first: float, sums: Floats, ends: Cells) -> None:
    """Add a row of cells to sums by column: of deviations from `first` and their squares, and
    the least and greatest of the valid."""
    # By column, not one after the other: columns are added side by side.
    for j in range(row.size):
        held, value = valid[j], np.float64(row[j])
        apart = value - first if held else 0.0
        sums[0, j] += apart
        sums[1, j] += apart * apart
        ends[0, j] = min(ends[0, j], row[j] if held else np.float32(np.inf))
        ends[1, j] = max(ends[1, j], row[j] if held else np.float32(-np.inf))


@compiled
def _moments(sums: Floats, ends: Cells, first: float, count: int) -> Moments:
    """Moments from sums by column."""
    if count == 0:
        return 0, np.inf, -np.inf, 0.0, 0.0
    total, square = 0.0, 0.0
    for j in range(sums.shape[1]):
        total += sums[0, j]
        square += sums[1, j]
    shift = total / count
    spread = max(square - count * shift * shift, 0.0)
    return count, np.float64(ends[0].min()), np.float64(ends[1].max()), first + shift, spread


@compiled
def store(
    values: Floats,
    valid: Flags,
    rounded: bool,
    nodata: float,
    layer: Cells,
    top: int,
    left: int,
) -> Moments:
    """Store values into part of a float32 layer from (top, left) on; their moments as stored."""
    height, width = values.shape
    sums, ends = np.zeros((2, width)), np.empty((2, width), dtype=np.float32)
    ends[0], ends[1] = np.inf, -np.inf
    first, count, empty = 0.0, 0, np.float32(nodata)
    for i in range(height):
        for j in range(width):
            count += valid[i, j]
    for i in range(height * width if count else 0):
        if valid[i // width, i % width]:
            first = np.float64(np.float32(values[i // width, i % width]))
            break
    for i in range(height):
        row = layer[top + i, left : left + width]
        for j in range(width):
            value = np.float32(values[i, j])
            if rounded:
                value = _rounded(value)
            row[j] = value if valid[i, j] else empty
        _add_moments(row, valid[i], first, sums, ends)
    return _moments(sums, ends, first, count)


@compiled
def store_classes(classes: Cells, valid: Flags, layer: Cells, top: int, left: int) -> Moments:
    """Store classes, 0 where not valid, into part of a layer; moments of the valid ones."""
    height, width = classes.shape
    sums, ends = np.zeros((2, width)), np.empty((2, width), dtype=np.float32)
    ends[0], ends[1] = np.inf, -np.inf
    count, row = 0, np.empty(width, dtype=np.float32)
    for i in range(height):
        for j in range(width):
            layer[top + i, left + j] = classes[i, j]
            row[j] = classes[i, j]
            count += valid[i, j]
        _add_moments(row, valid[i], 0.0, sums, ends)
    return _moments(sums, ends, 0.0, count)


@compiled
def halve_means(fine: Cells, rounded: bool, nodata: float, coarse: Cells) -> None:
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
def halve_classes(fine: Cells, coarse: Cells) -> None:
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
