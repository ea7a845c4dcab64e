"""Two runs of one grid compared."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pytest
import rasterio
from click.testing import CliRunner
from rio_cogeo.cogeo import cog_validate
from shapely.geometry import box

import regions
import saltrise
from saltrise.cli import commands
from saltrise.compare import WITHIN_ERROR, compare
from saltrise.errors import InputError


def write(folder: Path, shift: float, **tables) -> saltrise.Result:
    folder.mkdir(parents=True)
    values = regions.fields((60, 70), np.random.default_rng(6))
    values["depth"] = np.where(values["depth"] == -9999, -9999, values["depth"] + shift).astype(
        "f4"
    )
    regions.write_fields(folder, values)
    west, north = regions.WEST, regions.NORTH
    shapes = {
        "a": box(west, north - 900, west + 700, north),
        "b": box(west, north - 1700, west + 900, north - 400),
    }
    regions.write_zones(folder / "zones.gpkg", shapes)
    output = {"folder": str(folder / "out"), "precision": "full"}
    zones = tables.pop("zones", {"file": "zones.gpkg"})
    content = regions.tables(folder, output=output, **tables)
    return saltrise.run(regions.write_config(folder, content | ({"zones": zones} if zones else {})))


@pytest.fixture(scope="module")
def runs(tmp_path_factory: pytest.TempPathFactory) -> tuple[saltrise.Result, saltrise.Result]:
    folder = tmp_path_factory.mktemp("compare")
    return write(folder / "a", 0.0), write(folder / "b", -0.3, hazard={"target_load": 3.0})


def read(path: Path) -> np.ma.MaskedArray:
    with rasterio.open(path) as dataset:
        return dataset.read(1, masked=True)


def test_layers_are_the_second_minus_the_first(runs, tmp_path: Path) -> None:
    one, other = runs
    found = compare(one.folder, other.folder, tmp_path / "change")
    for name in ("salt_load", "depth_margin"):
        change = read(tmp_path / "change/layers" / f"{name}_change.tif")
        expected = other.layer(name)[0].astype("f8") - one.layer(name)[0]
        np.testing.assert_array_equal(change.mask, expected.mask)
        np.testing.assert_allclose(change.compressed(), expected.compressed(), rtol=1e-6, atol=1e-6)
    classes = [r.layer("hazard_class")[0].astype(int) for r in runs]
    change = read(tmp_path / "change/layers/hazard_class_change.tif")
    np.testing.assert_array_equal(change.filled(99), (classes[1] - classes[0]).filled(99))
    assert cog_validate(tmp_path / "change/layers/salt_load_change.tif", quiet=True)[0]
    assert found.load_t_per_year[1] > found.load_t_per_year[0]


def test_transitions_add_up_to_the_zone_tables(runs, tmp_path: Path) -> None:
    one, other = runs
    compare(one.folder, other.folder, tmp_path / "change")
    with (tmp_path / "change/class_transitions.csv").open(encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert list(rows[0]) == ["zone_id", "name", "from_class", "to_class", "area_ha"]
    columns = {
        1: "very_low_ha",
        3: "moderate_ha",
        5: "very_high_ha",
        6: "at_surface_ha",
        0: "nodata_ha",
    }
    for side, result in (("from_class", one), ("to_class", other)):
        for zone in ("a", "b"):
            for number, column in columns.items():
                area = sum(
                    float(r["area_ha"])
                    for r in rows
                    if r["zone_id"] == zone and int(r[side]) == number
                )
                table = result.zones.set_index("zone_id")
                assert area == pytest.approx(table.loc[zone, column], rel=1e-9, abs=1e-9)


def test_depths_within_their_error_are_a_class_of_their_own(runs, tmp_path: Path) -> None:
    one, other = runs
    compare(one.folder, other.folder, tmp_path / "within", 0.4)
    change = read(tmp_path / "within/layers/hazard_class_change.tif")
    assert set(np.unique(change.compressed())) == {WITHIN_ERROR}
    compare(one.folder, other.folder, tmp_path / "beyond", 0.2)
    assert WITHIN_ERROR not in read(tmp_path / "beyond/layers/hazard_class_change.tif").compressed()


def test_the_command_says_what_differs(runs, tmp_path: Path) -> None:
    one, other = (str(r.folder) for r in runs)
    found = CliRunner().invoke(commands, ["diff", one, other, "--out", str(tmp_path / "change")])
    assert found.exit_code == 0, found.output
    assert "config hazard.target_load: was 2.0, is 3.0" in found.output
    assert "input depth.tif changed" in found.output
    report = (tmp_path / "change/report.txt").read_text("utf-8")
    assert report in found.output
    same = CliRunner().invoke(commands, ["diff", one, one, "--out", str(tmp_path / "same")])
    assert "same settings, inputs and software" in same.output
    assert not read(tmp_path / "same/layers/salt_load_change.tif").any()


def test_without_zones_the_region_is_one(tmp_path: Path) -> None:
    one, other = write(tmp_path / "a", 0.0, zones=None), write(tmp_path / "b", 0.5, zones=None)
    compare(one.folder, other.folder, tmp_path / "change")
    with (tmp_path / "change/class_transitions.csv").open(encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert {row["zone_id"] for row in rows} == {"region"}
    total = sum(float(row["area_ha"]) for row in rows)
    assert total == pytest.approx(60 * 70 * 900 / 1e4, rel=2e-3)


def test_what_cannot_be_compared(runs, tmp_path: Path) -> None:
    one, other = runs
    small = saltrise.run(
        regions.small_region(tmp_path, (20, 20), output={"folder": str(tmp_path / "small")})
    )
    with pytest.raises(InputError, match="its grid does not match"):
        compare(one.folder, small.folder, tmp_path / "change")
    assert not list(tmp_path.glob("change*"))
    with pytest.raises(InputError, match=r"no folder of a finished run"):
        compare(one.folder, tmp_path, tmp_path / "change")
    (tmp_path / "there").mkdir()
    with pytest.raises(InputError, match="exists already"):
        compare(one.folder, other.folder, tmp_path / "there")


def test_a_run_without_the_layers(tmp_path: Path) -> None:
    output = {"layers": ["salt_load"], "folder": str(tmp_path / "out")}
    alone = saltrise.run(regions.small_region(tmp_path, output=output))
    with pytest.raises(InputError, match=r"depth_margin\.tif: cannot be read; a comparison needs"):
        compare(alone.folder, alone.folder, tmp_path / "change")
