"""The whole job once more, small and slow: quadrature, loops and polygons, no tiling.

Shares no code with the package. Parameters are retyped from Rawls, Brakensiek & Saxton (1982)
Trans. ASAE 25(5):1316-1320, Table 2: geometric means of bubbling pressure [cm] and pore-size
index [-], saturated conductivity [cm/h].
"""

from __future__ import annotations

import itertools
import math

import numpy as np
from scipy.integrate import quad
from scipy.optimize import brentq

RAWLS = {
    "sand": (7.26, 0.592, 21.00),
    "loamy sand": (8.69, 0.474, 6.11),
    "sandy loam": (14.66, 0.322, 2.59),
    "loam": (11.15, 0.220, 1.32),
    "silt loam": (20.76, 0.211, 0.68),
    "sandy clay loam": (28.08, 0.250, 0.43),
    "clay loam": (25.89, 0.194, 0.23),
    "silty clay loam": (32.56, 0.151, 0.15),
    "sandy clay": (29.17, 0.168, 0.12),
    "silty clay": (34.19, 0.127, 0.09),
    "clay": (37.30, 0.131, 0.06),
}
BREAKS = (1.0, 5.0, 15.0, 30.0)
DAYS = 365.0


def rise_depth(rate: float, texture: str) -> float:
    """Depth [m] at which the soil lifts `rate` [mm/day]: integral of dh / (1 + E/K)."""
    entry, index, conductivity = RAWLS[texture]
    entry, conductivity = entry / 100, conductivity * 240.0
    power = 2.0 + 3.0 * index
    wet = entry / (1.0 + rate / conductivity)

    def dry(s: float) -> float:  # h = entry * exp(s)
        h = entry * math.exp(s)
        return h / (1.0 + rate / conductivity * math.exp(power * s))

    # The integrand peaks where E = K and falls off as a power on both sides.
    knee = max(0.0, math.log(conductivity / rate) / power)
    parts = [0.0, knee, knee + 5.0, knee + 60.0] if knee > 0 else [0.0, 5.0, 60.0]
    return wet + sum(
        quad(dry, a, b, epsabs=0, epsrel=1e-11, limit=200)[0] for a, b in itertools.pairwise(parts)
    )


def max_evaporation(depth: float, texture: str) -> float:
    """Maximum steady evaporation [mm/day] over a water table at `depth` [m]."""
    depth = max(depth, 0.001)

    def gap(log_rate: float) -> float:
        return math.log(rise_depth(math.exp(log_rate), texture) / depth)

    return math.exp(brentq(gap, -40.0, 25.0, xtol=1e-12))


def critical_depth(tds: float, demand: float, texture: str, target: float) -> float:
    """Shallowest depth [m] that keeps the load within `target` [t/ha/year]."""
    if tds == 0 or demand * DAYS * tds / 100 <= target:
        return 0.0
    return min(max(rise_depth(target * 100 / tds / DAYS, texture), 0.001), 30.0)


def cell(depth: float, texture: str, tds: float, demand: float, target: float) -> dict[str, float]:
    """All layers of one cell; depth [m], TDS [g/L], demand [mm/day], target [t/ha/year]."""
    most = max_evaporation(depth, texture)
    surface = depth <= 0.001
    evaporation = DAYS * (demand if surface else min(most, demand))
    load = evaporation * tds / 100
    critical = critical_depth(tds, demand, texture, target)
    return {
        "max_evaporation": most,
        "evaporation": evaporation,
        "salt_load": load,
        "critical_depth": critical,
        "depth_margin": depth - critical,
        "hazard_class": 6 if surface else 1 + sum(load >= edge for edge in BREAKS),
    }


def region(
    depth: np.ndarray, texture: np.ndarray, tds: np.ndarray, demand: np.ndarray, target: float
) -> dict[str, np.ndarray]:
    """All layers of a small region; `texture` holds class names or None, NaN is nodata."""
    names = ("max_evaporation", "evaporation", "salt_load", "critical_depth", "depth_margin")
    layers = {name: np.full(depth.shape, -9999.0) for name in names}
    layers["hazard_class"] = np.zeros(depth.shape)
    for at in np.ndindex(depth.shape):
        numbers = (depth[at], tds[at], demand[at])
        if texture[at] is not None and np.all(np.isfinite(numbers)):
            answer = cell(depth[at], texture[at], tds[at], demand[at], target)
            for name, value in answer.items():
                layers[name][at] = value
    return layers
