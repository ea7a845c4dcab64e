"""Zone sums that merge: one table of block partials in, one row a zone out.

Areas and area-weighted sums are kept a block apart until one final `math.fsum`, which rounds once
and so does not care for order; percentiles come from histograms whose weights are whole numbers.
The region as a whole takes part as zone `REGION`.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from saltrise.coverage import BlockCover

Floats = NDArray[np.float64]
Whole = NDArray[np.int64]

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
    """Values before rounding of a run of a block's cells, flat, in row-major order.

    `depth_m` [m], `evaporation_mm_per_year`, `salt_load` [t/ha/year], `critical_depth` and
    `depth_margin` [m], `other_loads` [t/ha/year] under other parameter sets. Where
    `hazard_class` is 0 the others are finite but mean nothing.
    """

    depth_m: Floats
    evaporation_mm_per_year: Floats
    salt_load: Floats
    critical_depth: Floats
    depth_margin: Floats
    hazard_class: NDArray[np.uint8]
    other_loads: tuple[Floats, ...] = ()

    def part(self, cells: slice | Whole) -> ZoneValues:
        """Some of the cells."""
        arrays = {name: array[cells] for name, array in vars(self).items() if name != _OTHERS}
        return ZoneValues(**arrays, other_loads=tuple(load[cells] for load in self.other_loads))


_OTHERS = "other_loads"


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

    def other_loads(self, zone: int) -> list[float]:
        """Salt loads of assessed cells under the other parameter sets, times m2."""
        return [float(load) for load in self._row(zone)[_COLUMNS:]]

    def _row(self, zone: int) -> Floats:
        width = next((len(row) for row in self.sums.values()), _COLUMNS)
        return self.sums.get(zone, np.zeros(width))


class BlockSums:
    """Sums of one block under way, for the region and every zone that meets it.

    A class because a block comes strip by strip, while its numbers are still in the processor's
    cache. Slot 0 holds what belongs to no zone as a whole, slot k the whole cells of zone k; the
    region is all slots together. What zones cover in part is weighed apart.
    """

    def __init__(self, cover: BlockCover, unit_m2: float, others: int = 0) -> None:
        self._cover, self._unit = cover, unit_m2
        slots = len(cover.zones) + 1
        self._whole = np.zeros((slots, _COLUMNS + others))
        self._part = np.zeros((slots, _COLUMNS + others))
        self._whole_bins = [_Bins(slots) for _ in QUANTITIES]
        self._part_bins = [_Bins(slots) for _ in QUANTITIES]

    def add(self, first: int, area_m2: Floats, values: ZoneValues) -> None:
        """Take the cells from `first` on, in the block's row-major order.

        Parameters
        ----------
        first : int
            Position of the first cell in the block.
        area_m2 : flat float64 array
            True areas of the cells.
        values : ZoneValues
            Their values.
        """
        starts, slots = self._runs(first, area_m2.size)
        cells = _Cells.of(values)
        lengths = np.diff(np.append(starts, area_m2.size))
        label = None if starts.size == 1 else np.repeat(slots, lengths)
        dry = area_m2 * cells.assessed
        whole = self._whole
        for column, weighed in enumerate(cells.weighed(dry, area_m2)):
            sums = np.add.reduceat(weighed, starts)
            whole[:, _CODES + column] += np.bincount(slots, sums, len(whole))
        self._count(self._whole, self._whole_bins, cells, label, int(slots[0]), area_m2)
        self._add_part(first, area_m2, values)

    def _runs(self, first: int, size: int) -> tuple[Whole, NDArray[np.intp]]:
        """Starts (within the strip) and slots of the runs of a strip."""
        cover = self._cover
        low = int(np.searchsorted(cover.run_start, first, side="right")) - 1
        high = int(np.searchsorted(cover.run_start, first + size))
        return np.maximum(cover.run_start[low:high] - first, 0), cover.run_slot[low:high]

    def _add_part(self, first: int, area_m2: Floats, values: ZoneValues) -> None:
        """Cells that a zone covers in part, or that lie in several zones."""
        cover = self._cover
        low, high = np.searchsorted(cover.cell, (first, first + area_m2.size))
        if low == high:
            return
        here, slot = cover.cell[low:high] - first, cover.slot[low:high]
        cells = _Cells.of(values.part(here))
        weight = area_m2[here] * cover.fraction[low:high]
        part = self._part
        for column, weighed in enumerate(cells.weighed(weight * cells.assessed, weight)):
            part[:, _CODES + column] += np.bincount(slot, weighed, len(part))
        self._count(part, self._part_bins, cells, slot, 0, weight)

    def _count(
        self,
        columns: Floats,
        bins: list[_Bins],
        cells: _Cells,
        slot: NDArray[np.intp] | None,
        only: int,
        weight: Floats,
    ) -> None:
        """Areas by code and histograms; `only` is the slot where all cells share one."""
        place = cells.code if slot is None else slot * _CODES + cells.code
        if slot is None:
            columns[only, :_CODES] += np.bincount(place, weight, _CODES)
        else:
            counted = np.bincount(place, weight, len(columns) * _CODES)
            columns[:, :_CODES] += counted.reshape(-1, _CODES)
        # At least one count, so that a zone far smaller than a cell still has percentiles.
        count = np.maximum(np.rint(weight * (1.0 / self._unit)), 1.0) * cells.assessed
        for held, values in zip(bins, cells.quantities, strict=True):
            held.add(values, slot, only, count)

    def partial(self) -> ZonePartial:
        """The block's sums: a row for the region, then one a zone."""
        numbers = np.append(REGION, self._cover.zones)
        sums = self._whole + self._part
        sums[0] = self._whole.sum(axis=0)
        parts = []
        for quantity in range(len(QUANTITIES)):
            whole, part = self._whole_bins[quantity], self._part_bins[quantity]
            parts += [
                whole.histogram(np.full(numbers.size, REGION), quantity, first=0),
                whole.histogram(numbers, quantity, first=1),
                part.histogram(numbers, quantity, first=1),
            ]
        return ZonePartial(numbers, sums, _join(parts))


@dataclass(frozen=True)
class _Cells:
    """What the sums need of a run of cells: its code, whether it is assessed, its quantities."""

    code: NDArray[np.uint8]
    assessed: NDArray[np.bool_]
    surface: NDArray[np.bool_]
    summed: tuple[Floats, ...]
    load: Floats
    others: tuple[Floats, ...]
    quantities: tuple[Floats, ...]

    @classmethod
    def of(cls, values: ZoneValues) -> _Cells:
        hazard = values.hazard_class
        code = hazard * np.uint8(DEPTHS)
        for edge in DEPTH_EDGES_M:
            code += values.depth_m >= edge
        code *= np.uint8(2)
        code += values.depth_margin < 0
        surface = hazard == CLASSES - 1
        return cls(
            code,
            (hazard > 0) & ~surface,
            surface,
            (
                values.depth_m,
                values.evaporation_mm_per_year,
                values.salt_load,
                values.depth_margin,
            ),
            values.salt_load,
            values.other_loads,
            (values.salt_load, values.critical_depth),
        )

    def weighed(self, dry: Floats, area: Floats) -> Iterator[Floats]:
        """Values of `SUMS`, in its order, and other loads, each times its weight [m2]."""
        for values in self.summed:
            yield dry * values
        yield self._at_surface(area)
        for values in self.others:
            yield dry * values

    def _at_surface(self, area: Floats) -> Floats:
        return area * self.surface * self.load if self.surface.any() else np.zeros_like(area)


class _Bins:
    """Histograms of one quantity for all slots, over a span of bins that grows as needed."""

    def __init__(self, slots: int) -> None:
        self._low = 0
        self._counts = np.zeros((slots, 0))

    def add(self, values: Floats, slot: NDArray[np.intp] | None, only: int, count: Floats) -> None:
        """Count cells into their bins; `only` is the slot where all cells share one."""
        bins = values.view(np.int64) >> _BIN_SHIFT
        # Less one and unsigned: zero, which has a place of its own, becomes the greatest.
        low, high = int((bins - 1).view(np.uint64).min()) + 1, int(bins.max())
        self._cover_span(low, max(high, 1))
        place = np.maximum(bins - (self._low - 1), 0)
        slots, span = self._counts.shape
        # Whole numbers below 2^53 add up exactly in any order.
        if slot is None:
            self._counts[only] += np.bincount(place, count, span)
        else:
            place += slot * span
            self._counts += np.bincount(place, count, slots * span).reshape(slots, span)

    def _cover_span(self, low: int, high: int) -> None:
        slots, span = self._counts.shape
        if span == 0:
            # A class of bins beyond what comes first, so that the span seldom has to grow.
            self._low = max(min(low, high) - _SPARE, 1)
            self._counts = np.zeros((slots, high - self._low + 2 + _SPARE))
            return
        more_low = max(self._low - min(low, high), 0)
        more_high = max(high - (self._low + span - 2), 0)
        if more_low or more_high:
            grown = np.zeros((slots, span + more_low + more_high))
            grown[:, 0] = self._counts[:, 0]
            grown[:, 1 + more_low : span + more_low] = self._counts[:, 1:]
            self._counts, self._low = grown, self._low - more_low

    def histogram(self, zones: Whole, quantity: int, first: int) -> Histogram:
        """Filled bins of the slots from `first` on; slot k counts for `zones[k]`."""
        slot, position = np.nonzero(self._counts[first:])
        counts = self._counts[first:][slot, position]
        return Histogram(
            zones[slot + first],
            np.full(slot.size, quantity, dtype=np.int64),
            np.where(position == 0, 0, position - 1 + self._low).astype(np.int64),
            counts.astype(np.int64),
        )


_SPARE = 512


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
