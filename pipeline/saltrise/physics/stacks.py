"""Stacks of texture classes: a number a layer, and one key for all layers of a cell."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from saltrise.physics.soils import NOT_SOIL, TEXTURES

Floats = NDArray[np.float64]
Numbers = NDArray[np.int64]

MASK, MISSING, UNKNOWN = len(TEXTURES), len(TEXTURES) + 1, len(TEXTURES) + 2
"""Numbers of a layer that is no soil, has no value, or has a code that is not mapped; the others
are places in `TEXTURES`."""

BASE = len(TEXTURES) + 3


@dataclass(frozen=True)
class ClassCodes:
    """What the codes of a texture raster mean: `number` of each code from `first` on."""

    first: int
    number: Numbers

    @classmethod
    def of(cls, classes: Mapping[int, str]) -> ClassCodes:
        """From texture class (or "not soil") by code."""
        first = min(classes)
        number = np.full(max(classes) - first + 1, UNKNOWN, dtype=np.int64)
        for code, name in classes.items():
            number[code - first] = MASK if name == NOT_SOIL else TEXTURES.index(name)
        return cls(first, number)

    def numbers(self, codes: Floats) -> Numbers:
        """Number of each cell; a code that is not mapped is `UNKNOWN`, NaN is `MISSING`."""
        missing = np.isnan(codes)
        known = np.where(missing, self.first, codes)
        position = known.astype(np.int64)
        wrong = position != known
        position -= self.first
        if position.min() < 0 or position.max() >= self.number.size:
            wrong |= (position < 0) | (position >= self.number.size)
            position = np.clip(position, 0, self.number.size - 1)
        numbers = self.number.take(position)
        numbers[wrong] = UNKNOWN
        numbers[missing] = MISSING
        return numbers


def stack_keys(layers: Sequence[Numbers]) -> Numbers:
    """One key a cell from the numbers of its layers, the top one counting least."""
    key = layers[-1]
    for numbers in reversed(layers[:-1]):
        key = key * BASE + numbers
    return key


def stack_of(key: int, layers: int) -> tuple[int, ...]:
    """Numbers of the layers of a key, from the top down."""
    return tuple(key // BASE**k % BASE for k in range(layers))


def soils_of(stack: Sequence[int]) -> tuple[str, ...] | None:
    """Texture classes of a stack; None where a layer is no soil or has no class."""
    if any(number >= len(TEXTURES) for number in stack):
        return None
    return tuple(TEXTURES[number] for number in stack)
