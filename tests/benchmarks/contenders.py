"""What benchmarks compare, each run as a process of its own: python contenders.py NAME CONFIG.

saltrise      the whole job
cog_floor     our own reader and writer (statistics, overviews and fsync included), physics
              replaced by a copy, no survey, no hashes, no zone sums
plain_floor   a plain two-thread rasterio loop: read the inputs, write six layers, no overviews
xarray_dask   the usual xarray + dask script, one write a layer, then GDAL's COG driver
nothing       only the start: imports, and what the first compiled loop takes in
"""

from __future__ import annotations

import os
import sys
import threading
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from unittest.mock import patch

import numpy as np

os.environ.setdefault("GDAL_CACHEMAX", "256")

LAYERS = (
    ("max_evaporation", "depth"),
    ("evaporation", "demand"),
    ("salt_load", "salinity"),
    ("critical_depth", "depth"),
    ("depth_margin", "salinity"),
    ("hazard_class", "texture"),
)
"""Layers and the inputs that the floors copy into them."""


def saltrise(config: Path) -> None:
    """The whole job."""
    from saltrise import run

    run(config, force=True)


def cog_floor(config: Path) -> None:
    """Our own reader and writer around a copy."""
    from saltrise.engine import region, tiles
    from saltrise.engine.survey import BlockScan, Range, Sighting
    from saltrise.io.fingerprint import Fingerprint
    from saltrise.recipe import CellResult
    from saltrise.zonal import COLUMNS, Histogram, ZonePartial

    def copied(_recipe, inputs, _shape):
        valid = np.logical_and.reduce([np.isfinite(values) for values in inputs.values()])
        roles = {"demand": "potential_evaporation"}
        values = {n: inputs[roles.get(r, r)].astype(np.float64) for n, r in LAYERS[:-1]}
        codes = np.nan_to_num(inputs["texture"]).astype(np.uint8)
        return CellResult(
            values, codes, valid, inputs["depth"], inputs["salinity"], {"cells": valid.size}, ()
        )

    class Unsummed:
        """Stands for both areas and sums, and does nothing."""

        def __init__(self, *_: object) -> None: ...
        def rows(self, *_: object) -> np.ndarray:
            return nothing

        def add(self, *_: object) -> None: ...
        def partial(self) -> ZonePartial:
            return ZonePartial(np.array([-1]), np.zeros((1, COLUMNS)), Histogram(*[nothing] * 4))

    nothing = np.zeros(0, np.int64)

    def unseen(inputs, *_arguments, **_options):
        seen = Range(1, 0, 1.0, 1.0, None)
        codes = {("", float(k)): Sighting(1, 0, 0) for k in range(1, 12)}
        return BlockScan(dict.fromkeys(inputs.rasters, seen), codes, 1)

    with (
        patch.object(tiles, "compute_cells", copied),
        patch.object(tiles, "BlockSums", Unsummed),
        patch.object(tiles, "block_areas", lambda *_: Unsummed()),
        patch.object(tiles, "_sound_ranges", lambda *_: {}),
        patch.object(region, "_scan", unseen),
        patch("saltrise.engine.prints.fingerprint", lambda *_: Fingerprint(0, "", "")),
    ):
        saltrise(config)


def plain_floor(config: Path) -> None:
    """Read the inputs and write six rasters by 2048-windows on two threads, one lock a file."""
    import rasterio
    from rasterio.windows import Window

    folder = config.parent
    target = folder / "out_plain"
    target.mkdir(exist_ok=True)
    names = ("depth", "texture", "salinity", "demand")
    local = threading.local()
    with rasterio.open(folder / "depth.tif") as like:
        profile = like.profile
    size = profile["width"]
    outputs, locks = {}, {}
    for name, role in LAYERS:
        classes = role == "texture"
        changed = {"dtype": "uint8", "nodata": 0, "predictor": 2} if classes else {"predictor": 3}
        outputs[name] = rasterio.open(
            target / f"{name}.tif", "w", **(profile | changed | {"zstd_level": 1})
        )
        locks[name] = threading.Lock()

    def work(place: tuple[int, int]) -> None:
        if not hasattr(local, "inputs"):
            local.inputs = {name: rasterio.open(folder / f"{name}.tif") for name in names}
        top, left = place
        window = Window(left, top, min(2048, size - left), min(2048, size - top))
        read = {name: dataset.read(1, window=window) for name, dataset in local.inputs.items()}
        for name, role in LAYERS:
            values = read[role]
            if values.dtype == np.float32:
                bits = values.view(np.uint32)
                values = ((bits + np.uint32(1 << 10)) & np.uint32(0xFFFFF800)).view(np.float32)
            with locks[name]:
                outputs[name].write(values, 1, window=window)

    places = [(r, c) for r in range(0, size, 2048) for c in range(0, size, 2048)]
    with ThreadPoolExecutor(2) as pool:
        list(pool.map(work, places))
    for dataset in outputs.values():
        dataset.close()


def xarray_dask(config: Path) -> None:
    """The usual script: open lazily, map a function over chunks, write a raster a layer."""
    import dask
    import rasterio.shutil
    import rioxarray
    import xarray as xr

    from saltrise.engine.config import read_settings
    from saltrise.engine.region import make_recipe
    from saltrise.job import Silent, survey
    from saltrise.recipe import compute_cells

    recipe = make_recipe(survey(read_settings(config), Silent()))
    folder, target = config.parent, config.parent / "out_xarray"
    target.mkdir(exist_ok=True)
    roles = {"depth": "depth", "texture": "texture", "salinity": "salinity"}
    roles["demand"] = "potential_evaporation"
    chunks = {"x": 2048, "y": 2048}
    opened = {
        role: rioxarray.open_rasterio(folder / f"{name}.tif", chunks=chunks, masked=True)[0]
        for name, role in roles.items()
    }

    def layer(*arrays: np.ndarray, name: str) -> np.ndarray:
        inputs = {r: a.astype(np.float64) for r, a in zip(opened, arrays, strict=True)}
        result = compute_cells(recipe, inputs, arrays[0].shape)
        if name == "hazard_class":
            return result.hazard_class
        return np.where(result.valid, result.values[name], np.nan).astype(np.float32)

    with dask.config.set(scheduler="threads", num_workers=2):
        for name, _ in LAYERS:
            classes = name == "hazard_class"
            made = xr.apply_ufunc(
                layer,
                *opened.values(),
                kwargs={"name": name},
                dask="parallelized",
                output_dtypes=[np.uint8 if classes else np.float32],
            )
            made.rio.write_nodata(0 if classes else np.nan, inplace=True)
            plain = target / f"{name}.plain.tif"
            made.rio.to_raster(
                plain,
                tiled=True,
                blockxsize=512,
                blockysize=512,
                compress="zstd",
                zstd_level=1,
                predictor=2 if classes else 3,
                lock=threading.Lock(),
                bigtiff="if_safer",
            )
            rasterio.shutil.copy(
                plain,
                target / f"{name}.tif",
                driver="COG",
                compress="zstd",
                level=1,
                predictor="yes",
                overview_resampling="mode" if classes else "average",
                bigtiff="if_safer",
                num_threads=2,
            )
            plain.unlink()


def nothing(_config: Path) -> None:
    """The cost of starting."""
    import saltrise.job  # noqa: F401
    from saltrise.physics import powers

    powers.exp2(np.zeros(1))


if __name__ == "__main__":
    globals()[sys.argv[1]](Path(sys.argv[2]))
