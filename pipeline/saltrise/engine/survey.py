"""Look at every cell of every input before any tile runs: ranges, codes, faults."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from functools import partial

import numpy as np
from numpy.typing import NDArray

from saltrise.engine.inputs import Inputs
from saltrise.engine.stop import check_stop
from saltrise.grid import Window
from saltrise.io.align import BlockReader

Each = Callable[[Callable[[Window], "BlockScan"], Iterable[Window]], Iterable["BlockScan"]]
"""Applies a function to windows, in any order and on any threads."""


@dataclass(frozen=True)
class Sighting:
    """How often something was seen, and the row and column of the first cell [grid]."""

    count: int
    row: int
    col: int

    def __add__(self, other: Sighting) -> Sighting:
        first = min((self.row, self.col), (other.row, other.col))
        return Sighting(self.count + other.count, *first)


@dataclass(frozen=True)
class Range:
    """What one quantity holds on the region's grid, in the config's unit."""

    valid: int
    nodata: int
    low: float
    high: float
    negative: Sighting | None

    def __add__(self, other: Range) -> Range:
        return Range(
            self.valid + other.valid,
            self.nodata + other.nodata,
            min(self.low, other.low),
            max(self.high, other.high),
            _both(self.negative, other.negative),
        )


@dataclass(frozen=True)
class BlockScan:
    """What one or more blocks of all inputs hold."""

    ranges: dict[str, Range]
    codes: dict[float, Sighting]
    complete: int
    """Cells where every input has a value."""

    def __add__(self, other: BlockScan) -> BlockScan:
        ranges = dict(self.ranges)
        for role, found in other.ranges.items():
            ranges[role] = ranges[role] + found if role in ranges else found
        codes = dict(self.codes)
        for code, seen in other.codes.items():
            codes[code] = codes[code] + seen if code in codes else seen
        return BlockScan(ranges, codes, self.complete + other.complete)


def _both(a: Sighting | None, b: Sighting | None) -> Sighting | None:
    return a + b if a is not None and b is not None else a or b


def scan(inputs: Inputs, tile: int, each: Each) -> BlockScan:
    """Scan all inputs on the region's grid.

    Parameters
    ----------
    inputs : Inputs
        The opened region.
    tile : int
        Edge of the windows handed to `each` [cells].
    each : Each
        Runs the scan over windows, on as many threads as it likes.

    Returns
    -------
    BlockScan
        Sums over the region; independent of tile and threads.

    Raises
    ------
    RunError
        A file breaks while it is read.
    """
    readers = {role: BlockReader(aligned) for role, aligned in inputs.rasters.items()}
    total = BlockScan({}, {}, 0)
    for found in each(partial(_scan_window, inputs, readers), inputs.grid.tiles(tile)):
        total = total + found
    return total


def _scan_window(inputs: Inputs, readers: dict[str, BlockReader], window: Window) -> BlockScan:
    total = BlockScan({}, {}, 0)
    for block in inputs.grid.blocks(window):
        check_stop()
        values = {role: reader.read(block) for role, reader in readers.items()}
        total = total + _scan_block(values, inputs.constants, block)
    return total


def _scan_block(
    values: dict[str, NDArray[np.float64]], constants: dict[str, float], block: Window
) -> BlockScan:
    complete = np.ones((block.height, block.width), dtype=bool)
    for read in values.values():
        complete &= np.isfinite(read)
    codes = {}
    if "texture" in values and np.isfinite(values["texture"]).any():
        codes = _codes(values["texture"], block)
    if "ground" in values or "elevation" in values:
        ground, water = (
            values[role] if role in values else np.full(complete.shape, constants[role])
            for role in ("ground", "elevation")
        )
        values = values | {"depth": ground - water}
    ranges = {role: _range(read, block) for role, read in values.items()}
    return BlockScan(ranges, codes, int(complete.sum()))


def _range(values: NDArray[np.float64], block: Window) -> Range:
    finite = np.isfinite(values)
    valid = int(finite.sum())
    if valid == 0:
        return Range(0, values.size, np.inf, -np.inf, None)
    low = float(np.min(values, where=finite, initial=np.inf))
    high = float(np.max(values, where=finite, initial=-np.inf))
    negative = _sighting(finite & (values < 0), block) if low < 0 else None
    return Range(valid, values.size - valid, low, high, negative)


def _sighting(found: NDArray[np.bool_], block: Window) -> Sighting:
    row, col = divmod(int(np.argmax(found)), block.width)
    return Sighting(int(found.sum()), block.row + row, block.col + col)


def _codes(values: NDArray[np.float64], block: Window) -> dict[float, Sighting]:
    flat = values.ravel()
    whole = np.isfinite(flat)
    if not whole.all():
        flat = flat[whole]
    seen = _distinct(flat)
    codes = {}
    for code in seen:
        codes[float(code)] = _sighting(values == code, block)
    return codes


def _distinct(flat: NDArray[np.float64]) -> NDArray[np.float64]:
    low, high = flat.min(), flat.max()
    if low >= 0 and high < 65536:
        # Counting beats sorting by ten for the small codes that class maps have.
        whole = flat.astype(np.int64)
        if np.array_equal(whole, flat):
            return np.flatnonzero(np.bincount(whole)).astype(np.float64)
    return np.unique(flat)
