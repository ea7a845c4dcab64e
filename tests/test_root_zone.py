"""The rise that ends at the roots, at a finite suction."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import regions
import saltrise
from saltrise.errors import InputError
from saltrise.explain import Explainer
from saltrise.io.soil_tables import load_soil_set
from saltrise.physics.column import Column

SHAPE = (25, 30)
RAWLS = {t: row.profile for t, row in load_soil_set("rawls1982", Path()).rows.items()}


def run_with(folder: Path, root: dict | None, **tables) -> saltrise.Result:
    return saltrise.run(write(folder, root, **tables))


def write(folder: Path, root: dict | None, **tables) -> Path:
    folder.mkdir(exist_ok=True, parents=True)
    regions.write_fields(folder, regions.fields(SHAPE, np.random.default_rng(4)))
    depth = np.random.default_rng(5).choice([0.0, 0.2, 0.35, 0.8], SHAPE).astype(np.float32)
    depth[2, 3:6] = -9999
    regions.write_raster(folder / "roots.tif", depth, nodata=-9999)
    output = {"folder": str(folder / "out"), "precision": "full"}
    content = regions.tables(folder, output=output, **tables)
    return regions.write_config(folder, content | ({"root_zone": root} if root else {}))


def read(path: Path) -> np.ma.MaskedArray:
    import rasterio

    with rasterio.open(path) as dataset:
        return dataset.read(1, masked=True).astype(np.float64)


@pytest.mark.parametrize("suction", [150.0, 5.0])
def test_cells_against_the_solver(tmp_path: Path, suction: float) -> None:
    result = run_with(tmp_path, {"depth": "roots.tif", "suction": suction})
    most = result.layer("max_evaporation")[0]
    depth, roots, codes = (read(tmp_path / f"{n}.tif") for n in ("depth", "roots", "texture"))
    assert np.ma.getmaskarray(most)[2, 3:6].all()
    valid = np.argwhere(~np.ma.getmaskarray(most))
    for row, col in np.random.default_rng(1).permutation(valid)[:40]:
        soil = RAWLS[regions.CODES[int(codes[row, col])]]
        rise = max(depth[row, col] - roots[row, col], 0.001)
        exact = Column((soil,), (), suction).evaporation(np.array([rise]))[0][0]
        assert most[row, col] == pytest.approx(exact, rel=1e-4, abs=1e-6)


def test_a_rise_under_a_millimetre_is_not_at_the_surface(tmp_path: Path) -> None:
    result = run_with(tmp_path, {"depth": 0.5})
    depth = read(tmp_path / "depth.tif")
    inside = (depth > 0.001) & (depth < 0.5)
    classes = result.layer("hazard_class")[0]
    assert not np.any((classes == 6) & inside)
    assert np.all((classes == 6)[(depth <= 0.001) & ~classes.mask])
    # Roots in the water: only the demand holds the rise.
    demand = read(tmp_path / "demand.tif")
    shown = inside & ~classes.mask
    np.testing.assert_allclose(result.layer("evaporation")[0][shown], demand[shown], rtol=1e-6)


def test_critical_depth_counts_from_the_ground(tmp_path: Path) -> None:
    without = run_with(tmp_path / "bare", {"depth": 0.0})
    rooted = run_with(tmp_path / "rooted", {"depth": 0.8})
    bare, deep = (r.layer("critical_depth")[0] for r in (without, rooted))
    some = ~bare.mask & (bare > 0.01)
    np.testing.assert_allclose(deep[some], np.minimum(bare[some] + 0.8, 30), rtol=1e-5)


def test_suction_of_a_wet_root_zone_lowers_the_load(tmp_path: Path) -> None:
    dry = run_with(tmp_path / "dry", {"depth": 0.3}).layer("salt_load")[0]
    wet = run_with(tmp_path / "wet", {"depth": 0.3, "suction": 5}).layer("salt_load")[0]
    assert np.ma.all(wet <= dry * (1 + 1e-6))
    assert wet.sum() < dry.sum()


def test_layers_are_cut_at_the_roots(tmp_path: Path) -> None:
    layers = [{"bottom": 0.5, "texture": 1}, {"bottom": 1.2, "texture": 4}, {"texture": 2}]
    config = write(tmp_path, {"depth": "roots.tif"}, soil={"texture": None})
    text = config.read_text()
    for layer in layers:
        text += "[[soil.layer]]\n" + "".join(f"{k} = {v}\n" for k, v in layer.items())
    config.write_text(text)
    result = saltrise.run(config)
    most = result.layer("max_evaporation")[0]
    depth, roots = (read(tmp_path / f"{n}.tif") for n in ("depth", "roots"))
    soils = [RAWLS[regions.CODES[layer["texture"]]] for layer in layers]
    below = {0.0: (soils, (0.5, 1.2)), 0.2: (soils, (0.3, 1.0)), 0.35: (soils, (0.15, 0.85))}
    below[0.8] = (soils[1:], (0.4,))
    places = np.argwhere(~np.ma.getmaskarray(most))
    assert np.ma.getmaskarray(most)[2, 3:6].all()
    for row, col in np.random.default_rng(2).permutation(places)[:40]:
        chosen, bottoms = below[round(float(roots[row, col]), 3)]
        column = Column(tuple(chosen), bottoms, 150.0)
        rise = max(depth[row, col] - roots[row, col], 0.001)
        exact = column.evaporation(np.array([rise]))[0][0]
        assert most[row, col] == pytest.approx(exact, rel=1e-4)
    row, col = places[40]
    x, y = regions.WEST + 30 * (col + 0.5), regions.NORTH - 30 * (row + 0.5)
    answer = Explainer(config).at(x, y)
    assert answer["max_evaporation"] == most[row, col]
    assert answer["root_suction_m"] == 150.0


def test_too_many_depths_for_layers(tmp_path: Path) -> None:
    config = write(tmp_path, {"depth": "roots.tif"}, soil={"texture": None})
    many = np.random.default_rng(1).uniform(0, 1, SHAPE).astype(np.float32)
    regions.write_raster(tmp_path / "roots.tif", many, nodata=-9999)
    text = "[[soil.layer]]\nbottom = 0.5\ntexture = 1\n[[soil.layer]]\ntexture = 4\n"
    config.write_text(config.read_text() + text)
    with pytest.raises(InputError, match=r"root_zone\.depth: \d+ depths .* at most 64 can"):
        saltrise.run(config)


@pytest.mark.parametrize(
    ("root", "message"),
    [
        ({"depth": -0.3}, r"root_zone\.depth: is -0\.3, must be 0 or more"),
        ({"depth": 0.3, "suction": 0}, r"root_zone\.suction: is 0, must be greater than 0"),
        ({"suction": 5}, r"root_zone\.depth: missing"),
        ({"depth": 0.3, "sucion": 5}, "did you mean 'suction'"),
    ],
)
def test_roots_that_cannot_be(tmp_path: Path, root: dict, message: str) -> None:
    with pytest.raises(InputError, match=message):
        run_with(tmp_path, root)
