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
    """One block's values before rounding, flat, in row-major order; `depth_m` [m],
    `evaporation_mm_per_year`, `salt_load` [t/ha/year], `critical_depth` and `depth_margin` [m].
    Where `hazard_class` is 0 the others are finite but mean nothing.
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
    block = _Prepared.of(values)
    region = _sums(block, np.array([REGION]), area, None, None, unit_m2)
    if not cover.cell.size:
        return region
    zones, local = np.unique(cover.zone, return_inverse=True)
    numbers = zones.astype(np.int64)
    if len(zones) == 1 and cover.cell.size == area.size and cover.fraction.min() == 1.0:
        return concat([region, _renumbered(region, numbers[0])])
    weight = cover.fraction * area[cover.cell]
    return concat([region, _sums(block, numbers, weight, cover.cell, local, unit_m2)])


def _renumbered(partial: ZonePartial, zone: np.int64) -> ZonePartial:
    histogram = partial.histogram
    return ZonePartial(
        np.array([zone]),
        partial.sums,
        Histogram(
            np.full_like(histogram.zone, zone), histogram.quantity, histogram.bin, histogram.weight
        ),
    )


@dataclass(frozen=True)
class _Prepared:
    """What every zone of a block needs, made once: values, codes, and the span of the bins."""

    values: ZoneValues
    code: NDArray[np.uint8]
    low: tuple[int, ...]
    span: tuple[int, ...]

    @classmethod
    def of(cls, values: ZoneValues) -> _Prepared:
        code = np.empty(values.hazard_class.size, dtype=np.uint8)
        low, high = [_NO_BIN] * len(QUANTITIES), [0] * len(QUANTITIES)
        for part in _chunks(code.size):
            depth = values.depth_m[part]
            kind = values.hazard_class[part] * np.uint8(DEPTHS)
            for edge in DEPTH_EDGES_M:
                kind += depth >= edge
            code[part] = kind * np.uint8(2) + (values.depth_margin[part] < 0)
            for k, name in enumerate(QUANTITIES):
                bins = _bins(getattr(values, name)[part])
                # Less one and unsigned: zero, which has a place of its own, becomes the greatest.
                low[k] = min(low[k], int((bins - 1).view(np.uint64).min()) + 1)
                high[k] = max(high[k], int(bins.max()))
        span = tuple(max(h - b, 0) + 2 for b, h in zip(low, high, strict=True))
        return cls(values, code, tuple(low), span)


_NO_BIN = 1 << 30
_CHUNK = 1 << 15


def _chunks(size: int) -> list[slice]:
    """Runs of cells small enough that a core's cache holds their numbers."""
    return [slice(a, min(a + _CHUNK, size)) for a in range(0, size, _CHUNK)]


def _bins(values: Floats) -> Whole:
    return values.view(np.int64) >> _BIN_SHIFT


def _sums(
    block: _Prepared,
    zones: Whole,
    weight: Floats,
    cell: NDArray[np.int32] | None,
    local: NDArray[np.intp] | None,
    unit_m2: float,
) -> ZonePartial:
    """Sums of the given zones; `cell` and `local` (its zone's position) are None for the region."""
    count, values = len(zones), block.values
    columns = np.zeros((count, _COLUMNS))
    histograms = [np.zeros((count, span)) for span in block.span]
    weighed = (
        values.depth_m,
        values.evaporation_mm_per_year,
        values.salt_load,
        values.depth_margin,
    )
    for part in _chunks(weight.size):
        where = part if cell is None else cell[part]
        zone = None if local is None or count == 1 else local[part]
        area, hazard = weight[part], values.hazard_class[where]
        columns[:, :_CODES] += _counted(block.code[where], zone, area, count, _CODES)
        surface = hazard == CLASSES - 1
        assessed = (hazard > 0) & ~surface
        dry = area * assessed
        for k, value in enumerate(weighed):
            columns[:, _CODES + k] += _summed(dry * value[where], zone, count)
        if surface.any():
            load = area * surface * values.salt_load[where]
            columns[:, -1] += _summed(load, zone, count)
        # At least one count, so that a zone far smaller than a cell still has percentiles.
        whole = np.maximum(np.rint(area / unit_m2), 1.0) * assessed
        for k, name in enumerate(QUANTITIES):
            place = np.maximum(_bins(getattr(values, name)[where]) - (block.low[k] - 1), 0)
            # Whole numbers below 2^53 add up exactly in any order.
            histograms[k] += _counted(place, zone, whole, count, block.span[k])
    sparse = [_histogram(zones, k, block.low[k], found) for k, found in enumerate(histograms)]
    return ZonePartial(zones, columns, _join(sparse))


def _summed(values: Floats, zone: NDArray[np.intp] | None, count: int) -> Floats:
    sums = values.sum(keepdims=True) if zone is None else np.bincount(zone, values, count)
    return np.asarray(sums, dtype=np.float64)


def _counted(
    code: NDArray[np.uint8] | Whole,
    zone: NDArray[np.intp] | None,
    weight: Floats,
    count: int,
    width: int,
) -> Floats:
    """Weights by zone (rows) and code (columns)."""
    place = code if zone is None else zone * width + code
    counts = np.bincount(place, weight, count * width).reshape(count, width)
    return np.asarray(counts, dtype=np.float64)


def _histogram(zones: Whole, quantity: int, low: int, counts: Floats) -> Histogram:
    zone, position = np.nonzero(counts)
    return Histogram(
        zones[zone],
        np.full(zone.size, quantity, dtype=np.int64),
        np.where(position == 0, 0, position - 1 + low).astype(np.int64),
        counts[zone, position].astype(np.int64),
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
