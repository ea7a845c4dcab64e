"""Look at inputs before any tile runs: which codes occur, whether anything can be computed.

`scan` looks at every cell of every input, which is as much work as reading them for a run. A run
therefore looks at all texture codes and, of the rest, only until one cell has every input; its
tiles tell what else the inputs hold, and whatever is found amiss there is settled by a scan.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from functools import partial
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from saltrise.engine.inputs import FRACTIONS, Inputs
from saltrise.engine.stop import check_stop
from saltrise.grid import Window
from saltrise.io.align import BlockReader, Floats
from saltrise.kernels.survey import extent, tally
from saltrise.physics.texture import class_of_fractions
from saltrise.soil_cells import fractions

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
    """What one quantity holds on the region's grid, in the config's unit; None where nothing."""

    valid: int
    nodata: int
    low: float | None
    high: float | None
    negative: Sighting | None

    def __add__(self, other: Range) -> Range:
        return Range(
            self.valid + other.valid,
            self.nodata + other.nodata,
            _either(min, self.low, other.low),
            _either(max, self.high, other.high),
            _both(self.negative, other.negative),
        )


@dataclass(frozen=True)
class BlockScan:
    """What one or more blocks of all inputs hold."""

    ranges: dict[str, Range]
    codes: dict[tuple[str, float], Sighting]
    """Texture codes by the ending of their layer's roles and the code."""
    complete: int
    """Cells where every input has a value."""
    wrong_fractions: dict[str, Sighting] = field(default_factory=dict)
    """Cells whose sand, clay and silt cannot be, by the ending of their layer's roles."""
    stacks: dict[tuple[int, float], int] = field(default_factory=dict)
    """Cells by key of their layers' classes and depth of the root zone, where it tells stacks
    apart (else 0)."""

    def __add__(self, other: BlockScan) -> BlockScan:
        stacks = dict(self.stacks)
        for stack, count in other.stacks.items():
            stacks[stack] = stacks.get(stack, 0) + count
        return BlockScan(
            add_ranges(self.ranges, other.ranges),
            _added(self.codes, other.codes),
            self.complete + other.complete,
            _added(self.wrong_fractions, other.wrong_fractions),
            stacks,
        )


_Key = TypeVar("_Key")


def _added(one: dict[_Key, Sighting], other: dict[_Key, Sighting]) -> dict[_Key, Sighting]:
    total = dict(one)
    for key, seen in other.items():
        total[key] = total[key] + seen if key in total else seen
    return total


def add_ranges(one: dict[str, Range], other: dict[str, Range]) -> dict[str, Range]:
    """Ranges of two parts of a region together."""
    total = dict(one)
    for role, found in other.items():
        total[role] = total[role] + found if role in total else found
    return total


def _either(
    pick: Callable[[float, float], float], a: float | None, b: float | None
) -> float | None:
    if a is None or b is None:
        return b if a is None else a
    return pick(a, b)


def _both(a: Sighting | None, b: Sighting | None) -> Sighting | None:
    return a + b if a is not None and b is not None else a or b


def scan(inputs: Inputs, tile: int, each: Each, roles: Iterable[str] | None = None) -> BlockScan:
    """Scan inputs on the region's grid.

    Parameters
    ----------
    inputs : Inputs
        The opened region.
    tile : int
        Edge of the windows handed to `each` [cells].
    each : Each
        Runs the scan over windows, on as many threads as it likes.
    roles : iterable of str, optional
        Inputs to scan; all unless given.

    Returns
    -------
    BlockScan
        Sums over the region; independent of tile and threads.

    Raises
    ------
    BrokenInputError
        A file breaks while it is read.
    """
    readers = _readers(inputs, roles)
    total = BlockScan({}, {}, 0)
    for found in each(partial(_scan_window, inputs, readers), inputs.grid.tiles(tile)):
        total = total + found
    return total


def first_look(inputs: Inputs) -> BlockScan:
    """Scan blocks here and there until every input has a value and some cell has all.

    Raises
    ------
    BrokenInputError
        A file breaks while it is read.
    """
    readers, blocks = _readers(inputs, None), list(inputs.grid.blocks())
    total = BlockScan({}, {}, 0)
    for position in _spread(len(blocks)):
        total = total + _scan_window(inputs, readers, blocks[position])
        if total.complete and all(found.valid for found in total.ranges.values()):
            break
    return total


def _spread(count: int) -> Iterable[int]:
    """All numbers below `count`, neighbours far apart: steps of the golden section."""
    step = max(1, round(count * 0.618))
    while math.gcd(step, count) != 1:
        step += 1
    return (position * step % count for position in range(count))


def _readers(inputs: Inputs, roles: Iterable[str] | None) -> dict[str, BlockReader]:
    wanted = set(inputs.rasters if roles is None else roles)
    return {r: BlockReader(aligned) for r, aligned in inputs.rasters.items() if r in wanted}


def _scan_window(inputs: Inputs, readers: dict[str, BlockReader], window: Window) -> BlockScan:
    total = BlockScan({}, {}, 0)
    for block in inputs.grid.blocks(window):
        check_stop()
        values = {role: reader.read(block) for role, reader in readers.items()}
        total = total + _scan_block(values, inputs, block)
    return total


def block_ranges(
    values: dict[str, Floats], constants: dict[str, float], block: Window
) -> dict[str, Range]:
    """What each input, and depth where it is a difference, holds in one block."""
    if "ground" in values or "elevation" in values:
        shape = (block.height, block.width)
        ground, water = (
            values[role] if role in values else np.full(shape, constants[role])
            for role in ("ground", "elevation")
        )
        values = values | {"depth": ground.astype(np.float64) - water}
    return {role: _range(read, block) for role, read in values.items()}


def _scan_block(values: dict[str, Floats], inputs: Inputs, block: Window) -> BlockScan:
    complete = np.ones((block.height, block.width), dtype=bool)
    for read in values.values():
        complete &= np.isfinite(read)
    codes: dict[tuple[str, float], Sighting] = {}
    wrong: dict[str, Sighting] = {}
    textures = []
    for end in inputs.layers:
        texture, bad = _texture(values, inputs, end, block)
        if bad is not None and bad.any():
            wrong[end] = _sighting(bad, block)
        if texture is None:
            continue
        if f"texture{end}" not in inputs.constants and np.isfinite(texture).any():
            codes |= {(end, code): seen for code, seen in _codes(texture, block).items()}
        if inputs.stacked:
            textures.append(texture)
    ranges = block_ranges(values, inputs.constants, block)
    stacks = {}
    if len(textures) == len(inputs.layers) > 1:
        stacks = _stacks(inputs.codes.stacks(textures)[0], values.get("root_depth"))
    return BlockScan(ranges, codes, int(complete.sum()), wrong, stacks)


def _texture(
    values: dict[str, Floats], inputs: Inputs, end: str, block: Window
) -> tuple[Floats | NDArray[np.float64] | None, NDArray[np.bool_] | None]:
    """Texture codes of a layer, and where its fractions cannot be; None for what is not read."""
    role, constants = f"texture{end}", inputs.constants
    if role in values:
        return values[role], None
    shape = (block.height, block.width)
    if role in constants:
        return (np.full(shape, constants[role]) if inputs.stacked else None), None
    given: dict[str, Floats | NDArray[np.float64]] = {
        r: values[r] if r in values else np.full(shape, constants[r])
        for r in (f"{name}{end}" for name in FRACTIONS)
        if r in values or r in constants
    }
    if not given or (not inputs.stacked and not given.keys() & values.keys()):
        return None, None
    return class_of_fractions(fractions(given, end), inputs.fraction_divisor)


def _stacks(key: NDArray[np.int64], root: Floats | None) -> dict[tuple[int, float], int]:
    """How many cells each stack has; a stack without a root depth counts for nothing."""
    if root is None:
        if int(key.max()) < _FEW_KEYS:
            counts = np.bincount(key.ravel())
            return {(int(k), 0.0): int(counts[k]) for k in np.flatnonzero(counts)}
        keys, counts = np.unique(key, return_counts=True)
        return {(int(k), 0.0): int(n) for k, n in zip(keys, counts, strict=True)}
    found: dict[tuple[int, float], int] = {}
    for depth in np.unique(root[np.isfinite(root)]):
        keys, counts = np.unique(key[root == depth], return_counts=True)
        found |= {(int(k), float(depth)): int(n) for k, n in zip(keys, counts, strict=True)}
        if len(found) > MANY_STACKS:
            break
    return found


_FEW_KEYS = 1 << 18
"""Keys that are counted rather than sorted."""

MANY_STACKS = 200_000
"""A block with more stacks than this is told apart no further: far too many for any run."""


def _range(values: Floats, block: Window) -> Range:
    valid, low, high, negative, first = extent(values)
    if valid == 0:
        return Range(0, values.size, None, None, None)
    row, col = divmod(first, block.width)
    below = Sighting(negative, block.row + row, block.col + col) if negative else None
    return Range(valid, values.size - valid, low, high, below)


def _sighting(found: NDArray[np.bool_], block: Window) -> Sighting:
    row, col = divmod(int(np.argmax(found)), block.width)
    return Sighting(int(found.sum()), block.row + row, block.col + col)


def _codes(values: Floats, block: Window) -> dict[float, Sighting]:
    flat = values.ravel()
    codes, first, counts = _distinct(flat)
    return {
        float(code): Sighting(int(n), block.row + at // block.width, block.col + at % block.width)
        for code, at, n in zip(codes.tolist(), first.tolist(), counts.tolist(), strict=True)
    }


def _distinct(
    flat: Floats,
) -> tuple[NDArray[np.float64], NDArray[np.int64], NDArray[np.int64]]:
    """Distinct numbers that are not NaN, where each comes first, and how often it comes."""
    counts, first = np.zeros(_FEW_CODES, dtype=np.int64), np.zeros(_FEW_CODES, dtype=np.int64)
    # Counting beats sorting by far for the small codes that class maps have.
    if tally(flat, counts, first):
        few = np.flatnonzero(counts)
        return few.astype(np.float64), first[few], counts[few]
    seen = np.flatnonzero(~np.isnan(flat))
    codes, at, counts = np.unique(flat[seen], return_index=True, return_counts=True)
    return codes.astype(np.float64), seen[at].astype(np.int64), counts.astype(np.int64)


_FEW_CODES = 4096
