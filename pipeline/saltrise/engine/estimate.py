"""What a run would cost, from one real sample of the region."""

from __future__ import annotations

import time
from dataclasses import dataclass

from saltrise.engine.region import Region, make_plan
from saltrise.engine.tiles import compute_tile
from saltrise.engine.workdir import Workdir
from saltrise.grid import Window

_LIBRARIES_GB = 0.35
"""Interpreter, libraries and GDAL's bounded cache."""

_BLOCK_COPIES = 40
"""Float64 arrays of one block alive at once at the peak, inputs and zone sums included."""

_ASSEMBLY = 1.5
"""Final files with overviews over tile files; and assembly's time over the tiles'."""


@dataclass(frozen=True)
class Estimate:
    """Expected cost of a run: memory at the peak, scratch and final disk [GB], time [s]."""

    tiles: int
    memory_gb: float
    scratch_gb: float
    final_gb: float
    seconds: float


def estimate_cost(region: Region) -> Estimate:
    """Expected cost of a run, by computing one block from the middle of the region."""
    plan = make_plan(region, Workdir(region.settings.output_folder))
    grid, workers = plan.grid, region.settings.workers
    blocks = list(grid.blocks())
    middle = blocks[len(blocks) // 2]
    sample = Window(middle.row, middle.col, middle.height, middle.width)
    compute_tile(plan, sample)  # opens files and fills caches, which a long run pays once
    began = time.perf_counter()
    done = compute_tile(plan, sample)
    spent = time.perf_counter() - began
    cells, sampled = grid.width * grid.height, sample.width * sample.height
    scratch = sum(len(part) for part in done.sections.values()) * cells / sampled / 1e9
    stored = sum(5 if name == "hazard_class" else 4 for name in plan.layers)
    tile_gb = min(plan.tile**2, cells) * stored * 2 / 1e9
    block_gb = grid.block**2 * 8 * _BLOCK_COPIES / 1e9
    return Estimate(
        tiles=len(plan.tiles()),
        memory_gb=_LIBRARIES_GB + workers * (tile_gb + block_gb),
        scratch_gb=scratch,
        final_gb=scratch * _ASSEMBLY,
        seconds=spent * cells / sampled / workers * (1 + _ASSEMBLY),
    )
