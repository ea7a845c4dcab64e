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
    with np.errstate(invalid="ignore"):
        inside = (sand >= 0.0) & (clay >= 0.0) & (sand + clay <= _WHOLE)
        row = np.where(inside, clay * _SQUARES, 0.0).astype(np.int32)
        col = np.where(inside, sand * _SQUARES, 0.0).astype(np.int32)
    row *= _ACROSS
    row += col
    classes: Floats = _squares().take(row)
    near = np.isnan(classes) | ~inside
    if near.any():
        classes[near] = _by_rules(sand[near], clay[near])
    return classes


_SQUARES, _ACROSS, _WHOLE = 4, 402, 100.0
"""Squares of the table in one percent, its width, and where the triangle ends."""


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
    sand, clay = _percent(sand, divisor), _percent(clay, divisor)
    with np.errstate(invalid="ignore", divide="ignore"):
        wrong = (sand < 0) | (clay < 0)
        if silt is None:
            return sand, clay, wrong | (np.round(sand + clay, _DIGITS) > 100)
        silt = _percent(silt, divisor)
        total = sand + clay + silt
        wrong |= (silt < 0) | (np.abs(np.round(total - 100, _DIGITS)) > _SUM_TOLERANCE)
        return sand * 100 / total, clay * 100 / total, wrong


def _percent(fraction: Values, divisor: float) -> Floats:
    percent: Floats = np.divide(fraction, divisor, dtype=np.float64)
    return percent


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
