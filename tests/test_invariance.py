"""The same answer however a region is cut, on however many workers."""

from __future__ import annotations

import hashlib
import tempfile
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import rasterio
from hypothesis import HealthCheck, Phase, given, settings
from hypothesis import strategies as st
from shapely.geometry import Polygon, box

import regions
import runs
import saltrise
from saltrise.engine.config import read_settings


@pytest.fixture(autouse=True)
def _fixed_date(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1767225600")


def hashes(folder: Path) -> dict[str, str]:
    """SHA-256 of every file of a finished run but the record, which names the folder."""
    files = sorted(p for p in folder.rglob("*") if p.is_file() and p.name != "run.json")
    return {
        p.relative_to(folder).as_posix(): hashlib.sha256(p.read_bytes()).hexdigest() for p in files
    }


def run(
    folder: Path,
    name: str,
    tile: int,
    workers: int,
    scheduler: str = "threads",
    block: int = 16,
    told: Callable[[Path], dict[str, str]] = hashes,
    **tables,
) -> dict[str, str]:
    output = {"folder": str(folder / name)} | tables.pop("output", {})
    content = regions.tables(folder, zones={"file": "zones.gpkg"}, output=output, **tables)
    config = regions.write_config(folder, content, name)
    found = read_settings(config)
    # Tests cut smaller blocks than a config may ask for.
    table = found.run.model_copy(update={"tile": tile, "workers": workers, "scheduler": scheduler})
    found = type(found)(
        found.tables.model_copy(update={"run": table}), found.source, found.base, found.lines
    )
    return told(saltrise.run(found, block=block).folder)


def stars(random: np.random.Generator, size: float) -> dict[str, Polygon]:
    zones = {}
    for k in range(4):
        angle = np.sort(random.uniform(0, 2 * np.pi, 9))
        radius = random.uniform(0.05, 0.6, 9) * size
        x = regions.WEST + random.uniform(0, size) + radius * np.cos(angle)
        y = regions.NORTH - random.uniform(0, size) + radius * np.sin(angle)
        zones[f"z{k}"] = Polygon(zip(x, y, strict=True))
    # One that surely meets the region, however narrow that is.
    corner = (regions.WEST + 100, regions.NORTH - 400)
    return zones | {"corner": box(*corner, corner[0] + 210, corner[1] + 310)}


@settings(
    max_examples=8, deadline=None, phases=[Phase.generate], suppress_health_check=list(HealthCheck)
)
@given(
    st.integers(0, 1000),
    st.integers(17, 90),
    st.integers(17, 90),
    st.sampled_from([16, 32, 48, 64]),
    st.integers(1, 3),
    st.booleans(),
)
def test_any_tile_and_any_workers_give_the_same_bytes(
    seed: int, width: int, height: int, tile: int, workers: int, warped: bool
) -> None:
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        random = np.random.default_rng(seed)
        regions.write_fields(folder, regions.fields((height, width), random))
        if warped:
            shift = regions.place(regions.WEST - 55, regions.NORTH + 70, 41.0)
            values = regions.fields((height, width), random)
            regions.write_raster(folder / "salinity.tif", values["salinity"], shift, nodata=-9999)
            regions.write_raster(folder / "texture.tif", values["texture"], shift, nodata=0)
        regions.write_zones(folder / "zones.gpkg", stars(random, 30.0 * max(width, height)))
        whole = run(folder, "whole", tile=96, workers=1)
        assert run(folder, "cut", tile=tile, workers=workers) == whole


def test_processes_give_the_same_bytes_as_threads(tmp_path: Path) -> None:
    random = np.random.default_rng(2)
    regions.write_fields(tmp_path, regions.fields((40, 70), random))
    regions.write_zones(tmp_path / "zones.gpkg", stars(random, 2000.0))
    threads = run(tmp_path, "threads", tile=32, workers=2)
    assert run(tmp_path, "processes", tile=32, workers=2, scheduler="processes") == threads


@pytest.mark.parametrize("assembly", ["copy", "gdal"])
def test_real_tiles_of_512_1024_2048_give_the_same_bytes(tmp_path: Path, assembly: str) -> None:
    random = np.random.default_rng(4)
    regions.write_fields(tmp_path, regions.fields((1100, 1300), random))
    regions.write_zones(tmp_path / "zones.gpkg", stars(random, 30_000.0))
    found = [
        run(tmp_path, f"t{tile}w{workers}", tile, workers, block=512, output={"assembly": assembly})
        for tile, workers in ((512, 1), (1024, 2), (2048, 1))
    ]
    assert found[0] == found[1] == found[2]


def test_a_mosaic_of_tiles_is_the_raster(tmp_path: Path) -> None:
    random = np.random.default_rng(6)
    values = regions.fields((50, 60), random)
    regions.write_fields(tmp_path, values)
    regions.write_zones(tmp_path / "zones.gpkg", stars(random, 1800.0))
    whole = run(tmp_path, "whole", tile=32, workers=1, told=runs.data)
    for i, rows in enumerate((slice(0, 23), slice(23, 50))):
        for j, cols in enumerate((slice(0, 17), slice(17, 60))):
            corner = regions.place(regions.WEST + 30 * cols.start, regions.NORTH - 30 * rows.start)
            regions.write_raster(
                tmp_path / f"part_{i}{j}.tif", values["depth"][rows, cols], corner, nodata=-9999
            )
    mosaic = {"depth": "part_*.tif"}
    assert run(tmp_path, "parts", 32, 1, told=runs.data, water_table=mosaic) == whole


def test_the_assembled_layer_holds_what_gdals_own_driver_writes(tmp_path: Path) -> None:
    random = np.random.default_rng(7)
    regions.write_fields(tmp_path, regions.fields((700, 1100), random))
    regions.write_zones(tmp_path / "zones.gpkg", stars(random, 30_000.0))
    for way in ("copy", "gdal"):
        run(tmp_path, way, 512, 2, block=512, output={"assembly": way})
    for path in sorted((tmp_path / "copy" / "layers").glob("*.tif")):
        with (
            rasterio.open(path) as ours,
            rasterio.open(tmp_path / "gdal" / "layers" / path.name) as theirs,
        ):
            np.testing.assert_array_equal(ours.read(1), theirs.read(1))
            assert ours.profile == theirs.profile
            assert ours.overviews(1) == theirs.overviews(1)
            dropped = {"OVR_RESAMPLING_ALG"}
            assert ours.tags() == {k: v for k, v in theirs.tags().items() if k not in dropped}
            assert ours.tags(1) == theirs.tags(1)
            assert ours.descriptions == theirs.descriptions
            assert ours.units == theirs.units
            assert ours.colorinterp == theirs.colorinterp
            if path.stem == "hazard_class":
                assert ours.colormap(1) == theirs.colormap(1)
