"""Zone sums that merge: one table of block partials in, one row a zone out.

Areas and area-weighted sums are kept a block apart until one final `math.fsum`, which rounds once
and so does not care for order; percentiles come from histograms whose weights are whole numbers.
The region as a whole takes part as zone `REGION`.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Whole = NDArray[np.int64]

REGION = -1
"""Zone number of the whole region."""

CLASSES, DEPTHS = 7, 4
"""Hazard classes with 0 for nodata and 6 for water at surface; depth classes."""

DEPTH_EDGES_M = (1.0, 2.0, 3.0)
"""A depth class holds its lower edge."""

SALTS = 4
SALT_EDGES_G_PER_L = (1.5, 7.0, 15.0)
SALT_NAMES = ("at most slightly saline", "moderately saline", "highly saline", "very highly saline")
"""Classes of groundwater salinity by TDS [g/L]: Rhoades, Kandiah & Mashali (1992) FAO Irrigation
and Drainage Paper 48, Table 1 (from memory); a class holds its lower edge."""

SUMS = ("depth", "evaporation", "salt_load", "depth_margin", "surface_load")
"""Sums weighted by area [m2]: the first four over assessed cells, the last over surface cells."""

QUANTITIES = ("salt_load", "critical_depth")
"""Quantities with percentiles, by their number in a histogram."""

CODES = CLASSES * DEPTHS * 2 * SALTS
"""Columns of area by hazard class, depth class, too shallow (no, yes) and salinity class."""

COLUMNS = CODES + len(SUMS)
"""Columns of a row of sums; extras follow."""

BIN_SHIFT = 44
"""A bin is a number's sign, exponent and eight mantissa bits: at most 0.4 % wide."""

_COMPACT = 2_000_000


@dataclass(frozen=True)
class ZoneValues:
    """Values before rounding of a run of a block's cells, flat, in row-major order.

    `depth_m` [m], `evaporation_mm_per_year`, `salt_load` [t/ha/year], `critical_depth` and
    `depth_margin` [m], `tds_g_per_l` of the groundwater, `extras` whatever else is summed. Where
    `hazard_class` is 0 the others are finite but mean nothing.
    """

    depth_m: Floats
    evaporation_mm_per_year: Floats
    salt_load: Floats
    critical_depth: Floats
    depth_margin: Floats
    hazard_class: NDArray[np.uint8]
    tds_g_per_l: Floats
    extras: tuple[Floats, ...] = ()

    def part(self, cells: slice | Whole) -> ZoneValues:
        """Some of the cells."""
        arrays = {name: array[cells] for name, array in vars(self).items() if name != _EXTRAS}
        return ZoneValues(**arrays, extras=tuple(values[cells] for values in self.extras))


_EXTRAS = "extras"


@dataclass(frozen=True)
class Histogram:
    """Sparse area histograms: one row a (zone, quantity, bin), with a whole-number weight."""

    zone: Whole
    quantity: Whole
    bin: Whole
    weight: Whole


@dataclass(frozen=True)
class ZonePartial:
    """Sums of one or more blocks: `zone` (rows), `sums` (rows, columns) in m2 times the unit."""

    zone: Whole
    sums: Floats
    histogram: Histogram


@dataclass(frozen=True)
class ZoneTotals:
    """Merged sums by zone number, and merged histograms, in the order of `compact`."""

    sums: dict[int, Floats]
    histogram: Histogram

    def areas(self, zone: int) -> Floats:
        """Area [m2] by hazard class, depth class and too shallow (no, yes)."""
        areas: Floats = self._areas(zone).sum(axis=3)
        return areas

    def depth_by_salinity(self, zone: int) -> Floats:
        """Assessed area [m2] by depth class and salinity class."""
        areas: Floats = self._areas(zone)[1 : CLASSES - 1].sum(axis=(0, 2))
        return areas

    def _areas(self, zone: int) -> Floats:
        return self._row(zone)[:CODES].reshape(CLASSES, DEPTHS, 2, SALTS)

    def sum_of(self, zone: int, name: str) -> float:
        """One of `SUMS`."""
        return float(self._row(zone)[CODES + SUMS.index(name)])

    def extras(self, zone: int) -> list[float]:
        """Sums of assessed cells of what was given as extras, times m2."""
        return [float(load) for load in self._row(zone)[COLUMNS:]]

    def _row(self, zone: int) -> Floats:
        width = next((len(row) for row in self.sums.values()), COLUMNS)
        return self.sums.get(zone, np.zeros(width))


def concat(partials: Iterable[ZonePartial]) -> ZonePartial:
    """Put the rows of several partials into one; no sum is touched."""
    parts = list(partials)
    return ZonePartial(
        np.concatenate([p.zone for p in parts]),
        np.concatenate([p.sums for p in parts]),
        join([p.histogram for p in parts]),
    )


def join(parts: list[Histogram]) -> Histogram:
    """The rows of several histograms in one."""
    names = ("zone", "quantity", "bin", "weight")
    return Histogram(*(np.concatenate([getattr(p, name) for p in parts]) for name in names))


def compact(histogram: Histogram) -> Histogram:
    """The same histograms with one row a (zone, quantity, bin), in that order."""
    if histogram.zone.size == 0:
        return histogram
    # One number sorts ten times as fast as three.
    key = (histogram.zone - REGION) << _KEY_BITS | histogram.quantity << _BIN_BITS | histogram.bin
    order = np.argsort(key)
    key = key[order]
    first = np.flatnonzero(np.append(True, key[1:] != key[:-1]))
    rows = order[first]
    return Histogram(
        histogram.zone[rows],
        histogram.quantity[rows],
        histogram.bin[rows],
        np.add.reduceat(histogram.weight[order], first),
    )


_BIN_BITS = 64 - BIN_SHIFT
_KEY_BITS = _BIN_BITS + len(QUANTITIES).bit_length()


def pack(partials: list[ZonePartial]) -> dict[str, NDArray[np.generic]]:
    """A tile's partials as plain arrays; sums stay a row a block and zone."""
    joined = concat(partials)
    histogram = compact(joined.histogram)
    return {
        "zone": joined.zone,
        "sums": joined.sums,
        "hist_zone": histogram.zone,
        "hist_quantity": histogram.quantity,
        "hist_bin": histogram.bin,
        "hist_weight": histogram.weight,
    }


def unpack(arrays: dict[str, NDArray[np.generic]], prefix: str = "") -> ZonePartial:
    """The partial that `pack` took apart, its arrays' names behind a prefix."""
    names = ("hist_zone", "hist_quantity", "hist_bin", "hist_weight")
    histogram = Histogram(*(arrays[prefix + name].astype(np.int64) for name in names))
    return ZonePartial(
        arrays[f"{prefix}zone"].astype(np.int64),
        arrays[f"{prefix}sums"].astype(np.float64),
        histogram,
    )


@dataclass
class _Pile:
    """Histograms under way: compacted whenever they pile up, so memory stays bounded."""

    parts: list[Histogram] = field(default_factory=list)
    rows: int = 0

    def add(self, histogram: Histogram) -> None:
        self.parts.append(histogram)
        self.rows += histogram.zone.size
        if self.rows > _COMPACT:
            self.parts = [self.whole()]
            self.rows = self.parts[0].zone.size

    def whole(self) -> Histogram:
        return compact(join(self.parts))


def merge_partials(partials: Iterable[ZonePartial]) -> ZoneTotals:
    """Merge block partials in any order; the result is the same to the last bit."""
    pile = _Pile()
    zones, sums = [], []
    for partial in partials:
        zones.append(partial.zone)
        sums.append(partial.sums)
        pile.add(partial.histogram)
    zone, rows = np.concatenate(zones), np.concatenate(sums)
    order = np.argsort(zone, kind="stable")
    zone, rows = zone[order], rows[order]
    numbers, first = np.unique(zone, return_index=True)
    ends = np.append(first[1:], zone.size)
    merged = {
        int(number): np.array([math.fsum(column) for column in rows[a:b].T])
        for number, a, b in zip(numbers, first, ends, strict=True)
    }
    return ZoneTotals(merged, pile.whole())
