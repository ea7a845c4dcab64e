"""Zone sums of one block while it is computed, strip by strip."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from saltrise.coverage import BlockCover
from saltrise.kernels import sums
from saltrise.zonal import (
    BIN_SHIFT,
    CLASSES,
    CODES,
    COLUMNS,
    DEPTH_EDGES_M,
    QUANTITIES,
    REGION,
    SALT_EDGES_G_PER_L,
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
        self._cover = cover
        slots = len(cover.zones) + 1
        self._whole = _Sums(slots, extras, 1.0 / unit_m2)
        self._part = _Sums(slots, extras, 1.0 / unit_m2)

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
        cover = self._cover
        low = int(np.searchsorted(cover.run_start, first, side="right")) - 1
        high = int(np.searchsorted(cover.run_start, first + area_m2.size))
        starts = np.maximum(cover.run_start[low:high] - first, 0)
        self._whole.add(starts, cover.run_slot[low:high], area_m2, values)
        # Cells that a zone covers in part, or that lie in several zones: each a run of its own.
        low, high = (int(at) for at in np.searchsorted(cover.cell, (first, first + area_m2.size)))
        if low < high:
            here = cover.cell[low:high] - first
            weight = area_m2[here] * cover.fraction[low:high]
            alone = np.arange(here.size)
            self._part.add(alone, cover.slot[low:high], weight, values.part(here))

    def partial(self) -> ZonePartial:
        """The block's sums: a row for the region, then one a zone."""
        numbers = np.append(REGION, self._cover.zones)
        whole, part = self._whole, self._part
        columns = whole.columns + part.columns
        columns[0] = whole.columns.sum(axis=0)
        parts = []
        for quantity in range(len(QUANTITIES)):
            inside, across = whole.bins[quantity], part.bins[quantity]
            parts += [
                inside.histogram(np.full(numbers.size, REGION), quantity, first=0),
                inside.histogram(numbers, quantity, first=1),
                across.histogram(numbers, quantity, first=1),
            ]
        return ZonePartial(numbers, columns, join(parts))


class _Sums:
    """Columns and histograms of all slots under way."""

    def __init__(self, slots: int, extras: int, per_unit: float) -> None:
        self.columns = np.zeros((slots, COLUMNS + extras))
        self.bins = [_Bins(slots) for _ in QUANTITIES]
        self._per_unit = per_unit

    def add(
        self, starts: Whole, slots: NDArray[np.intp], weight_m2: Floats, values: ZoneValues
    ) -> None:
        """Add runs of cells, run k from `starts[k]` on to slot `slots[k]`."""
        code = np.empty(weight_m2.size, dtype=np.uint8)
        edges = (DEPTH_EDGES_M, SALT_EDGES_G_PER_L)
        hazard, margin = values.hazard_class, values.depth_margin
        sums.codes(hazard, values.depth_m, margin, values.tds_g_per_l, edges, code)
        runs: sums.Runs = (starts, slots, weight_m2, code, _DRY, _WET)
        summed = (values.depth_m, values.evaporation_mm_per_year, values.salt_load, margin)
        extras = np.array(values.extras).reshape(len(values.extras), weight_m2.size)
        sums.add(runs, summed, extras, self.columns)
        for bins, numbers in zip(self.bins, (values.salt_load, values.critical_depth), strict=True):
            bins.add(runs, numbers, self._per_unit)


_DRY, _WET = CODES // CLASSES, CODES // CLASSES * (CLASSES - 1)
"""Codes of assessed cells begin, and those of water at the surface."""


class _Bins:
    """Histograms of one quantity for all slots, over a span of bins that grows as needed."""

    def __init__(self, slots: int) -> None:
        self._low = 0
        self._counts = np.zeros((slots, 0))

    def add(self, runs: sums.Runs, values: Floats, per_unit: float) -> None:
        """Count cells into their bins."""
        self._cover_span(*sums.span(values, BIN_SHIFT))
        sums.count(runs, values, BIN_SHIFT, per_unit, self._low, self._counts)

    def _cover_span(self, low: int, high: int) -> None:
        slots, span = self._counts.shape
        if span == 0:
            # A class of bins beyond what comes first, so that the span seldom has to grow.
            self._low = max(min(low, high) - _SPARE, 1)
            self._counts = np.zeros((slots, high - self._low + 2 + _SPARE))
            return
        if high < low:
            # Nothing but zeros, which have their place.
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
