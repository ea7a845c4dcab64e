"""From a cell's soil inputs to what its rise curve is chosen by."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.cells import settle
from saltrise.physics.fraction_soils import soils_of
from saltrise.physics.regressions import METHODS
from saltrise.physics.stacks import (
    BASE,
    NO_SOIL,
    NO_VALUE,
    NOT_MAPPED,
    ClassCodes,
    Flags,
    Numbers,
)
from saltrise.physics.texture import class_of_fractions, fractions_in_percent

Array = NDArray[np.float64]
Values = NDArray[np.float32] | NDArray[np.float64]
Profiles = NDArray[np.int32]

UNKNOWN_STACK = -1
"""Profile of keys that the survey did not see."""

DENSE = 1 << 24
"""Keys that a table by key may span; beyond it keys are searched for."""


class UnmappedCodeError(ValueError):
    """A texture code or stack that no profile was made for."""


@dataclass(frozen=True)
class SoilCells:
    """Soils of some cells: `cells` as the curves take them, some soil or other where there is
    none, and where that is.

    `counts` are numbers of cells to report.
    """

    cells: Any
    missing: NDArray[np.bool_]
    not_soil: NDArray[np.bool_]
    counts: dict[str, int]


class Soil(Protocol):
    """How a region's soil inputs are read."""

    def cells(self, given: Mapping[str, Values]) -> SoilCells:
        """Soils of some cells from inputs by role, in the config's units."""


@dataclass(frozen=True)
class ClassSoil:
    """Texture classes of one or more layers, from codes or fractions.

    Attributes
    ----------
    codes : ClassCodes
        What codes mean.
    layers : tuple of str
        Endings of the layers' roles, from the top down; one empty ending where there are none.
    keys : int array or None
        Keys of the stacks that occur, increasing; None where `profiles` is by key itself.
    profiles : int array
        Profile of each key.
    roots_m : float64 array
        Depths of the root zone that tell stacks apart, increasing; empty where none do.
    fraction_divisor : float
        From the unit of sand, clay and silt to %.
    """

    codes: ClassCodes
    layers: tuple[str, ...]
    keys: Numbers | None
    profiles: Profiles
    roots_m: Array
    fraction_divisor: float

    def cells(self, given: Mapping[str, Values]) -> SoilCells:
        """See `Soil.cells`.

        Raises
        ------
        UnmappedCodeError
            A code or stack has no profile, or fractions do not add up.
        """
        key, flags = self.codes.stacks([self._texture(given, end) for end in self.layers])
        if self.roots_m.size:
            key = key + self._root_key(given["root_depth"])
            flags |= np.isnan(given["root_depth"]) * np.uint8(NO_SOIL)
        profile = self._look_up(key)
        if settle(profile.reshape(-1), flags.ravel()):
            raise UnmappedCodeError(self._unknown(given, profile, flags))
        return SoilCells(profile, (flags & NO_VALUE) > 0, (flags & NO_SOIL) > 0, {})

    def _look_up(self, key: Numbers) -> Profiles:
        if self.keys is None:
            profile: Profiles = self.profiles.take(key)
            return profile
        place = np.minimum(np.searchsorted(self.keys, key), self.keys.size - 1)
        found: Profiles = self.profiles.take(place)
        found[self.keys.take(place) != key] = UNKNOWN_STACK
        return found

    def _root_key(self, root: Values) -> Numbers:
        place = np.minimum(np.searchsorted(self.roots_m, root), self.roots_m.size - 1)
        key: Numbers = place.astype(np.int64) * np.int64(BASE ** len(self.layers))
        return key

    def _texture(self, given: Mapping[str, Values], end: str) -> Values:
        """Texture codes of a layer: as given, or the number of the class its fractions make."""
        if f"texture{end}" in given:
            return given[f"texture{end}"]
        classes, wrong = class_of_fractions(fractions(given, end), self.fraction_divisor)
        if wrong.any():
            raise UnmappedCodeError("sand, clay and silt do not add up")
        return classes

    def _unknown(self, given: Mapping[str, Values], profile: Profiles, flags: Flags) -> str:
        unknown = ((flags & NOT_MAPPED) > 0) | ((profile < 0) & ((flags & NO_SOIL) == 0))
        codes = [self._texture(given, end)[unknown].flat[0] for end in self.layers]
        shown = ", ".join(f"{code:g}" for code in codes)
        return f"texture code {shown} is not mapped or was not there when the run began"


@dataclass(frozen=True)
class FractionSoil:
    """Parameters cell by cell from fractions, by a published regression.

    `method` is a name of `regressions.METHODS`, `fraction_divisor` goes from the unit of sand,
    clay and silt to %.
    """

    method: str
    fraction_divisor: float

    def cells(self, given: Mapping[str, Values]) -> SoilCells:
        """See `Soil.cells`.

        Raises
        ------
        UnmappedCodeError
            Fractions do not add up.
        """
        sand, clay, wrong = fractions_in_percent(
            given["sand"], given["clay"], given.get("silt"), self.fraction_divisor
        )
        if wrong.any():
            raise UnmappedCodeError("sand, clay and silt do not add up")
        inputs = {"sand": sand, "clay": clay}
        needs = METHODS[self.method].needs
        if needs:
            inputs[needs] = given[needs].astype(np.float64)
        missing = np.isnan(sand) | np.isnan(clay)
        for values in inputs.values():
            missing |= np.isnan(values)
        if missing.any():
            inputs = {r: np.where(missing, _ANY_SOIL[r], values) for r, values in inputs.items()}
        found = soils_of(self.method, inputs)
        outside = int(np.count_nonzero(found.outside & ~missing))
        return SoilCells(found.cells, missing, np.zeros_like(missing), {"outside_range": outside})


_ANY_SOIL = {"sand": 40.0, "clay": 20.0, "organic_matter": 2.0, "bulk_density": 1.4}


def fractions(given: Mapping[str, Values], end: str) -> dict[str, Values]:
    """Sand, clay and perhaps silt of one layer."""
    roles = ("sand", "clay", "silt")
    return {role: given[f"{role}{end}"] for role in roles if f"{role}{end}" in given}
