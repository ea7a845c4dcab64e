"""One cell by hand: the same numbers as the layers, with where they come from."""

from __future__ import annotations

import csv
import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import rasterio
from rasterio.warp import transform

import reference
import regions
import saltrise
from saltrise.errors import InputError
from saltrise.explain import Explainer
from saltrise.explain_text import describe

LAYERS = ("max_evaporation", "evaporation", "salt_load", "critical_depth", "depth_margin")


@pytest.fixture(scope="module")
def region(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A region with a warped salinity raster, run once."""
    folder = tmp_path_factory.mktemp("explain")
    regions.write_fields(folder, regions.fields((40, 50), np.random.default_rng(1)))
    coarse = regions.fields((12, 15), np.random.default_rng(2))["salinity"]
    place = regions.place(regions.WEST - 20, regions.NORTH + 20, 130.0)
    regions.write_raster(folder / "salinity.tif", coarse, place, nodata=-9999)
    config = regions.write_config(folder, regions.tables(folder))
    saltrise.run(config)
    return config


def centre(row: int, col: int) -> tuple[float, float]:
    return regions.WEST + 30 * (col + 0.5), regions.NORTH - 30 * (row + 0.5)


def test_every_cell_equals_its_layers(region: Path) -> None:
    explainer = Explainer(region)
    layers = {}
    for path in (region.parent / "out" / "layers").glob("*.tif"):
        with rasterio.open(path) as dataset:
            layers[path.stem] = dataset.read(1)
    random = np.random.default_rng(3)
    masked = 0
    for row, col in zip(random.integers(0, 40, 150), random.integers(0, 50, 150), strict=True):
        answer = explainer.at(*centre(int(row), int(col)))
        assert (answer["row"], answer["column"]) == (row, col)
        if layers["hazard_class"][row, col] == 0:
            masked += 1
            assert answer["masked"]
            assert "salt_load" not in answer
            continue
        assert answer["hazard_class"] == layers["hazard_class"][row, col]
        for name in LAYERS:
            assert answer[name] == layers[name][row, col]
    assert masked > 5


def test_the_numbers_follow_by_hand(region: Path) -> None:
    explainer = Explainer(region)
    answers = [explainer.at(*centre(row, row + 3)) for row in range(40)]
    answers = [a for a in answers if "masked" not in a and a["depth_m"] > 0.05]
    assert len(answers) > 20
    for answer in answers:
        inputs = {role: found["value"] for role, found in answer["inputs"].items()}
        tds = inputs["salinity"] * 0.64
        assert answer["tds_g_per_l"] == pytest.approx(tds, rel=1e-12)
        expected = reference.cell(
            inputs["depth"], answer["texture"], tds, inputs["potential_evaporation"] / 365, 2.0
        )
        assert answer["max_evaporation_exact"] == pytest.approx(
            expected["max_evaporation"], rel=1e-8
        )
        # Rounding to 12 mantissa bits and the rise curve.
        assert answer["salt_load"] == pytest.approx(expected["salt_load"], rel=2.3e-4)
        assert answer["closed_form_over_exact"] > 1
        assert answer["parameters"]["source"].startswith("Rawls")
        assert answer["limited_by"] in ("soil", "evaporative demand")


def test_inputs_tell_file_and_pixel_or_how_they_were_warped(region: Path) -> None:
    found = Explainer(region).at(*centre(7, 11))["inputs"]
    assert found["depth"]["file"].endswith("depth.tif")
    assert (found["depth"]["pixel_column"], found["depth"]["pixel_row"]) == (11, 7)
    assert found["salinity"]["method"] == "bilinear"
    assert (found["salinity"]["unit"], found["salinity"]["key"]) == ("dS/m", "groundwater.salinity")


def test_a_point_in_another_crs(region: Path) -> None:
    x, y = centre(7, 11)
    lon, lat = transform(regions.CRS, "EPSG:4326", [x], [y])
    explainer = Explainer(region)
    there, here = explainer.at(lon[0], lat[0], "EPSG:4326"), explainer.at(x, y)
    assert (there["row"], there["column"]) == (7, 11)
    assert there["inputs"] == here["inputs"]


def test_points_off_the_grid_and_foreign_crs(region: Path) -> None:
    explainer = Explainer(region)
    with pytest.raises(InputError, match="lies off the grid: column 50, row 3 of 50 x 40 cells"):
        explainer.at(*centre(3, 50))
    with pytest.raises(InputError, match="is no coordinate reference system"):
        explainer.at(0, 0, "EPSG:nothing")


def test_the_text_shows_equation_and_sources(region: Path) -> None:
    explainer = Explainer(region)
    answers = [explainer.at(*centre(row, 5)) for row in range(40)]
    text = describe(next(a for a in answers if a.get("limited_by") == "soil"))
    for words in (
        "pixel column 5",
        "L = integral from 0 to infinity",
        "closed form",
        "Rawls et al. 1982",
        "Evaporative demand",
        "t/ha/year = mm/year x",
        "Hazard class",
    ):
        assert words in text


def call(*arguments: str) -> subprocess.CompletedProcess[str]:
    script = "from saltrise.cli import main; main()"
    return subprocess.run(
        [sys.executable, "-c", script, "explain", *arguments],
        capture_output=True,
        text=True,
        check=False,
    )


def test_the_command_line(region: Path, tmp_path: Path) -> None:
    points = tmp_path / "points.csv"
    with points.open("w", newline="") as file:
        writer = csv.writer(file)
        writer.writerow(["name", "x", "y"])
        writer.writerows([["a", *centre(7, 11)], ["b", *centre(8, 12)]])
    done = call(str(region), "--points", str(points), "--json")
    answers = [json.loads(line) for line in done.stdout.splitlines()]
    assert [(a["row"], a["column"]) for a in answers] == [(7, 11), (8, 12)]
    told = [call(str(region), "--at", *map(str, centre(*cell))) for cell in ((7, 11), (8, 12))]
    assert "No answer: no value in water_table.depth" in told[0].stdout
    assert "Salt load" in told[1].stdout
    assert call(str(region), "--at", "0", "0").returncode == 2
    assert call(str(region)).returncode == 2
    points.write_text("x,y\n1,two\n")
    wrong = call(str(region), "--points", str(points))
    assert wrong.returncode == 2
    assert "points.csv:2:" in wrong.stderr
