"""Which part of each cell a zone covers, exactly, block by block.

Coverage is found by signed areas, as scan converters of outline fonts do it: every edge is cut
at cell lines, each piece adds its height and the area to its right to its cell, and running sums
along the rows turn that into covered fractions. Only cells that an edge touches are visited: what
lies between them is a run of one fraction. All in float64: fractions of zones that share edges
add up to 1 within rounding, which float32 fractions would miss by 1e-8.
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
Whole = NDArray[np.int64]

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
    """How zones cover the cells of one block (row-major).

    The block is cut into runs of cells, `run_start` being their first cells: in a run of slot 0
    every cell is either free or in `cell`; a run of slot k > 0 lies wholly inside zone
    `zones[k - 1]`. Cells that a zone covers partly, or that lie wholly in a second zone, are in
    `cell`, in rising order, with their slot and fraction.
    """

    zones: Whole
    run_start: Whole
    run_slot: NDArray[np.intp]
    cell: Whole
    slot: NDArray[np.intp]
    fraction: Floats

    def every_cell(self, size: int) -> tuple[Whole, Whole, Floats]:
        """Zone, cell and fraction of every covered cell of a block of `size` cells, by zone."""
        label = np.repeat(self.run_slot, np.diff(np.append(self.run_start, size)))
        whole = np.flatnonzero(label)
        zone = self.zones[np.concatenate([label[whole], self.slot]) - 1]
        cell = np.concatenate([whole, self.cell])
        fraction = np.concatenate([np.ones(whole.size), self.fraction])
        order = np.lexsort((cell, zone))
        return zone[order], cell[order], fraction[order]


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
        Fractions in (0, 1], each within about 1e-12 of exact.
    """
    numbers: list[int] = []
    runs: list[_Runs] = []
    if zones.shapes:
        tree, shapes = _index(zones)
        box = shapely.box(block.col, block.row, block.col + block.width, block.row + block.height)
        for zone in sorted(tree.query(box, predicate="intersects").tolist()):
            if shapely.contains_properly(shapes[zone], box):
                whole = np.array([0]), np.array([block.width * block.height]), np.ones(1)
                runs.append(whole)
            else:
                runs.append(_covered_runs(zones.edges[zone], block))
            numbers.append(zone)
    return _arranged(numbers, runs, block.width * block.height)


_Runs = tuple[Whole, Whole, Floats]
"""First cell, end (first cell after) and fraction of runs of one zone, in rising order."""


def _arranged(numbers: list[int], runs: list[_Runs], size: int) -> BlockCover:
    """Share the block's cells out: whole runs to their zone, what is left over cell by cell."""
    start, end, slot = (np.empty(0, dtype=np.int64) for _ in range(3))
    rest: list[tuple[Whole, NDArray[np.intp], Floats]] = []
    for k, (first, after, fraction) in enumerate(runs, start=1):
        taken = fraction == 1.0
        # Free if no run that was taken before reaches into it.
        free = np.searchsorted(end, first, side="right") == np.searchsorted(start, after)
        taken &= free
        rest.append(_cell_by_cell(first[~taken], after[~taken], fraction[~taken], k))
        start, end = np.append(start, first[taken]), np.append(end, after[taken])
        slot = np.append(slot, np.full(int(taken.sum()), k))
        order = np.argsort(start)
        start, end, slot = start[order], end[order], slot[order]
    cell = np.concatenate([c for c, _, _ in rest] or [start[:0]])
    slots = np.concatenate([s for _, s, _ in rest] or [slot[:0]])
    fraction = np.concatenate([f for _, _, f in rest] or [np.empty(0)])
    order = np.argsort(cell, kind="stable")
    # Gaps between the runs, and before and after them, are runs of slot 0.
    edges = np.column_stack([start, end]).ravel()
    slot_after = np.column_stack([slot, np.zeros_like(slot)]).ravel()
    edges, slot_after = np.append(0, edges), np.append(0, slot_after)
    filled = np.diff(np.append(edges, size)) > 0
    return BlockCover(
        np.array(numbers, dtype=np.int64),
        edges[filled],
        slot_after[filled].astype(np.intp),
        cell[order],
        slots[order].astype(np.intp),
        fraction[order],
    )


def _cell_by_cell(
    first: Whole, after: Whole, fraction: Floats, slot: int
) -> tuple[Whole, NDArray[np.intp], Floats]:
    length = after - first
    begin = np.repeat(np.cumsum(length) - length, length)
    cell = np.repeat(first, length) + np.arange(len(begin)) - begin
    return cell, np.full(cell.size, slot, dtype=np.intp), np.repeat(fraction, length)


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


def _covered_runs(edges: Floats, block: Window) -> _Runs:
    """Runs of cells of equal fraction of one zone whose boundary meets the block."""
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
    place = np.concatenate([row * stride + column, row * stride + column + 1])
    added = np.concatenate([dy * (1 - right), dy * right])
    order = np.argsort(place, kind="stable")
    place, first = np.unique(place[order], return_index=True)
    if place.size == 0:
        return place, place, np.empty(0)
    total = np.cumsum(np.add.reduceat(added[order], first))
    row, column = np.divmod(place, stride)
    opens = np.flatnonzero(np.append(True, row[1:] != row[:-1]))
    before = np.append(0.0, total)[opens]
    fraction = total - np.repeat(before, np.diff(np.append(opens, row.size)))
    fraction[fraction > 1 - _DUST] = 1.0
    after = np.append(column[1:], block.width)
    after[np.append(opens[1:] - 1, row.size - 1)] = block.width
    kept = (fraction > _DUST) & (column < block.width)
    base = row[kept] * block.width
    start, end, fraction = base + column[kept], base + after[kept], fraction[kept]
    # Whole runs that touch, mostly from row to row, become one.
    heads, tails = np.ones(start.size, dtype=bool), np.ones(start.size, dtype=bool)
    joined = (fraction[1:] == 1.0) & (fraction[:-1] == 1.0) & (start[1:] == end[:-1])
    heads[1:] = tails[:-1] = ~joined
    return start[heads], end[tails], fraction[heads]


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
