"""Regions whose soil is fractions of sand and clay, cell by cell."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner

import regions
import runs
import saltrise
from saltrise.cli import commands
from saltrise.errors import InputError
from saltrise.explain import Explainer
from saltrise.physics.column import Column
from saltrise.physics.fraction_soils import profile_of_fractions

SHAPE = (30, 36)
METHODS = {
    "cosby1984": {},
    "saxton-rawls2006": {"organic_matter": "organic.tif"},
    "campbell1985": {"bulk_density": "density.tif"},
}


def write(folder: Path, soil: dict, **tables) -> Path:
    folder.mkdir(exist_ok=True, parents=True)
    random = np.random.default_rng(9)
    regions.write_fields(folder, regions.fields(SHAPE, random))
    clay = random.uniform(4, 56, SHAPE)
    sand = np.clip(random.uniform(0.08, 1, SHAPE) * (100 - clay), 7, 91)
    sand[3, 4:8] = -9999
    for name, values in {
        "sand": sand,
        "clay": clay,
        "organic": random.uniform(0.5, 5, SHAPE),
        "density": random.uniform(1.1, 1.7, SHAPE),
        "silt": np.where(
            sand < 0, -9999, np.maximum(100 - sand - clay + random.uniform(-1, 1, SHAPE), 0)
        ),
    }.items():
        regions.write_raster(folder / f"{name}.tif", values.astype(np.float32), nodata=-9999)
    base = {
        "texture": None,
        "parameters": None,
        "sand": "sand.tif",
        "clay": "clay.tif",
        "unit": "%",
    }
    output = {"folder": str(folder / "out"), "precision": "full"} | tables.pop("output", {})
    content = regions.tables(folder, soil=base | soil, output=output, **tables)
    del content["soil.classes"]
    return regions.write_config(folder, content)


def read(path: Path) -> np.ma.MaskedArray:
    import rasterio

    with rasterio.open(path) as dataset:
        return dataset.read(1, masked=True).astype(np.float64)


@pytest.mark.parametrize("roots", [False, True])
@pytest.mark.parametrize("method", METHODS)
def test_cells_against_the_solver(tmp_path: Path, method: str, roots: bool) -> None:
    tables = {"root_zone": {"depth": 0.25, "suction": 5.0}} if roots else {}
    config = write(tmp_path, {"method": method} | METHODS[method], **tables)
    result = saltrise.run(config)
    most = result.layer("max_evaporation")[0]
    masked = np.ma.getmaskarray(most)
    assert masked[3, 4:8].all()
    maps = {n: read(tmp_path / f"{n}.tif") for n in ("depth", "sand", "clay", "organic", "density")}
    places = np.argwhere(~masked)
    for row, col in np.random.default_rng(1).permutation(places)[:30]:
        given = {role: float(maps[role][row, col]) for role in ("sand", "clay")}
        extra = {"organic_matter": maps["organic"], "bulk_density": maps["density"]}
        given |= {role: float(values[row, col]) for role, values in extra.items()}
        soil = profile_of_fractions(method, given)
        column = Column((soil,), (), 5.0) if roots else soil
        rise = max(maps["depth"][row, col] - (0.25 if roots else 0.0), 0.001)
        exact = column.evaporation(np.array([rise]))[0][0]
        assert most[row, col] == pytest.approx(exact, rel=1e-4, abs=1e-6)
    assert result.record["parameters"]["set"] == method


@pytest.mark.parametrize("method", METHODS)
def test_explain_equals_the_layers(tmp_path: Path, method: str) -> None:
    config = write(tmp_path, {"method": method} | METHODS[method])
    result = saltrise.run(config)
    explainer = Explainer(config)
    valid = np.argwhere(~np.ma.getmaskarray(result.layer("salt_load")[0]))
    for row, col in valid[::200]:
        x, y = regions.WEST + 30 * (col + 0.5), regions.NORTH - 30 * (row + 0.5)
        answer = explainer.at(x, y)
        for name in ("max_evaporation", "salt_load", "critical_depth", "depth_margin"):
            assert answer[name] == result.layer(name)[0][row, col]
        assert answer["max_evaporation_exact"] == pytest.approx(answer["max_evaporation"], rel=1e-4)
    found = CliRunner().invoke(commands, ["explain", str(config), "--at", str(x), str(y)])
    assert f"set {method}" in found.output


def test_tiles_do_not_matter(tmp_path: Path) -> None:
    config = write(tmp_path, {"method": "saxton-rawls2006", "organic_matter": 2.5})
    one = runs.run_small(config, tile=16).layer("salt_load")[0].filled()
    other = runs.run_small(config, tile=32, workers=2, force=True).layer("salt_load")[0].filled()
    np.testing.assert_array_equal(one, other)


def test_units_and_a_third_fraction(tmp_path: Path) -> None:
    percent = saltrise.run(write(tmp_path / "percent", {"method": "cosby1984"}))
    config = write(tmp_path / "per_mille", {"method": "cosby1984", "unit": "g/kg"})
    for name in ("sand", "clay"):
        values = read(tmp_path / "per_mille" / f"{name}.tif") * 10
        path = tmp_path / "per_mille" / f"{name}.tif"
        regions.write_raster(path, values.filled(-9999).astype(np.float32), nodata=-9999)
    per_mille = saltrise.run(config)
    one, other = (r.layer("salt_load")[0] for r in (percent, per_mille))
    np.testing.assert_allclose(one.filled(1), other.filled(1), rtol=1e-4)
    # A sum within 2 % of 100 is scaled to 100.
    silt = saltrise.run(write(tmp_path / "silt", {"method": "cosby1984", "silt": "silt.tif"}))
    assert not np.array_equal(silt.layer("salt_load")[0].filled(), one.filled())


def test_outside_the_range_is_clamped_counted_and_told(tmp_path: Path) -> None:
    config = write(tmp_path, {"method": "cosby1984"})
    sand, clay = (read(tmp_path / f"{n}.tif").filled(-9999) for n in ("sand", "clay"))
    sand[10, :6], clay[10, :6] = 96.0, 1.0
    regions.write_raster(tmp_path / "sand.tif", sand.astype(np.float32), nodata=-9999)
    regions.write_raster(tmp_path / "clay.tif", clay.astype(np.float32), nodata=-9999)
    result = saltrise.run(config)
    assert result.record["counts_cells"]["outside_range"] == 6
    text = next(t for t in result.record["warnings"] if t.startswith("soil.method"))
    assert "6 cells lie outside the range of cosby1984 (sand 6 to 92 %, clay 3 to 58 %)" in text


def test_numbers_for_the_whole_region(tmp_path: Path) -> None:
    soil = {"method": "campbell1985", "bulk_density": 1.4, "sand": 40, "clay": 20}
    result = saltrise.run(write(tmp_path, soil))
    assert result.layer("salt_load")[0].count() > 0.9 * SHAPE[0] * SHAPE[1]


def test_check_names_the_method(tmp_path: Path) -> None:
    config = write(tmp_path, {"method": "cosby1984"})
    found = CliRunner().invoke(commands, ["check", str(config)])
    assert found.exit_code == 0, found.output
    assert "Soil from fractions, cell by cell: cosby1984" in found.output


def test_impossible_fractions(tmp_path: Path) -> None:
    config = write(tmp_path, {"method": "cosby1984"})
    sand = read(tmp_path / "sand.tif").filled(-9999)
    sand[7, 9] = 99.0
    regions.write_raster(tmp_path / "sand.tif", sand.astype(np.float32), nodata=-9999)
    with pytest.raises(
        InputError, match=r"soil\.sand: fractions that cannot be in 1 cells .*row 7"
    ):
        saltrise.run(config)


@pytest.mark.parametrize(
    ("soil", "message"),
    [
        ({"method": "saxton-rawls2006"}, r"soil\.organic_matter: missing; method"),
        ({"method": "campbell1985"}, r"soil\.bulk_density: missing; method"),
        ({"method": "cosby1984", "bulk_density": 1.3}, r"soil\.bulk_density: goes with method"),
        (
            {"method": "cosby1984", "parameters": "rawls1982"},
            r"soil\.parameters: goes with texture",
        ),
        ({"method": "cosby", "unit": "%"}, r"did you mean 'cosby1984'"),
        ({"method": "campbell1985", "bulk_density": -1}, "bulk_density.*must be 0 or more"),
    ],
)
def test_settings_that_cannot_be(tmp_path: Path, soil: dict, message: str) -> None:
    with pytest.raises(InputError, match=message):
        saltrise.run(write(tmp_path, soil))


def test_response_time_needs_classes(tmp_path: Path) -> None:
    config = write(tmp_path, {"method": "cosby1984"}, output={"layers": ["response_time"]})
    with pytest.raises(InputError, match=r"response_time.*method 'cosby1984' does not give"):
        saltrise.run(config)
