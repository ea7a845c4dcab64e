"""Evaporative demand as the cap on what the soil can lift."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.cells import cap
from saltrise.physics.curve import SURFACE_DEPTH_M

Floats = NDArray[np.float64]


def at_surface(depth_m: Floats) -> NDArray[np.bool_]:
    """Whether the water table [m below ground] is at or above the surface (at most 1 mm deep)."""
    return depth_m <= SURFACE_DEPTH_M


def capped(most: Floats, demand: Floats, depth_m: Floats) -> Floats:
    """Groundwater evaporation: the lesser of what the soil can lift and the demand.

    Parameters
    ----------
    most, demand : float64 arrays
        What the soil can lift and the evaporative demand, rates or sums in one unit.
    depth_m : float64 array
        Depth to water table [m]; at the surface the demand evaporates whatever the soil.

    Returns
    -------
    float64 array
        In the unit of its arguments; NaN where one of them is.
    """
    rise = np.empty(most.size)
    cap(most.ravel(), demand.ravel(), depth_m.ravel(), SURFACE_DEPTH_M, rise)
    return rise.reshape(most.shape)
