"""Tiles of one input on their common grid, and the virtual raster that reads them."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
import rasterio
from affine import Affine

from regions import CELL, NORTH, WEST, place, write_raster
from saltrise.errors import InputError
from saltrise.io.mosaic import Mosaic, cell_offset, open_mosaic
from saltrise.io.overlaps import disagreements


@dataclass(frozen=True)
class Given:
    paths: tuple[str, ...]


def mosaic(*paths: Path, nodata: float | None = None) -> Mosaic:
    return open_mosaic("water_table.depth", Given(tuple(map(str, paths))), nodata)


def read(virtual: str) -> np.ndarray:
    with rasterio.open(virtual) as dataset:
        return dataset.read(1)


def shifted(cols: float, rows: float) -> Affine:
    return place(WEST + cols * CELL, NORTH - rows * CELL)


def test_tiles_with_a_gap_read_as_one_raster_with_nan_between(tmp_path: Path) -> None:
    a = write_raster(tmp_path / "a.tif", np.full((2, 2), 1, np.int16))
    b = write_raster(tmp_path / "b.tif", np.full((2, 2), 2, np.int16), shifted(3, 1))
    got = mosaic(b, a)
    nan = np.nan
    expected = [[1, 1, nan, nan, nan], [1, 1, nan, 2, 2], [nan, nan, nan, 2, 2]]
    assert (got.width, got.height) == (5, 3)
    np.testing.assert_array_equal(read(got.vrt()), expected)


@pytest.mark.parametrize(
    "dtype", ["uint8", "int16", "uint16", "int32", "uint32", "float32", "float64"]
)
def test_every_value_of_every_type_is_kept_exactly(tmp_path: Path, dtype: str) -> None:
    top = np.iinfo(dtype).max if "int" in dtype else 1.0 / 3.0
    values = np.array([[0, 1, top]], dtype=dtype)
    np.testing.assert_array_equal(
        read(mosaic(write_raster(tmp_path / "a.tif", values)).vrt()), values
    )


def test_declared_and_configured_nodata_both_become_nan(tmp_path: Path) -> None:
    values = np.array([[-9999, -32768, 3, 0]], dtype=np.int16)
    path = write_raster(tmp_path / "a.tif", values, nodata=-9999)
    nan = np.nan
    np.testing.assert_array_equal(read(mosaic(path).vrt()), [[nan, -32768, 3, 0]])
    np.testing.assert_array_equal(read(mosaic(path, nodata=-32768).vrt()), [[nan, nan, 3, 0]])


def test_float32_nodata_of_the_smallest_number_becomes_nan(tmp_path: Path) -> None:
    lowest = float(np.finfo(np.float32).min)
    values = np.array([[lowest, 1.5]], dtype=np.float32)
    path = write_raster(tmp_path / "a.tif", values, nodata=lowest)
    np.testing.assert_array_equal(read(mosaic(path).vrt()), [[np.nan, 1.5]])


def test_a_mask_band_counts(tmp_path: Path) -> None:
    path = write_raster(tmp_path / "a.tif", np.array([[1, 2, 7]], dtype=np.uint8))
    with rasterio.open(path, "r+") as dataset:
        dataset.write_mask(np.array([[255, 0, 255]], dtype=np.uint8))
    np.testing.assert_array_equal(read(mosaic(path).vrt()), [[1, np.nan, 7]])
    np.testing.assert_array_equal(read(mosaic(path, nodata=7).vrt()), [[1, np.nan, np.nan]])


def test_scale_and_offset_apply_after_nodata_and_are_reported(tmp_path: Path) -> None:
    path = write_raster(tmp_path / "a.tif", np.array([[10, -1]], dtype=np.int16), nodata=-1)
    with rasterio.open(path, "r+") as dataset:
        dataset.scales, dataset.offsets = (0.01,), (1.0,)
    got = mosaic(path)
    np.testing.assert_allclose(read(got.vrt()), [[1.1, np.nan]], rtol=1e-15)
    assert "0.01" in got.notes[0]


def test_where_tiles_overlap_the_first_named_wins_and_disagreement_is_told(tmp_path: Path) -> None:
    a = write_raster(tmp_path / "a.tif", np.array([[1, 1, -9]], np.int16), nodata=-9)
    b = write_raster(tmp_path / "b.tif", np.array([[1, 2, 2]], np.int16), shifted(0, 0), nodata=-9)
    np.testing.assert_array_equal(read(mosaic(a, b).vrt()), [[1, 1, 2]])
    np.testing.assert_array_equal(read(mosaic(b, a).vrt()), [[1, 2, 2]])
    (sentence,) = disagreements(mosaic(a, b))
    assert "differ in 1 of them" in sentence
    assert "column 1, row 0" in sentence
    assert f"values of {a} are used" in sentence


def test_overlaps_that_agree_are_silent(tmp_path: Path) -> None:
    a = write_raster(tmp_path / "a.tif", np.ones((3, 3), np.float32))
    b = write_raster(tmp_path / "b.tif", np.ones((3, 3), np.float32), shifted(2, 2))
    assert disagreements(mosaic(a, b)) == []


@pytest.mark.parametrize(
    ("transform", "crs", "words"),
    [
        (shifted(4.5, 0), "EPSG:32740", "0.5 cells off"),
        (place(cell=31.0), "EPSG:32740", "cells off"),
        (shifted(4, 0), "EPSG:32741", "CRS differs"),
    ],
)
def test_tiles_that_share_no_grid_are_refused(
    tmp_path: Path, transform: Affine, crs: str, words: str
) -> None:
    a = write_raster(tmp_path / "a.tif", np.ones((4, 4), np.float32))
    b = write_raster(tmp_path / "b.tif", np.ones((4, 4), np.float32), transform, crs=crs)
    with pytest.raises(InputError, match=words) as caught:
        mosaic(a, b)
    assert str(b) in str(caught.value)


def test_a_window_beyond_the_mosaic_is_nan_there(tmp_path: Path) -> None:
    got = mosaic(write_raster(tmp_path / "a.tif", np.array([[1, 2], [3, 4]], np.float32)))
    window = read(got.vrt_on(3, 2, got.transform, -1, 1))
    np.testing.assert_array_equal(window, [[np.nan, 3, 4], [np.nan, np.nan, np.nan]])


def test_cell_offset_of_turned_grids_measures_along_their_axes() -> None:
    base = place(rotation=30.0)
    x = base.c + 3.0 * base.a - 2.25 * base.b
    y = base.f + 3.0 * base.d - 2.25 * base.e
    other = Affine(base.a, base.b, x, base.d, base.e, y)
    col, row, worst = cell_offset(tuple(base)[:6], tuple(other)[:6], 10, 10)
    assert (col, row) == pytest.approx((3.0, -2.25))
    assert worst == pytest.approx(0.25)


def test_integer_without_nodata_is_known(tmp_path: Path) -> None:
    path = write_raster(tmp_path / "a.tif", np.ones((2, 2), np.uint8))
    assert mosaic(path).integer_without_nodata
    assert not mosaic(path, nodata=0).integer_without_nodata
