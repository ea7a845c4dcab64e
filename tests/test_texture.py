"""Texture classes from fractions: the rules' edges, the whole triangle, and whole runs."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pedotri
import pytest

import regions
import saltrise
from saltrise.errors import InputError
from saltrise.physics.soils import TEXTURES
from saltrise.physics.texture import fractions_in_percent, texture_class


def name_of(sand: float, clay: float) -> str:
    return TEXTURES[int(texture_class(np.array([sand]), np.array([clay]))[0])]


def test_every_percent_of_the_triangle_has_a_class() -> None:
    sand, clay = np.meshgrid(np.arange(101.0), np.arange(101.0))
    inside = sand + clay <= 100
    classes = texture_class(sand[inside], clay[inside])
    assert np.isfinite(classes).all()
    assert len(np.unique(classes)) == 12


def test_classes_inside_the_triangle_equal_pedotri() -> None:
    # Points a third of a percent off every edge, which all lie on whole percents or halves.
    sand, clay = np.meshgrid(np.arange(0.31, 100, 1.0), np.arange(0.17, 100, 1.0))
    inside = sand + clay < 99.9
    sand, clay = sand[inside], clay[inside]
    theirs = pedotri.classify(sand, clay, "USDA")
    ours = [TEXTURES[int(k)].replace(" ", "_") for k in texture_class(sand, clay)]
    assert ours == [str(key).replace(" ", "_").replace("-", "_") for key in theirs]


@pytest.mark.parametrize(
    ("sand", "clay", "expected"),
    [
        # Soil survey manual, USDA Handbook 18, chapter 3: an edge belongs where the rules put it.
        (85, 0, "loamy sand"),  # silt + 1.5 clay = 15: no longer sand
        (85.1, 0, "sand"),
        (70, 0, "sandy loam"),  # silt + 2 clay = 30
        (52, 10, "loam"),  # sand 52 or less
        (52.1, 10, "sandy loam"),
        (43, 7, "silt loam"),  # silt 50 or more
        (43.5, 7, "loam"),
        (10, 10, "silt"),  # silt 80 or more
        (8, 12, "silt loam"),  # clay 12 or more is no silt
        (50, 20, "loam"),  # silt 30
        (53, 20, "sandy clay loam"),  # silt 27
        (30, 27, "clay loam"),
        (20, 27, "silty clay loam"),
        (45, 30, "clay loam"),
        (45.1, 30, "sandy clay loam"),
        (46, 35, "sandy clay"),
        (20, 40, "silty clay"),  # silt 40
        (21, 40, "clay"),
    ],
)
def test_edges_by_the_published_rules(sand: float, clay: float, expected: str) -> None:
    assert name_of(sand, clay) == expected


def test_rounding_noise_does_not_cross_an_edge() -> None:
    for tenth in range(1001):
        sand = np.array([tenth / 10])
        exact = texture_class(np.round(sand, 1), np.array([7.0]))
        noisy = texture_class(sand * (1 + 2e-16), np.array([0.1 * 70]))
        if tenth <= 930:
            assert exact == noisy


def test_sums_within_two_percent_are_scaled_and_others_are_wrong() -> None:
    sand, clay, silt = (
        np.array(v, float) for v in ([40, 40, 40, -1], [20, 20, 20, 50], [41, 38, 43, 51])
    )
    s, c, wrong = fractions_in_percent(sand, clay, silt, 1.0)
    assert wrong.tolist() == [False, False, True, True]
    np.testing.assert_allclose(s[:2], [4000 / 101, 4000 / 98])
    np.testing.assert_allclose(c[:2], [2000 / 101, 2000 / 98])
    assert fractions_in_percent(np.array([70.0]), np.array([31.0]), None, 1.0)[2].all()
    assert fractions_in_percent(np.array([520.0]), np.array([70.0]), None, 10.0)[0] == 52.0


def fraction_region(folder: Path, unit: str = "%", **soil) -> Path:
    """The texture codes of a region as fractions, its config without codes."""
    values = regions.fields((40, 50), np.random.default_rng(1))
    regions.write_fields(folder, values)
    middles = {1: (92, 4), 2: (65, 10), 3: (42, 18), 4: (20, 60), 9: (40, 30)}
    scale = 10 if unit == "g/kg" else 1
    for k, name in enumerate(("sand", "clay")):
        raster = np.select(
            [values["texture"] == c for c in middles], [m[k] * scale for m in middles.values()]
        )
        regions.write_raster(folder / f"{name}.tif", raster.astype(np.int16), nodata=-1)
    tables = regions.tables(folder)
    tables["soil"] = {"sand": "sand.tif", "clay": "clay.tif", "unit": unit} | soil
    tables["soil.classes"] = {"clay loam": "not soil"}
    return regions.write_config(folder, tables)


@pytest.mark.parametrize("unit", ["%", "g/kg"])
def test_fractions_run_like_the_classes_they_make(tmp_path: Path, unit: str) -> None:
    (tmp_path / "codes").mkdir()
    (tmp_path / "fractions").mkdir()
    codes = saltrise.run(regions.small_region(tmp_path / "codes"))
    fractions = saltrise.run(fraction_region(tmp_path / "fractions", unit))
    for path in (codes.folder / "layers").glob("*.tif"):
        assert (fractions.folder / "layers" / path.name).exists()
        np.testing.assert_array_equal(
            fractions.layer(path.stem)[0].filled(), codes.layer(path.stem)[0].filled()
        )
    assert fractions.record["counts_cells"]["not_soil"] == codes.record["counts_cells"]["not_soil"]


def test_numbers_as_fractions(tmp_path: Path) -> None:
    result = saltrise.run(fraction_region(tmp_path, sand=42, clay=18))
    assert [row["texture"] for row in result.record["parameters"]["classes"]] == ["loam"]


def test_numbers_that_cannot_be_fractions_name_the_line(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"region\.toml:\d+: soil\.sand: fractions that cannot be"):
        saltrise.run(fraction_region(tmp_path, sand=82, clay=38))


def test_fractions_that_cannot_be_are_counted_and_located(tmp_path: Path) -> None:
    config = fraction_region(tmp_path, sand=10)
    clay = np.full((40, 50), 20, np.int16)
    clay[7, 11] = clay[9, 2] = 99
    regions.write_raster(tmp_path / "clay.tif", clay, nodata=-1)
    with pytest.raises(InputError) as caught:
        saltrise.run(config)
    text = str(caught.value)
    assert "soil.sand: fractions that cannot be in 2 cells (first at column 11, row 7" in text
    assert "sand and clay must not exceed 100 % together" in text
    assert not (tmp_path / "out.unfinished").exists()


@pytest.mark.parametrize(
    ("soil", "classes", "words"),
    [
        ({"sand": "sand.tif", "clay": "clay.tif"}, {}, "soil.unit: missing"),
        ({"sand": "sand.tif", "unit": "%"}, {}, "soil.clay: missing"),
        ({"sand": 1, "clay": 2, "unit": "ppm"}, {}, "soil.unit: is 'ppm'"),
        (
            {"texture": "texture.tif", "sand": 3},
            {"1": "sand"},
            "soil.sand: goes with sand and clay",
        ),
        ({"sand": 1, "clay": 2, "unit": "%"}, {"3": "loam"}, "must be a texture class"),
        ({"texture": "texture.tif"}, None, "soil.classes: missing"),
        ({}, None, "soil.texture: missing; give texture and classes, or sand, clay and unit"),
    ],
)
def test_faults_of_the_soil_table(tmp_path: Path, soil, classes, words) -> None:
    regions.small_region(tmp_path)
    tables = regions.tables(tmp_path)
    tables["soil"] = soil
    del tables["soil.classes"]
    if classes is not None:
        tables["soil.classes"] = classes
    with pytest.raises(InputError) as caught:
        saltrise.run(regions.write_config(tmp_path, tables))
    assert words in str(caught.value)


def test_the_table_of_squares_equals_the_rules() -> None:
    from saltrise.physics.texture import _by_rules

    random = np.random.default_rng(8)
    clay = random.uniform(0, 100, 400_000)
    sand = random.uniform(0, 1, 400_000) * (100 - clay)
    # Near whole numbers too, where the edges meet.
    clay[::2] = np.round(clay[::2]) + random.choice([-1e-10, 0.0, 1e-10], 200_000)
    sand[::3] = np.round(sand[::3])
    sand[5], clay[6] = np.nan, np.nan
    np.testing.assert_array_equal(texture_class(sand, clay), _by_rules(sand, clay))
