"""USDA texture classes from fractions of sand, silt and clay.

References
----------
.. [1] Soil Science Division Staff (2017) Soil survey manual. USDA Handbook 18, chapter 3,
   "Texture classes and subclasses": the verbal rules that the triangle draws.
"""

from __future__ import annotations

from collections.abc import Mapping
from functools import cache

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.fractions import percent, squares
from saltrise.physics.soils import TEXTURES

Floats = NDArray[np.float64]
Values = NDArray[np.float32] | NDArray[np.float64]

_DIGITS = 9
"""Digits kept [%] where sums are compared with an edge, so that 0.1 + 0.2 does not miss it."""


def texture_class(sand: Floats, clay: Floats) -> Floats:
    """Number of each cell's texture class in `TEXTURES`.

    Most of the triangle is read from a table of small squares that lie inside one class; where an
    edge is near, the rules decide.

    Parameters
    ----------
    sand, clay : float64 arrays
        Percent by mass of the fine earth (2-0.05 mm and < 0.002 mm); the rest is silt. An edge
        belongs to the class that the rules of [1] give it.

    Returns
    -------
    float64 array
        Whole numbers; NaN where a fraction is NaN.
    """
    classes, near = np.empty(sand.size), np.empty(sand.size, dtype=bool)
    flat = (sand.ravel(), clay.ravel())
    if squares(*flat, _squares(), _SQUARES, _ACROSS, classes, near):
        classes[near] = _by_rules(flat[0][near], flat[1][near])
    return classes.reshape(sand.shape)


_SQUARES, _ACROSS = 4, 402
"""Squares of the table in one percent, and its width."""


@cache
def _squares() -> Floats:
    """Class of each square of the triangle, by clay and sand; NaN where an edge may be near."""
    inside = np.linspace(0.0, 1.0, 5) / _SQUARES
    corner = np.arange(_ACROSS) / _SQUARES
    clay = corner[:, np.newaxis, np.newaxis, np.newaxis] + inside[:, np.newaxis]
    sand = corner[np.newaxis, :, np.newaxis, np.newaxis] + inside
    found = _by_rules(*(np.ascontiguousarray(v) for v in np.broadcast_arrays(sand, clay)))
    found = found.reshape(_ACROSS, _ACROSS, -1)
    one: Floats = found[:, :, 0]
    return np.where((found == one[:, :, np.newaxis]).all(axis=2), one, np.nan).ravel()


def _by_rules(sand: Floats, clay: Floats) -> Floats:
    """Classes by the rules of [1]."""
    sand, clay = np.round(sand, _DIGITS), np.round(clay, _DIGITS)
    silt = np.round(100.0 - sand - clay, _DIGITS)
    light = np.round(silt + 1.5 * clay, _DIGITS)
    heavy = np.round(silt + 2.0 * clay, _DIGITS)
    with np.errstate(invalid="ignore"):
        rules = {
            "sand": light < 15,
            "loamy sand": (light >= 15) & (heavy < 30),
            "sandy loam": ((clay >= 7) & (clay < 20) & (sand > 52) & (heavy >= 30))
            | ((clay < 7) & (silt < 50) & (heavy >= 30)),
            "loam": (clay >= 7) & (clay < 27) & (silt >= 28) & (silt < 50) & (sand <= 52),
            "silt loam": ((silt >= 50) & (clay >= 12) & (clay < 27))
            | ((silt >= 50) & (silt < 80) & (clay < 12)),
            "silt": (silt >= 80) & (clay < 12),
            "sandy clay loam": (clay >= 20) & (clay < 35) & (silt < 28) & (sand > 45),
            "clay loam": (clay >= 27) & (clay < 40) & (sand > 20) & (sand <= 45),
            "silty clay loam": (clay >= 27) & (clay < 40) & (sand <= 20),
            "sandy clay": (clay >= 35) & (sand > 45),
            "silty clay": (clay >= 40) & (silt >= 40),
            "clay": (clay >= 40) & (sand <= 45) & (silt < 40),
        }
    classes = np.full(np.shape(sand), np.nan)
    for name, where in rules.items():
        classes[where] = TEXTURES.index(name)
    return classes


def fractions_in_percent(
    sand: Values, clay: Values, silt: Values | None, divisor: float
) -> tuple[Floats, Floats, NDArray[np.bool_]]:
    """Sand and clay [%] and where fractions cannot be.

    Parameters
    ----------
    sand, clay : float32 or float64 arrays
        Fractions, in % times `divisor`.
    silt : float32 or float64 array, or None
        The third fraction, if it is given: sums within 2 % of 100 are scaled to 100.
    divisor : float
        1 for %, 10 for g/kg.

    Returns
    -------
    sand, clay : float64 arrays
        NaN where a given fraction is.
    wrong : bool array
        Cells with a negative fraction, sand and clay over 100 %, or a sum beyond 2 % of 100.
    """
    found = (np.empty(sand.size), np.empty(sand.size), np.empty(sand.size, dtype=bool))
    third = np.empty(0) if silt is None else silt.ravel()
    percent(sand.ravel(), clay.ravel(), third, divisor, _SUM_TOLERANCE, 10.0**_DIGITS, found)
    shape = sand.shape
    return found[0].reshape(shape), found[1].reshape(shape), found[2].reshape(shape)


def class_of_fractions(
    given: Mapping[str, Values], divisor: float
) -> tuple[Floats, NDArray[np.bool_]]:
    """Texture class of each cell from its fractions, and where these cannot be.

    Parameters
    ----------
    given : mapping of float32 or float64 arrays
        `sand`, `clay` and perhaps `silt`, in % times `divisor`; other keys are ignored.
    divisor : float
        1 for %, 10 for g/kg.

    Returns
    -------
    classes : float64 array
        Numbers in `TEXTURES`; NaN where a fraction is, or where they cannot be.
    wrong : bool array
        Cells whose fractions cannot be.
    """
    sand, clay, wrong = fractions_in_percent(
        given["sand"], given["clay"], given.get("silt"), divisor
    )
    if wrong.any():
        sand = np.where(wrong, np.nan, sand)
    return texture_class(sand, clay), wrong


_SUM_TOLERANCE = 2.0
