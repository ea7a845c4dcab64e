"""Polygons on the ground: areas on the ellipsoid, and places on the region's grid."""

from __future__ import annotations

import math

import numpy as np
import pyproj
import shapely
from numpy.typing import NDArray
from shapely.geometry import Polygon
from shapely.geometry.base import BaseGeometry

from saltrise.errors import InputError
from saltrise.grid import Grid

_PIECES = 256
"""Pieces an edge as long as the polygon is wide is cut into before it is transformed."""


def _dense(geometry: BaseGeometry) -> BaseGeometry:
    left, bottom, right, top = geometry.bounds
    longest = math.hypot(right - left, top - bottom) / _PIECES
    return shapely.segmentize(geometry, longest) if longest > 0 else geometry


def _carried(geometry: BaseGeometry, change: pyproj.Transformer, to: str) -> BaseGeometry:
    def move(points: NDArray[np.float64]) -> NDArray[np.float64]:
        x, y = change.transform(points[:, 0], points[:, 1])
        return np.column_stack([x, y])

    moved = shapely.transform(geometry, move)
    if not np.all(np.isfinite(shapely.get_coordinates(moved))):
        raise InputError(f"a zone reaches beyond where {to} is defined; cut it or check its CRS")
    return moved


def on_grid(geometry: BaseGeometry, crs: pyproj.CRS, grid: Grid) -> BaseGeometry:
    """A polygon in the grid's CRS, its edges straight in its own CRS (densified before).

    Raises
    ------
    InputError
        The polygon reaches beyond where the grid's CRS is defined.
    """
    target = pyproj.CRS.from_wkt(grid.crs_wkt)
    if crs.equals(target, ignore_axis_order=True):
        return geometry
    change = pyproj.Transformer.from_crs(crs, target, always_xy=True)
    moved = _carried(_dense(geometry), change, target.name)
    # Transforming can make neighbouring edges touch.
    return moved if moved.is_valid else shapely.make_valid(moved, method="structure")


def ellipsoid_area(geometry: BaseGeometry, crs: pyproj.CRS) -> float:
    """Area on the ellipsoid of the polygon's CRS [m2], edges straight in that CRS.

    Raises
    ------
    InputError
        The polygon reaches beyond where its CRS is defined, or the CRS has no ellipsoid.
    """
    geod = crs.get_geod()
    if geod is None or crs.geodetic_crs is None:
        raise InputError(
            f"the CRS {crs.name!r} has no ellipsoid; use a geographic or projected one"
        )
    change = pyproj.Transformer.from_crs(crs, crs.geodetic_crs, always_xy=True)
    degrees = _carried(_dense(geometry), change, crs.geodetic_crs.name)
    factor = math.degrees(crs.geodetic_crs.axis_info[0].unit_conversion_factor)
    total = 0.0
    for polygon in shapely.get_parts(degrees):
        areas = [_ring_area(geod, ring, factor) for ring in (polygon.exterior, *polygon.interiors)]
        total += areas[0] - sum(areas[1:])
    return total


def _ring_area(geod: pyproj.Geod, ring: BaseGeometry, factor: float) -> float:
    lon, lat = shapely.get_coordinates(ring).T * factor
    area, _ = geod.polygon_area_perimeter(lon, lat)
    return abs(float(area))


def outside_area(geometry: BaseGeometry, grid: Grid) -> float:
    """Area on the ellipsoid [m2] of the part of a polygon (in the grid's CRS) beyond the grid."""
    corners = [(0, 0), (0, grid.width), (grid.height, grid.width), (grid.height, 0)]
    rim = Polygon([grid.corner(row, col) for row, col in corners])
    if shapely.covers(rim, geometry):
        return 0.0
    rest = shapely.difference(geometry, rim)
    parts = [p for p in shapely.get_parts(rest) if p.geom_type == "Polygon" and p.area > 0]
    crs = pyproj.CRS.from_wkt(grid.crs_wkt)
    return sum(ellipsoid_area(part, crs) for part in parts)
