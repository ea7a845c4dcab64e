"""Zone sums of one block while it is computed, strip by strip."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from saltrise.coverage import BlockCover
from saltrise.zonal import (
    BIN_SHIFT,
    CLASSES,
    CODES,
    COLUMNS,
    DEPTH_EDGES_M,
    DEPTHS,
    QUANTITIES,
    REGION,
    SALT_EDGES_G_PER_L,
    SALTS,
    Histogram,
    ZonePartial,
    ZoneValues,
    join,
)

Floats = NDArray[np.float64]
Whole = NDArray[np.int64]


class BlockSums:
    """Sums of one block under way, for the region and every zone that meets it.

    A class because a block comes strip by strip, while its numbers are still in the processor's
    cache. Slot 0 holds what belongs to no zone as a whole, slot k the whole cells of zone k; the
    region is all slots together. What zones cover in part is weighed apart.
    """

    def __init__(self, cover: BlockCover, unit_m2: float, extras: int = 0) -> None:
        self._cover, self._unit = cover, unit_m2
        slots = len(cover.zones) + 1
        self._whole = np.zeros((slots, COLUMNS + extras))
        self._part = np.zeros((slots, COLUMNS + extras))
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
            whole[:, CODES + column] += np.bincount(slots, sums, len(whole))
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
            part[:, CODES + column] += np.bincount(slot, weighed, len(part))
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
        place = cells.code if slot is None else slot * CODES + cells.code
        if slot is None:
            columns[only, :CODES] += np.bincount(place, weight, CODES)
        else:
            counted = np.bincount(place, weight, len(columns) * CODES)
            columns[:, :CODES] += counted.reshape(-1, CODES)
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
        return ZonePartial(numbers, sums, join(parts))


@dataclass(frozen=True)
class _Cells:
    """What the sums need of a run of cells: its code, whether it is assessed, its quantities."""

    code: NDArray[np.uint8]
    assessed: NDArray[np.bool_]
    surface: NDArray[np.bool_]
    summed: tuple[Floats, ...]
    load: Floats
    extras: tuple[Floats, ...]
    quantities: tuple[Floats, ...]

    @classmethod
    def of(cls, values: ZoneValues) -> _Cells:
        hazard = values.hazard_class
        code = hazard * np.uint8(DEPTHS)
        for edge in DEPTH_EDGES_M:
            code += values.depth_m >= edge
        code *= np.uint8(2)
        code += values.depth_margin < 0
        # 7 x 4 x 2 x 4 codes still fit a byte.
        code *= np.uint8(SALTS)
        for edge in SALT_EDGES_G_PER_L:
            code += values.tds_g_per_l >= edge
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
            values.extras,
            (values.salt_load, values.critical_depth),
        )

    def weighed(self, dry: Floats, area: Floats) -> Iterator[Floats]:
        """Values of `SUMS`, in its order, and extras, each times its weight [m2]."""
        for values in self.summed:
            yield dry * values
        yield self._at_surface(area)
        for values in self.extras:
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
        bins = values.view(np.int64) >> BIN_SHIFT
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
