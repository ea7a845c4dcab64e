"""One tile's task: read its blocks, compute, reduce, encode, and leave one file and one record."""

from __future__ import annotations

import threading
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from saltrise.block_sums import BlockSums
from saltrise.coverage import block_cover
from saltrise.engine.findings import never_negative
from saltrise.engine.inputs import key_of
from saltrise.engine.plan import Plan
from saltrise.engine.records import ComputedTile, section, write_tile
from saltrise.engine.stop import check_stop
from saltrise.engine.survey import Range, add_ranges, block_ranges
from saltrise.errors import UnusableInputError
from saltrise.grid import Window, block_areas
from saltrise.io.align import Floats
from saltrise.io.encode import encode
from saltrise.layers import layer_of
from saltrise.pyramid import halve
from saltrise.recipe import CellResult, compute_cells
from saltrise.soil_cells import UnmappedCodeError
from saltrise.stored import Stored, store
from saltrise.zonal import ZonePartial, pack

Array = NDArray[np.float64]
StoredLayers = dict[str, Stored]

_STRIP_CELLS = 1 << 16
"""Cells computed at a time: few enough for the caches, enough that what the interpreter does
between loops weighs little."""


@dataclass
class _Gathered:
    """What a tile's blocks add up to, in the blocks' order."""

    layers: StoredLayers
    statistics: dict[str, list[Array]]
    partials: list[ZonePartial]
    counts: dict[str, int]
    ranges: dict[str, Range]


def run_tile(plan: Plan, index: int) -> int:
    """Compute one tile and make it durable; return its index.

    Parameters
    ----------
    plan : Plan
        The region, ready to compute.
    index : int
        Position of the tile in `plan.tiles()`.

    Raises
    ------
    UnusableInputError
        An input breaks, or holds what it cannot hold.
    RunError
        The tile cannot be written; the message names the folder.
    """
    window = plan.tiles()[index]
    write_tile(plan.work, plan.run, index, window, compute_tile(plan, window))
    return index


def compute_tile(plan: Plan, window: Window) -> ComputedTile:
    """Compute, reduce and encode one window of whole blocks, in memory."""
    gathered = _gather(plan, window)
    sections = {}
    for name, values in gathered.layers.items():
        stored: Stored = values
        for level in range(plan.tile_levels() + 1):
            part = section(name, level)
            sections[part] = encode(stored, layer_of(name), plan.compression, plan.grid.block)
            if level < plan.tile_levels():
                stored = halve(stored, rounded=plan.rounded)
    return ComputedTile(gathered.counts, gathered.ranges, sections, _numbers(gathered))


def _gather(plan: Plan, window: Window) -> _Gathered:
    gathered = _Gathered(
        _room(plan, (window.height, window.width)),
        {name: [] for name in plan.layers},
        [],
        {},
        {},
    )
    for block in plan.grid.blocks(window):
        check_stop()
        inputs = {role: reader.read(block) for role, reader in plan.readers.items()}
        gathered.ranges = add_ranges(gathered.ranges, _sound_ranges(plan, inputs, block))
        try:
            _add_block(plan, gathered, inputs, block, window)
        except UnmappedCodeError as error:
            raise UnusableInputError(f"soil: {error}") from error
    return gathered


_LOCAL = threading.local()


def _room(plan: Plan, shape: tuple[int, int]) -> StoredLayers:
    """Arrays for a tile's layers; a thread fills the same ones for tile after tile.

    Memory fresh from the system costs more than what is computed into it.
    """
    held: dict[Any, StoredLayers] = _LOCAL.__dict__.setdefault("room", {})
    key = (plan.layers, shape)
    if key not in held:
        held.clear()
        held[key] = {name: np.empty(shape, dtype=layer_of(name).dtype) for name in plan.layers}
    return held[key]


def _add_block(
    plan: Plan, gathered: _Gathered, inputs: dict[str, Floats], block: Window, window: Window
) -> None:
    """Compute a block by strips of rows, so that its numbers stay in the processor's cache."""
    areas = block_areas(plan.grid, block)
    extras = len(plan.recipe.extra_sums)
    sums = BlockSums(block_cover(plan.zones, block), plan.unit_m2, extras)
    top, left = block.row - window.row, block.col - window.col
    step = max(1, _STRIP_CELLS // block.width)
    for first in range(0, block.height, step):
        after = min(first + step, block.height)
        strip = {role: values[first:after] for role, values in inputs.items()}
        result = compute_cells(plan.recipe, strip, (after - first, block.width))
        _place(plan, gathered, result, (top + first, left))
        area = areas.rows(first, after).ravel()
        sums.add(first * block.width, area, result.zone_values())
    gathered.partials.append(sums.partial())


def _sound_ranges(plan: Plan, inputs: dict[str, Floats], block: Window) -> dict[str, Range]:
    found = block_ranges(inputs, plan.recipe.constants, block)
    for role, seen in found.items():
        if never_negative(role) and seen.negative is not None:
            raise UnusableInputError(f"{key_of(role)}: holds negative values")
    return found


def _place(plan: Plan, gathered: _Gathered, result: CellResult, corner: tuple[int, int]) -> None:
    """Store a strip's layers and note their moments and counts."""
    for name, layer in gathered.layers.items():
        values = result.values[name] if layer_of(name).continuous else result.hazard_class
        moments = store(values, result.valid, layer, corner, rounded=plan.rounded)
        gathered.statistics[name].append(moments)
    for reason, count in result.counts.items():
        gathered.counts[reason] = gathered.counts.get(reason, 0) + count


def _numbers(gathered: _Gathered) -> dict[str, NDArray[np.generic]]:
    numbers: dict[str, NDArray[np.generic]] = {
        f"statistics.{name}": np.stack(rows) for name, rows in gathered.statistics.items()
    }
    packed = pack(gathered.partials)
    return numbers | {f"zonal.{name}": array for name, array in packed.items()}
