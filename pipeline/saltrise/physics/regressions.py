"""Soil hydraulic parameters from fractions of sand and clay, by published regression.

Each function takes arrays already inside the regression's range (`clamped`) and gives air-entry
suction [m], saturated conductivity [mm/day] and the shape of the curve.

References
----------
.. [1] Cosby B.J., Hornberger G.M., Clapp R.B., Ginn T.R. (1984) A statistical exploration of the
   relationships of soil moisture characteristics to the physical properties of soils. Water
   Resources Research 20(6):682-690, Tables 4 and 5, univariate regressions. log10; psi in cm, Ks
   in inch/h.
.. [2] Saxton K.E., Rawls W.J. (2006) Soil water characteristic estimates by texture and organic
   matter for hydrologic solutions. Soil Science Society of America Journal 70:1569-1578, Table 1.
.. [3] Campbell G.S. (1985) Soil physics with BASIC. Elsevier, chapters 2 and 6.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from saltrise.physics import powers

Floats = NDArray[np.float64]

GRAVITY = 9.80665
"""Standard gravity [m/s2]: 1 J/kg of water is 1/g m of head."""

M_PER_KPA = 1.0 / GRAVITY
"""Head of water [m] at 1000 kg/m3 that makes 1 kPa."""

_INCH_PER_HOUR = 25.4 * 24.0
_MM_PER_DAY_OF_M_PER_S = 1000.0 * 86400.0


@dataclass(frozen=True)
class Method:
    """A regression: where it is from, and the range of each input it holds for [% or g/cm3]."""

    source: str
    ranges: Mapping[str, tuple[float, float]]
    needs: str = ""
    """Input beside sand and clay, by role."""
    range_source: str = ""


METHODS: Mapping[str, Method] = MappingProxyType(
    {
        "cosby1984": Method(
            "Cosby et al. 1984, univariate",
            {"sand": (6.0, 92.0), "clay": (3.0, 58.0)},
            range_source="class means that the regressions rest on (from memory)",
        ),
        "saxton-rawls2006": Method(
            "Saxton & Rawls 2006",
            {"clay": (0.0, 60.0), "organic_matter": (0.0, 8.0)},
            "organic_matter",
            "clay up to 60 %, organic matter up to 8 % (Saxton & Rawls 2006)",
        ),
        "campbell1985": Method(
            "Campbell 1985",
            {"bulk_density": (1.0, 1.8)},
            "bulk_density",
            "mineral soils of 1.0 to 1.8 g/cm3 (common practice, no single source)",
        ),
    }
)

LEAST_WILTING, LEAST_RATIO, LEAST_AIR_KPA, LEAST_LARGE_PORES = 0.02, 1.13, 0.1, 0.01
"""Where [2] leaves physical sense (sand without organic matter, much organic matter) its water
content at 1500 kPa, that at 33 kPa over it, its air-entry tension [kPa] and the pores drained at
33 kPa are held at these; limits of this project, counted like clamped inputs."""


def clamped(
    method: str, given: Mapping[str, Floats]
) -> tuple[dict[str, Floats], NDArray[np.bool_]]:
    """Inputs held inside the published range of a method, and which cells were not."""
    held = dict(given)
    outside = np.zeros(given["sand"].shape, dtype=bool)
    for role, (low, high) in METHODS[method].ranges.items():
        values = given[role]
        with np.errstate(invalid="ignore"):
            beyond = (values < low) | (values > high)
        if beyond.any():
            outside |= beyond
            held[role] = np.clip(values, low, high)
    return held, outside


def cosby(sand: Floats, clay: Floats) -> tuple[Floats, Floats, Floats]:
    """Air-entry suction [m], b [-] and Ks [mm/day] from sand and clay [%] [1].

    b = 2.91 + 0.159 clay; log10 psi [cm] = 1.88 - 0.0131 sand; log10 Ks [inch/h] = -0.884 +
    0.0153 sand.
    """
    air_entry = powers.ten_to(1.88 - 0.0131 * sand) / 100.0
    ks = powers.ten_to(-0.884 + 0.0153 * sand) * _INCH_PER_HOUR
    return air_entry, 2.91 + 0.159 * clay, ks


def campbell(sand: Floats, clay: Floats, bulk_density: Floats) -> tuple[Floats, Floats, Floats]:
    """Air-entry suction [m], b [-] and Ks [mm/day] from sand, clay [%] and density [g/cm3] [3].

    With geometric mean diameter d [mm] (0.001 clay, 0.026 silt, 1.025 sand) and its geometric
    standard deviation s: psi_es = 0.5 d^-1/2 J/kg, b = 2 psi_es + 0.2 s, psi_e = psi_es
    (rho/1.3)^(0.67 b), Ks = 0.004 (1.3/rho)^(1.3 b) exp(-6.9 clay - 3.7 silt) kg s m^-3.
    """
    # Sums over the three fractions, silt being what sand and clay leave.
    small, middle, large = (math.log(d) for d in (0.001, 0.026, 1.025))
    mean = middle + (small - middle) / 100.0 * clay + (large - middle) / 100.0 * sand
    square = middle**2 + (small**2 - middle**2) / 100.0 * clay
    square += (large**2 - middle**2) / 100.0 * sand
    square -= mean * mean
    np.maximum(square, 0.0, out=square)
    loose = 0.5 * powers.exp(-0.5 * mean)
    b = 2.0 * loose + 0.2 * powers.exp(np.sqrt(square))
    dense = b * powers.log(bulk_density / 1.3)
    air_entry = loose * powers.exp(0.67 * dense) / GRAVITY
    ks = powers.exp(-1.3 * dense - 0.032 * clay + 0.037 * sand - 3.7)
    return air_entry, b, ks * (0.004 * GRAVITY / 1000.0 * _MM_PER_DAY_OF_M_PER_S)


@dataclass(frozen=True)
class SaxtonRawlsCells:
    """Parameters of [2]: air-entry suction [m], Ks [mm/day], retention exponent B [-], water
    contents [-] at saturation and 33 kPa, and where they were held (`LEAST_...`)."""

    air_entry_m: Floats
    ks_mm_per_day: Floats
    b: Floats
    theta_s: Floats
    theta_33: Floats
    held: NDArray[np.bool_]


def saxton_rawls(sand: Floats, clay: Floats, organic_matter: Floats) -> SaxtonRawlsCells:
    """Parameters from sand, clay and organic matter [%] [2].

    Fractions enter as parts of one, organic matter in percent. The air-entry tension takes the
    first solution for the pores drained at 33 kPa: with the corrected one most sands would come
    out below zero.
    """
    s, c, om = sand / 100.0, clay / 100.0, organic_matter
    dry = -0.024 * s + 0.487 * c + 0.006 * om + 0.005 * s * om - 0.013 * c * om + 0.068 * s * c
    dry = dry + 0.031
    theta_1500 = dry + (0.14 * dry - 0.02)
    moist = -0.251 * s + 0.195 * c + 0.011 * om + 0.006 * s * om - 0.027 * c * om + 0.452 * s * c
    moist = moist + 0.299
    theta_33 = moist + (1.283 * moist * moist - 0.374 * moist - 0.015)
    large = 0.278 * s + 0.034 * c + 0.022 * om - 0.018 * s * om - 0.027 * c * om - 0.584 * s * c
    large = large + 0.078
    drained = large + (0.636 * large - 0.107) - 0.097 * s + 0.043
    tension = -21.67 * s - 27.93 * c - 81.97 * large + 71.12 * s * large + 8.29 * c * large
    tension = tension + 14.05 * s * c + 27.16
    air_kpa = tension + (0.02 * tension * tension - 0.113 * tension - 0.70)
    held = (theta_1500 < LEAST_WILTING) | (drained < LEAST_LARGE_PORES) | (air_kpa < LEAST_AIR_KPA)
    theta_1500 = np.maximum(theta_1500, LEAST_WILTING)
    held |= theta_33 < LEAST_RATIO * theta_1500
    theta_33 = np.maximum(theta_33, LEAST_RATIO * theta_1500)
    drained = np.maximum(drained, LEAST_LARGE_PORES)
    air_kpa = np.maximum(air_kpa, LEAST_AIR_KPA)
    b = math.log(1500.0 / 33.0) / powers.log(theta_33 / theta_1500)
    ks = 1930.0 * 24.0 * powers.power(drained, 3.0 - 1.0 / b)
    return SaxtonRawlsCells(air_kpa * M_PER_KPA, ks, b, theta_33 + drained, theta_33, held)
