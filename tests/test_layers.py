"""Regions whose soil comes in layers."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import regions
import saltrise
from saltrise.cli import commands
from saltrise.errors import InputError
from saltrise.explain import Explainer
from saltrise.io.soil_tables import load_soil_set
from saltrise.physics.column import Column

SHAPE = (30, 40)
RAWLS = {t: row.profile for t, row in load_soil_set("rawls1982", Path()).rows.items()}
CODES = {1: "sand", 2: "loamy sand", 3: "loam", 4: "clay", 9: "not soil"}


def write(folder: Path, layers: list[dict], **tables) -> Path:
    """A region with textures `top`, `middle` and `deep`, and fractions of the same."""
    folder.mkdir(exist_ok=True)
    random = np.random.default_rng(3)
    values = regions.fields(SHAPE, random)
    regions.write_fields(folder, values)
    for name in ("top", "middle", "deep"):
        codes = random.choice([1, 2, 3, 4, 9], SHAPE, p=[0.2, 0.3, 0.3, 0.18, 0.02])
        codes[random.random(SHAPE) < 0.02] = 0
        regions.write_raster(folder / f"{name}.tif", codes.astype(np.uint8), nodata=0)
    soil = {"texture": None} | tables.pop("soil", {})
    output = {"folder": str(folder / "out"), "precision": "full"} | tables.pop("output", {})
    content = regions.tables(folder, soil=soil, output=output, **tables)
    content["soil.classes"] = {str(code): name for code, name in CODES.items()}
    return regions.write_config(folder, content | {"soil.layer": layers})


def three(*names: str) -> list[dict]:
    layers = [{"bottom": b, "texture": f"{n}.tif"} for b, n in zip((0.4, 1.3), names, strict=False)]
    return [*layers, {"texture": f"{names[-1]}.tif"}]


def read(path: Path) -> np.ndarray:
    import rasterio

    with rasterio.open(path) as dataset:
        return dataset.read(1)


def test_cells_against_the_solver(tmp_path: Path) -> None:
    result = saltrise.run(write(tmp_path, three("top", "middle", "deep")))
    most = result.layer("max_evaporation")[0]
    maps = [read(tmp_path / f"{name}.tif") for name in ("top", "middle", "deep")]
    depth = read(tmp_path / "depth.tif")
    valid = ~np.ma.getmaskarray(most)
    assert valid.sum() > 0.6 * valid.size
    soil = np.logical_and.reduce([(m > 0) & (m < 9) for m in maps])
    np.testing.assert_array_equal(valid, soil & (depth != -9999))
    random = np.random.default_rng(1)
    places = np.argwhere(valid & (depth > 0.05))
    for row, col in random.permutation(places)[:40]:
        soils = tuple(RAWLS[CODES[int(m[row, col])]] for m in maps)
        exact = Column(soils, (0.4, 1.3)).evaporation(np.array([float(depth[row, col])]))[0][0]
        # The contract of the curves is 1e-4.
        assert most[row, col] == pytest.approx(exact, rel=1e-4)


def test_equal_layers_are_the_soil_without_layers(tmp_path: Path) -> None:
    cut = saltrise.run(write(tmp_path / "cut", three("top", "top", "top")))
    config = write(tmp_path / "plain", [], soil={"texture": "top.tif"})
    plain = saltrise.run(config)
    for name in ("salt_load", "critical_depth", "max_evaporation"):
        one, other = (r.layer(name)[0] for r in (cut, plain))
        np.testing.assert_array_equal(one.mask, other.mask)
        np.testing.assert_allclose(one.filled(1), other.filled(1), rtol=2e-5)


def test_tiles_do_not_matter(tmp_path: Path) -> None:
    import runs

    config = write(tmp_path, three("top", "middle", "deep"))
    small = runs.run_small(config, tile=16).layer("salt_load")[0]
    other = runs.run_small(config, tile=32, force=True).layer("salt_load")[0]
    np.testing.assert_array_equal(small.filled(), other.filled())


def test_order_of_layers_matters(tmp_path: Path) -> None:
    down = saltrise.run(write(tmp_path / "down", three("top", "middle", "deep")))
    up = saltrise.run(write(tmp_path / "up", three("deep", "middle", "top")))
    one, other = (r.layer("max_evaporation")[0] for r in (down, up))
    assert np.ma.median(np.ma.abs(one / other - 1)) > 0.1


def test_layered_fractions_are_reduced_to_classes_and_say_so(tmp_path: Path) -> None:
    sand = {1: 92, 2: 82, 3: 40, 4: 20, 9: 40, 0: 255}
    clay = {1: 3, 2: 6, 3: 18, 4: 60, 9: 18, 0: 255}
    layers = three("top", "middle", "deep")
    by_class = saltrise.run(write(tmp_path, layers))
    parts = []
    for layer in layers:
        name = layer["texture"].removesuffix(".tif")
        codes = read(tmp_path / layer["texture"])
        for part, values in (("sand", sand), ("clay", clay)):
            found = np.vectorize(values.get)(codes).astype(np.uint8)
            regions.write_raster(tmp_path / f"{name}_{part}.tif", found, nodata=255)
        rest = {"bottom": layer["bottom"]} if "bottom" in layer else {}
        parts.append(rest | {"sand": f"{name}_sand.tif", "clay": f"{name}_clay.tif"})
    content = regions.tables(
        tmp_path,
        soil={"texture": None, "unit": "%"},
        output={"folder": str(tmp_path / "fractions")},
    )
    del content["soil.classes"]
    content["output"]["precision"] = "full"
    result = saltrise.run(regions.write_config(tmp_path, content | {"soil.layer": parts}, "parts"))
    assert any("reduced to USDA texture classes" in text for text in result.record["warnings"])
    one, other = (r.layer("salt_load")[0] for r in (by_class, result))
    both = ~(one.mask | other.mask)
    np.testing.assert_array_equal(one[both], other[both])


def test_a_list_of_sets(tmp_path: Path) -> None:
    sets = ["rawls1982", "carsel-parrish1988"]
    both = saltrise.run(write(tmp_path / "both", three("top", "deep"), soil={"parameters": sets}))
    alone = saltrise.run(
        write(tmp_path / "one", three("top", "deep"), soil={"parameters": sets[1]})
    )
    highest = both.layer("salt_load_highest_set")[0]
    assert np.ma.all(highest >= alone.layer("salt_load")[0])


def test_check_states_the_number_of_stacks(tmp_path: Path) -> None:
    from click.testing import CliRunner

    config = write(tmp_path, three("top", "middle", "deep"))
    found = CliRunner().invoke(commands, ["check", str(config)])
    assert found.exit_code == 0
    maps = [read(tmp_path / f"{name}.tif") for name in ("top", "middle", "deep")]
    triples = {t for t in zip(*(m.ravel() for m in maps), strict=True) if not {0, 9} & set(t)}
    # Equal neighbours are one layer, and stacks that come to the same are one.
    assert f"Soil profiles: {len(triples)} of rawls1982" in found.output
    assert "layer 2: code 3 = loam" in found.output


def test_explain_a_cell(tmp_path: Path) -> None:
    config = write(tmp_path, three("top", "middle", "deep"))
    result = saltrise.run(config)
    most = result.layer("max_evaporation")[0]
    explainer = Explainer(config)
    for row, col in np.argwhere(~np.ma.getmaskarray(most))[::100]:
        x, y = regions.WEST + 30 * (col + 0.5), regions.NORTH - 30 * (row + 0.5)
        answer = explainer.at(x, y)
        for name in ("max_evaporation", "salt_load", "critical_depth", "depth_margin"):
            assert answer[name] == result.layer(name)[0][row, col]
    assert len(answer["soil_layers"]) == 3
    keys = {f"soil.layer[{k}].texture" for k in (1, 2, 3)}
    assert keys < {told["key"] for told in answer["inputs"].values()}
    assert keys < set(result.record["input_dates"])
    assert [layer["top_m"] for layer in answer["soil_layers"]] == [0.0, 0.4, 1.3]
    assert answer["max_evaporation_exact"] == pytest.approx(answer["max_evaporation"], rel=1e-4)


FAULTS = {
    "bottoms not increasing": (
        [{"bottom": 1.0, "texture": 1}, {"bottom": 0.5, "texture": 1}, {"texture": 1}],
        r"soil\.layer\[2\]\.bottom: is 0\.5 m, must be at least 0\.01 m below",
    ),
    "no bottom": ([{"texture": 1}, {"texture": 1}], r"soil\.layer\[1\]\.bottom: missing"),
    "a last bottom": (
        [{"texture": 1, "bottom": 2.0}],
        r"layer\[1\]\.bottom: is 2\.0, but the last",
    ),
    "nothing": ([{"bottom": 0.3}, {"texture": 1}], r"soil\.layer\[1\]\.texture: missing"),
    "mixed": (
        [{"bottom": 0.3, "sand": 50, "clay": 10}, {"texture": 1}],
        "some layers have texture, others fractions",
    ),
    "misspelt": ([{"botom": 0.3, "texture": 1}, {"texture": 1}], "did you mean 'bottom'"),
}


@pytest.mark.parametrize("case", FAULTS)
def test_layers_that_cannot_be(tmp_path: Path, case: str) -> None:
    layers, message = FAULTS[case]
    with pytest.raises(InputError, match=message):
        saltrise.run(write(tmp_path, layers))


def test_texture_beside_layers(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"soil\.texture: stands in each \[\[soil\.layer\]\]"):
        saltrise.run(write(tmp_path, three("top", "deep"), soil={"texture": "top.tif"}))


def test_another_method_than_classes(tmp_path: Path) -> None:
    layers = [{"bottom": 0.5, "sand": 50, "clay": 20}, {"sand": 20, "clay": 30}]
    soil = {"unit": "%", "method": "cosby1984"}
    with pytest.raises(InputError, match="layered fractions are reduced to texture classes"):
        saltrise.run(write(tmp_path, layers, soil=soil))


def test_an_unmapped_code_names_its_layer(tmp_path: Path) -> None:
    config = write(tmp_path, three("top", "middle", "deep"))
    codes = read(tmp_path / "middle.tif")
    codes[4, 7] = 77
    regions.write_raster(tmp_path / "middle.tif", codes, nodata=0)
    with pytest.raises(
        InputError, match=r"texture raster of layer 2 holds .* 77 \(1 cells, .*row 4"
    ):
        saltrise.run(config)


def test_too_many_stacks(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    from saltrise.engine import soils

    monkeypatch.setattr(soils, "MOST_STACKS", 5)
    with pytest.raises(InputError, match=r"soil\.layer: \d+ different stacks .* use fewer layers"):
        saltrise.run(write(tmp_path, three("top", "middle", "deep")))


def test_more_keys_than_a_table_holds_are_searched_for(tmp_path: Path, monkeypatch) -> None:
    from saltrise.engine import soils

    config = write(tmp_path, three("top", "middle", "deep"))
    dense = saltrise.run(config).layer("salt_load")[0]
    monkeypatch.setattr(soils, "DENSE", 10)
    sparse = saltrise.run(config, force=True).layer("salt_load")[0]
    np.testing.assert_array_equal(dense.filled(), sparse.filled())


def test_one_layer_given_as_a_number(tmp_path: Path) -> None:
    one = saltrise.run(write(tmp_path / "layer", [{"texture": 3}]))
    other = saltrise.run(write(tmp_path / "plain", [], soil={"texture": 3}))
    a, b = (r.layer("salt_load")[0] for r in (one, other))
    np.testing.assert_allclose(a.filled(1), b.filled(1), rtol=2e-5)
