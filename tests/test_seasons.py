"""A year of seasons: sums, net demand, percolation, and the depth that would bring the same."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq
from shapely.geometry import box

import reference
import regions
import runs
import saltrise
from saltrise.cli import commands
from saltrise.errors import InputError
from saltrise.explain import Explainer
from saltrise.physics.year import Part, flux_of_load, full_load, net_demand

SHAPE = (24, 30)
TARGET = 2.0
MONTHS = (31, 28, 31, 30, 31, 30, 31, 31, 30, 31, 30, 31)


def write(folder: Path, seasons: list[dict], **tables) -> Path:
    """A region with depths, salinities, rain and irrigation of two seasons."""
    folder.mkdir(exist_ok=True, parents=True)
    random = np.random.default_rng(11)
    values = regions.fields(SHAPE, random)
    regions.write_fields(folder, values)
    wet = (values["depth"] * 0.6 - 0.1).astype(np.float32)
    wet[values["depth"] == -9999] = -9999
    regions.write_raster(folder / "wet.tif", wet, nodata=-9999)
    rain = random.uniform(0, 700, SHAPE).astype(np.float32)
    rain[0, :4] = -9999
    regions.write_raster(folder / "rain.tif", rain, nodata=-9999)
    west, north = regions.WEST, regions.NORTH
    shapes = {
        "a": box(west, north - 500, west + 400, north),
        "b": box(west, north - 300, west + 800, north),
    }
    regions.write_zones(folder / "zones.gpkg", shapes)
    output = {"folder": str(folder / "out"), "precision": "full"} | tables.pop("output", {})
    content = regions.tables(folder, output=output, zones={"file": "zones.gpkg"}, **tables)
    return regions.write_config(folder, content | {"season": seasons})


TWO = [
    {"name": "dry", "days": 200, "potential_evaporation": 2300, "coefficient": 0.9},
    {
        "name": "wet",
        "days": 165,
        "depth": "wet.tif",
        "salinity": 4.0,
        "rain": "rain.tif",
        "irrigation": 60,
    },
]


@pytest.fixture(scope="module")
def two(tmp_path_factory: pytest.TempPathFactory) -> saltrise.Result:
    return saltrise.run(write(tmp_path_factory.mktemp("two"), TWO))


def read(path: Path) -> np.ma.MaskedArray:
    import rasterio

    with rasterio.open(path) as dataset:
        return dataset.read(1, masked=True).astype(np.float64)


def year(folder: Path, row: int, col: int) -> dict[str, float]:
    """One cell by quadrature and bracketing, as `TWO` describes it."""
    maps = {p.stem: read(p)[row, col] for p in folder.glob("*.tif")}
    texture = regions.CODES[int(maps["texture"])]
    # TDS 640 mg/L per dS/m; potential evaporation in mm/year counts days over 365.
    seasons = [
        (200, maps["depth"], maps["salinity"] * 0.64, 0.9 * 2300 * 200 / 365, 0.0),
        (165, maps["wet"], 4.0 * 0.64, maps["demand"] * 165 / 365, maps["rain"] + 60),
    ]
    demands = [max(0.0, pe - water) for _, _, _, pe, water in seasons]

    def at(depths: list[float]) -> tuple[float, float, list[float]]:
        rises, load = [], 0.0
        for (days, _, tds, _, _), depth, demand in zip(seasons, depths, demands, strict=True):
            lifted = reference.max_evaporation(depth, texture) * days
            rises.append(demand if depth <= 0.001 else min(lifted, demand))
            load += rises[-1] * tds / 100
        return sum(rises), load, rises

    own = [depth for _, depth, _, _, _ in seasons]
    evaporation, load, _ = at(own)
    critical = 0.0
    if sum(n * s[2] / 100 for n, s in zip(demands, seasons, strict=True)) > TARGET:
        critical = brentq(lambda d: at([d, d])[1] - TARGET, 0.0011, 30, xtol=1e-12)
    return {
        "max_evaporation": sum(
            s[0] / 365 * reference.max_evaporation(d, texture)
            for s, d in zip(seasons, own, strict=True)
        ),
        "evaporation": evaporation,
        "salt_load": load,
        "critical_depth": critical,
        "net_demand": sum(demands),
        "percolation": sum(max(0.0, water - pe) for _, _, _, pe, water in seasons),
    }


def test_cells_by_quadrature(two: saltrise.Result) -> None:
    folder = two.folder.parent
    valid = ~np.ma.getmaskarray(two.layer("salt_load")[0])
    places = np.random.default_rng(2).permutation(np.argwhere(valid))[:25]
    for row, col in places:
        expected = year(folder, row, col)
        for name, value in expected.items():
            got = two.layer(name)[0][row, col]
            # The contract of the curves is 1e-4.
            assert got == pytest.approx(value, rel=1e-4, abs=1e-6), name


def test_nodata_in_any_season_masks_the_cell(two: saltrise.Result) -> None:
    masked = np.ma.getmaskarray(two.layer("salt_load")[0])
    assert masked[0, :4].all()
    for name in ("net_demand", "percolation", "depth_margin"):
        np.testing.assert_array_equal(np.ma.getmaskarray(two.layer(name)[0]), masked)


def test_margin_keeps_the_sign_of_the_load(two: saltrise.Result) -> None:
    load, margin = (two.layer(n)[0] for n in ("salt_load", "depth_margin"))
    classes = two.layer("hazard_class")[0]
    dry = ~load.mask & (classes.filled(0) != 6)
    np.testing.assert_array_equal((margin < 0)[dry], (load > TARGET)[dry])


def test_effective_depth_is_between_the_seasons_depths(two: saltrise.Result) -> None:
    depths = [read(two.folder.parent / f"{n}.tif") for n in ("depth", "wet")]
    effective = two.layer("depth_margin")[0] + two.layer("critical_depth")[0]
    low, high = np.ma.min(np.ma.stack(depths), 0), np.ma.max(np.ma.stack(depths), 0)
    some = ~effective.mask & (low > 0.001)
    # Where one season brings no salt at all the other's depth counts alone.
    assert np.all(effective[some] <= high[some] * 1.0001)
    assert np.all(effective[some] >= np.minimum(low, 0.0011)[some])


def test_net_demand_and_percolation_close_the_balance(two: saltrise.Result) -> None:
    folder = two.folder.parent
    demand, percolation = two.layer("net_demand")[0], two.layer("percolation")[0]
    given = 0.9 * 2300 * 200 / 365 + read(folder / "demand.tif") * 165 / 365
    np.testing.assert_allclose(
        (demand - percolation).compressed(),
        (given - read(folder / "rain.tif") - 60)[~demand.mask],
        rtol=1e-5,
        atol=1e-3,
    )


def test_zone_columns_follow_rank(two: saltrise.Result) -> None:
    columns = list(two.zones.columns)
    after = columns[columns.index("rank") + 1 :]
    assert after[:2] == ["net_demand_mean_mm_per_year", "percolation_mean_mm_per_year"]
    demand = two.layer("net_demand")[0]
    # Zone b holds zone a's eastern neighbours too; the region's mean lies among the zones' own.
    found = two.record["region"]["net_demand_mean_mm_per_year"]
    surface = two.layer("hazard_class")[0].filled(6) == 6
    assert found == pytest.approx(float(demand[~surface & ~demand.mask].mean()), rel=1e-3)


def test_class_six_only_where_every_season_is_flooded(two: saltrise.Result) -> None:
    folder = two.folder.parent
    depths = [read(folder / f"{n}.tif") for n in ("depth", "wet")]
    flooded = (depths[0] <= 0.001) & (depths[1] <= 0.001)
    classes = two.layer("hazard_class")[0]
    np.testing.assert_array_equal(
        (classes == 6).filled(False), (flooded & ~classes.mask).filled(False)
    )


def test_tiles_and_workers_do_not_matter(tmp_path: Path, monkeypatch) -> None:
    monkeypatch.setenv("SOURCE_DATE_EPOCH", runs.DATE)
    output = {"season_layers": True}
    config = write(tmp_path, TWO, output=output)
    one = runs.run_small(config, tile=16)
    first = runs.hashes(one.folder)
    other = runs.hashes(runs.run_small(config, tile=32, workers=2, force=True).folder)
    assert first == other


def test_the_same_all_year_is_no_season(tmp_path: Path) -> None:
    plain = saltrise.run(regions.small_region(tmp_path))
    halves = [{"name": "one", "days": 100}, {"name": "two", "days": 265}]
    content = regions.tables(tmp_path, output={"folder": str(tmp_path / "halves")})
    cut = saltrise.run(regions.write_config(tmp_path, content | {"season": halves}, "halves"))
    for name in ("max_evaporation", "evaporation", "salt_load", "critical_depth", "hazard_class"):
        one, other = (r.layer(name)[0] for r in (plain, cut))
        np.testing.assert_allclose(one.filled(1), other.filled(1), rtol=3e-4)
    assert np.ma.all(cut.layer("percolation")[0] == 0)
    assert any("land that gets neither" in text for text in cut.record["warnings"])
    assert not any("neither" in text for text in plain.record["warnings"])


def test_the_mean_depth_understates_the_year(tmp_path: Path) -> None:
    """Evaporation is convex in depth: shallow months bring more than deep ones save."""
    texture, demand = "loam", 6.0
    depths = [1.0 + 0.9 * math.cos(2 * math.pi * k / 12) + 0.6 for k in range(12)]
    months = list(zip(MONTHS, depths, strict=True))
    by_month = sum(d * min(reference.max_evaporation(z, texture), demand) for d, z in months)
    mean = sum(d * z for d, z in months) / 365
    by_mean = 365 * min(reference.max_evaporation(mean, texture), demand)
    assert by_month > 1.9 * by_mean


def test_the_annual_cap_overstates_the_monthly_one() -> None:
    """A year's demand caps less than each month's own: winters cannot use up summer's demand."""
    texture, depth = "silt loam", 0.9
    demands = [1.0, 1.5, 3.0, 5.0, 7.5, 9.0, 9.5, 8.5, 6.5, 4.0, 2.0, 1.0]
    lifted = reference.max_evaporation(depth, texture)
    by_month = sum(n * min(lifted, pe) for n, pe in zip(MONTHS, demands, strict=True))
    yearly = sum(n * pe for n, pe in zip(MONTHS, demands, strict=True))
    assert min(lifted * 365, yearly) > 1.15 * by_month


@settings(max_examples=200)
@given(
    st.lists(
        st.tuples(st.floats(5, 200), st.floats(0, 900), st.floats(0, 30)), min_size=1, max_size=12
    ),
    st.floats(0.001, 0.999),
)
def test_flux_of_load_solves_its_equation(seasons, share: float) -> None:
    parts = [Part(d, np.array([n]), np.array([t])) for d, n, t in seasons]
    load = full_load(parts)[0] * share
    if load < 1e-9:
        return
    flux = flux_of_load(parts, load)[0]
    brought = sum(min(flux * d, n) * t for d, n, t in seasons)
    assert brought == pytest.approx(load, rel=1e-9)


@given(st.floats(0, 2000), st.floats(0, 2000), st.floats(0, 2000))
def test_water_beyond_the_demand_percolates(potential, rain, irrigation) -> None:
    demand, percolation = net_demand(
        np.array([potential]), np.array([rain]), np.array([irrigation])
    )
    assert min(demand[0], percolation[0]) == 0.0
    assert demand[0] - percolation[0] == pytest.approx(potential - rain - irrigation, abs=1e-9)


def test_layers_of_single_seasons(tmp_path: Path) -> None:
    seasons = [dict(TWO[0], name="dry / сухой"), dict(TWO[1], name="wet")]
    result = saltrise.run(write(tmp_path, seasons, output={"season_layers": True}))
    folders = sorted(p.name for p in (result.folder / "layers").iterdir() if p.is_dir())
    assert folders == ["season-dry---сухой", "season-wet"]
    for total, unit in (("evaporation", "mm"), ("salt_load", "t ha-1"), ("net_demand", "mm")):
        parts = [result.layer(f"{folder}/{total}")[0] for folder in folders]
        whole = result.layer(total)[0]
        np.testing.assert_allclose(
            (parts[0] + parts[1]).compressed(), whole.compressed(), rtol=1e-6
        )
        import rasterio

        with rasterio.open(result.folder / "layers" / folders[1] / f"{total}.tif") as dataset:
            assert dataset.units == (unit,)
            assert "season wet" in dataset.descriptions[0]


def test_depth_may_come_from_seasons_alone(tmp_path: Path) -> None:
    seasons = [dict(TWO[0], depth="depth.tif"), TWO[1]]
    alone = saltrise.run(write(tmp_path / "alone", seasons, water_table={"depth": None}))
    both = saltrise.run(write(tmp_path / "both", TWO))
    for name in ("salt_load", "depth_margin"):
        one, other = (r.layer(name)[0] for r in (alone, both))
        np.testing.assert_array_equal(one.filled(), other.filled())


def test_a_main_depth_that_every_season_replaces_masks_nothing(tmp_path: Path) -> None:
    seasons = [dict(TWO[0], depth="depth.tif"), TWO[1]]
    config = write(tmp_path, seasons, water_table={"depth": "holes.tif"})
    depth = read(tmp_path / "depth.tif").filled(-9999).astype(np.float32)
    depth[5:20] = -9999
    regions.write_raster(tmp_path / "holes.tif", depth, nodata=-9999)
    other = saltrise.run(write(tmp_path / "other", TWO))
    np.testing.assert_array_equal(
        saltrise.run(config).layer("salt_load")[0].filled(), other.layer("salt_load")[0].filled()
    )


def test_explain_a_cell(two: saltrise.Result) -> None:
    config = two.folder.parent / "region.toml"
    explainer = Explainer(config)
    for row, col in np.argwhere(~np.ma.getmaskarray(two.layer("salt_load")[0]))[::150]:
        x, y = regions.WEST + 30 * (col + 0.5), regions.NORTH - 30 * (row + 0.5)
        answer = explainer.at(x, y)
        for name in ("salt_load", "critical_depth", "depth_margin", "percolation"):
            assert answer[name] == two.layer(name)[0][row, col]
        assert [season["name"] for season in answer["seasons"]] == ["dry", "wet"]
        total = sum(season["evaporation_mm"] for season in answer["seasons"])
        assert total == pytest.approx(answer["evaporation"], rel=1e-4, abs=1e-6)
    found = CliRunner().invoke(commands, ["explain", str(config), "--at", str(x), str(y)])
    assert "Season wet, 165 days" in found.output


FAULTS = {
    "days": ([{"name": "a", "days": 100}], r"season\[1\]\.days: days of all seasons add up to 100"),
    "names": (
        [{"name": "a b", "days": 100}, {"name": "a-b", "days": 265}],
        r"season\[2\]\.name: is 'a-b', too like 'a b'",
    ),
    "rain": (
        [{"name": "a", "days": 365, "rain": -3}],
        r"season\[1\]\.rain: is -3, must be 0 or more",
    ),
    "key": ([{"name": "a", "days": 365, "rian": 3}], r"season\[1\]\.rian: .* did you mean 'rain'"),
    "no name": ([{"days": 365}], r"season\[1\]\.name: missing"),
    "file": ([{"name": "a", "days": 365, "depth": "no.tif"}], r"season\[1\]\.depth: .*no\.tif"),
}


@pytest.mark.parametrize("case", FAULTS)
def test_seasons_that_cannot_be(tmp_path: Path, case: str) -> None:
    seasons, message = FAULTS[case]
    config = write(tmp_path, seasons)
    with pytest.raises(InputError, match=message) as caught:
        saltrise.run(config)
    line = int(str(caught.value).split("region.toml:")[1].split(":")[0])
    assert line > config.read_text().splitlines().index("[[season]]")


def test_a_season_without_depth_anywhere(tmp_path: Path) -> None:
    config = write(tmp_path, [TWO[0], TWO[1]], water_table={"depth": None})
    with pytest.raises(InputError, match=r"season\[1\]\.depth: missing"):
        saltrise.run(config)


def test_negative_rain_in_a_raster(tmp_path: Path) -> None:
    config = write(tmp_path, TWO)
    rain = read(tmp_path / "rain.tif").filled(-9999).astype(np.float32)
    rain[3, 4] = -5
    regions.write_raster(tmp_path / "rain.tif", rain, nodata=-9999)
    with pytest.raises(InputError, match=r"season\[2\]\.rain: 1 cells are negative .*row 3"):
        saltrise.run(config)


def test_summary_of_a_leap_year(tmp_path: Path) -> None:
    seasons = [{"name": "all", "days": 366}]
    found = CliRunner().invoke(commands, ["run", str(write(tmp_path, seasons))])
    assert found.exit_code == 0
    assert "land that gets neither" in found.output


def test_margin_keeps_its_sign_where_a_mean_depth_is_above_ground(tmp_path: Path) -> None:
    seasons = [
        {"name": "flooded", "days": 300, "depth": -0.5, "salinity": 0.05},
        {"name": "drained", "days": 65, "depth": 0.4, "salinity": 0.05},
    ]
    result = saltrise.run(write(tmp_path, seasons))
    load, margin = (result.layer(n)[0] for n in ("salt_load", "depth_margin"))
    assert np.ma.all(load < TARGET)
    assert np.ma.all(margin >= 0)
    assert not np.any(result.layer("hazard_class")[0] == 6)
