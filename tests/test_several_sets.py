"""A list of soil parameter sets: the first gives the layers, all show what the choice does."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from shapely.geometry import box

import regions
import saltrise
from saltrise.errors import InputError

SETS = ["rawls1982", "clapp-hornberger1978", "carsel-parrish1988"]


def run_with(folder: Path, sets: list[str] | str, **tables) -> saltrise.Result:
    folder.mkdir(parents=True, exist_ok=True)
    west, north = regions.WEST, regions.NORTH
    shapes = {
        "a": box(west, north - 1200, west + 700, north),
        "b": box(west, north - 600, west + 1500, north),
    }
    regions.write_zones(folder / "zones.gpkg", shapes)
    config = regions.small_region(
        folder,
        soil={"parameters": sets},
        zones={"file": "zones.gpkg"},
        output={"folder": str(folder / "out"), "precision": "full"} | tables.pop("output", {}),
        **tables,
    )
    return saltrise.run(config)


@pytest.fixture(scope="module")
def results(tmp_path_factory: pytest.TempPathFactory) -> dict[str, saltrise.Result]:
    folder = tmp_path_factory.mktemp("sets")
    alone = {name: run_with(folder / name, name) for name in SETS}
    return alone | {"all": run_with(folder / "all", SETS)}


def test_the_first_set_gives_the_layers(results) -> None:
    together, first = results["all"], results[SETS[0]]
    for path in (first.folder / "layers").glob("*.tif"):
        np.testing.assert_array_equal(
            together.layer(path.stem)[0].filled(), first.layer(path.stem)[0].filled()
        )


def test_lowest_and_highest_are_cell_by_cell(results) -> None:
    loads = [results[name].layer("salt_load")[0] for name in SETS]
    lowest = results["all"].layer("salt_load_lowest_set")[0]
    highest = results["all"].layer("salt_load_highest_set")[0]
    np.testing.assert_array_equal(lowest.filled(-1), np.ma.min(np.ma.stack(loads), 0).filled(-1))
    np.testing.assert_array_equal(highest.filled(-1), np.ma.max(np.ma.stack(loads), 0).filled(-1))


def test_zone_columns_are_totals_by_set_then_lowest_and_highest(results) -> None:
    totals = np.array([results[name].zones["salt_load_t_per_year"] for name in SETS])
    zones = results["all"].zones
    low, high = "salt_load_lowest_set_t_per_year", "salt_load_highest_set_t_per_year"
    np.testing.assert_allclose(zones[low], totals.min(axis=0), rtol=1e-12)
    np.testing.assert_allclose(zones[high], totals.max(axis=0), rtol=1e-12)
    columns = list(zones.columns)
    assert columns[columns.index("rank") + 1 :][:2] == [low, high]
    assert low not in results[SETS[0]].zones.columns


def test_the_record_holds_every_set(results) -> None:
    record = results["all"].record
    assert list(record["salt_load_by_set_t_per_year"]) == SETS
    for name in SETS:
        alone = results[name].record["region"]["salt_load_t_per_year"]
        assert record["salt_load_by_set_t_per_year"][name] == pytest.approx(alone, rel=1e-12)
    assert [p["set"] for p in record["other_parameters"]] == SETS[1:]
    assert record["config"]["output"]["layers"][-2:] == [
        "salt_load_lowest_set",
        "salt_load_highest_set",
    ]


def test_every_set_needs_a_row_for_every_class(tmp_path: Path) -> None:
    (tmp_path / "mine.csv").write_text(
        "texture,air_entry_cm,b,ks_cm_per_day,source\nsand,7,1.7,504,me\n"
    )
    with pytest.raises(InputError, match="'mine' has no row for it"):
        run_with(tmp_path, ["rawls1982", "mine.csv"])


def test_faults_of_a_list(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="names rawls1982 more than once"):
        run_with(tmp_path, ["rawls1982", "rawls1982"])
    with pytest.raises(InputError, match="needs a list of sets"):
        run_with(tmp_path, "rawls1982", output={"layers": ["salt_load_lowest_set"]})
    with pytest.raises(InputError, match=r"soil\.parameters: no parameter set 'nothing'"):
        run_with(tmp_path, ["rawls1982", "nothing"])


def test_chosen_layers_stay_chosen(tmp_path: Path) -> None:
    result = run_with(tmp_path, SETS[:2], output={"layers": ["salt_load"]})
    assert [p.stem for p in (result.folder / "layers").glob("*.tif")] == ["salt_load"]
    assert "salt_load_highest_set_t_per_year" in result.zones.columns
