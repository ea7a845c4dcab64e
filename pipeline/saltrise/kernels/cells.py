"""What is asked and computed of every cell beside its rise curve."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.compiled import compiled

Floats = NDArray[np.float64]
Bytes = NDArray[np.uint8]
Whole = NDArray[np.int64]
Cells = NDArray[Any]
"""float32 or float64"""
Breaks = tuple[float, float, float, float]


@compiled
def scale(values: Cells, factor: float, scaled: Floats) -> None:
    """Values times a factor."""
    for i in range(values.size):
        scaled[i] = values[i] * factor


@compiled
def mark(values: Floats, reason: int, reasons: Bytes) -> int:
    """Give cells without a finite value a reason where they have none; how many got it."""
    found = 0
    for i in range(values.size):
        if reasons[i] == 0 and not math.isfinite(values[i]):
            reasons[i] = reason
            found += 1
    return found


@compiled
def add_layer(
    codes: Cells,
    first: int,
    numbers: Whole,
    marks: tuple[int, int, int],
    base: int,
    lowest: bool,
    key: Whole,
    flags: Bytes,
) -> None:
    """Add one layer to the keys of cells, those of layers below multiplied by `base`; the lowest
    makes them anew.

    `numbers` are those of codes from `first` on; `marks` the numbers of no soil, no value and
    unknown code, which are also noted in `flags` (bits 1, 2 and 4).
    """
    no_soil, missing, unknown = marks
    for i in range(codes.size):
        code = codes[i]
        if math.isnan(code):
            number = missing
        else:
            held = int(min(max(code, first), first + numbers.size - 1))
            number = numbers[held - first] if held == code else unknown
        flag = (number >= no_soil) | (number == missing) << 1 | (number == unknown) << 2
        key[i] = number if lowest else key[i] * base + number
        flags[i] = flag if lowest else flags[i] | flag


@compiled
def settle(profile: NDArray[np.int32], flags: Bytes) -> int:
    """Give cells flagged as no soil some profile; how many others have none or are unknown."""
    lost = 0
    for i in range(profile.size):
        if flags[i] & 4 or (profile[i] < 0 and not flags[i] & 1):
            lost += 1
        elif flags[i] & 1:
            profile[i] = 0
    return lost


@compiled
def flux_of_load(days: Floats, demand: Floats, tds: Floats, load: Floats, flux: Floats) -> None:
    """Constant flux that, capped by the demand of each season (seasons, cells), brings a load."""
    seasons = days.size
    for i in range(load.size):
        low, reached = 0.0, 0.0
        for k in range(seasons if seasons > 1 else 0):
            here, brought = demand[k, i] / days[k], 0.0
            for s in range(seasons):
                brought += min(here * days[s], demand[s, i]) * tds[s, i]
            if brought <= load[i] and here > low:
                low, reached = here, brought
        rate = 0.0
        for k in range(seasons):
            if seasons == 1 or demand[k, i] / days[k] > low:
                rate += days[k] * tds[k, i]
        # Where nothing more can come the line is flat: 0/0 where the load is just reached.
        flux[i] = low + (load[i] - reached) / rate if rate > 0.0 else np.inf


@compiled
def cap(most: Floats, demand: Floats, depth: Floats, surface: float, rise: Floats) -> None:
    """The lesser of what the soil lifts and the demand; the demand where the water table is at the
    surface; NaN where one is."""
    for i in range(most.size):
        over = depth[i] <= surface or most[i] > demand[i] or math.isnan(demand[i])
        rise[i] = demand[i] if over else most[i]


@compiled
def classify(values: Floats, breaks: Breaks, falls: bool, classes: Bytes) -> None:
    """Class from 1: one more for every break that a value reaches, or lies below where breaks
    fall."""
    a, b, c, d = breaks
    for i in range(values.size):
        value = values[i]
        reached = 1 + (value >= a) + (value >= b) + (value >= c) + (value >= d)
        below = 1 + (value < a) + (value < b) + (value < c) + (value < d)
        classes[i] = below if falls else reached


@compiled
def settle_critical(most: Floats, target: float, depth: Floats) -> None:
    """Critical depths: 0 where even the most load keeps within the target, NaN where it is."""
    for i in range(most.size):
        if math.isnan(most[i]):
            depth[i] = np.nan
        elif most[i] <= target:
            depth[i] = 0.0
