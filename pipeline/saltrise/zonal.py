"""Zone sums that merge: one table of block partials in, one row a zone out.

Areas and area-weighted sums are kept a block apart until one final `math.fsum`, which rounds once
and so does not care for order; percentiles come from histograms whose weights are whole numbers.
The region as a whole takes part as zone `REGION`.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass, field
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from saltrise.coverage import BlockCover

Floats = NDArray[np.float64]
Whole = NDArray[np.int64]
_Kind = TypeVar("_Kind", bound=np.generic)

REGION = -1
"""Zone number of the whole region."""

CLASSES, DEPTHS = 7, 4
"""Hazard classes with 0 for nodata and 6 for water at surface; depth classes."""

DEPTH_EDGES_M = (1.0, 2.0, 3.0)
"""A depth class holds its lower edge."""

SUMS = ("depth", "evaporation", "salt_load", "depth_margin", "surface_load")
"""Sums weighted by area [m2]: the first four over assessed cells, the last over surface cells."""

QUANTITIES = ("salt_load", "critical_depth")
"""Quantities with percentiles, by their number in a histogram."""

_CODES = CLASSES * DEPTHS * 2
_COLUMNS = _CODES + len(SUMS)

# Sign, exponent and eight mantissa bits: bins at most 0.4 % wide, their middles within 0.2 %.
_BIN_SHIFT = np.int64(44)

_COMPACT = 2_000_000


@dataclass(frozen=True)
class ZoneValues:
    """One block's values before rounding, flat, in row-major order; `depth_m` [m],
    `evaporation_mm_per_year`, `salt_load` [t/ha/year], `critical_depth` and `depth_margin` [m].
    Where `hazard_class` is 0 the others mean nothing.
    """

    depth_m: Floats
    evaporation_mm_per_year: Floats
    salt_load: Floats
    critical_depth: Floats
    depth_margin: Floats
    hazard_class: NDArray[np.uint8]


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
    """Merged sums by zone number, and merged histograms."""

    sums: dict[int, Floats]
    histogram: Histogram

    def areas(self, zone: int) -> Floats:
        """Area [m2] by hazard class, depth class and too shallow (no, yes)."""
        return self._row(zone)[:_CODES].reshape(CLASSES, DEPTHS, 2)

    def sum_of(self, zone: int, name: str) -> float:
        """One of `SUMS`."""
        return float(self._row(zone)[_CODES + SUMS.index(name)])

    def _row(self, zone: int) -> Floats:
        return self.sums.get(zone, np.zeros(_COLUMNS))


def block_partial(
    cover: BlockCover, area_m2: Floats, values: ZoneValues, unit_m2: float
) -> ZonePartial:
    """Sums of one block for the region and every zone that meets it.

    Parameters
    ----------
    cover : BlockCover
        Cells that zones cover.
    area_m2 : float64 array
        True areas of the block's cells.
    values : ZoneValues
        The block's values.
    unit_m2 : float
        Area of one count in the histograms.
    """
    area = area_m2.ravel()
    prepared = _Prepared.of(values)
    parts = [_sums(prepared, REGION * np.ones(1, np.int64), area, None, None, unit_m2)]
    if cover.cell.size:
        zones, local = np.unique(cover.zone, return_inverse=True)
        weight = cover.fraction * area[cover.cell]
        numbers = zones.astype(np.int64)
        parts.append(_sums(prepared, numbers, weight, cover.cell, local, unit_m2))
    return concat(parts)


@dataclass(frozen=True)
class _Prepared:
    """What every zone of a block needs, made once."""

    code: Whole
    group: Whole
    weighed: tuple[Floats, ...]
    bins: tuple[Whole, ...]
    assessed: NDArray[np.bool_]

    @classmethod
    def of(cls, values: ZoneValues) -> _Prepared:
        hazard = values.hazard_class.astype(np.int64)
        valid = hazard > 0
        with np.errstate(invalid="ignore"):
            depth = sum((values.depth_m >= edge).astype(np.int64) for edge in DEPTH_EDGES_M)
            shallow = values.depth_margin < 0
        code = np.where(valid, (hazard * DEPTHS + depth) * 2 + shallow, 0)
        group = np.where(hazard == CLASSES - 1, 2, valid)
        weighed = (
            values.depth_m,
            values.evaporation_mm_per_year,
            values.salt_load,
            values.depth_margin,
        )
        bins = tuple(
            value.view(np.int64) >> _BIN_SHIFT
            for value in (values.salt_load, values.critical_depth)
        )
        return cls(code, group.astype(np.int64), weighed, bins, group == 1)


def _sums(
    block: _Prepared,
    zones: Whole,
    weight: Floats,
    cell: NDArray[np.int32] | None,
    local: NDArray[np.intp] | None,
    unit_m2: float,
) -> ZonePartial:
    """Sums of the given zones; `cell` and `local` (its zone's position) are None for the region."""

    def taken(array: NDArray[_Kind]) -> NDArray[_Kind]:
        return array if cell is None else array[cell]

    count = len(zones)
    shift: Whole = np.zeros(1, np.int64) if local is None else local.astype(np.int64)
    code = taken(block.code) + shift * _CODES
    columns = np.empty((count, _COLUMNS))
    columns[:, :_CODES] = np.bincount(code, weight, count * _CODES).reshape(count, _CODES)
    group = taken(block.group) + shift * 3
    for k, value in enumerate(block.weighed):
        # Groups keep apart what is assessed, at the surface and without value.
        by_group = np.bincount(group, weight * taken(value), count * 3).reshape(count, 3)
        columns[:, _CODES + k] = by_group[:, 1]
        if SUMS[k] == "salt_load":
            columns[:, -1] = by_group[:, 2]
    keep = taken(block.assessed)
    # At least one count, so that a zone far smaller than a cell still has percentiles.
    whole = np.maximum(np.rint(weight[keep] / unit_m2), 1.0)
    where = np.zeros(whole.size, np.int64) if local is None else local[keep]
    parts = [
        _histogram(zones, where, quantity, taken(bins)[keep], whole)
        for quantity, bins in enumerate(block.bins)
    ]
    return ZonePartial(zones, columns, _join(parts))


def _histogram(zones: Whole, local: Whole, quantity: int, bins: Whole, weight: Floats) -> Histogram:
    zero = bins == 0
    low = int(bins.min(where=~zero, initial=1 << 30))
    span = max(int(bins.max(initial=0)) - low, 0) + 2
    # Zero sits next to the lowest bin; its own place would make the table 2^18 wide.
    place = np.where(zero, 0, bins - low + 1) + local * span
    # Whole numbers below 2^53 add up exactly in any order.
    counts = np.bincount(place, weight, len(zones) * span)
    filled = np.flatnonzero(counts)
    zone, position = np.divmod(filled, span)
    return Histogram(
        zones[zone],
        np.full(filled.size, quantity, dtype=np.int64),
        np.where(position == 0, 0, position - 1 + low).astype(np.int64),
        counts[filled].astype(np.int64),
    )


def concat(partials: Iterable[ZonePartial]) -> ZonePartial:
    """Put the rows of several partials into one; no sum is touched."""
    parts = list(partials)
    return ZonePartial(
        np.concatenate([p.zone for p in parts]),
        np.concatenate([p.sums for p in parts]),
        _join([p.histogram for p in parts]),
    )


def _join(parts: list[Histogram]) -> Histogram:
    names = ("zone", "quantity", "bin", "weight")
    return Histogram(*(np.concatenate([getattr(p, name) for p in parts]) for name in names))


def compact(histogram: Histogram) -> Histogram:
    """The same histograms with one row a (zone, quantity, bin), in that order."""
    if histogram.zone.size == 0:
        return histogram
    order = np.lexsort((histogram.bin, histogram.quantity, histogram.zone))
    keys = [getattr(histogram, name)[order] for name in ("zone", "quantity", "bin")]
    new = np.ones(order.size, dtype=bool)
    new[1:] = np.any([key[1:] != key[:-1] for key in keys], axis=0)
    first = np.flatnonzero(new)
    zone, quantity, bin_ = (key[first] for key in keys)
    return Histogram(zone, quantity, bin_, np.add.reduceat(histogram.weight[order], first))


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


def unpack(arrays: dict[str, NDArray[np.generic]]) -> ZonePartial:
    """The partial that `pack` took apart."""
    names = ("hist_zone", "hist_quantity", "hist_bin", "hist_weight")
    histogram = Histogram(*(arrays[name].astype(np.int64) for name in names))
    return ZonePartial(
        arrays["zone"].astype(np.int64), arrays["sums"].astype(np.float64), histogram
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
        return compact(_join(self.parts))


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
