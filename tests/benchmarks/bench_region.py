"""A large invented region for benchmarks: four rasters and, if asked for, zones."""

from __future__ import annotations

import itertools
from pathlib import Path

import geopandas
import numpy as np
import rasterio
from affine import Affine
from rasterio.windows import Window
from shapely.geometry import Polygon

from saltrise.physics.soils import TEXTURES

CRS, WEST, NORTH, CELL = "EPSG:32740", 500_000.0, 6_000_000.0, 30.0
STRIP = 512
CLASSES = tuple(name for name in TEXTURES if name != "silt")

# Name, least, greatest, cells between knots, type, nodata.
RASTERS = (
    ("depth", 0.2, 7.0, 64, "float32", -9999),
    ("texture", 0.0, 13.0, 97, "uint8", 0),
    ("salinity", 0.5, 20.0, 80, "float32", -9999),
    ("demand", 1200.0, 1900.0, 200, "float32", -9999),
)


SOIL_RASTERS = (
    ("middle", 0.0, 13.0, 83, "uint8", 0),
    ("deep", 0.0, 13.0, 113, "uint8", 0),
    ("sand", 7.0, 55.0, 97, "float32", -9999),
    ("clay", 4.0, 44.0, 71, "float32", -9999),
)

_FRACTIONS = 'sand = "sand.tif"\nclay = "clay.tif"\nunit = "%"\n'

SOILS = {
    "": 'texture = "texture.tif"\n',
    "layers": "".join(
        f'[[soil.layer]]\n{bottom}texture = "{name}.tif"\n'
        for bottom, name in (
            ("bottom = 0.4\n", "texture"),
            ("bottom = 1.2\n", "middle"),
            ("", "deep"),
        )
    ),
    "classes": _FRACTIONS,
    "cosby1984": _FRACTIONS + 'method = "cosby1984"\n',
    "campbell1985": _FRACTIONS + 'method = "campbell1985"\nbulk_density = 1.4\n',
    "saxton-rawls2006": _FRACTIONS + 'method = "saxton-rawls2006"\norganic_matter = 2.5\n',
}
"""Tables `[soil]` to compare, by name; the first is the usual one."""


def make_region(folder: Path, size: int, zones: int = 0, soil: str = "") -> Path:
    """Write rasters of `size` x `size` cells, `zones` zones and a config; return the config."""
    folder.mkdir(parents=True, exist_ok=True)
    config = folder / f"region{zones}{soil}.toml"
    if not (folder / "demand.tif").exists():
        for number, raster in enumerate(RASTERS):
            _write(folder, size, np.random.default_rng(number), *raster)
    if soil and not (folder / "clay.tif").exists():
        for number, raster in enumerate(SOIL_RASTERS, start=len(RASTERS)):
            _write(folder, size, np.random.default_rng(number), *raster)
    table = ""
    if zones:
        _write_zones(folder / f"zones{zones}.gpkg", size, zones)
        table = f'[zones]\nfile = "zones{zones}.gpkg"\n'
    classes = "\n".join(f'{k} = "{name}"' for k, name in enumerate(CLASSES, start=1))
    classes = f"[soil.classes]\n{classes}" if soil in ("", "layers") else ""
    if soil == "classes":
        classes = '[soil.classes]\nsilt = "silt loam"'
    config.write_text(
        f"""title = "Benchmark (invented)"
[water_table]
depth = "depth.tif"
unit = "m"
[soil]
{SOILS[soil]}{classes}
[groundwater]
salinity = "salinity.tif"
unit = "dS/m"
[climate]
potential_evaporation = "demand.tif"
unit = "mm/year"
{table}[output]
folder = "out"
report = false
[run]
workers = 2
""",
        encoding="utf-8",
    )
    return config


def _write(
    folder: Path,
    size: int,
    random: np.random.Generator,
    name: str,
    low: float,
    high: float,
    knots: int,
    dtype: str,
    nodata: float,
) -> None:
    """Bilinear noise between knots, rounded to millimetres; patches of nodata."""
    coarse = random.random((size // knots + 3, size // knots + 3)).astype(np.float32)
    profile = {"driver": "GTiff", "width": size, "height": size, "count": 1, "dtype": dtype}
    codec = {"compress": "zstd", "zstd_level": 1, "predictor": 3 if dtype == "float32" else 2}
    place = {"crs": CRS, "transform": Affine(CELL, 0, WEST, 0, -CELL, NORTH), "nodata": nodata}
    tiles = {"tiled": True, "blockxsize": STRIP, "blockysize": STRIP, "bigtiff": "if_safer"}
    temporary = folder / f"{name}.partial.tif"
    with rasterio.open(temporary, "w", **profile, **codec, **place, **tiles) as dataset:
        cols = np.arange(size) / knots
        left, right_share = cols.astype(int), (cols % 1).astype(np.float32)
        for top in range(0, size, STRIP):
            rows = np.arange(top, min(top + STRIP, size)) / knots
            above, below_share = rows.astype(int), (rows % 1)[:, None].astype(np.float32)
            strip = coarse[above] * (1 - below_share) + coarse[above + 1] * below_share
            values = strip[:, left] * (1 - right_share) + strip[:, left + 1] * right_share
            values = low + (high - low) * values
            if dtype == "uint8":
                values = np.clip(np.floor(values), 1, len(CLASSES))
            else:
                values = np.round(values + random.normal(0, 0.01, values.shape), 3)
            values[coarse[above + 1][:, left + 1] > 0.97] = nodata
            window = Window(0, top, size, values.shape[0])
            dataset.write(values.astype(dtype), 1, window=window)
    temporary.replace(folder / f"{name}.tif")


def _write_zones(path: Path, size: int, count: int) -> None:
    """Zones that partition the region along wavy borders of some hundred vertices."""
    across = next(k for k in range(int(count**0.5), 0, -1) if count % k == 0)
    down = count // across
    knots_x, knots_y = np.linspace(0, size, across + 1), np.linspace(0, size, down + 1)

    def bent(x: np.ndarray, y: np.ndarray) -> np.ndarray:
        inside = (x > 0) & (x < size) & (y > 0) & (y < size)
        dx = np.where(inside, 0.01 * size * np.sin(y / size * 40), 0)
        dy = np.where(inside, 0.01 * size * np.sin(x / size * 40), 0)
        return np.column_stack([WEST + CELL * (x + dx), NORTH - CELL * (y + dy)])

    shapes = []
    steps = np.linspace(0, 1, 60)
    for i, j in itertools.product(range(down), range(across)):
        (x0, x1), (y0, y1) = knots_x[j : j + 2], knots_y[i : i + 2]
        xs = np.concatenate([x0 + (x1 - x0) * steps, np.full(60, x1)])
        ys = np.concatenate([np.full(60, y0), y0 + (y1 - y0) * steps])
        xs = np.concatenate([xs, x1 - (x1 - x0) * steps, np.full(60, x0)])
        ys = np.concatenate([ys, np.full(60, y1), y1 - (y1 - y0) * steps])
        shapes.append(Polygon(bent(xs, ys)))
    codes = [f"Z{k:04d}" for k in range(len(shapes))]
    frame = geopandas.GeoDataFrame({"code": codes, "name": codes}, geometry=shapes, crs=CRS)
    frame.to_file(path, layer="zones", driver="GPKG")
