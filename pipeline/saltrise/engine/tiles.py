"""One tile's task: read its blocks, compute, reduce, encode, and leave one file and one record."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from saltrise.coverage import block_cover
from saltrise.engine.plan import Plan
from saltrise.engine.stop import check_stop
from saltrise.engine.workdir import section, write_tile
from saltrise.grid import Window, cell_areas
from saltrise.io.blocks import block_places
from saltrise.io.encode import encode, store
from saltrise.layers import LAYERS
from saltrise.pyramid import Stored, halve
from saltrise.recipe import BlockResult, compute_block
from saltrise.zonal import ZonePartial, block_partial, pack

Array = NDArray[np.float64]


@dataclass
class _Gathered:
    """What a tile's blocks add up to, in the blocks' order."""

    layers: dict[str, NDArray[np.float32] | NDArray[np.uint8]]
    statistics: dict[str, list[Array]]
    partials: list[ZonePartial]
    counts: dict[str, int]


@dataclass(frozen=True)
class ComputedTile:
    """A tile ready to be written: cell counts, encoded layers by name, sums by name."""

    counts: dict[str, int]
    sections: dict[str, bytes]
    numbers: dict[str, NDArray[np.generic]]


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
    RunError
        An input breaks or the tile cannot be written; the message names file or folder.
    """
    window = plan.tiles()[index]
    done = compute_tile(plan, window)
    write_tile(plan.work, index, window, done.counts, done.sections, done.numbers)
    return index


def compute_tile(plan: Plan, window: Window) -> ComputedTile:
    """Compute, reduce and encode one window of whole blocks, in memory."""
    gathered = _gather(plan, window)
    sections, places = {}, {}
    for name, values in gathered.layers.items():
        stored: Stored = values
        for level in range(plan.tile_levels() + 1):
            part = section(name, level)
            sections[part] = encode(stored, LAYERS[name], plan.compression, plan.grid.block)
            places[f"blocks.{part}"] = block_places(sections[part])
            stored = halve(stored, rounded=plan.rounded)
    return ComputedTile(gathered.counts, sections, _numbers(gathered) | places)


def _gather(plan: Plan, window: Window) -> _Gathered:
    shape = (window.height, window.width)
    gathered = _Gathered(
        {name: np.empty(shape, dtype=LAYERS[name].dtype) for name in plan.layers},
        {name: [] for name in plan.layers},
        [],
        {},
    )
    for block in plan.grid.blocks(window):
        check_stop()
        inputs = {role: reader.read(block) for role, reader in plan.readers.items()}
        result = compute_block(plan.recipe, inputs, (block.height, block.width))
        for name, count in result.counts.items():
            gathered.counts[name] = gathered.counts.get(name, 0) + count
        _place(plan, gathered, result, block, window)
        cover = block_cover(plan.zones, block)
        areas = cell_areas(plan.grid, block)
        gathered.partials.append(block_partial(cover, areas, result.zone_values(), plan.unit_m2))
    return gathered


def _place(
    plan: Plan, gathered: _Gathered, result: BlockResult, block: Window, window: Window
) -> None:
    top, left = block.row - window.row, block.col - window.col
    here = (slice(top, top + block.height), slice(left, left + block.width))
    for name, target in gathered.layers.items():
        if LAYERS[name].continuous:
            stored = store(result.values[name], result.valid, rounded=plan.rounded)
            gathered.statistics[name].append(_moments(stored[result.valid]))
            target[here] = stored
        else:
            target[here] = result.hazard_class
            gathered.statistics[name].append(_moments(result.hazard_class[result.valid]))


def _moments(stored: NDArray[np.float32] | NDArray[np.uint8]) -> Array:
    """Count, least, greatest, mean and sum of squared deviations of one block's valid cells."""
    if stored.size == 0:
        return np.array([0.0, np.inf, -np.inf, 0.0, 0.0])
    wide = stored.astype(np.float64)
    mean = wide.mean()
    wide -= mean
    spread = np.sum(np.square(wide, out=wide))
    return np.array([stored.size, stored.min(), stored.max(), mean, spread])


def _numbers(gathered: _Gathered) -> dict[str, NDArray[np.generic]]:
    numbers: dict[str, NDArray[np.generic]] = {
        f"statistics.{name}": np.stack(rows) for name, rows in gathered.statistics.items()
    }
    packed = pack(gathered.partials)
    return numbers | {f"zonal.{name}": array for name, array in packed.items()}
