"""Whole runs over inputs as agencies hold them: degrees, gaps, overlaps, other grids."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pyproj
import pytest
import rasterio
from affine import Affine
from shapely.geometry import box

import regions
import saltrise

WEST, NORTH, CELL = regions.WEST, regions.NORTH, regions.CELL


def full(folder: Path) -> dict[str, dict[str, str]]:
    return {"output": {"folder": str(folder / "out"), "precision": "full"}}


def test_a_grid_in_degrees_weighs_cells_by_true_area_and_conserves(tmp_path: Path) -> None:
    step, left, top = 0.01, 58.0, -36.0
    shape = (60, 40)
    values = regions.fields(shape, np.random.default_rng(3))
    regions.write_fields(tmp_path, values, Affine(step, 0, left, 0, -step, top), "EPSG:4326")
    right, bottom = left + step * shape[1], top - step * shape[0]
    parts = {
        "a": box(left, bottom, left + 0.1234, top),
        "b": box(left + 0.1234, bottom, right, bottom + 0.2222),
        "c": box(left + 0.1234, bottom + 0.2222, right, top),
    }
    regions.write_zones(tmp_path / "zones.gpkg", parts, "EPSG:4326")
    result = saltrise.run(
        regions.write_config(
            tmp_path, regions.tables(tmp_path, zones={"file": "zones.gpkg"}, **full(tmp_path))
        )
    )
    load = result.layer("salt_load")[0].astype(float)
    depth = np.where(values["depth"] == -9999, np.nan, values["depth"])
    geod = pyproj.Geod(ellps="WGS84")
    areas = np.empty(shape)
    for row in range(shape[0]):
        north = top - step * row
        # Parallels are no geodesics; densified edges follow them.
        xs = np.linspace(left, left + step, 50)
        ring = (np.r_[xs, xs[::-1]], np.r_[np.full(50, north), np.full(50, north - step)])
        areas[row] = abs(geod.polygon_area_perimeter(*ring)[0]) / 1e4
    dry = ~load.mask & (depth > 0.001)
    total = float(np.sum(areas[dry] * load.data[dry]))
    zones = result.zones
    # float32 layers carry 6e-8 of rounding each.
    assert zones["salt_load_t_per_year"].sum() == pytest.approx(total, rel=1e-7)
    region = result.record["region"]
    assert zones["salt_load_t_per_year"].sum() == pytest.approx(
        region["salt_load_t_per_year"], rel=1e-9
    )
    assert zones["area_ha"].sum() == pytest.approx(areas.sum(), rel=1e-6)
    for column in ("assessed_ha", "at_surface_ha", "nodata_ha"):
        assert zones[column].sum() == pytest.approx(region[column], rel=1e-9)


def test_gaps_are_nodata_and_overlaps_that_disagree_are_reported(tmp_path: Path) -> None:
    values = regions.fields((40, 50), np.random.default_rng(1))
    values["depth"][:] = 2.0
    regions.write_fields(tmp_path, values)
    left, right = values["depth"][:, :22], values["depth"][:, 18:30].copy()
    right[5, 0] = 3.0
    regions.write_raster(tmp_path / "d_0.tif", left, nodata=-9999)
    regions.write_raster(tmp_path / "d_1.tif", right, regions.place(WEST + 18 * CELL), nodata=-9999)
    last = values["depth"][:, 40:]
    regions.write_raster(tmp_path / "d_2.tif", last, regions.place(WEST + 40 * CELL), nodata=-9999)
    tables = regions.tables(tmp_path, water_table={"depth": "d_*.tif"}, **full(tmp_path))
    result = saltrise.run(regions.write_config(tmp_path, tables))
    layer = result.layer("depth_margin")[0]
    assert layer.shape == (40, 50)
    expected = values["texture"] == 9
    expected[:, 30:40] = True
    np.testing.assert_array_equal(layer.mask, expected)
    told = [text for text in result.record["warnings"] if "d_1.tif" in text]
    assert len(told) == 1
    assert "overlap" in told[0]


@pytest.mark.parametrize("like", ["depth", "salinity", "own"])
def test_the_grid_is_the_one_named(tmp_path: Path, like: str) -> None:
    regions.write_fields(tmp_path, regions.fields((40, 50), np.random.default_rng(1)))
    coarse = regions.fields((10, 12), np.random.default_rng(2))["salinity"]
    place = regions.place(WEST + 15, NORTH - 15, 120.0)
    regions.write_raster(tmp_path / "salinity.tif", coarse, place, nodata=-9999)
    grid = {
        "depth": {"like": "water_table"},
        "salinity": {"like": "salinity.tif"},
        "own": {
            "crs": "EPSG:32740",
            "resolution": 60,
            "bounds": [WEST, NORTH - 900, WEST + 600, NORTH],
        },
    }[like]
    tables = regions.tables(tmp_path, grid=grid)
    result = saltrise.run(regions.write_config(tmp_path, tables))
    expected = {"depth": (40, 50, WEST), "salinity": (10, 12, WEST + 15), "own": (15, 10, WEST)}
    with rasterio.open(result.folder / "layers" / "salt_load.tif") as dataset:
        assert (dataset.height, dataset.width, dataset.transform.c) == expected[like]
    assert set(result.record["alignment"]) >= {"water_table.depth", "groundwater.salinity"}


def test_nodata_by_nan_by_tag_and_by_config(tmp_path: Path) -> None:
    values = regions.fields((40, 50), np.random.default_rng(1))
    values["depth"] = np.where(values["depth"] == -9999, np.nan, values["depth"])
    values["texture"][:] = 3
    values["salinity"][0, 0] = 777
    regions.write_fields(tmp_path, values)
    regions.write_raster(tmp_path / "depth.tif", values["depth"])
    regions.write_raster(tmp_path / "salinity.tif", values["salinity"])
    tables = regions.tables(tmp_path, groundwater={"nodata": 777})
    result = saltrise.run(regions.write_config(tmp_path, tables))
    expected = np.isnan(values["depth"])
    expected[0, 0] = True
    for name in ("salt_load", "hazard_class", "critical_depth"):
        np.testing.assert_array_equal(result.layer(name)[0].mask, expected)
