"""Conductivity of a van Genuchten-Mualem soil.

With suction head h, m = 1 - 1/n and effective saturation Se = [1 + (alpha h)^n]^-m,

    K(h) = Ks Se^(1/2) {1 - [1 - Se^(1/m)]^m}^2

References
----------
.. [1] van Genuchten M.Th. (1980) A closed-form equation for predicting the hydraulic conductivity
   of unsaturated soils. Soil Science Society of America Journal 44:892-898.
.. [2] Mualem Y. (1976) A new model for predicting the hydraulic conductivity of unsaturated porous
   media. Water Resources Research 12:513-522.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]


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
