"""Everything a tile's task needs, settled before the first tile and the same for all."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from saltrise.coverage import ZoneShapes
from saltrise.grid import Grid, Window
from saltrise.io.align import BlockReader
from saltrise.pyramid import level_sizes
from saltrise.recipe import Recipe


@dataclass(frozen=True)
class Plan:
    """A region ready to compute; pickles, so that any process can take a tile.

    Attributes
    ----------
    work : Path
        Folder of tiles and records, seen by every worker.
    run : str
        Name of the run, for its records.
    grid : Grid
        The region's grid.
    readers : dict of BlockReader
        Raster inputs by role.
    recipe : Recipe
        Parameters of the physics.
    zones : ZoneShapes
        Zone polygons on the grid; none where the config has no zones.
    unit_m2 : float
        Area that one count of a percentile histogram stands for [m2].
    layers : tuple of str
        Layers to write.
    compression : str
        Codec of the rasters.
    assembly : str
        "copy" or "gdal": how final files are made.
    rounded : bool
        Whether continuous layers are rounded.
    tile : int
        Edge of a tile [cells].
    """

    work: Path
    run: str
    grid: Grid
    readers: dict[str, BlockReader]
    recipe: Recipe
    zones: ZoneShapes
    unit_m2: float
    layers: tuple[str, ...]
    compression: str
    assembly: str
    rounded: bool
    tile: int

    def tile_levels(self) -> int:
        """Overview levels that a tile makes by itself: its edge halves into whole blocks."""
        blocks = self.tile // self.grid.block
        whole = (blocks & -blocks).bit_length() - 1
        needed = level_sizes(self.grid.width, self.grid.height, self.grid.block)
        return min(whole, len(needed))

    def tiles(self) -> list[Window]:
        """Windows of all tiles, row by row."""
        return list(self.grid.tiles(self.tile))
