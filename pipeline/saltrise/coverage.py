"""Which part of each cell a zone covers, exactly, block by block.

Coverage is found by signed areas, as scan converters of outline fonts do it: every edge is cut
at cell lines, each piece adds its height and the area to its right to its cell, and running sums
along the rows turn that into covered fractions. All in float64: fractions of zones that share
edges add up to 1 within rounding, which float32 fractions would miss by 1e-8.
"""

from __future__ import annotations

import threading
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import shapely
from numpy.typing import NDArray
from shapely.geometry import MultiPolygon, Polygon
from shapely.geometry.base import BaseGeometry

from saltrise.grid import Grid, Window

Floats = NDArray[np.float64]

_DUST = 1e-12
"""A fraction this close to 0 or 1 is rounding."""


@dataclass(frozen=True, eq=False)
class ZoneShapes:
    """Zones in cell coordinates (x along columns, y along rows).

    `edges` holds for each zone its edges as rows x0, y0, x1, y1, outer rings and holes turning
    opposite ways.
    """

    shapes: tuple[BaseGeometry, ...]
    edges: tuple[Floats, ...]


@dataclass(frozen=True)
class BlockCover:
    """Cells of one block that zones cover: zone, cell (row-major in the block), fraction.

    Ordered by zone, then cell.
    """

    zone: NDArray[np.int32]
    cell: NDArray[np.int32]
    fraction: Floats


def prepare_zones(geometries: Sequence[BaseGeometry], grid: Grid) -> ZoneShapes:
    """Bring polygons and multipolygons from the grid's CRS into its cell coordinates."""
    a, b, c, d, e, f = grid.transform
    det = a * e - b * d

    def to_cells(points: Floats) -> Floats:
        x, y = points[:, 0] - c, points[:, 1] - f
        return np.column_stack([(e * x - b * y) / det, (a * y - d * x) / det])

    shapes = tuple(shapely.transform(geometry, to_cells) for geometry in geometries)
    return ZoneShapes(shapes, tuple(_edges(shape) for shape in shapes))


def _polygons(shape: BaseGeometry) -> Iterable[Polygon]:
    return shape.geoms if isinstance(shape, MultiPolygon) else (shape,)


def _edges(shape: BaseGeometry) -> Floats:
    parts = [np.empty((0, 4))]
    for polygon in _polygons(shape):
        rings = [(polygon.exterior, 1.0), *((hole, -1.0) for hole in polygon.interiors)]
        for ring, sign in rings:
            points = shapely.get_coordinates(ring)
            if _turning(points) * sign < 0:
                points = points[::-1]
            parts.append(np.hstack([points[:-1], points[1:]]))
    edges = np.vstack(parts)
    # An edge along a row adds no height.
    return np.ascontiguousarray(edges[edges[:, 1] != edges[:, 3]])


def _turning(points: Floats) -> float:
    # About its own first point: far from the origin the products would drown the area.
    x, y = (points - points[0]).T
    return float(np.sum(x[1:] * y[:-1] - x[:-1] * y[1:]))


def block_cover(zones: ZoneShapes, block: Window) -> BlockCover:
    """Cells of a block that each zone covers, and by which fraction.

    Parameters
    ----------
    zones : ZoneShapes
        The region's zones; they may overlap.
    block : Window
        One block of the grid. The result depends on nothing else.

    Returns
    -------
    BlockCover
        Fractions in (0, 1], each within about 1e-13 of exact.
    """
    found: list[tuple[int, NDArray[np.int32], Floats]] = []
    if zones.shapes:
        tree, shapes = _index(zones)
        box = shapely.box(block.col, block.row, block.col + block.width, block.row + block.height)
        for zone in sorted(tree.query(box, predicate="intersects").tolist()):
            if shapely.contains_properly(shapes[zone], box):
                cells = np.arange(block.width * block.height, dtype=np.int32)
                found.append((zone, cells, np.ones(cells.size)))
            else:
                found.append((zone, *_partial_cover(zones.edges[zone], block)))
    return BlockCover(
        np.concatenate([np.full(c.size, z, dtype=np.int32) for z, c, _ in found] or [_NO_CELLS]),
        np.concatenate([c for _, c, _ in found] or [_NO_CELLS]),
        np.concatenate([f for _, _, f in found] or [np.empty(0)]),
    )


_NO_CELLS = np.empty(0, dtype=np.int32)
_LOCAL = threading.local()


def _index(zones: ZoneShapes) -> tuple[shapely.STRtree, NDArray[Any]]:
    """Search tree and prepared polygons, a thread's own: GEOS prepares lazily inside."""
    held = getattr(_LOCAL, "index", None)
    if held is None or held[0] is not zones:
        shapes = shapely.from_wkb(shapely.to_wkb(np.array(zones.shapes, dtype=object)))
        shapely.prepare(shapes)
        held = (zones, shapely.STRtree(shapes), shapes)
        _LOCAL.index = held
    return held[1], held[2]


def _partial_cover(edges: Floats, block: Window) -> tuple[NDArray[np.int32], Floats]:
    """Covered cells and fractions of one zone whose boundary meets the block."""
    low, high = np.minimum(edges[:, 1], edges[:, 3]), np.maximum(edges[:, 1], edges[:, 3])
    near = (high > block.row) & (low < block.row + block.height)
    near &= np.minimum(edges[:, 0], edges[:, 2]) < block.col + block.width
    local = edges[near] - np.array([block.col, block.row, block.col, block.row])
    x, y, dy = _pieces(local, block.width, block.height)
    column = np.floor(np.clip(x, 0, block.width)).astype(np.int64)
    row = np.clip(np.floor(y).astype(np.int64), 0, block.height - 1)
    # What lies left of the block covers all of its row; what lies right of it, nothing.
    right = np.where(x < 0, 0.0, x - column)
    stride = block.width + 2
    at = row * stride + column
    size = block.height * stride
    added = np.bincount(at, dy * (1 - right), size) + np.bincount(at + 1, dy * right, size)
    cover = np.cumsum(added.reshape(block.height, stride), axis=1)[:, : block.width].ravel()
    cover[cover > 1 - _DUST] = 1.0
    cells = np.flatnonzero(cover > _DUST).astype(np.int32)
    return cells, cover[cells]


def _pieces(edges: Floats, width: int, height: int) -> tuple[Floats, Floats, Floats]:
    """Edges cut at the cell lines of a block: middle x, middle y and signed height of each."""
    x0, y0, x1, y1 = edges.T
    rows = _crossings(y0, y1, 0, height)
    cols = _crossings(x0, x1, 0, width)
    edge = np.concatenate([np.arange(len(edges))] * 2 + [rows[0], cols[0]])
    along = np.concatenate([np.zeros(len(edges)), np.ones(len(edges)), rows[1], cols[1]])
    order = np.lexsort((along, edge))
    edge, along = edge[order], along[order]
    x, y = _at(x0, x1, edge, along), _at(y0, y1, edge, along)
    same = edge[1:] == edge[:-1]
    y = np.clip(y, 0, height)
    dy = (y[1:] - y[:-1])[same]
    middle_x, middle_y = ((x[1:] + x[:-1]) / 2)[same], ((y[1:] + y[:-1]) / 2)[same]
    kept = dy != 0
    return middle_x[kept], middle_y[kept], dy[kept]


def _at(start: Floats, end: Floats, edge: NDArray[np.int64], along: Floats) -> Floats:
    # Weighted so that both ends come out exactly.
    point: Floats = start[edge] * (1 - along) + end[edge] * along
    return point


def _crossings(
    start: Floats, end: Floats, first: int, last: int
) -> tuple[NDArray[np.int64], Floats]:
    """Edges and positions along them (0 to 1) where they cross lines first..last."""
    low = np.clip(np.ceil(np.minimum(start, end)), first, last + 1).astype(np.int64)
    high = np.clip(np.floor(np.maximum(start, end)), first - 1, last).astype(np.int64)
    count = np.maximum(high - low + 1, 0)
    count[start == end] = 0
    edge = np.repeat(np.arange(len(start)), count)
    begin = np.repeat(np.cumsum(count) - count, count)
    line = low[edge] + np.arange(len(edge)) - begin
    along = (line - start[edge]) / (end[edge] - start[edge])
    return edge, np.clip(along, 0.0, 1.0)
