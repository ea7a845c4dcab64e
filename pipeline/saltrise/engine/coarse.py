"""Overview levels coarser than a tile can make: from stored values, strip by strip."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import cast

import numpy as np
from numpy.typing import NDArray

from saltrise.engine.plan import Plan
from saltrise.engine.records import Record, section, section_path
from saltrise.engine.stop import check_stop
from saltrise.grid import Window
from saltrise.io.blocks import Level, block_places
from saltrise.io.durable import append
from saltrise.io.encode import encode
from saltrise.io.strips import read_strips
from saltrise.layers import Layer
from saltrise.pyramid import halve, level_sizes
from saltrise.stored import Stored


def coarse_levels(plan: Plan, records: list[Record], layer: Layer) -> list[Level]:
    """Levels beyond those that tiles hold, finest first.

    Memory holds two strips of block rows a level, whatever the region's height; compressed
    blocks go to scratch files in the run's folder.
    """
    grid = plan.grid
    held = plan.tile_levels()
    sizes = [(grid.width, grid.height), *level_sizes(grid.width, grid.height, grid.block)]
    if held == len(sizes) - 1:
        return []
    spools = [_Spool(plan, layer, level, *size) for level, size in enumerate(sizes) if level > held]
    for strip in _held_strips(plan, records, layer, held, sizes[held]):
        check_stop()
        spools[0].take(strip, spools[1:])
    spools[0].close(spools[1:])
    return [spool.level() for spool in spools]


def _held_strips(
    plan: Plan, records: list[Record], layer: Layer, level: int, size: tuple[int, int]
) -> Iterator[Stored]:
    tiles = []
    for record in records:
        row, col, height, width = (-(-v // 2**level) for v in record.window)
        path = section_path(plan.work, record, section(layer.name, level))
        tiles.append((path, Window(row, col, height, width)))
    return read_strips(tiles, layer, *size, 2 * plan.grid.block)


class _Spool:
    """One coarse level under way: strips come in, blocks go out, the next level is fed.

    A class because each level holds a half strip that waits for its other half.
    """

    def __init__(self, plan: Plan, layer: Layer, level: int, width: int, height: int) -> None:
        self._plan, self._layer = plan, layer
        self._size = (width, height)
        self._path = plan.work / "coarse" / f"{section(layer.name, level)}.bin"
        self._path.parent.mkdir(parents=True, exist_ok=True)
        self._path.unlink(missing_ok=True)
        self._places: list[NDArray[np.int64]] = []
        self._written = 0
        self._waiting: list[Stored] = []

    def take(self, finer: Stored, coarser: list[_Spool]) -> None:
        """Halve a strip of the finer level, keep its blocks and pass it on in pairs."""
        strip = halve(finer, rounded=self._plan.rounded)
        grid = self._plan.grid
        encoded = encode(strip, self._layer, self._plan.compression, grid.block)
        places = block_places(encoded)
        places[:, 0] += self._written
        self._places.append(places)
        self._written += append(self._path, encoded)
        if coarser:
            self._waiting.append(strip)
            if len(self._waiting) == 2:
                pair = cast(Stored, np.vstack(self._waiting))
                coarser[0].take(pair, coarser[1:])
                self._waiting = []

    def close(self, coarser: list[_Spool]) -> None:
        """Pass on a last strip that has no partner."""
        if coarser:
            if self._waiting:
                coarser[0].take(self._waiting[0], coarser[1:])
            coarser[0].close(coarser[1:])

    def level(self) -> Level:
        """The whole level."""
        places = np.concatenate(self._places)
        paths: list[Path] = [self._path]
        nowhere = np.zeros(len(places), dtype=np.int64)
        return Level(*self._size, paths, nowhere, places[:, 0], places[:, 1])
