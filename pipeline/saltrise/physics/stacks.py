"""Stacks of texture classes: a number a layer, and one key for all layers of a cell."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.cells import add_layer
from saltrise.physics.soils import NOT_SOIL, TEXTURES

Floats = NDArray[np.float64]
Numbers = NDArray[np.int64]
Flags = NDArray[np.uint8]
Codes = NDArray[np.float32] | NDArray[np.float64]

MASK, MISSING, UNKNOWN = len(TEXTURES), len(TEXTURES) + 1, len(TEXTURES) + 2
"""Numbers of a layer that is no soil, has no value, or has a code that is not mapped; the others
are places in `TEXTURES`."""

BASE = len(TEXTURES) + 3

NO_SOIL, NO_VALUE, NOT_MAPPED = 1, 2, 4
"""Flags of a cell: some layer is no soil, has no value or is not mapped (then also `NO_SOIL`), has
no value, or has a code that is not mapped."""


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

    def stacks(self, layers: Sequence[Codes]) -> tuple[Numbers, Flags]:
        """One key a cell from the codes of its layers, the top one counting least; and its flags.

        A code that is not mapped has the number `UNKNOWN`, NaN `MISSING`.
        """
        # Not zeros: the system would give out every page twice, once to be read.
        key = np.empty(layers[0].size, dtype=np.int64)
        flags = np.empty(layers[0].size, dtype=np.uint8)
        how = (self.first, self.number, (MASK, MISSING, UNKNOWN), BASE)
        for k, codes in enumerate(reversed(layers)):
            add_layer(codes.ravel(), *how, k == 0, key, flags)
        return key.reshape(layers[0].shape), flags.reshape(layers[0].shape)


def stack_key(numbers: Sequence[int]) -> int:
    """Key of a stack from the numbers of its layers, from the top down."""
    return sum(number * BASE**k for k, number in enumerate(numbers))


def stack_of(key: int, layers: int) -> tuple[int, ...]:
    """Numbers of the layers of a key, from the top down."""
    return tuple(key // BASE**k % BASE for k in range(layers))


def soils_of(stack: Sequence[int]) -> tuple[str, ...] | None:
    """Texture classes of a stack; None where a layer is no soil or has no class."""
    if any(number >= len(TEXTURES) for number in stack):
        return None
    return tuple(TEXTURES[number] for number in stack)
