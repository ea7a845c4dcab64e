"""Sums of a quadrature over its panels, for many fluxes."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.compiled import compiled

Floats = NDArray[np.float64]


@compiled
def running_sums(
    flux: Floats, area: Floats, conductivity: Floats, height: Floats, rest: Floats
) -> None:
    """Integrals of s = 1/(1 + E/K) and of s (1 - s) up to each panel's end, a row a flux.

    `area` and `conductivity` are (panels, points); the first column of the results is 0.
    """
    for k in range(flux.size):
        risen, left = 0.0, 0.0
        for i in range(area.shape[0]):
            own, own_left = 0.0, 0.0
            for j in range(area.shape[1]):
                share = 1.0 / (1.0 + flux[k] / conductivity[i, j])
                own += area[i, j] * share
                own_left += area[i, j] * share * (1.0 - share)
            risen += own
            left += own_left
            height[k, i + 1] = risen
            rest[k, i + 1] = left
