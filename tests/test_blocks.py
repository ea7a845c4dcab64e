"""Assembled layers: any size and shape, both TIFF flavours, read by GDAL and by tifffile."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import rasterio
import tifffile
from rio_cogeo.cogeo import cog_validate

import regions
import saltrise
from saltrise.grid import Grid
from saltrise.io import tiff
from saltrise.io.blocks import Level, block_places, template, write_assembled
from saltrise.io.encode import encode
from saltrise.layers import LAYERS, NODATA
from saltrise.pyramid import halve, level_sizes


def noisy_region(folder: Path, shape: tuple[int, int], **tables) -> Path:
    random = np.random.default_rng(3)
    regions.write_fields(folder, regions.fields(shape, random))
    return regions.write_config(folder, regions.tables(folder, **tables))


def levels_of(path: Path) -> list[np.ndarray]:
    """Full resolution and every overview, by tifffile."""
    with tifffile.TiffFile(path) as file:
        return [page.asarray() for page in file.pages]


@pytest.mark.parametrize(
    ("shape", "tile"),
    [
        ((512, 700), 512),
        ((1030, 513), 512),
        ((2100, 1500), 1024),
        ((700, 2600), 2048),
        ((40, 9), 512),
    ],
)
def test_every_level_equals_a_whole_array_pyramid(
    tmp_path: Path, shape: tuple[int, int], tile: int
) -> None:
    result = saltrise.run(noisy_region(tmp_path, shape, run={"tile": tile, "workers": 2}))
    for path in (result.folder / "layers").glob("*.tif"):
        levels = levels_of(path)
        sizes = [shape[::-1], *level_sizes(shape[1], shape[0], 512)]
        assert [level.shape[::-1] for level in levels] == sizes
        with rasterio.open(path) as dataset:
            expected = dataset.read(1)
            assert dataset.overviews(1) == [2**k for k in range(1, len(sizes))]
        for k, level in enumerate(levels):
            np.testing.assert_array_equal(level, expected)
            if k:
                with rasterio.open(path, overview_level=k - 1) as dataset:
                    np.testing.assert_array_equal(dataset.read(1), expected)
            expected = halve(expected, rounded=True)
        valid, errors, warnings = cog_validate(path, strict=True, quiet=True)
        assert valid, (path.name, errors, warnings)


@pytest.mark.parametrize("compression", ["zstd", "deflate"])
def test_beyond_four_gigabytes_it_is_a_bigtiff(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, compression: str
) -> None:
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1767225600")
    config = noisy_region(tmp_path, (1100, 900), output={"compression": compression})
    plain = saltrise.run(config)
    monkeypatch.setattr(tiff, "CLASSIC_LIMIT", 100_000)
    kept = tmp_path / "kept"
    plain.folder.rename(kept)
    big = saltrise.run(config)
    path = big.folder / "layers" / "salt_load.tif"
    assert path.read_bytes()[2] == 43  # BigTIFF's version number
    assert (kept / "layers" / "salt_load.tif").read_bytes()[2] == 42
    for ours, theirs in zip(levels_of(path), levels_of(kept / "layers" / path.name), strict=True):
        np.testing.assert_array_equal(ours, theirs)
    assert cog_validate(path, strict=True, quiet=True)[0]
    with rasterio.open(path) as a, rasterio.open(kept / "layers" / path.name) as b:
        assert a.profile == b.profile
        assert a.tags() == b.tags()


@pytest.mark.bench
def test_a_file_of_more_than_four_gigabytes_reads_back(tmp_path: Path) -> None:
    layer, size = LAYERS["salt_load"], 36_864
    random = np.random.default_rng(1)
    block = random.integers(0, 2**31, (512, 512), dtype=np.int32).view(np.float32)
    block = np.nan_to_num(block, nan=1.0, posinf=2.0, neginf=3.0)
    encoded = encode(block, layer, "deflate", 512)
    (tmp_path / "block.bin").write_bytes(encoded)
    grid = Grid(rasterio.crs.CRS.from_epsg(32740).to_wkt(), (30, 0, 5e5, 0, -30, 6e6), size, size)
    levels = []
    for width, height in [(size, size), *level_sizes(size, size, 512)]:
        count = -(-width // 512) * -(-height // 512)
        ((start, length),) = block_places(encoded).tolist()
        nowhere = np.zeros(count, np.int64)
        place = (nowhere + start, nowhere + length)
        levels.append(Level(width, height, [tmp_path / "block.bin"], nowhere, *place))
    path = tmp_path / "large.tif"
    write_assembled(path, template(grid, layer, "deflate", {}, {}, {}), levels)
    assert path.stat().st_size > 4.3e9
    assert cog_validate(path, strict=True, quiet=True)[0]
    with rasterio.open(path) as dataset:
        for corner in (0, size // 2, size - 512):
            window = rasterio.windows.Window(corner, corner, 512, 512)
            np.testing.assert_array_equal(dataset.read(1, window=window), block)
    assert NODATA not in block
