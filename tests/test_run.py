"""The whole job, against the brute-force reference and the contract of its outputs."""

from __future__ import annotations

import csv
import json
from functools import cache
from pathlib import Path

import geopandas
import numpy as np
import pytest
import rasterio
import tifffile
from rio_cogeo.cogeo import cog_validate
from shapely.geometry import box

import reference
import regions
import saltrise
from saltrise.engine.workdir import KNOWN
from saltrise.layers import BASIC, LAYERS

SHAPE = (23, 31)


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("run")
    config = regions.small_region(
        folder, SHAPE, zones={"file": "zones.gpkg"}, output={"precision": "full"}
    )
    west, north, cell = regions.WEST, regions.NORTH, regions.CELL
    regions.write_zones(
        folder / "zones.gpkg",
        {
            "a": box(west, north - 12 * cell, west + 20.5 * cell, north),
            "b": box(west + 20.5 * cell, north - 30 * cell, west + 31 * cell, north),
        },
    )
    return saltrise.run(config, block=16).folder


def layer(folder: Path, name: str) -> np.ndarray:
    with rasterio.open(folder / "layers" / f"{name}.tif") as dataset:
        return dataset.read(1)


@cache
def expected() -> dict[str, np.ndarray]:
    values = regions.fields(SHAPE, np.random.default_rng(1))
    texture = np.array(
        [[regions.CODES[c] for c in row] for row in values["texture"].tolist()], dtype=object
    )
    texture[texture == "not soil"] = None
    depth = np.where(values["depth"] == -9999, np.nan, values["depth"]).astype(float)
    tds = values["salinity"].astype(float) * 0.64
    return reference.region(depth, texture, tds, values["demand"].astype(float) / 365, 2.0)


def test_every_cell_of_every_layer_equals_the_reference(finished: Path) -> None:
    for name, wanted in expected().items():
        # Curves are within 1e-5 of exact; a margin is a difference of depths of metres.
        np.testing.assert_allclose(
            layer(finished, name), wanted, rtol=1e-5, atol=1e-4, err_msg=name
        )


def test_rounded_layers_are_within_the_contracted_precision(tmp_path: Path) -> None:
    folder = saltrise.run(regions.small_region(tmp_path, SHAPE)).folder
    for name, wanted in expected().items():
        if name != "depth_margin":
            np.testing.assert_allclose(layer(folder, name), wanted, rtol=2.3e-4, err_msg=name)


@pytest.mark.parametrize("name", BASIC)
def test_layers_are_valid_cogs_with_unit_description_nodata_and_statistics(
    finished: Path, name: str
) -> None:
    path = finished / "layers" / f"{name}.tif"
    assert cog_validate(str(path), strict=True) == (True, [], [])
    values = layer(finished, name)
    with rasterio.open(path) as dataset:
        assert dataset.units == (LAYERS[name].unit,)
        assert dataset.descriptions == (LAYERS[name].meaning,)
        assert dataset.nodata == LAYERS[name].nodata
        tags, overviews = dataset.tags(1), dataset.overviews(1)
        colours = dataset.colormap(1) if name == "hazard_class" else None
        assert "bare soil" in dataset.tags()["USE_LIMITS"]
    valid = values[values != LAYERS[name].nodata].astype(np.float64)
    assert float(tags["STATISTICS_MINIMUM"]) == valid.min()
    assert float(tags["STATISTICS_MAXIMUM"]) == valid.max()
    assert float(tags["STATISTICS_MEAN"]) == pytest.approx(valid.mean(), rel=1e-12)
    assert float(tags["STATISTICS_STDDEV"]) == pytest.approx(valid.std(), rel=1e-9)
    assert overviews == [2]
    np.testing.assert_array_equal(tifffile.imread(path), values)
    if colours is not None:
        assert colours[5] == (0x99, 0x34, 0x04, 255)


def test_zone_rows_equal_the_reference(finished: Path) -> None:
    with (finished / "zones.csv").open(newline="") as file:
        rows = {row["zone_id"]: row for row in csv.DictReader(file)}
    wanted = expected()
    # Zone a: columns 0 to 20.5, rows 0 to 12; near the central meridian all cells are alike.
    weight = np.zeros(SHAPE)
    weight[:12, :20] = 1.0
    weight[:12, 20] = 0.5
    classes = wanted["hazard_class"]
    assessed = (classes >= 1) & (classes <= 5)
    load = (wanted["salt_load"] * weight)[assessed].sum() / (weight[assessed].sum())
    row = rows["a"]
    assert float(row["salt_load_mean_t_per_ha_per_year"]) == pytest.approx(load, rel=1e-6)
    share = (weight * assessed).sum() / weight.sum()
    assert float(row["assessed_share"]) == pytest.approx(share, rel=1e-6)
    parts = ("assessed_ha", "at_surface_ha", "nodata_ha", "outside_ha")
    for row in rows.values():
        assert sum(float(row[p]) for p in parts) == pytest.approx(float(row["area_ha"]), rel=1e-6)


def test_zone_layer_and_table_say_the_same(finished: Path) -> None:
    frame = geopandas.read_file(finished / "zones.gpkg", layer="zones")
    with (finished / "zones.csv").open(newline="") as file:
        rows = list(csv.DictReader(file))
    assert list(frame.columns[:-1]) == list(rows[0])
    for row, (_, other) in zip(rows, frame.iterrows(), strict=True):
        for column, text in row.items():
            if text == "":
                assert other[column] != other[column] or other[column] is None
            elif column in ("zone_id", "name"):
                assert other[column] == text
            else:
                assert float(text) == float(other[column])


def test_the_record_tells_inputs_parameters_counts_and_limits(finished: Path) -> None:
    record = json.loads((finished / "run.json").read_text("utf-8"))
    assert {entry["file"] for entry in record["inputs"]} == {
        "depth.tif",
        "texture.tif",
        "salinity.tif",
        "demand.tif",
        "zones.gpkg",
    }
    assert all(len(entry["sha256"]) == 64 for entry in record["inputs"])
    counts = record["counts_cells"]
    masked = sum(v for k, v in counts.items() if k.startswith("no"))
    assert counts["cells"] == SHAPE[0] * SHAPE[1]
    assert counts["assessed"] + counts["at_surface"] + masked == counts["cells"]
    classes = expected()["hazard_class"]
    assert counts["at_surface"] == (classes == 6).sum()
    assert {row["texture"] for row in record["parameters"]["classes"]} == {
        "sand",
        "sandy loam",
        "loam",
        "clay",
    }
    assert all("Rawls" in row["source"] for row in record["parameters"]["classes"])
    assert "run" not in record["config"]
    assert not any("second" in key for key in record)


def test_only_finished_things_are_left(finished: Path) -> None:
    assert {p.name for p in finished.iterdir()} <= KNOWN
    assert sorted(p.name for p in finished.parent.glob("out*")) == ["out"]


def test_chosen_layers_only(tmp_path: Path) -> None:
    config = regions.small_region(tmp_path, output={"layers": ["salt_load"]})
    folder = saltrise.run(config).folder
    assert [p.name for p in (folder / "layers").glob("*.tif")] == ["salt_load.tif"]


UNITS = [
    ({"water_table": {"unit": "cm"}}, {"depth": 100.0}),
    ({"water_table": {"unit": "ft"}}, {"depth": 1 / 0.3048}),
    ({"groundwater": {"unit": "uS/cm"}}, {"salinity": 1000.0}),
    ({"groundwater": {"unit": "mS/cm"}}, {}),
    ({"groundwater": {"unit": "mg/L"}}, {"salinity": 640.0}),
    ({"groundwater": {"unit": "g/L"}}, {"salinity": 0.64}),
    ({"climate": {"unit": "mm/day"}}, {"demand": 1 / 365}),
    ({"climate": {"coefficient": 0.5}}, {"demand": 2.0}),
]


@pytest.mark.parametrize(("tables", "factors"), UNITS)
def test_the_same_region_in_other_units_has_the_same_answer(tmp_path, tables, factors) -> None:
    values = regions.fields(SHAPE, np.random.default_rng(1))
    for name, factor in factors.items():
        scaled = np.where(values[name] == -9999, -9999, values[name].astype(float) * factor)
        values[name] = scaled
    regions.write_fields(tmp_path, values)
    config = regions.write_config(
        tmp_path, regions.tables(tmp_path, output={"precision": "full"}, **tables)
    )
    folder = saltrise.run(config).folder
    for name, wanted in expected().items():
        np.testing.assert_allclose(layer(folder, name), wanted, rtol=1e-5, atol=1e-4, err_msg=name)


def test_depth_as_ground_minus_elevation(tmp_path: Path) -> None:
    config = regions.small_region(
        tmp_path,
        SHAPE,
        output={"precision": "full"},
        water_table={
            "depth": None,
            "elevation": "level.tif",
            "ground": 250.0,
            "ground_accuracy": 0.2,
        },
    )
    depth = regions.fields(SHAPE, np.random.default_rng(1))["depth"].astype(float)
    level = np.where(depth == -9999, -9999, 250.0 - depth)
    regions.write_raster(tmp_path / "level.tif", level, nodata=-9999)
    folder = saltrise.run(config).folder
    for name, wanted in expected().items():
        np.testing.assert_allclose(layer(folder, name), wanted, rtol=1e-5, atol=1e-4, err_msg=name)


def test_numbers_stand_for_rasters_of_that_number(tmp_path: Path) -> None:
    ones = {n: np.full(SHAPE, v, np.float32) for n, v in (("salinity", 4.0), ("demand", 1500.0))}
    values = regions.fields(SHAPE, np.random.default_rng(1)) | ones
    regions.write_fields(tmp_path, values)
    rasters = saltrise.run(regions.write_config(tmp_path, regions.tables(tmp_path))).folder
    numbers = regions.write_config(
        tmp_path,
        regions.tables(
            tmp_path,
            groundwater={"salinity": 4.0},
            climate={"potential_evaporation": 1500.0},
            output={"folder": str(tmp_path / "numbers")},
        ),
        "numbers",
    )
    numbers = saltrise.run(numbers).folder
    for name in BASIC:
        np.testing.assert_array_equal(layer(rasters, name), layer(numbers, name))


def test_a_mapping_runs_and_the_result_opens(tmp_path: Path, monkeypatch) -> None:
    regions.small_region(tmp_path, SHAPE)
    monkeypatch.chdir(tmp_path)
    tables = regions.tables(tmp_path)
    tables["soil"]["classes"] = tables.pop("soil.classes")
    result = saltrise.run(tables)
    values, transform = result.layer("salt_load")
    assert values.shape == SHAPE
    assert transform == regions.place()
    with pytest.raises(FileNotFoundError, match="no \\[zones\\]"):
        _ = result.zones
