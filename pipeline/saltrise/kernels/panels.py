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

    `area` and `conductivity` are (points, panels); the first column of the results is 0.
    """
    points, panels = area.shape
    own, left = np.empty(panels), np.empty(panels)
    for k in range(flux.size):
        own[:], left[:] = 0.0, 0.0
        # Panels side by side, point by point: they are divided side by side.
        for j in range(points):
            for i in range(panels):
                share = conductivity[j, i] / (conductivity[j, i] + flux[k])
                part = area[j, i] * share
                own[i] += part
                left[i] += part * (1.0 - share)
        height[k, 0], rest[k, 0] = 0.0, 0.0
        for i in range(panels):
            height[k, i + 1] = height[k, i] + own[i]
            rest[k, i + 1] = rest[k, i] + left[i]
