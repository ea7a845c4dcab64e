"""Expanding paths and reading headers."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import rasterio
from affine import Affine

from regions import place, write_raster
from saltrise.errors import InputError
from saltrise.io.sources import expand, read_header

ONES = np.ones((4, 5), dtype=np.float32)


def test_pattern_gives_files_in_name_order(tmp_path: Path) -> None:
    for name in ("b_2.tif", "b_1.tif", "c.tif"):
        write_raster(tmp_path / name, ONES)
    files, faults = expand([str(tmp_path / "b_*.tif")])
    assert [Path(f).name for f in files] == ["b_1.tif", "b_2.tif"]
    assert faults == []


def test_a_name_with_brackets_is_a_file_before_it_is_a_pattern(tmp_path: Path) -> None:
    path = write_raster(tmp_path / "depth[1].tif", ONES)
    assert expand([str(path)]) == ([str(path)], [])


def test_every_missing_file_pattern_and_folder_is_a_fault(tmp_path: Path) -> None:
    _, faults = expand([str(tmp_path / "no.tif"), str(tmp_path / "*.tif"), str(tmp_path)])
    assert len(faults) == 3
    assert "no such file" in faults[0]
    assert "no file matches" in faults[1]
    assert "is a folder" in faults[2]


def test_remote_paths_are_left_to_gdal() -> None:
    assert expand(["https://example.org/a.tif", "/vsizip/a.zip/b.tif"])[1] == []


def test_header_tells_nodata_scale_unit_and_place(tmp_path: Path) -> None:
    path = write_raster(tmp_path / "a.tif", ONES, nodata=-1)
    with rasterio.open(path, "r+") as dataset:
        dataset.scales, dataset.offsets, dataset.units = (0.1,), (5.0,), ("m",)
    header = read_header(str(path))
    assert (header.width, header.height, header.nodata) == (5, 4, -1.0)
    assert (header.scale, header.offset, header.unit) == (0.1, 5.0, "m")
    assert header.transform == tuple(place())[:6]


def test_a_nan_nodata_needs_no_translation(tmp_path: Path) -> None:
    assert read_header(str(write_raster(tmp_path / "a.tif", ONES, nodata=np.nan))).nodata is None


@pytest.mark.filterwarnings("ignore::rasterio.errors.NotGeoreferencedWarning")
def test_faults_name_the_file_and_what_to_do(tmp_path: Path) -> None:
    empty = tmp_path / "empty.tif"
    empty.touch()
    text = tmp_path / "text.tif"
    text.write_text("not a raster")
    no_crs = write_raster(tmp_path / "no_crs.tif", ONES, crs=None)
    no_place = write_raster(tmp_path / "no_place.tif", ONES, transform=Affine.identity())
    complex_ = write_raster(tmp_path / "complex.tif", ONES.astype(np.complex64))
    for path, words in [
        (empty, "0 bytes"),
        (text, "not a raster"),
        (no_crs, "coordinate reference system"),
        (no_place, "georeference"),
        (complex_, "plain numbers"),
        (tmp_path / "gone.tif", "gone.tif"),
    ]:
        with pytest.raises(InputError, match=words) as caught:
            read_header(str(path))
        assert str(path) in str(caught.value)
