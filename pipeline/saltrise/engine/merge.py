"""From all tiles' records to the region's numbers, in an order that cannot matter."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from saltrise.engine.records import Record, read_numbers
from saltrise.engine.survey import Range, add_ranges
from saltrise.zonal import ZonePartial, ZoneTotals, merge_partials, unpack


@dataclass(frozen=True)
class Statistics:
    """Of one layer's stored values: count, least, greatest, mean, standard deviation."""

    count: int
    minimum: float
    maximum: float
    mean: float
    deviation: float


@dataclass(frozen=True)
class Totals:
    """The region's numbers.

    `statistics` lacks a layer that has no valid cell; `ranges` are what each input holds.
    """

    counts: dict[str, int]
    ranges: dict[str, Range]
    statistics: dict[str, Statistics]
    zones: ZoneTotals


def merge(work: Path, records: list[Record], layers: Iterable[str]) -> Totals:
    """Merge all tiles of a run.

    Sums are `math.fsum` over all blocks, which rounds once and so is free of order; counts and
    histograms are whole numbers.
    """
    counts: Counter[str] = Counter()
    ranges: dict[str, Range] = {}
    moments: dict[str, list[NDArray[np.float64]]] = {name: [] for name in layers}

    def partials() -> Iterator[ZonePartial]:
        nonlocal ranges
        for record in records:
            numbers = read_numbers(work, record)
            counts.update(record.counts)
            ranges = add_ranges(ranges, record.ranges)
            for name, rows in moments.items():
                rows.append(numbers[f"statistics.{name}"].astype(np.float64))
            yield unpack(numbers, "zonal.")

    zones = merge_partials(partials())
    statistics = {name: _statistics(np.concatenate(rows)) for name, rows in moments.items()}
    found = {name: value for name, value in statistics.items() if value is not None}
    return Totals(dict(counts), ranges, found, zones)


def _statistics(blocks: NDArray[np.float64]) -> Statistics | None:
    count, low, high, mean, spread = blocks.T
    total = int(count.sum())
    if total == 0:
        return None
    overall = math.fsum(count * mean) / total
    variance = (math.fsum(spread) + math.fsum(count * (mean - overall) ** 2)) / total
    return Statistics(
        total, float(low.min()), float(high.max()), overall, math.sqrt(max(variance, 0.0))
    )
