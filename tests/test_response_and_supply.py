"""Is the rise steady, and is the water there?"""

from __future__ import annotations

import itertools
import math
from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import quad
from shapely.geometry import box

import regions
import saltrise
from saltrise.errors import InputError
from saltrise.io.soil_tables import load_soil_set
from saltrise.physics.column import Column
from saltrise.physics.curve import build_curves

RAWLS = {t: row.profile for t, row in load_soil_set("rawls1982", Path()).rows.items()}
CARSEL = {t: row.profile for t, row in load_soil_set("carsel-parrish1988", Path()).rows.items()}


def by_quadrature(soil, depth: float, suction: float = math.inf) -> float:
    """Days from (drained water under the flux - at rest) / flux, by scipy's quad."""
    flux = float(Column((soil,), (), suction).evaporation(np.array([depth]))[0][0])

    def drained(log: float, flux: float) -> float:
        h = np.array([math.exp(log)])
        with np.errstate(over="ignore", divide="ignore"):
            return (h * soil.drained(h) / (1 + flux / soil.conductivity(h))).item()

    start, knee = math.log(soil.anchor_m) - 12, math.log(soil.anchor_m)
    end = 20.0 if suction == math.inf else math.log(suction)
    cuts = np.unique(np.clip([start, knee, *np.linspace(knee, end, 12), end], start, end))
    moving = sum(
        quad(drained, a, b, args=(flux,), epsrel=1e-10, limit=200)[0]
        for a, b in itertools.pairwise(cuts)
    )
    top = math.log(depth)
    cuts = np.unique(np.clip([start, min(knee, top), top], start, top))
    still = sum(
        quad(drained, a, b, args=(0.0,), epsrel=1e-10)[0] for a, b in itertools.pairwise(cuts)
    )
    return 1000 * (moving - still) / flux


@pytest.mark.parametrize("suction", [math.inf, 5.0])
@pytest.mark.parametrize(
    "soil", [RAWLS["sand"], RAWLS["loam"], RAWLS["clay"], CARSEL["silt loam"], CARSEL["clay"]]
)
def test_response_against_quadrature(soil, suction: float) -> None:
    depths = np.array([0.1, 0.5, 1.0, 2.0, 4.0])
    curves = build_curves([Column((soil,), (), suction)], response=True)
    found = curves.response_days(np.zeros(5, np.int32), depths)
    expected = [by_quadrature(soil, depth, suction) for depth in depths]
    # An order of magnitude is what it is read for; 1 % is what its table promises.
    np.testing.assert_allclose(found, expected, rtol=0.01)


def test_response_of_one_soil_cut_in_layers() -> None:
    soil, depths = RAWLS["silt loam"], np.geomspace(0.05, 20, 60)
    curves = build_curves([Column((soil,)), Column((soil, soil), (0.6,))], response=True)
    one, cut = (curves.response_days(np.full(60, k, np.int32), depths) for k in (0, 1))
    np.testing.assert_allclose(one, cut, rtol=0.01)
    plain = build_curves([soil], response=True)
    np.testing.assert_array_equal(plain.response_days(np.zeros(60, np.int32), depths), one)


def test_deeper_water_takes_longer() -> None:
    curves = build_curves(list(RAWLS.values()), response=True)
    depths = np.geomspace(0.2, 25, 80)
    for number in range(len(RAWLS)):
        days = curves.response_days(np.full(80, number, np.int32), depths)
        assert np.all(np.diff(days) > 0)


def test_the_layer_and_its_warning(tmp_path: Path) -> None:
    layers = ["response_time", "salt_load"]
    output = {"folder": str(tmp_path / "out"), "layers": layers, "precision": "full"}
    result = saltrise.run(regions.small_region(tmp_path, output=output))
    import rasterio

    with rasterio.open(tmp_path / "depth.tif") as dataset:
        depth = dataset.read(1)
    with rasterio.open(tmp_path / "texture.tif") as dataset:
        codes = dataset.read(1)
    days = result.layer("response_time")[0]
    for row, col in np.argwhere(~np.ma.getmaskarray(days) & (depth > 0.05))[::120]:
        soil = RAWLS[regions.CODES[int(codes[row, col])]]
        assert days[row, col] == pytest.approx(by_quadrature(soil, depth[row, col]), rel=0.01)
    slow = int(np.sum((days > 365).filled(False)))
    assert result.record["counts_cells"]["slower_than_season"] == slow > 0
    assert any(f"in {slow:,} cells" in text for text in result.record["warnings"])
    with rasterio.open(result.folder / "layers/response_time.tif") as dataset:
        assert dataset.units == ("days",)


def test_seasons_show_the_slowest(tmp_path: Path) -> None:
    seasons = [{"name": "a", "days": 300}, {"name": "b", "days": 65, "depth": 2.0}]
    result = saltrise.run(regions.small_region(tmp_path, season=seasons))
    days = result.layer("response_time")[0]
    assert days.count() > 0
    text = next(t for t in result.record["warnings"] if t.startswith("response_time"))
    assert "longer than the season" in text


@pytest.mark.parametrize(
    ("law", "table"),
    [
        ("campbell", "texture,air_entry_cm,b,ks_cm_per_day,source\nsand,7,1.7,504,me\n"),
        ("gardner-power", "texture,a,b,n,source\nsand,1000,500,3,me\n"),
    ],
)
def test_without_a_retention_curve(tmp_path: Path, law: str, table: str) -> None:
    rows = table.splitlines()
    more = [rows[1].replace("sand", name) for name in ("loamy sand", "sandy loam", "loam", "clay")]
    (tmp_path / "mine.csv").write_text("\n".join([*rows, *more]))
    output = {"layers": ["response_time"]}
    soil = {"parameters": "mine.csv", "conductivity": law}
    config = regions.small_region(tmp_path, output=output, soil=soil)
    with pytest.raises(InputError, match=r"response_time.*needs the retention curve of"):
        saltrise.run(config)
    # With seasons the layer comes by itself only where the shipped sets have what it needs.
    del output["layers"]
    output["folder"] = str(tmp_path / "seasons")
    seasons = [{"name": "all", "days": 365}]
    config = regions.small_region(tmp_path, output=output, soil=soil, season=seasons)
    assert "response_time" not in saltrise.run(config).record["layers"]


def test_only_the_first_of_several_sets_needs_a_retention_curve(tmp_path: Path) -> None:
    rows = [f"{t},7,1.7,504,me" for t in ("sand", "loamy sand", "sandy loam", "loam", "clay")]
    table = ["texture,air_entry_cm,b,ks_cm_per_day,source", *rows]
    (tmp_path / "mine.csv").write_text("\n".join(table))
    seasons = [{"name": "all", "days": 365}]
    soil = {"parameters": ["rawls1982", "mine.csv"]}
    result = saltrise.run(regions.small_region(tmp_path, soil=soil, season=seasons))
    assert result.layer("response_time")[0].count() > 0


def zoned(folder: Path, supply: list) -> Path:
    import geopandas

    folder.mkdir(exist_ok=True)
    west, north = regions.WEST, regions.NORTH
    shapes = [box(west + 400 * k, north - 900, west + 400 * (k + 1), north) for k in range(3)]
    frame = geopandas.GeoDataFrame(
        {"code": ["a", "b", "c"], "supply_mm_per_year": supply}, geometry=shapes, crs=regions.CRS
    )
    frame.to_file(folder / "zones.gpkg", driver="GPKG")
    zones = {"file": "zones.gpkg", "id": "code"}
    output = {"folder": str(folder / "out")}
    return regions.small_region(folder, zones=zones, output=output)


def test_evaporation_over_supply(tmp_path: Path) -> None:
    result = saltrise.run(zoned(tmp_path, [10.0, None, 5000.0]))
    zones = result.zones
    assert list(zones.columns)[-2] == "evaporation_over_supply"
    share = zones["evaporation_mean_mm_per_year"] / np.array([10.0, np.nan, 5000.0])
    np.testing.assert_allclose(zones["evaporation_over_supply"], share)
    assert any("exceeds the supply of water in zone a:" in t for t in result.record["warnings"])


def test_supply_that_cannot_be(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"field supply_mm_per_year must be .* zone b"):
        saltrise.run(zoned(tmp_path, [10.0, -4.0, 3.0]))
    with pytest.raises(InputError, match=r"field supply_mm_per_year must be .* zone c"):
        saltrise.run(zoned(tmp_path / "text", ["1", "2", "much"]))
