"""Which piece of a rise curve holds a cell."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.compiled import compiled

Floats = NDArray[np.float64]
Rows = NDArray[Any]
"""int32 or int64"""


@compiled
def place_by_start(
    profile: Rows, depth: Floats, least: float, start: Floats, row: Rows, sign: Floats,
    shift: Floats, place: Rows, argument: Floats,
) -> None:  # fmt: skip
    """Row and argument of the piece of each profile's curve that holds a depth: the last one of
    `start` (profiles, pieces) that begins there or above. Negative profiles stay negative."""
    for i in range(depth.size):
        here = profile[i]
        if here < 0:
            place[i], argument[i] = -1, depth[i]
            continue
        held, piece = max(depth[i], least), 0
        for k in range(1, start.shape[1]):
            piece += held >= start[here, k]
        place[i] = row[here, piece]
        argument[i] = held * sign[here, piece] + shift[here, piece]
        if math.isnan(depth[i]):
            argument[i] = np.nan


@compiled
def place_by_flux(profile: Rows, flux: Floats, end: Floats, row: Rows, place: Rows) -> None:
    """Row of the piece that holds a flux: the last one of `end` (profiles, pieces) above it."""
    for i in range(flux.size):
        here = max(profile[i], 0)
        piece = 0
        for k in range(1, end.shape[1]):
            piece += flux[i] < end[here, k]
        place[i] = row[here, piece]
