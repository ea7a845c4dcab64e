"""Inputs on the region's grid: how each is brought there, and reading it block by block."""

from __future__ import annotations

import math
import threading
from dataclasses import dataclass
from typing import Literal

import numpy as np
import rasterio
from numpy.typing import NDArray
from rasterio.crs import CRS
from rasterio.enums import Resampling
from rasterio.errors import RasterioError
from rasterio.transform import Affine
from rasterio.vrt import WarpedVRT
from rasterio.warp import transform as transform_points
from rasterio.warp import transform_bounds
from rasterio.windows import Window as RasterWindow

from saltrise.errors import BrokenInputError, InputError
from saltrise.grid import Grid, Window
from saltrise.io.mosaic import ALIGNED, Mosaic, Placed, cell_offset, intersect, same_crs
from saltrise.io.vrt import Rect

Floats = NDArray[np.float32] | NDArray[np.float64]

Method = Literal["cell for cell", "nearest", "bilinear", "average"]

MUCH_FINER = 0.5
"""A source cell under this part of a grid cell is averaged instead of interpolated."""

_KERNEL = 4
"""Source cells beyond the region that a warp may touch."""

_RESAMPLING = {
    "nearest": Resampling.nearest,
    "bilinear": Resampling.bilinear,
    "average": Resampling.average,
}


@dataclass(frozen=True)
class Direct:
    """A plain file that holds the whole region cell for cell: no virtual raster is needed.

    `corner` is the column and row in the file of the region's first cell.
    """

    path: str
    corner: tuple[int, int]
    nodata: float | None


@dataclass(frozen=True)
class Aligned:
    """One input on the region's grid.

    `vrt` is the virtual raster to open; for a method other than "cell for cell" it lies on the
    input's own grid and is warped. `offset` is the distance [cells of the grid] of the input's
    grid lines from the region's (0 when they coincide), None across CRSs or cell sizes.
    """

    mosaic: Mosaic
    grid: Grid
    method: Method
    offset: tuple[float, float] | None
    vrt: str
    direct: Direct | None = None

    def describe(self) -> str:
        """One phrase for the run's report."""
        if self.method == "cell for cell":
            dust = max(abs(v) for v in self.offset or (0.0, 0.0))
            return "cell for cell" + (f", grids {dust:.2g} cells apart" if dust > 1e-6 else "")
        if self.offset is None:
            return f"{self.method}, from another cell size, orientation or CRS"
        return f"{self.method}, grids {self.offset[0]:.3g}, {self.offset[1]:.3g} cells apart"

    def pixel(self, row: int, col: int) -> tuple[str, int, int] | None:
        """File, pixel column and row behind a cell of the region's grid, read cell for cell.

        None where no file covers the cell.
        """
        shift_col, shift_row, _ = cell_offset(self.mosaic.transform, self.grid.transform, 1, 1)
        x, y = col + round(shift_col), row + round(shift_row)
        for tile in self.mosaic.tiles:
            if intersect(tile.rect, (x, y, 1, 1)):
                return tile.file.path, x - tile.col, y - tile.row
        return None

    def needed(self, tile: Placed) -> Rect | None:
        """Cells of a tile's file that the region can need: column, row, width, height.

        None where the region needs none. A warp's kernel and curved edges are allowed for.
        """
        grid = self.grid
        if self.method == "cell for cell":
            shift_col, shift_row, _ = cell_offset(self.mosaic.transform, grid.transform, 1, 1)
            rect = (round(shift_col), round(shift_row), grid.width, grid.height)
        else:
            rect = self._warped_rect()
        common = intersect(tile.rect, rect)
        return common and (common[0] - tile.col, common[1] - tile.row, common[2], common[3])

    def _warped_rect(self) -> Rect:
        grid, mosaic = self.grid, self.mosaic
        bounds = extent(grid.transform, grid.width, grid.height)
        if not same_crs(mosaic.crs_wkt, grid.crs_wkt):
            source, target = CRS.from_wkt(grid.crs_wkt), CRS.from_wkt(mosaic.crs_wkt)
            bounds = transform_bounds(source, target, *bounds)
        a, b, c, d, e, f = mosaic.transform
        det = a * e - b * d
        corners = [(x - c, y - f) for x in bounds[::2] for y in bounds[1::2]]
        cols = [(e * x - b * y) / det for x, y in corners]
        rows = [(a * y - d * x) / det for x, y in corners]
        left, top = math.floor(min(cols)) - _KERNEL, math.floor(min(rows)) - _KERNEL
        right, bottom = math.ceil(max(cols)) + _KERNEL, math.ceil(max(rows)) + _KERNEL
        return left, top, right - left, bottom - top


def align(mosaic: Mosaic, grid: Grid, *, classes: bool) -> Aligned:
    """Decide how an input reaches the region's grid.

    Parameters
    ----------
    mosaic : Mosaic
        The input.
    grid : Grid
        The region's grid.
    classes : bool
        Class codes (never mixed: nearest) rather than a quantity (bilinear, or the average where
        the input's cells are under half a grid cell).

    Raises
    ------
    InputError
        The input lies wholly outside the region; both extents are named.
    """
    _require_overlap(mosaic, grid)
    if same_crs(mosaic.crs_wkt, grid.crs_wkt):
        col, row, worst = cell_offset(mosaic.transform, grid.transform, grid.width, grid.height)
        if worst <= ALIGNED:
            shift = (round(col), round(row))
            vrt = mosaic.vrt_on(grid.width, grid.height, grid.transform, *shift)
            apart = (col - shift[0], row - shift[1])
            return Aligned(mosaic, grid, "cell for cell", apart, vrt, _direct(mosaic, grid, *shift))
        same_cells = _same_cells(mosaic.transform, grid.transform)
        offset = (col - round(col), row - round(row)) if same_cells else None
    else:
        offset = None
    method: Method = "nearest" if classes else "bilinear"
    if not classes and relative_cell_size(mosaic, grid) < MUCH_FINER:
        method = "average"
    return Aligned(mosaic, grid, method, offset, mosaic.vrt())


def _direct(mosaic: Mosaic, grid: Grid, col: int, row: int) -> Direct | None:
    """The one file that can be read as it is; it saves the virtual raster's work on every cell."""
    tile = mosaic.tiles[0]
    file = tile.file
    corner = (col - tile.col, row - tile.row)
    inside = (
        min(corner) >= 0
        and corner[0] + grid.width <= file.width
        and corner[1] + grid.height <= file.height
    )
    plain = not file.masked and mosaic.dtype == "Float32"
    both = None not in (file.nodata, mosaic.nodata) and file.nodata != mosaic.nodata
    if len(mosaic.tiles) > 1 or not inside or not plain or both:
        return None
    return Direct(file.path, corner, file.nodata if mosaic.nodata is None else mosaic.nodata)


def _same_cells(a: tuple[float, ...], b: tuple[float, ...]) -> bool:
    size = max(abs(v) for v in (a[0], a[1], a[3], a[4]))
    return all(abs(a[i] - b[i]) <= 1e-6 * size for i in (0, 1, 3, 4))


def relative_cell_size(mosaic: Mosaic, grid: Grid) -> float:
    """Edge of an input cell over the edge of a grid cell, both as squares of equal area.

    Measured at the middle of the input, in the grid's CRS.
    """
    a, b, c, d, e, f = mosaic.transform
    col, row = mosaic.width / 2, mosaic.height / 2
    xs = [c + a * (col + i) + b * (row + j) for i, j in ((0, 0), (1, 0), (0, 1))]
    ys = [f + d * (col + i) + e * (row + j) for i, j in ((0, 0), (1, 0), (0, 1))]
    if not same_crs(mosaic.crs_wkt, grid.crs_wkt):
        source, target = CRS.from_wkt(mosaic.crs_wkt), CRS.from_wkt(grid.crs_wkt)
        xs, ys = transform_points(source, target, xs, ys)
    area = abs((xs[1] - xs[0]) * (ys[2] - ys[0]) - (xs[2] - xs[0]) * (ys[1] - ys[0]))
    ga, gb, _, gd, ge, _ = grid.transform
    return math.sqrt(area / abs(ga * ge - gb * gd))


def extent(transform: tuple[float, ...], width: int, height: int) -> tuple[float, ...]:
    """Left, bottom, right, top of a grid, rotated ones included."""
    a, b, c, d, e, f = transform
    corners = [(0, 0), (width, 0), (0, height), (width, height)]
    xs = [c + a * u + b * v for u, v in corners]
    ys = [f + d * u + e * v for u, v in corners]
    return min(xs), min(ys), max(xs), max(ys)


def _require_overlap(mosaic: Mosaic, grid: Grid) -> None:
    own = extent(mosaic.transform, mosaic.width, mosaic.height)
    there = extent(grid.transform, grid.width, grid.height)
    try:
        seen = own
        if not same_crs(mosaic.crs_wkt, grid.crs_wkt):
            source, target = CRS.from_wkt(mosaic.crs_wkt), CRS.from_wkt(grid.crs_wkt)
            seen = transform_bounds(source, target, *own)
    except RasterioError as error:
        raise InputError(
            f"its extent {_show(own)} cannot be expressed in the region's CRS: {error}"
        ) from error
    if seen[0] >= there[2] or seen[2] <= there[0] or seen[1] >= there[3] or seen[3] <= there[1]:
        raise InputError(
            f"lies wholly outside the region: its extent (left, bottom, right, top in the region's "
            f"CRS) is {_show(seen)}, the region's {_show(there)}; check both CRSs and extents"
        )


def _show(bounds: tuple[float, ...]) -> str:
    return ", ".join(f"{v:.10g}" for v in bounds)


class BlockReader:
    """Reads one aligned input by blocks; a thread has its own handle.

    A GDAL handle cannot cross threads, and opening one costs more than a block, so handles are
    kept per thread. A class because it owns them.
    """

    def __init__(self, aligned: Aligned) -> None:
        self.aligned = aligned
        self._local = threading.local()

    def __reduce__(self) -> tuple[type[BlockReader], tuple[Aligned]]:
        # Handles stay behind: another process opens its own.
        return BlockReader, (self.aligned,)

    def read(self, window: Window) -> Floats:
        """Values of one block of the region's grid, NaN where there is no value.

        float32 where that holds every value of the input exactly, else float64.

        Raises
        ------
        BrokenInputError
            GDAL cannot read a file behind it; names the input, block and GDAL's reason.
        """
        try:
            dataset = self._open()
            direct = self.aligned.direct
            col, row = (0, 0) if direct is None else direct.corner
            block = RasterWindow(window.col + col, window.row + row, window.width, window.height)
            values: Floats = dataset.read(1, window=block)
        except RasterioError as error:
            raise BrokenInputError(self._broken(window, error)) from error
        if direct is not None:
            values = values.astype(np.float32, copy=False)
            if direct.nodata is not None:
                values[values == np.float32(direct.nodata)] = np.nan
        return values

    def _open(self) -> rasterio.DatasetReader | WarpedVRT:
        if not hasattr(self._local, "dataset"):
            self._local.dataset = _open(self.aligned)
        return self._local.dataset

    def _broken(self, window: Window, error: Exception) -> str:
        reason = str(error.__cause__ or error.__context__ or error)
        files = self.aligned.mosaic.tiles
        which = files[0].file.path if len(files) == 1 else f"one of {len(files)} files"
        return (
            f"{self.aligned.mosaic.key}: {which}: cannot read cells from column {window.col}, row "
            f"{window.row} of the region's grid: {reason}"
        )


def _open(aligned: Aligned) -> rasterio.DatasetReader | WarpedVRT:
    if aligned.direct is not None:
        return rasterio.open(aligned.direct.path)
    source = rasterio.open(aligned.vrt)
    if aligned.method == "cell for cell":
        return source
    grid = aligned.grid
    extra = {}
    if aligned.method == "bilinear":
        # Without a fixed scale GDAL widens the kernel by a factor it takes from each chunk.
        extra = {"XSCALE": "1", "YSCALE": "1"}
    # One warp on the whole region's grid: a warp on a tile's own grid changes with the tile.
    return WarpedVRT(
        source,
        crs=CRS.from_wkt(grid.crs_wkt),
        transform=Affine(*grid.transform),
        width=grid.width,
        height=grid.height,
        resampling=_RESAMPLING[aligned.method],
        src_nodata=math.nan,
        nodata=math.nan,
        init_dest_nodata=True,
        tolerance=1e-4,
        **extra,
    )
