"""Coordinate reference systems by name, and extents carried from one to another."""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence

import pyproj
from rasterio.crs import CRS
from rasterio.errors import CRSError, RasterioError
from rasterio.warp import transform, transform_bounds

from saltrise.errors import InputError
from saltrise.io.mosaic import same_crs


def crs_text(name: str) -> str:
    """WKT of a CRS given as `EPSG:...`, WKT or PROJ text.

    Raises
    ------
    InputError
        The text means no CRS.
    """
    try:
        return str(CRS.from_user_input(name).to_wkt())
    except (CRSError, ValueError) as error:
        raise InputError(
            f"{name!r} is no coordinate reference system; give one such as 'EPSG:32740' ({error})"
        ) from error


def bounds_in(
    source_wkt: str, target_wkt: str, bounds: tuple[float, ...]
) -> tuple[float, float, float, float]:
    """Left, bottom, right, top of an extent in another CRS, edges densified.

    Raises
    ------
    InputError
        The extent does not exist in the target CRS.
    """
    left, bottom, right, top = bounds
    if same_crs(source_wkt, target_wkt):
        return left, bottom, right, top
    try:
        seen = transform_bounds(
            CRS.from_wkt(source_wkt), CRS.from_wkt(target_wkt), left, bottom, right, top
        )
    except RasterioError as error:
        raise InputError(f"the extent {bounds} has no place in the grid's CRS: {error}") from error
    return seen[0], seen[1], seen[2], seen[3]


def point_in(source_wkt: str, target_wkt: str, x: float, y: float) -> tuple[float, float]:
    """A point in another CRS, x before y (longitude before latitude).

    Raises
    ------
    InputError
        The point does not exist in the target CRS.
    """
    try:
        xs, ys = transform(CRS.from_wkt(source_wkt), CRS.from_wkt(target_wkt), [x], [y])
    except RasterioError as error:
        raise InputError(f"the point {x}, {y} has no place in the grid's CRS: {error}") from error
    if not (math.isfinite(xs[0]) and math.isfinite(ys[0])):
        raise InputError(f"the point {x}, {y} has no place in the grid's CRS")
    return xs[0], ys[0]


def outline_in_degrees(
    source_wkt: str, corners: Sequence[tuple[float, float]], steps: int = 8
) -> list[tuple[float, float]]:
    """A closed outline as longitude and latitude on WGS 84, each side cut in `steps`.

    Raises
    ------
    InputError
        A point has no place on the globe.
    """
    around = [*corners, corners[0]]
    points = []
    for (x0, y0), (x1, y1) in itertools.pairwise(around):
        points += [(x0 + (x1 - x0) * k / steps, y0 + (y1 - y0) * k / steps) for k in range(steps)]
    degrees = crs_text("EPSG:4326")
    placed = [point_in(source_wkt, degrees, x, y) for x, y in points]
    rounded = [(round(lon, 9), round(lat, 9)) for lon, lat in placed]
    return [*rounded, rounded[0]]


def epsg_of(wkt: str) -> int | None:
    """EPSG code of a CRS, if it has one."""
    code = CRS.from_wkt(wkt).to_epsg()
    return int(code) if code is not None else None


def ground_size(
    wkt: str, centre: tuple[float, float], right: tuple[float, float], below: tuple[float, float]
) -> tuple[float, float, tuple[float, float]]:
    """How a cell lies on the ground.

    Parameters
    ----------
    wkt : str
        The grid's CRS.
    centre, right, below : pairs of float
        Corner of a cell, and of its neighbours to the right and below.

    Returns
    -------
    metres_x, metres_y : float
        Width and height [m].
    north : pair of float
        Direction of north in rows and columns (x right, y down), of length 1.
    """
    degrees = crs_text("EPSG:4326")
    at, east, south = (point_in(wkt, degrees, *point) for point in (centre, right, below))
    geod = pyproj.Geod(ellps="WGS84")
    azimuth_x, _, metres_x = geod.inv(*at, *east)
    azimuth_y, _, metres_y = geod.inv(*at, *south)
    x, y = math.cos(math.radians(azimuth_x)), math.cos(math.radians(azimuth_y))
    length = math.hypot(x, y) or 1.0
    return float(metres_x), float(metres_y), (x / length, y / length)
