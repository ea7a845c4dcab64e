"""Whole runs in a process of their own, ended at a chosen moment, and what they leave."""

from __future__ import annotations

import hashlib
import os
import re
import subprocess
import sys
from pathlib import Path

import numpy as np
import rasterio
from shapely.geometry import box

import regions
import saltrise
from saltrise.engine.config import read_settings
from saltrise.io import durable
from saltrise.settings import Settings

DATE = "1767225600"


class Stopped(BaseException):
    """A run is ended at a fault point."""


def make_region(folder: Path, **tables: dict) -> Path:
    """A region of 3 x 3 tiles of 32 cells with three zones, and its config."""
    folder.mkdir(parents=True, exist_ok=True)
    regions.write_fields(folder, regions.fields((70, 80), np.random.default_rng(5)))
    west, north = regions.WEST, regions.NORTH
    shapes = {
        "a": box(west, north - 1000, west + 700, north),
        "b": box(west + 700, north - 3000, west + 2600, north - 300),
        "c": box(west + 400, north - 900, west + 1500, north - 200),
    }
    regions.write_zones(folder / "zones.gpkg", shapes)
    output = {"folder": str(folder / "out")} | tables.pop("output", {})
    content = regions.tables(folder, zones={"file": "zones.gpkg"}, output=output, **tables)
    return regions.write_config(folder, content)


def small_tiles(config: Path, tile: int = 32, workers: int = 1, scheduler: str = "threads"):
    """Settings of a config with tiles smaller than a config may ask for."""
    found = read_settings(config)
    table = found.run.model_copy(update={"tile": tile, "workers": workers, "scheduler": scheduler})
    tables = found.tables.model_copy(update={"run": table})
    return Settings(tables, found.source, found.base, found.lines)


def run_small(config: Path, *, force: bool = False, **options) -> saltrise.Result:
    """Run a region with blocks of 16 cells."""
    return saltrise.run(small_tiles(config, **options), force=force, block=16)


def hashes(folder: Path) -> dict[str, str]:
    """SHA-256 of every file of a finished run."""
    files = sorted(p for p in folder.rglob("*") if p.is_file())
    return {
        p.relative_to(folder).as_posix(): hashlib.sha256(p.read_bytes()).hexdigest() for p in files
    }


def data(folder: Path) -> dict[str, str]:
    """SHA-256 of what a finished run says, apart from which files its inputs came from.

    Of a layer: every level's stored numbers, its profile, colours and all tags but the names of
    rasters (and their SHA-256). Of the catalogue item: all but the checksums and sizes of files.
    """
    found = {name: digest for name, digest in hashes(folder).items() if name != "run.json"}
    for name in found:
        if name.endswith(".tif"):
            found[name] = _layer_digest(folder / name)
        elif name == "item.json":
            item = re.sub(r'"file:(checksum|size)": [^,}]*', "", (folder / name).read_text())
            found[name] = hashlib.sha256(item.encode()).hexdigest()
    return found


def _layer_digest(path: Path) -> str:
    digest = hashlib.sha256()
    with rasterio.open(path) as layer:
        tags = {name: text for name, text in layer.tags().items() if name != "INPUTS"}
        tags["SETTINGS"] = re.sub(r'"[^"]*\.tif"', "raster", tags["SETTINGS"])
        told = (tags, layer.tags(1), layer.profile, layer.units, layer.descriptions)
        digest.update(repr(told).encode())
        if layer.count == 1 and layer.dtypes[0] == "uint8":
            digest.update(repr(layer.colormap(1)).encode())
        levels = len(layer.overviews(1))
    for level in range(-1, levels):
        options = {} if level < 0 else {"overview_level": level}
        with rasterio.open(path, **options) as stored:
            digest.update(stored.read(1).tobytes())
    return digest.hexdigest()


def stop_at(step: int, seen: list[str]):
    """An observer that notes every durable step and ends the run at one of them."""

    def observe(name: str) -> None:
        seen.append(name)
        if len(seen) == step:
            raise Stopped(name)

    return observe


def stopped_run(config: Path, step: int, **options) -> list[str]:
    """Run until a durable step; return the steps seen, one more than asked if it finished."""
    seen: list[str] = []
    observer = stop_at(step, seen)
    durable.observers.append(observer)
    try:
        run_small(config, **options)
    except Stopped:
        return seen
    finally:
        durable.observers.remove(observer)
    return [*seen, "whole"]


CHILD = """
import sys, os, signal
sys.path[:0] = {path!r}
import runs
from saltrise.io import durable
{setup}
from saltrise import cli
runs_config = {config!r}
import saltrise.job as job
plain = job.run
def small(settings, *, force=False, listener=None):
    made = runs.small_tiles(runs_config, workers={workers}, scheduler={scheduler!r})
    return plain(made, force=force, listener=listener, block=16)
job.run = small
sys.argv = ["saltrise", "run", runs_config] + {arguments!r}
if __name__ == "__main__":
    cli.main()
"""

KILL = """
count = 0
def kill(name):
    global count
    count += name.startswith({name!r})
    if count == {nth}:
        os.kill(os.getpid(), signal.SIGKILL)
durable.observers.append(kill)
"""


def child(
    config: Path,
    setup: str = "",
    *arguments: str,
    workers: int = 1,
    scheduler: str = "threads",
    wait: bool = True,
):
    """The command line's `run` on small tiles in another process, after some setup code."""
    script = config.parent / "child.py"
    script.write_text(
        CHILD.format(
            path=[str(Path(__file__).parent)],
            setup=setup,
            config=str(config),
            workers=workers,
            scheduler=scheduler,
            arguments=list(arguments),
        )
    )
    command = [sys.executable, str(script)]
    environment = os.environ | {"SOURCE_DATE_EPOCH": DATE}
    if wait:
        return subprocess.run(
            command, capture_output=True, text=True, timeout=120, env=environment, check=False
        )
    nowhere = subprocess.DEVNULL
    return subprocess.Popen(
        command, stdout=nowhere, stderr=nowhere, env=environment, start_new_session=True
    )
