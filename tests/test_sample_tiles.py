"""The demo region: invented, small, reproducible, and right where it is worked by hand."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import geopandas
import numpy as np
import pyproj
import pytest
import rasterio
from exactextract import exact_extract
from exactextract.raster import NumPyRasterSource

import reference
import saltrise
from saltrise.engine.config import read_settings
from saltrise.grid import Grid, cell_areas
from saltrise.io.soil_tables import load_soil_set
from saltrise.physics.column import Column
from saltrise.result import Result

ROOT = Path(__file__).parents[1]
TILES = ROOT / "sample_tiles"
HEIGHT, WIDTH = 1000, 1300
TEXTURE = read_settings(ROOT / "config" / "velith.toml").soil.codes


def pasted(name: str) -> np.ndarray:
    """A layer's tiles as one array."""

    def tile(i: int, j: int) -> np.ndarray:
        with rasterio.open(TILES / f"{name}_{i}{j}.tif") as dataset:
            return dataset.read(1)

    return np.block([[tile(i, j) for j in range(2)] for i in range(2)])


def run_demo(folder: Path, config: str) -> Result:
    found = read_settings(ROOT / "config" / config)
    output = found.tables.output.model_copy(
        update={"folder": str(folder / "out"), "precision": "full", "report": False}
    )
    tables = found.tables.model_copy(update={"output": output})
    return saltrise.run(type(found)(tables, found.source, found.base, found.lines))


@pytest.fixture(scope="module")
def demo(tmp_path_factory: pytest.TempPathFactory) -> Result:
    return run_demo(tmp_path_factory.mktemp("demo"), "velith.toml")


def test_the_files_are_small_and_lie_over_open_ocean() -> None:
    assert sum(p.stat().st_size for p in TILES.iterdir() if p.is_file()) < 4e6
    frame = geopandas.read_file(TILES / "districts.gpkg")
    assert frame.crs.to_epsg() == 32740
    left, bottom, right, top = frame.to_crs(4326).total_bounds
    # Southern Indian Ocean; the nearest land of any size is over 1,500 km away.
    assert 56.5 < left < right < 58.5
    assert -39.0 < bottom < top < -37.0


def test_the_script_makes_the_files_in_the_repository(tmp_path: Path) -> None:
    subprocess.run([sys.executable, TILES / "make_velith.py", tmp_path], check=True, timeout=120)
    for path in sorted(TILES.glob("*.tif")):
        with rasterio.open(path) as kept, rasterio.open(tmp_path / path.name) as made:
            assert kept.profile == made.profile
            old, new = kept.read(1).astype(float), made.read(1).astype(float)
        # Other releases of SciPy may turn a rounding: one step of the last digit, rarely.
        step = 1 if "texture" in path.name else 0.11 if "groundwater" in path.name else 0.011
        assert np.abs(old - new).max() <= step
        assert np.mean(old != new) < 1e-4
    kept_zones, made_zones = (
        geopandas.read_file(folder / "districts.gpkg") for folder in (TILES, tmp_path)
    )
    assert kept_zones.drop(columns="geometry").equals(made_zones.drop(columns="geometry"))
    assert kept_zones.geometry.geom_equals_exact(made_zones.geometry, 0.01).all()


def test_forty_cells_worked_by_hand(demo: Result) -> None:
    depth, codes, salt = (
        pasted(name).astype(float) for name in ("water_table_depth", "texture", "groundwater_ec")
    )
    layers = {}
    for path in (demo.folder / "layers").glob("*.tif"):
        with rasterio.open(path) as dataset:
            layers[path.stem] = dataset.read(1)
    random = np.random.default_rng(40)
    soil = np.argwhere((depth > -9000) & (codes > 0) & (codes < 20))
    picked = list(soil[random.choice(len(soil), 34, replace=False)])
    picked += list(soil[depth[tuple(soil.T)] <= 0.001][:6])
    for row, col in picked:
        tds = four_neighbours(salt, row, col) * 0.64
        answer = reference.cell(depth[row, col], TEXTURE[codes[row, col]], tds, 1650 / 365, 2.0)
        for name, value in answer.items():
            # The rise curve may err by 1e-4; a margin is the small difference of two depths.
            close = pytest.approx(value, rel=1.1e-4, abs=4e-4 if name == "depth_margin" else 1e-9)
            assert layers[name][row, col] == close, (row, col, name)


def four_neighbours(coarse: np.ndarray, row: int, col: int) -> float:
    """Bilinear value of a raster of four times coarser cells at the centre of a fine cell."""
    y, x = (row + 0.5) / 4 - 0.5, (col + 0.5) / 4 - 0.5
    rows = np.clip([int(np.floor(y)), int(np.floor(y)) + 1], 0, coarse.shape[0] - 1)
    cols = np.clip([int(np.floor(x)), int(np.floor(x)) + 1], 0, coarse.shape[1] - 1)
    v, u = y - np.floor(y), x - np.floor(x)
    return float(np.array([1 - v, v]) @ coarse[np.ix_(rows, cols)] @ np.array([1 - u, u]))


def test_zone_loads_and_areas_equal_exactextract(demo: Result) -> None:
    load, place = demo.layer("salt_load")
    classes = demo.layer("hazard_class")[0].filled(0)
    grid = Grid(pyproj.CRS.from_epsg(32740).to_wkt(), tuple(place)[:6], WIDTH, HEIGHT)
    hectares = np.empty((HEIGHT, WIDTH))
    for block in grid.blocks():
        rows = slice(block.row, block.row + block.height)
        hectares[rows, block.col : block.col + block.width] = cell_areas(grid, block) / 1e4
    dry, margin = (classes >= 1) & (classes <= 5), demo.layer("depth_margin")[0].filled(0)
    frame = geopandas.read_file(TILES / "districts.gpkg")
    bounds = dict(zip(("xmin", "ymax"), (place.c, place.f), strict=True))
    bounds |= {"xmax": place.c + place.a * WIDTH, "ymin": place.f + place.e * HEIGHT}
    columns = {
        "salt_load_t_per_year": np.where(dry, load.filled(0).astype(float) * hectares, 0.0),
        "assessed_ha": np.where(dry, hectares, 0.0),
        "high_ha": np.where(classes == 4, hectares, 0.0),
        "too_shallow_ha": np.where(dry & (margin < 0), hectares, 0.0),
    }
    for column, values in columns.items():
        source = NumPyRasterSource(values, srs_wkt=grid.crs_wkt, **bounds)
        found = exact_extract(source, frame, ["sum"], include_cols=["code"], output="pandas")
        theirs = dict(zip(found["code"], found["sum"], strict=True))
        for code, ours in zip(demo.zones["zone_id"], demo.zones[column], strict=True):
            # exactextract keeps fractions, and the layers keep loads, as float32.
            assert ours == pytest.approx(theirs[code], rel=1e-6, abs=1e-4), (code, column)


def test_the_demo_is_believable(demo: Result) -> None:
    counts = demo.record["counts_cells"]
    assert counts["at_surface"] > 100
    classes = demo.record["region"]
    for name in ("very_low_ha", "low_ha", "moderate_ha", "high_ha", "very_high_ha"):
        assert classes[name] > 0
    ranks = list(demo.zones["rank"])
    assert sum(rank is not None and rank == rank for rank in ranks) >= 10
    assert min(demo.zones["area_ha"]) < 2 < max(demo.zones["area_ha"])


def test_the_demo_of_seasons_worked_by_hand(tmp_path: Path) -> None:
    """Layers, roots, seasons and mulch of config/velith_seasons.toml, by the exact solution."""
    result = run_demo(tmp_path, "velith_seasons.toml")
    depth, codes, salt = (
        pasted(name).astype(float) for name in ("water_table_depth", "texture", "groundwater_ec")
    )
    load, most = (result.layer(name)[0] for name in ("salt_load", "max_evaporation"))
    soils = {t: row.profile for t, row in load_soil_set("rawls1982", ROOT).rows.items()}
    years = [(150, None, 900 * 150 / 365 * 0.9 - 180), (35, 0.7, 1650 * 35 / 365 * 0.9 - 250)]
    years.append((180, None, 2450 * 180 / 365 * 0.9 - 620))
    places = np.argwhere(~np.ma.getmaskarray(load) & (depth > 0.3))
    for row, col in np.random.default_rng(3).choice(places, 20, replace=False):
        stack = (soils[TEXTURE[codes[row, col]]], soils["silt loam"], soils["loamy sand"])
        column = Column(stack, (0.6 - 0.25, 1.8 - 0.25), 5.0)
        brought = mean = 0.0
        for days, own, demand in years:
            rise = max((own or depth[row, col]) - 0.25, 0.001)
            rate = float(column.evaporation(np.array([rise]))[0][0])
            brought += min(rate * days, max(demand, 0.0))
            mean += rate * days / 365
        tds = four_neighbours(salt, row, col) * 0.64
        assert load[row, col] == pytest.approx(brought * tds / 100, rel=1.1e-4, abs=1e-6)
        assert most[row, col] == pytest.approx(mean, rel=1.1e-4, abs=1e-6)
    folders = [path.name for path in (result.folder / "layers").iterdir() if path.is_dir()]
    assert sorted(folders) == ["season-fallow", "season-growing", "season-leaching"]
