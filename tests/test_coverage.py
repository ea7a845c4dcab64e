"""Exact cell coverage: by hand, by partition, and against exactextract."""

from __future__ import annotations

import numpy as np
import pyproj
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from shapely.geometry import MultiPolygon, Polygon, box

from saltrise.coverage import block_cover, prepare_zones
from saltrise.grid import Grid, Window

WKT = pyproj.CRS.from_epsg(32740).to_wkt()


def grid_of(width: int, height: int, block: int = 16) -> Grid:
    """One CRS unit a cell, rows counted down from `height`."""
    return Grid(WKT, (1.0, 0.0, 0.0, 0.0, -1.0, float(height)), width, height, block)


def dense(shape, grid: Grid) -> np.ndarray:
    """Fractions of one zone over the whole grid, block by block."""
    zones = prepare_zones([shape], grid)
    out = np.zeros((grid.height, grid.width))
    for block in grid.blocks():
        _, cell, fraction = block_cover(zones, block).every_cell(block.height * block.width)
        row, col = np.divmod(cell, block.width)
        out[block.row + row, block.col + col] = fraction
    return out


@pytest.mark.parametrize(
    ("shape", "expected"),
    [
        (box(0, 0, 3, 3), np.ones((3, 3))),
        (box(0.5, 0.5, 2.5, 2.5), [[0.25, 0.5, 0.25], [0.5, 1, 0.5], [0.25, 0.5, 0.25]]),
        (Polygon([(0, 3), (3, 3), (0, 0)]), [[1, 1, 0.5], [1, 0.5, 0], [0.5, 0, 0]]),
        (box(1.25, 1.25, 1.5, 1.75), [[0, 0, 0], [0, 0.125, 0], [0, 0, 0]]),
        (box(0, 0, 3, 3) - box(1, 1, 2, 2.5), [[1, 0.5, 1], [1, 0, 1], [1, 1, 1]]),
        (MultiPolygon([box(0, 2, 1, 3), box(2, 0, 3.5, 0.5)]), [[1, 0, 0], [0, 0, 0], [0, 0, 0.5]]),
        (box(-5, -5, -1, -1), np.zeros((3, 3))),
        (box(-9, -9, 9, 9), np.ones((3, 3))),
    ],
)
def test_three_by_three_by_hand(shape, expected) -> None:
    np.testing.assert_allclose(dense(shape, grid_of(3, 3)), expected, rtol=0, atol=1e-15)


def random_star(random: np.random.Generator, size: float) -> Polygon:
    angle = np.sort(random.uniform(0, 2 * np.pi, 40))
    radius = random.uniform(0.1, 0.6, 40) * size
    middle = random.uniform(0, size, 2)
    return Polygon(np.column_stack([np.cos(angle), np.sin(angle)]) * radius[:, None] + middle)


@pytest.mark.parametrize("seed", range(6))
def test_fractions_equal_intersections_with_each_cell(seed: int) -> None:
    grid = grid_of(37, 29)
    star = shapely.make_valid(random_star(np.random.default_rng(seed), 30.0))
    cells = [box(c, 29 - r - 1, c + 1, 29 - r) for r in range(29) for c in range(37)]
    expected = shapely.area(shapely.intersection(star, cells)).reshape(29, 37)
    np.testing.assert_allclose(dense(star, grid), expected, rtol=0, atol=1e-12)


def test_fractions_equal_exactextract() -> None:
    import geopandas
    from exactextract import exact_extract
    from exactextract.raster import NumPyRasterSource

    star = random_star(np.random.default_rng(8), 100.0)
    source = NumPyRasterSource(
        np.zeros((100, 100)), xmin=0, ymin=0, xmax=100, ymax=100, srs_wkt=WKT
    )
    frame = geopandas.GeoDataFrame({"id": [1]}, geometry=[star], crs=WKT)
    (found,) = exact_extract(source, frame, ["cell_id", "coverage"])
    theirs = np.zeros(100 * 100)
    theirs[found["properties"]["cell_id"]] = found["properties"]["coverage"]
    # exactextract keeps fractions as float32.
    np.testing.assert_allclose(dense(star, grid_of(100, 100)).ravel(), theirs, rtol=0, atol=1e-6)


@settings(max_examples=30)
@given(st.integers(0, 10_000), st.integers(5, 40), st.integers(5, 40))
def test_zones_that_partition_the_region_cover_every_cell_once(seed, width, height) -> None:
    grid = grid_of(width, height)
    points = shapely.MultiPoint(np.random.default_rng(seed).uniform(0, 40, (12, 2)))
    whole = box(0, 0, width, height)
    parts = [p & whole for p in shapely.voronoi_polygons(points, extend_to=whole).geoms]
    total = sum(dense(part, grid) for part in parts if part.area > 0)
    np.testing.assert_allclose(total, 1.0, rtol=0, atol=1e-11)


def test_a_block_does_not_know_its_neighbours() -> None:
    star = random_star(np.random.default_rng(5), 90.0)
    wide, narrow = grid_of(96, 96, 16), grid_of(96, 96, 48)
    np.testing.assert_allclose(dense(star, wide), dense(star, narrow), rtol=0, atol=1e-12)
    zones = prepare_zones([star], wide)
    again = prepare_zones([star], wide)
    block = Window(32, 32, 16, 16)
    one, two = (block_cover(z, block).every_cell(256)[2] for z in (zones, again))
    np.testing.assert_array_equal(one, two)


def test_turned_and_south_up_grids_cover_the_same_ground() -> None:
    star = random_star(np.random.default_rng(5), 30.0)
    south_up = Grid(WKT, (1.0, 0.0, 0.0, 0.0, 1.0, 0.0), 30, 30, 16)
    np.testing.assert_allclose(
        dense(star, south_up)[::-1], dense(star, grid_of(30, 30)), atol=1e-13
    )
    cos, sin = np.cos(0.3), np.sin(0.3)
    turned = Grid(WKT, (cos, sin, -30.0, sin, -cos, 40.0), 120, 120, 16)
    assert dense(star, turned).sum() == pytest.approx(star.area, rel=1e-12)


@pytest.mark.parametrize("order", [(0, 1, 2), (2, 1, 0), (1, 0, 2)])
def test_overlapping_zones_are_each_whole_and_in_order(order) -> None:
    grid = grid_of(16, 16)
    shapes = [box(0, 0, 16, 16), box(4, 4, 8, 8.5), box(-9, -9, 99, 99)]
    areas = [256, 18, 256]
    zones = prepare_zones([shapes[k] for k in order], grid)
    zone, cell, fraction = block_cover(zones, Window(0, 0, 16, 16)).every_cell(256)
    expected = [areas[k] for k in order]
    np.testing.assert_allclose(np.bincount(zone, fraction), expected, rtol=1e-14)
    assert np.all(np.diff(zone) >= 0)
    assert np.all(np.diff(cell)[np.diff(zone) == 0] > 0)


@settings(max_examples=30, deadline=None)
@given(st.integers(0, 10_000))
def test_runs_and_single_cells_share_the_block_out(seed: int) -> None:
    random = np.random.default_rng(seed)
    stars = [shapely.make_valid(random_star(random, 30.0)) for _ in range(4)]
    grid = grid_of(30, 30, 32)
    cover = block_cover(prepare_zones(stars, grid), Window(0, 0, 30, 30))
    assert cover.run_start[0] == 0
    assert np.all(np.diff(np.append(cover.run_start, 900)) > 0)
    label = np.repeat(cover.run_slot, np.diff(np.append(cover.run_start, 900)))
    assert np.all(cover.fraction > 0)
    assert np.all(np.diff(cover.cell) >= 0)
    # A cell that a zone has as a whole is never counted again for the same zone.
    assert not np.any(label[cover.cell] == cover.slot)
    zone, cell, fraction = cover.every_cell(900)
    for number, star in enumerate(stars):
        mine = zone == number
        np.testing.assert_allclose(
            np.bincount(cell[mine], fraction[mine], 900), dense(star, grid).ravel(), atol=1e-12
        )


def test_a_polygon_of_many_vertices() -> None:
    angle = np.linspace(0, 2 * np.pi, 100_001)[:-1]
    circle = Polygon(np.column_stack([np.cos(angle), np.sin(angle)]) * 45 + 50)
    assert dense(circle, grid_of(100, 100, 48)).sum() == pytest.approx(circle.area, rel=1e-12)


def test_no_zones_cover_nothing() -> None:
    cover = block_cover(prepare_zones([], grid_of(3, 3)), Window(0, 0, 3, 3))
    assert cover.every_cell(9)[0].size == 0
    assert cover.run_slot.tolist() == [0]
