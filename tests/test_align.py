"""Inputs on the region's grid, against arithmetic by hand."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyproj
import pytest
from affine import Affine

from regions import CELL, CRS, NORTH, WEST, place, write_raster
from saltrise.errors import InputError, RunError
from saltrise.grid import Grid, Window
from saltrise.io.align import Aligned, BlockReader, align, relative_cell_size
from saltrise.io.mosaic import Mosaic, open_mosaic

WKT = pyproj.CRS.from_user_input(CRS).to_wkt()


@dataclass(frozen=True)
class Given:
    paths: tuple[str, ...]


def mosaic(path: Path) -> Mosaic:
    return open_mosaic("water_table.depth", Given((str(path),)), None)


def grid_of(
    width: int = 12, height: int = 10, transform: Affine | None = None, block: int = 16
) -> Grid:
    return Grid(WKT, tuple(transform or place())[:6], width, height, block)


def read(aligned: Aligned) -> np.ndarray:
    reader = BlockReader(aligned)
    grid = aligned.grid
    out = np.empty((grid.height, grid.width))
    for b in grid.blocks():
        out[b.row : b.row + b.height, b.col : b.col + b.width] = reader.read(b)
    return out


def field(width: int, height: int, seed: int = 0) -> np.ndarray:
    return np.random.default_rng(seed).uniform(0, 10, (height, width)).astype(np.float32)


def bilinear(values: np.ndarray, col: float, row: float) -> float:
    """Four neighbours; nearest nodata is nodata, else weights of the valid ones; rims extend."""
    height, width = values.shape
    nearest = values[min(int(row), height - 1), min(int(col), width - 1)]
    if np.isnan(nearest):
        return np.nan
    x, y = col - 0.5, row - 0.5
    total = weight = 0.0
    for r, v in ((np.floor(y), 1 - y % 1), (np.floor(y) + 1, y % 1)):
        for c, u in ((np.floor(x), 1 - x % 1), (np.floor(x) + 1, x % 1)):
            inside = 0 <= r < height and 0 <= c < width
            if inside and not np.isnan(values[int(r), int(c)]):
                total += u * v * values[int(r), int(c)]
                weight += u * v
    return total / weight


def test_a_shared_grid_is_read_cell_for_cell_with_nan_outside(tmp_path: Path) -> None:
    values = field(5, 4)
    path = write_raster(tmp_path / "a.tif", values, place(WEST + 2 * CELL, NORTH - CELL))
    aligned = align(mosaic(path), grid_of(), classes=False)
    assert aligned.method == "cell for cell"
    expected = np.full((10, 12), np.nan)
    expected[1:5, 2:7] = values
    np.testing.assert_array_equal(read(aligned), expected)
    assert aligned.pixel(3, 4) == (str(path), 2, 2)
    assert aligned.pixel(0, 0) is None


def test_float_dust_in_the_origin_does_not_count_but_is_told(tmp_path: Path) -> None:
    path = write_raster(tmp_path / "a.tif", field(12, 10), place(WEST + 1e-3 * CELL))
    aligned = align(mosaic(path), grid_of(), classes=False)
    assert aligned.method == "cell for cell"
    assert "0.001 cells apart" in aligned.describe()


@pytest.mark.parametrize("cell", [CELL, 2.3 * CELL, 0.7 * CELL])
def test_quantities_are_bilinear_of_four_neighbours(tmp_path: Path, cell: float) -> None:
    values = field(20, 18)
    values[5:7, 6:9] = np.nan
    path = write_raster(tmp_path / "a.tif", values, place(WEST - 40, NORTH + 50, cell))
    aligned = align(mosaic(path), grid_of(), classes=False)
    assert aligned.method == "bilinear"
    got = read(aligned)
    for row, col in np.ndindex(got.shape):
        x, y = (col + 0.5) * CELL + 40, (row + 0.5) * CELL + 50
        c, r = x / cell, y / cell
        if not (0 <= c < 20 and 0 <= r < 18):
            assert np.isnan(got[row, col])
        elif min(c % 1, 1 - c % 1, r % 1, 1 - r % 1) > 1e-3:
            assert got[row, col] == pytest.approx(bilinear(values, c, r), abs=2e-4, nan_ok=True)


def test_much_finer_quantities_are_averaged_without_nodata(tmp_path: Path) -> None:
    values = field(120, 100)
    values[0:4, 0:3] = np.nan
    path = write_raster(tmp_path / "a.tif", values, place(cell=CELL / 10))
    aligned = align(mosaic(path), grid_of(), classes=False)
    assert aligned.method == "average"
    expected = np.nanmean(values.reshape(10, 10, 12, 10).swapaxes(1, 2), axis=(2, 3))
    np.testing.assert_allclose(read(aligned), expected, rtol=1e-5)


def test_half_a_cell_is_not_much_finer(tmp_path: Path) -> None:
    path = write_raster(tmp_path / "a.tif", field(24, 20), place(cell=CELL / 2))
    assert relative_cell_size(mosaic(path), grid_of()) == pytest.approx(0.5)
    assert align(mosaic(path), grid_of(), classes=False).method == "bilinear"


def test_classes_are_never_mixed(tmp_path: Path) -> None:
    codes = np.random.default_rng(0).choice([1, 5, 9], (60, 70)).astype(np.uint8)
    path = write_raster(tmp_path / "a.tif", codes, place(WEST - 7, NORTH + 3, 8.0), nodata=0)
    aligned = align(mosaic(path), grid_of(), classes=True)
    assert aligned.method == "nearest"
    got = read(aligned)
    rows = ((np.arange(10) + 0.5) * CELL + 3) // 8
    cols = ((np.arange(12) + 0.5) * CELL + 7) // 8
    np.testing.assert_array_equal(got, codes[np.ix_(rows.astype(int), cols.astype(int))])


def test_another_crs_lands_where_pyproj_says(tmp_path: Path) -> None:
    # A plane in degrees: bilinear interpolation of it is exact, so only the place can be wrong.
    lon, lat = pyproj.Transformer.from_crs(CRS, 4326, always_xy=True).transform(WEST, NORTH)
    step = 0.0005
    cols, rows = np.meshgrid(np.arange(60), np.arange(60))
    west, north = lon - 10 * step, lat + 10 * step
    plane = ((west + (cols + 0.5) * step) * 3 + (north - (rows + 0.5) * step) * 5).astype(float)
    path = write_raster(
        tmp_path / "a.tif", plane, Affine(step, 0, west, 0, -step, north), crs="EPSG:4326"
    )
    grid = grid_of()
    aligned = align(mosaic(path), grid, classes=False)
    got = read(aligned)
    back = pyproj.Transformer.from_crs(CRS, 4326, always_xy=True)
    for row, col in np.ndindex(got.shape):
        x, y = back.transform(*grid.xy(row, col))
        assert got[row, col] == pytest.approx(3 * x + 5 * y, abs=step * 0.01)


@pytest.mark.parametrize("cell", [CELL * 1.7, CELL / 3, CELL])
def test_a_warped_block_is_the_same_read_alone_or_in_any_order(tmp_path: Path, cell: float) -> None:
    path = write_raster(tmp_path / "a.tif", field(200, 200), place(WEST + 11, NORTH - 7, cell))
    aligned = align(mosaic(path), grid_of(90, 70), classes=False)
    blocks = list(aligned.grid.blocks())
    first, second = BlockReader(aligned), BlockReader(aligned)
    forward = {b: first.read(b) for b in blocks}
    for block in reversed(blocks):
        np.testing.assert_array_equal(second.read(block), forward[block])


def test_turned_grids_read_cell_for_cell(tmp_path: Path) -> None:
    values = field(12, 10)
    turned = place(rotation=25)
    path = write_raster(tmp_path / "a.tif", values, turned)
    aligned = align(mosaic(path), grid_of(transform=turned), classes=False)
    assert aligned.method == "cell for cell"
    np.testing.assert_array_equal(read(aligned), values)


def test_an_input_outside_the_region_names_both_extents(tmp_path: Path) -> None:
    path = write_raster(tmp_path / "a.tif", field(5, 5), place(WEST + 1e5))
    with pytest.raises(InputError, match=r"wholly outside the region.*600000.*500000"):
        align(mosaic(path), grid_of(), classes=False)


def test_a_torn_file_is_named_when_it_is_read(tmp_path: Path) -> None:
    path = write_raster(tmp_path / "a.tif", field(64, 64), compress="deflate")
    data = path.read_bytes()
    path.write_bytes(data[: len(data) // 2])
    reader = BlockReader(align(mosaic(path), grid_of(64, 64, block=64), classes=False))
    with pytest.raises(RunError, match=r"water_table.depth.*a\.tif.*column 0, row 0"):
        reader.read(Window(0, 0, 64, 64))
