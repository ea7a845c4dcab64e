"""Blocks, tiles and true cell areas."""

from __future__ import annotations

import math

import numpy as np
import pyproj
import pytest
from hypothesis import given
from hypothesis import strategies as st

from saltrise.errors import InputError
from saltrise.grid import Grid, Window, cell_areas

DEGREES = pyproj.CRS.from_epsg(4326).to_wkt()


def grid_in(
    epsg: int,
    west: float,
    north: float,
    cell: float,
    size: int = 600,
    turn: float = 0.0,
    block: int = 512,
) -> Grid:
    cos, sin = math.cos(turn), math.sin(turn)
    transform = (cell * cos, cell * sin, west, cell * sin, -cell * cos, north)
    return Grid(pyproj.CRS.from_epsg(epsg).to_wkt(), transform, size, size, block)


def geodesic_area(grid: Grid, row: int, col: int, n: int) -> float:
    """Area of n x n cells as a densified polygon on the ellipsoid [m2]."""
    crs = pyproj.CRS.from_wkt(grid.crs_wkt)
    steps = n * np.linspace(0, 1, 129)[:-1]
    edge = [(row + s, col) for s in steps] + [(row + n, col + s) for s in steps]
    edge += [(row + n - s, col + n) for s in steps] + [(row, col + n - s) for s in steps]
    xs, ys = zip(*(grid.corner(r, c) for r, c in edge), strict=True)
    to_degrees = pyproj.Transformer.from_crs(crs, crs.geodetic_crs, always_xy=True)
    area, _ = crs.get_geod().polygon_area_perimeter(*to_degrees.transform(xs, ys))
    return abs(area)


@given(st.integers(1, 200), st.integers(1, 200), st.integers(1, 5))
def test_blocks_of_all_tiles_are_the_blocks_of_the_grid(width: int, height: int, k: int) -> None:
    grid = Grid(DEGREES, (1, 0, 0, 0, -1, 0), width, height, block=16)
    from_tiles = {b for tile in grid.tiles(16 * k) for b in grid.blocks(tile)}
    assert from_tiles == set(grid.blocks())
    assert sum(b.width * b.height for b in grid.blocks()) == width * height


@given(st.floats(0, 6.3), st.integers(0, 599), st.integers(0, 599))
def test_a_cells_centre_lies_in_the_cell_also_on_turned_grids(turn, row, col) -> None:
    grid = grid_in(32740, 5e5, 6e6, 30, turn=turn)
    assert grid.rowcol(*grid.xy(row, col)) == (row, col)


def test_one_degree_cells_wgs84() -> None:
    # WGS84 cells of one degree whose lower edge is at 0, 40 and 60 degrees north, and the whole
    # ellipsoid; authalic closed form, checked against GeographicLib through pyproj.Geod.
    grid = Grid(DEGREES, (1, 0, -180, 0, -1, 90), 360, 180)
    areas = cell_areas(grid, Window(0, 0, 180, 360))
    geod = pyproj.Geod(ellps="WGS84")
    for south in (0, 40, 60):
        # Parallels are not geodesics: a dense polygon follows them.
        lon = np.linspace(0, 1, 20001)
        ring = (np.r_[lon, lon[::-1]], np.r_[np.full(20001, south), np.full(20001, south + 1)])
        expected = abs(geod.polygon_area_perimeter(*ring)[0])
        assert areas[89 - south, 0] == pytest.approx(expected, rel=1e-9)
    assert areas.sum() / 1e6 == pytest.approx(510065621.7240885, rel=1e-9)


@pytest.mark.parametrize(
    ("epsg", "west", "north", "cell", "turn"),
    [
        (32740, 5.0e5, 6.0e6, 30.0, 0.0),
        (32740, 2.0e5, 6.0e6, 30.0, 0.4),  # near the zone's rim, turned
        (3857, 8.0e6, 8.4e6, 30.0, 0.0),  # Web Mercator at 60 degrees north
        (3035, 4.0e6, 3.0e6, 1000.0, 0.0),  # equal area, large cells
        (2263, 9.8e5, 2.0e5, 100.0, 0.0),  # US survey feet
        (4326, 57.0, -36.0, 0.001, 0.3),  # turned geographic grid
    ],
)
def test_areas_equal_geodesic_polygons(epsg, west, north, cell, turn) -> None:
    grid = grid_in(epsg, west, north, cell, turn=turn)
    for block in grid.blocks():
        areas = cell_areas(grid, block)
        n = 64  # one cell alone drowns in the polygon's own rounding, about 1e-5 m2
        for row, col in ((0, 0), (block.height - n, block.width // 2 - n // 2)):
            ours = areas[row : row + n, col : col + n].sum()
            expected = geodesic_area(grid, block.row + row, block.col + col, n)
            assert ours == pytest.approx(expected, rel=2e-9)


@pytest.mark.parametrize("epsg", [32740, 3857, 3035])
def test_interpolating_the_scale_costs_nothing(epsg: int) -> None:
    west, north = {32740: (5e5, 6e6), 3857: (8e6, 8.4e6), 3035: (4e6, 3e6)}[epsg]
    coarse, fine = grid_in(epsg, west, north, 30.0), grid_in(epsg, west, north, 30.0, block=16)
    ours = cell_areas(coarse, Window(0, 0, 512, 512))
    for row in (0, 160, 496):
        direct = cell_areas(fine, Window(row, row, 16, 16))
        np.testing.assert_allclose(ours[row : row + 16, row : row + 16], direct, rtol=2e-10)


def test_a_ragged_block_has_the_areas_of_the_whole_one() -> None:
    whole = cell_areas(grid_in(32740, 5e5, 6e6, 30, size=512), Window(0, 0, 512, 512))
    ragged = cell_areas(grid_in(32740, 5e5, 6e6, 30, size=77), Window(0, 0, 77, 77))
    np.testing.assert_array_equal(ragged, whole[:77, :77])


def test_a_grid_beyond_the_projection_or_a_pole_is_refused() -> None:
    far = Grid(pyproj.CRS.from_epsg(3035).to_wkt(), (1e5, 0, -3e7, 0, -1e5, 3e7), 600, 600)
    with pytest.raises(InputError, match="beyond where its projection"):
        cell_areas(far, Window(0, 0, 512, 512))
    with pytest.raises(InputError, match="beyond a pole"):
        cell_areas(Grid(DEGREES, (1, 0, 0, 0, -1, 95), 10, 10), Window(0, 0, 10, 10))
