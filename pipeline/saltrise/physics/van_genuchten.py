"""Steady upward flow in a van Genuchten-Mualem soil, by quadrature of the full integral.

With suction head h, m = 1 - 1/n and effective saturation Se = [1 + (alpha h)^n]^-m,

    K(h) = Ks Se^(1/2) {1 - [1 - Se^(1/m)]^m}^2

and the depth from which the soil lifts a flux E is L = integral of dh / (1 + E/K) over all h >= 0.

References
----------
.. [1] van Genuchten M.Th. (1980) A closed-form equation for predicting the hydraulic conductivity
   of unsaturated soils. Soil Science Society of America Journal 44:892-898.
.. [2] Mualem Y. (1976) A new model for predicting the hydraulic conductivity of unsaturated porous
   media. Water Resources Research 12:513-522.
"""

from __future__ import annotations

from functools import cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]

_LOG_SPAN = (-14 * np.log(10.0), 16 * np.log(10.0))
"""Logarithms of the suction heads [m] between which the integral is taken; what lies outside is
below 1e-10 of any depth from 1 mm on, for n from 1.05."""

_PANEL, _POINTS = 0.25, 10
"""Width of a panel in log suction and Gauss-Legendre points in it."""

_START_POINTS = 241
_NEWTON_LIMIT = 40
_NEWTON_STEP = 1e-11


def relative_conductivity(suction: ArrayLike, alpha: float, n: float) -> Floats:
    """K / Ks at a suction head [1, 2], with Mualem's pore connectivity of 1/2.

    Written with log1p and expm1, so that nothing cancels near saturation or far into dryness.

    Parameters
    ----------
    suction : array_like
        Suction head, > 0, in the unit of 1/alpha.
    alpha : float
        Inverse of a suction head, > 0.
    n : float
        Shape [-], > 1.
    """
    m = 1.0 - 1.0 / n
    log_power = n * np.log(alpha * np.asarray(suction, dtype=np.float64))
    log_saturation = -m * np.logaddexp(0.0, log_power)
    # (u / (1 + u))^m with u = (alpha h)^n, as the exponential of its logarithm.
    pores = -np.expm1(-m * np.logaddexp(0.0, -log_power))
    conductivity: Floats = np.exp(0.5 * log_saturation) * pores * pores
    return conductivity


def rise_depth(flux: ArrayLike, alpha: float, n: float, ks: float) -> tuple[Floats, Floats]:
    """Depth [m] from which the soil lifts a flux, and the slope of depth against flux.

    Parameters
    ----------
    flux : array_like
        Steady upward flux, > 0, in the unit of `ks`.
    alpha : float
        [1/m], > 0.
    n : float
        [-], > 1.
    ks : float
        Saturated conductivity, > 0.

    Returns
    -------
    depth, slope : ndarrays
        Relative error below 1e-8 for depths from 1 mm on, alpha from 0.01 to 1000 per m and n
        from 1.05 to 10.
    """
    rate = np.atleast_1d(np.asarray(flux, dtype=np.float64)) / ks
    head, weight = _nodes()
    relative = relative_conductivity(head, alpha, n)
    area = head * weight
    depth, slope = np.empty(rate.shape), np.empty(rate.shape)
    for k, one in enumerate(rate):
        with np.errstate(divide="ignore", over="ignore"):
            resistance = one / relative
            share = 1.0 / (1.0 + resistance)
        depth[k] = np.sum(area * share)
        # d/dE of 1 / (1 + E/K) is -(1/E) (1 - share) share.
        slope[k] = -np.sum(area * share * (1.0 - share)) / one
    return depth, slope / ks


@cache
def _nodes() -> tuple[Floats, Floats]:
    """Suction heads [m] and weights of the quadrature in log suction."""
    low, high = _LOG_SPAN
    panels = int(np.ceil((high - low) / _PANEL))
    points, weights = np.polynomial.legendre.leggauss(_POINTS)
    edges = np.linspace(low, high, panels + 1)
    half = (edges[1] - edges[0]) / 2
    middles = (edges[1:] + edges[:-1]) / 2
    logs = (middles[:, np.newaxis] + half * points).ravel()
    return np.exp(logs), np.tile(half * weights, panels)


def max_evaporation(depth: ArrayLike, alpha: float, n: float, ks: float) -> tuple[Floats, Floats]:
    """Maximum steady evaporation from a water table at `depth` [m], and its slope: the inverse.

    Newton's method on log depth against log flux, from a table.

    Raises
    ------
    ArithmeticError
        Newton's method did not settle (parameters far outside any soil's).
    """
    wanted = np.atleast_1d(np.asarray(depth, dtype=np.float64))
    grid = ks * np.logspace(-60, 12, _START_POINTS)
    known = rise_depth(grid, alpha, n, ks)[0]
    flux = np.exp(np.interp(-np.log(wanted), -np.log(known), np.log(grid)))
    for _ in range(_NEWTON_LIMIT):
        found, slope = rise_depth(flux, alpha, n, ks)
        step = np.log(found / wanted) * found / (flux * slope)
        flux = flux * np.exp(-step)
        if np.all(np.abs(step) < _NEWTON_STEP):
            return flux, 1.0 / slope
    raise ArithmeticError(
        f"van Genuchten's law: no solution after {_NEWTON_LIMIT} steps for alpha {alpha!r} per m, "
        f"n {n!r}, ks {ks!r}; check the soil parameters"
    )
