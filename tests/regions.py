"""Small regions for tests: rasters, zones and a config, all invented."""

from __future__ import annotations

import json
import math
import re
from pathlib import Path
from typing import Any

import geopandas
import numpy as np
import rasterio
from affine import Affine
from shapely.geometry.base import BaseGeometry

# UTM 40S, over the open Indian Ocean.
CRS = "EPSG:32740"
WEST, NORTH, CELL = 500_000.0, 6_000_000.0, 30.0
CODES = {1: "sand", 2: "sandy loam", 3: "loam", 4: "clay", 9: "not soil"}


def place(
    west: float = WEST, north: float = NORTH, cell: float = CELL, rotation: float = 0.0
) -> Affine:
    """Transform of a north-up grid, or one turned about its first corner."""
    cos, sin = math.cos(math.radians(rotation)), math.sin(math.radians(rotation))
    return Affine(cell * cos, cell * sin, west, cell * sin, -cell * cos, north)


def write_raster(
    path: Path,
    values: np.ndarray,
    transform: Affine | None = None,
    crs: str | None = CRS,
    nodata: float | None = None,
    **options: Any,
) -> Path:
    """A one-band GeoTIFF."""
    path.parent.mkdir(parents=True, exist_ok=True)
    with rasterio.open(
        path,
        "w",
        driver="GTiff",
        width=values.shape[1],
        height=values.shape[0],
        count=1,
        dtype=values.dtype,
        crs=crs,
        transform=transform or place(),
        nodata=nodata,
        **options,
    ) as dataset:
        dataset.write(values, 1)
    return path


def write_zones(path: Path, shapes: dict[str, BaseGeometry], crs: str = CRS) -> Path:
    """A GeoPackage of zones with the fields `code` and `name`."""
    names = [f"Zone {code}" for code in shapes]
    frame = geopandas.GeoDataFrame(
        {"code": list(shapes), "name": names}, geometry=list(shapes.values()), crs=crs
    )
    frame.to_file(path, layer="districts", driver="GPKG")
    return path


def write_config(folder: Path, tables: dict[str, dict[str, Any]], name: str = "region") -> Path:
    """A TOML config; dicts become tables, lists arrays of tables, None leaves a key out."""
    lines = []
    for table, content in tables.items():
        if isinstance(content, list):
            for part in content:
                lines += [f"[[{table}]]", *_keys(part)]
        elif isinstance(content, dict):
            lines += [f"[{table}]", *_keys(content)]
        else:
            lines.insert(0, f"{table} = {json.dumps(content)}")
    path = folder / f"{name}.toml"
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


def _keys(content: dict[str, Any]) -> list[str]:
    lines = []
    for key, value in content.items():
        bare = key if re.fullmatch(r"[A-Za-z0-9_-]+", key) else json.dumps(key)
        if value is not None:
            lines.append(f"{bare} = {json.dumps(value, ensure_ascii=False)}")
    return lines


def fields(shape: tuple[int, int], random: np.random.Generator) -> dict[str, np.ndarray]:
    """Plausible depth [m], texture code, EC [dS/m] and potential evaporation [mm/year]."""
    depth = random.uniform(-0.2, 6.0, shape).astype(np.float32)
    depth[random.random(shape) < 0.05] = -9999
    texture = random.choice([1, 2, 3, 4, 9], shape, p=[0.2, 0.3, 0.3, 0.15, 0.05])
    salinity = random.uniform(0.5, 20.0, shape).astype(np.float32)
    demand = random.uniform(1200, 1900, shape).astype(np.float32)
    return {
        "depth": depth,
        "texture": texture.astype(np.uint8),
        "salinity": salinity,
        "demand": demand,
    }


def tables(folder: Path, **changes: Any) -> dict[str, dict[str, Any]]:
    """A full config for the rasters of `write_fields`, with changed keys by table."""
    base: dict[str, Any] = {
        "title": "Test",
        "water_table": {"depth": "depth.tif", "unit": "m"},
        "soil": {"texture": "texture.tif", "parameters": "rawls1982"},
        "soil.classes": {str(code): name for code, name in CODES.items()},
        "groundwater": {"salinity": "salinity.tif", "unit": "dS/m"},
        "climate": {"potential_evaporation": "demand.tif", "unit": "mm/year"},
        "hazard": {"target_load": 2.0},
        "output": {"folder": str(folder / "out"), "report": False},
        "run": {"tile": 512, "workers": 1},
    }
    for table, content in changes.items():
        key = table.replace("__", ".")
        base[key] = content if isinstance(content, list) else base.get(key, {}) | content
    return base


def write_fields(
    folder: Path, values: dict[str, np.ndarray], transform: Affine | None = None, crs: str = CRS
) -> None:
    """The rasters that `tables` names."""
    write_raster(folder / "depth.tif", values["depth"], transform, crs, nodata=-9999)
    write_raster(folder / "texture.tif", values["texture"], transform, crs, nodata=0)
    write_raster(folder / "salinity.tif", values["salinity"], transform, crs, nodata=-9999)
    write_raster(folder / "demand.tif", values["demand"], transform, crs, nodata=-9999)


def small_region(
    folder: Path, shape: tuple[int, int] = (40, 50), seed: int = 1, **changes: Any
) -> Path:
    """Rasters and config of a small random region."""
    write_fields(folder, fields(shape, np.random.default_rng(seed)))
    return write_config(folder, tables(folder, **changes))
