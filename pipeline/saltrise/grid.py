"""The region's grid: cells, blocks, tiles and the true area of each cell."""

from __future__ import annotations

import math
import threading
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
import pyproj
from numpy.typing import NDArray

from saltrise.errors import InputError
from saltrise.kernels.sums import areas

Floats = NDArray[np.float64]
_Local = Callable[[Floats, Floats], tuple[Floats, Floats]]

_NODES = 5
"""Chebyshev points an edge of a block on which the areal scale is evaluated."""

_STEP_M = 1000.0
"""Step of the differences that give the projection's Jacobian [m]."""


@dataclass(frozen=True)
class Window:
    """A rectangle of cells: first row and column, rows and columns."""

    row: int
    col: int
    height: int
    width: int


@dataclass(frozen=True)
class Grid:
    """Cells of a region.

    `transform` holds the affine's a, b, c, d, e, f (x = a col + b row + c, y = d col + e row + f);
    rotated and south-up grids are allowed. `block` is the edge of the unit of arithmetic [cells];
    blocks are anchored at the grid's origin.
    """

    crs_wkt: str
    transform: tuple[float, float, float, float, float, float]
    width: int
    height: int
    block: int = 512

    @property
    def cell_area(self) -> float:
        """Area of a cell in the grid's own plane [CRS units squared]."""
        a, b, _, d, e, _ = self.transform
        return abs(a * e - b * d)

    def blocks(self, window: Window | None = None) -> Iterator[Window]:
        """Blocks of the grid, or those that begin inside a window, row by row."""
        inside = window or Window(0, 0, self.height, self.width)
        return self._cut(inside, self.block)

    def block_at(self, row: int, col: int) -> Window:
        """The block that holds a cell."""
        top, left = row // self.block * self.block, col // self.block * self.block
        return next(self._cut(Window(top, left, self.block, self.block), self.block))

    def tiles(self, edge: int) -> Iterator[Window]:
        """Tiles of `edge` cells (a multiple of the block), row by row."""
        return self._cut(Window(0, 0, self.height, self.width), edge)

    def _cut(self, inside: Window, edge: int) -> Iterator[Window]:
        bottom = min(inside.row + inside.height, self.height)
        right = min(inside.col + inside.width, self.width)
        for row in range(inside.row, bottom, edge):
            for col in range(inside.col, right, edge):
                yield Window(row, col, min(edge, bottom - row), min(edge, right - col))

    def xy(self, row: float, col: float) -> tuple[float, float]:
        """Coordinates of the centre of a cell."""
        return self.corner(row + 0.5, col + 0.5)

    def corner(self, row: float, col: float) -> tuple[float, float]:
        """Coordinates of a point given in cells from the grid's first corner."""
        a, b, c, d, e, f = self.transform
        return a * col + b * row + c, d * col + e * row + f

    def rowcol(self, x: float, y: float) -> tuple[int, int]:
        """Row and column of the cell that holds a point; may lie outside the grid."""
        a, b, c, d, e, f = self.transform
        det = a * e - b * d
        col = (e * (x - c) - b * (y - f)) / det
        row = (a * (y - f) - d * (x - c)) / det
        return math.floor(row), math.floor(col)

    def place(self) -> str:
        """Transform and size in full."""
        return f"{self.transform} {self.width} x {self.height}"

    def describe(self) -> str:
        """Size, cell and CRS in one phrase."""
        a, b, _, d, e, _ = self.transform
        crs = pyproj.CRS.from_wkt(self.crs_wkt)
        unit = crs.axis_info[0].unit_name if crs.axis_info else "unit"
        size = f"{math.hypot(a, d):.6g} x {math.hypot(b, e):.6g} {unit}"
        cells = f"{self.width} x {self.height} = {self.width * self.height:,} cells"
        return f"{cells} of {size}, {crs.name}"


@dataclass(frozen=True)
class BlockAreas:
    """True areas of a block's cells [m2]: `down` (rows, nodes) times `across` (nodes, columns)."""

    down: Floats
    across: Floats

    def rows(self, first: int, after: int) -> Floats:
        """Areas of rows `first` to before `after`: float64 (rows, columns)."""
        area = np.empty((after - first, self.across.shape[1]))
        areas(self.down[first:after], self.across, area)
        return area


def block_areas(grid: Grid, window: Window) -> BlockAreas:
    """True areas of a block's cells on the ellipsoid of the grid's CRS.

    Parameters
    ----------
    grid : Grid
        The region's grid.
    window : Window
        One block of it.

    Returns
    -------
    BlockAreas
        They depend on grid and block only.

    Raises
    ------
    InputError
        The grid reaches beyond where its projection is defined.

    Notes
    -----
    A north-up geographic grid takes the closed form of the zone between two parallels (Snyder
    1987, USGS PP 1395, eq. 3-12 for the authalic q). Any other grid takes the plane area times
    the areal scale from the Jacobian to longitude and latitude and the radii of curvature M and
    N, evaluated at 5 x 5 points of the block and interpolated by a polynomial.
    """
    crs = _crs(grid.crs_wkt)
    _, b, _, d, _, _ = grid.transform
    if crs.is_geographic and b == 0 and d == 0:
        rows = _geographic_rows(grid, window, crs)
        return BlockAreas(rows[:, np.newaxis], np.ones((1, window.width)))
    # The full block even at a ragged edge: its points must not depend on the grid's size.
    nodes = _chebyshev(grid.block)
    row, col = np.meshgrid(window.row + nodes, window.col + nodes, indexing="ij")
    a, b, c, d, e, f = grid.transform
    scale = _areal_scale(crs, a * col + b * row + c, d * col + e * row + f)
    inside = (row <= grid.height) & (col <= grid.width)
    if not np.all(np.isfinite(scale[inside])):
        raise InputError(
            f"the grid reaches beyond where its projection ({crs.name}) is defined, near row "
            f"{window.row}, column {window.col}; cut it or use another CRS"
        )
    if not np.all(np.isfinite(scale)):
        scale = np.where(np.isfinite(scale), scale, np.nanmean(scale))
    weights = _interpolation(grid.block)
    across = _weighted_sum(weights[: window.width], grid.cell_area * scale.T)
    return BlockAreas(weights[: window.height], np.ascontiguousarray(across.T))


def cell_areas(grid: Grid, window: Window) -> Floats:
    """All of `block_areas` as one float64 array (rows, columns) [m2]."""
    return block_areas(grid, window).rows(0, window.height)


def _weighted_sum(weights: Floats, values: Floats) -> Floats:
    # Not a matrix product: a library's blocking must not decide the last bits.
    total: Floats = weights[:, 0, np.newaxis] * values[0]
    for k in range(1, len(values)):
        total += weights[:, k, np.newaxis] * values[k]
    return total


def _chebyshev(block: int) -> Floats:
    angles = np.pi * np.arange(_NODES) / (_NODES - 1)
    nodes: Floats = block * (1 - np.cos(angles)) / 2
    return nodes


def _interpolation(block: int) -> Floats:
    """Weights (cells, nodes) that carry node values to cell centres (Lagrange)."""
    nodes, centres = _chebyshev(block), np.arange(block) + 0.5
    weights = np.ones((block, _NODES))
    for k in range(_NODES):
        for j in range(_NODES):
            if j != k:
                weights[:, k] *= (centres - nodes[j]) / (nodes[k] - nodes[j])
    return weights


_LOCAL = threading.local()


def _crs(wkt: str) -> pyproj.CRS:
    # PROJ objects must not be shared between threads.
    cache: dict[str, pyproj.CRS] = _LOCAL.__dict__.setdefault("crs", {})
    if wkt not in cache:
        cache[wkt] = pyproj.CRS.from_wkt(wkt)
    return cache[wkt]


def _to_degrees(crs: pyproj.CRS) -> pyproj.Transformer:
    cache: dict[str, pyproj.Transformer] = _LOCAL.__dict__.setdefault("degrees", {})
    key = crs.to_wkt()
    if key not in cache:
        cache[key] = pyproj.Transformer.from_crs(crs, crs.geodetic_crs, always_xy=True)
    return cache[key]


def ellipsoid(crs: pyproj.CRS) -> tuple[float, float]:
    """Semi-major axis [m] and squared eccentricity of a CRS's ellipsoid."""
    geod = crs.get_geod()
    if geod is None:
        raise InputError(
            f"the CRS {crs.name!r} has no ellipsoid; use a geographic or projected one"
        )
    return float(geod.a), float(geod.es)


def _geographic_rows(grid: Grid, window: Window, crs: pyproj.CRS) -> Floats:
    radius, squared = ellipsoid(crs)
    to_radians = crs.axis_info[0].unit_conversion_factor
    a, _, _, _, e, f = grid.transform
    edges = (f + e * (window.row + np.arange(window.height + 1))) * to_radians
    if np.any(np.abs(edges) > np.pi / 2 + 1e-9):
        raise InputError(
            f"the grid reaches latitude {np.degrees(np.abs(edges).max()):.6g} degrees, beyond a "
            "pole; cut it"
        )
    step = abs(a) * to_radians
    return radius**2 * step / 2 * np.abs(np.diff(_authalic_q(np.sin(edges), squared)))


def _authalic_q(sine: Floats, squared: float) -> Floats:
    if squared == 0:
        return 2 * sine
    root = math.sqrt(squared)
    q: Floats = (1 - squared) * (sine / (1 - squared * sine**2) + np.arctanh(root * sine) / root)
    return q


def _areal_scale(crs: pyproj.CRS, x: Floats, y: Floats) -> Floats:
    """True area over plane area [m2 per CRS unit squared] at points."""
    radius, squared = ellipsoid(crs)
    step = _STEP_M / (crs.axis_info[0].unit_conversion_factor or 1.0)
    if crs.is_geographic:
        step = 1e-2
    lon_x, lat_x = _derivative(crs, x, y, step, 0.0)
    lon_y, lat_y = _derivative(crs, x, y, 0.0, step)
    _, latitude = _degrees(crs, x, y)
    sine = np.sin(latitude)
    bend = 1 - squared * sine**2
    meridian, normal = radius * (1 - squared) / bend**1.5, radius / np.sqrt(bend)
    jacobian = np.abs(lon_x * lat_y - lon_y * lat_x)
    scale: Floats = jacobian * meridian * normal * np.cos(latitude)
    return scale


def _degrees(crs: pyproj.CRS, x: Floats, y: Floats) -> tuple[Floats, Floats]:
    """Longitude and latitude [radians]."""
    if crs.is_geographic:
        factor = crs.axis_info[0].unit_conversion_factor
        return x * factor, y * factor
    lon, lat = _to_degrees(crs).transform(x, y)
    assert crs.geodetic_crs is not None
    factor = crs.geodetic_crs.axis_info[0].unit_conversion_factor
    return np.where(np.isfinite(lon), lon, np.nan) * factor, np.where(
        np.isfinite(lat), lat, np.nan
    ) * factor


def _derivative(
    crs: pyproj.CRS, x: Floats, y: Floats, dx: float, dy: float
) -> tuple[Floats, Floats]:
    """Change of longitude and latitude per unit along one axis: central, fourth order."""
    near = [_degrees(crs, x + k * dx, y + k * dy) for k in (-1, 1)]
    far = [_degrees(crs, x + k * dx, y + k * dy) for k in (-2, 2)]
    lon = 8 * _turn(near[1][0] - near[0][0]) - _turn(far[1][0] - far[0][0])
    lat = 8 * (near[1][1] - near[0][1]) - (far[1][1] - far[0][1])
    return lon / (12 * (dx + dy)), lat / (12 * (dx + dy))


def _turn(difference: Floats) -> Floats:
    # Across the antimeridian longitudes jump by a full turn.
    wrapped: Floats = (difference + np.pi) % (2 * np.pi) - np.pi
    return wrapped
