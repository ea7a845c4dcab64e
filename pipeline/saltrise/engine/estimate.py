"""What a run would cost, from a sample of real blocks of the region."""

from __future__ import annotations

import pickle
import shutil
import time
from dataclasses import dataclass

from saltrise.engine.plan import Plan
from saltrise.engine.tiles import compute_tile
from saltrise.errors import InputError
from saltrise.grid import Window

_LIBRARIES_GB = 0.35
"""Interpreter, libraries and GDAL's bounded cache."""

_BLOCK_COPIES = 40
"""Float64 arrays of one block alive at once at the peak, inputs and zone sums included."""

_OVERVIEWS = 1.02
"""Final files over tile files: framing of blocks and the coarsest levels."""

_ASSEMBLY = 0.2
"""Time of everything after the tiles over the tiles' own."""

_SAMPLES = 5

_PLAIN_BYTES = 4 * 1.4 * 2
"""Bytes a cell and layer without compression: float32, overviews, tiles and final file."""


@dataclass(frozen=True)
class Estimate:
    """Expected cost of a run: memory at the peak, scratch and final disk [GB], time [s]."""

    tiles: int
    memory_gb: float
    scratch_gb: float
    final_gb: float
    seconds: float


def estimate_cost(plan: Plan, workers: int) -> Estimate:
    """Expected cost of a run, by computing blocks here and there in the region."""
    grid = plan.grid
    blocks = list(grid.blocks())
    count = min(_SAMPLES, len(blocks))
    chosen = [blocks[(2 * k + 1) * len(blocks) // (2 * count)] for k in range(count)]
    compute_tile(plan, _window(chosen[0]))  # opens files and fills caches, which a run pays once
    spent, written, sampled = 0.0, 0, 0
    for block in chosen:
        began = time.perf_counter()
        done = compute_tile(plan, _window(block))
        spent += time.perf_counter() - began
        written += sum(len(part) for part in done.sections.values())
        sampled += block.width * block.height
    cells = grid.width * grid.height
    scratch = written * cells / sampled / 1e9
    stored = sum(5 if name == "hazard_class" else 4 for name in plan.layers)
    tile_gb = min(plan.tile**2, cells) * stored * 2 / 1e9
    block_gb = grid.block**2 * 8 * _BLOCK_COPIES / 1e9
    curves_gb = len(pickle.dumps(plan.recipe, protocol=5)) / 1e9
    return Estimate(
        tiles=len(plan.tiles()),
        memory_gb=_LIBRARIES_GB + curves_gb + workers * (tile_gb + block_gb),
        scratch_gb=scratch,
        final_gb=scratch * _OVERVIEWS,
        seconds=spent * cells / sampled / workers * (1 + _ASSEMBLY),
    )


def _window(block: Window) -> Window:
    return Window(block.row, block.col, block.height, block.width)


def require_room(plan: Plan, workers: int) -> None:
    """Refuse a run that the disk cannot hold.

    Parameters
    ----------
    plan : Plan
        The region; what is in its folder already counts as paid.
    workers : int
        Threads or processes at work.

    Raises
    ------
    InputError
        Tiles and final files together need more than is free; names both.
    """
    folder = plan.work.parent
    there = folder
    while not there.exists():
        there = there.parent
    free = shutil.disk_usage(there).free / 1e9
    cells = plan.grid.width * plan.grid.height
    if cells * len(plan.layers) * _PLAIN_BYTES / 1e9 < free:
        return  # room enough even if nothing compressed: no need for a sample
    estimate = estimate_cost(plan, workers)
    held = sum(file.stat().st_size for file in folder.rglob("*") if file.is_file()) / 1e9
    need = estimate.scratch_gb + estimate.final_gb - held
    if need > free:
        raise InputError(
            f"{folder}: the run needs about {need:.3g} GB of disk for tiles and final layers, "
            f"{free:.3g} GB are free; free some, name another output.folder or fewer output.layers"
        )
