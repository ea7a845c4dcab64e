"""Sums of a run of cells by zone: areas by code, weighted sums, histograms."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.compiled import compiled

Floats = NDArray[np.float64]
Whole = NDArray[np.int64]
Bytes = NDArray[np.uint8]
Edges = tuple[tuple[float, float, float], tuple[float, float, float]]
"""Of classes of depth and of salinity; a class holds its lower edge."""
Runs = tuple[Whole, NDArray[Any], Floats, Bytes, int, int]
"""Start and slot of each run of cells; area and code of each cell; the first code of assessed
cells, and the first of cells with water at the surface."""

_LANES = 64


@compiled
def areas(down: Floats, across: Floats, area: Floats) -> None:
    """Areas of cells: `down` (rows, nodes) times `across` (nodes, columns)."""
    for i in range(area.shape[0]):
        for j in range(area.shape[1]):
            area[i, j] = down[i, 0] * across[0, j]
        for k in range(1, across.shape[0]):
            for j in range(area.shape[1]):
                area[i, j] += down[i, k] * across[k, j]


@compiled
def codes(
    hazard: Bytes, depth: Floats, margin: Floats, tds: Floats, edges: Edges, code: Bytes
) -> None:
    """Number of hazard class, depth class, too shallow (no, yes) and salinity class together."""
    depths, salts = edges
    for i in range(hazard.size):
        deep = (depth[i] >= depths[0]) + (depth[i] >= depths[1]) + (depth[i] >= depths[2])
        salty = (tds[i] >= salts[0]) + (tds[i] >= salts[1]) + (tds[i] >= salts[2])
        above = (hazard[i] * (len(depths) + 1) + deep) * 2 + (margin[i] < 0.0)
        code[i] = above * (len(salts) + 1) + salty


@compiled
def add(
    runs: Runs,
    summed: tuple[Floats, Floats, Floats, Floats],
    extras: Floats,
    sums: Floats,
) -> None:
    """Add runs of cells to the rows of `sums` that are their slots.

    Its columns are areas by code, then the sums of `summed` over assessed cells, the third of them
    over cells with water at the surface, and the sums of `extras` (quantities, cells) over
    assessed cells.
    """
    starts, slots, area, code, first_dry, first_wet = runs
    a, b, c, d = summed
    extra = extras.shape[0]
    column = sums.shape[1] - 5 - extra
    for k in range(starts.size):
        row = sums[slots[k]]
        of_a, of_b, of_c, of_d, wet = 0.0, 0.0, 0.0, 0.0, 0.0
        after = starts[k + 1] if k + 1 < starts.size else area.size
        for i in range(starts[k], after):
            row[code[i]] += area[i]
            dry = area[i] if first_dry <= code[i] < first_wet else 0.0
            of_a += dry * a[i]
            of_b += dry * b[i]
            of_c += dry * c[i]
            of_d += dry * d[i]
            wet += area[i] * c[i] if code[i] >= first_wet else 0.0
        row[column] += of_a
        row[column + 1] += of_b
        row[column + 2] += of_c
        row[column + 3] += of_d
        row[column + 4] += wet
        for n in range(extra):
            total = 0.0
            for i in range(starts[k], after):
                total += area[i] * extras[n, i] if first_dry <= code[i] < first_wet else 0.0
            row[column + 5 + n] += total


@compiled
def span(values: Floats, shift: int) -> tuple[int, int]:
    """Least and greatest bin of positive numbers (0, -1 where there are none)."""
    # In lanes, not one after the other: lanes are compared side by side.
    lows, highs = np.full(_LANES, np.inf), np.zeros(_LANES)
    whole = values.size // _LANES * _LANES
    for start in range(0, whole, _LANES):
        for j in range(_LANES):
            value = values[start + j]
            lows[j] = min(lows[j], value if value > 0.0 else np.inf)
            highs[j] = max(highs[j], value)
    low, high = lows.min(), highs.max()
    for i in range(whole, values.size):
        if values[i] > 0.0:
            low = min(low, values[i])
        high = max(high, values[i])
    if low > high:
        return 0, -1
    least, most = np.float64(low).view(np.int64), np.float64(high).view(np.int64)
    return int(least >> shift), int(most >> shift)


@compiled
def count(
    runs: Runs,
    values: Floats,
    shift: int,
    per_unit: float,
    low: int,
    counts: Floats,
) -> None:
    """Count the area of assessed cells, in whole units and at least one, by bin of a value.

    Column 0 of `counts` (slots, bins) is for zero; bin `low` is in column 1.
    """
    starts, slots, area, code, first_dry, first_wet = runs
    for k in range(starts.size):
        row = counts[slots[k]]
        after = starts[k + 1] if k + 1 < starts.size else area.size
        for i in range(starts[k], after):
            if first_dry <= code[i] < first_wet:
                place = (np.float64(values[i]).view(np.int64) >> shift) - low + 1
                row[min(max(place, 0), row.size - 1)] += max(np.rint(area[i] * per_unit), 1.0)
