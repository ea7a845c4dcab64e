"""From tile files to the final layers: one function of (records, layer), two ways to do it."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

import numpy as np

from saltrise.engine.coarse import coarse_levels
from saltrise.engine.merge import Statistics
from saltrise.engine.plan import Plan
from saltrise.engine.records import Record, section, section_path, tile_file
from saltrise.engine.stop import check_stop
from saltrise.grid import Window
from saltrise.io.blocks import Level, template, write_assembled
from saltrise.io.cog import virtual_layer, write_cog
from saltrise.layers import Layer, layer_of
from saltrise.pyramid import level_sizes

_Tags = dict[str, str]


def assemble(
    plan: Plan,
    records: list[Record],
    name: str,
    statistics: Statistics | None,
    tags: Mapping[str, str],
    target: Path,
    workers: int,
) -> None:
    """Write one layer of a run as a Cloud-Optimized GeoTIFF.

    Parameters
    ----------
    plan : Plan
        The region; `plan.assembly` says whether the tiles' compressed blocks are copied ("copy")
        or decoded and encoded again by GDAL's COG driver ("gdal").
    records : list of Record
        Every tile of the run.
    name : str
        Layer to write.
    statistics : Statistics or None
        Of the stored values; None where no cell is valid.
    tags : mapping of str
        Dataset tags: title, cautions, parameters.
    target : Path
        File to write.
    workers : int
        Threads that compress, where anything is compressed.

    Raises
    ------
    RunError
        The file cannot be written.
    """
    layer, grid = layer_of(name), plan.grid
    target.parent.mkdir(parents=True, exist_ok=True)
    colours = {} if layer.continuous else plan.recipe.scheme.rgb()
    dataset_tags = dict(tags) | _layer_tags(plan, layer)
    band_tags = _band_tags(plan, layer, statistics)
    if plan.assembly == "gdal":
        tiles = [(section_path(plan.work, r, name), Window(*r.window)) for r in records]
        virtual = virtual_layer(grid, layer, tiles, dataset_tags, band_tags, colours)
        write_cog(target, virtual, layer, plan.compression, workers)
        return
    base = template(grid, layer, plan.compression, dataset_tags, band_tags, colours)
    stored = [_stored_level(plan, records, name, k) for k in range(plan.tile_levels() + 1)]
    write_assembled(target, base, stored + coarse_levels(plan, records, layer), check_stop)


def _stored_level(plan: Plan, records: list[Record], name: str, level: int) -> Level:
    """A level whose blocks lie in the tile files."""
    grid, block = plan.grid, plan.grid.block
    sizes = [(grid.width, grid.height), *level_sizes(grid.width, grid.height, block)]
    width, height = sizes[level]
    rows, cols = -(-height // block), -(-width // block)
    file, start, size = (np.zeros((rows, cols), dtype=np.int64) for _ in range(3))
    for position, record in enumerate(records):
        places = np.array(record.blocks[section(name, level)], dtype=np.int64)
        top, left, h, w = (-(-v // 2**level) for v in record.window)
        here = (
            slice(top // block, top // block - (-h // block)),
            slice(left // block, left // block - (-w // block)),
        )
        shape = (-(-h // block), -(-w // block))
        file[here] = position
        start[here] = places[:, 0].reshape(shape)
        size[here] = places[:, 1].reshape(shape)
    paths = [tile_file(plan.work, record.index) for record in records]
    return Level(width, height, paths, file.ravel(), start.ravel(), size.ravel())


def _layer_tags(plan: Plan, layer: Layer) -> _Tags:
    tags: _Tags = {"OVERVIEW_METHOD": layer.overview}
    if layer.continuous:
        return tags
    scheme = plan.recipe.scheme
    tags |= {f"CLASS_{k}": text for k, text in enumerate(scheme.names, start=1)}
    tags |= {"CLASS_SCHEME": scheme.title, "CLASS_CITATION": scheme.citation}
    tags["CLASS_BREAKS"] = ", ".join(f"{b:g}" for b in scheme.breaks) + f" {scheme.unit}"
    return tags


def _band_tags(plan: Plan, layer: Layer, statistics: Statistics | None) -> _Tags:
    cells = plan.grid.width * plan.grid.height
    tags: _Tags = {"long_name": layer.meaning} | _statistics_tags(statistics, cells)
    return tags | ({"standard_name": layer.cf_name} if layer.cf_name else {})


def _statistics_tags(found: Statistics | None, cells: int) -> dict[str, str]:
    if found is None:
        return {"STATISTICS_VALID_PERCENT": "0"}
    return {
        "STATISTICS_MINIMUM": repr(found.minimum),
        "STATISTICS_MAXIMUM": repr(found.maximum),
        "STATISTICS_MEAN": repr(found.mean),
        "STATISTICS_STDDEV": repr(found.deviation),
        "STATISTICS_VALID_PERCENT": f"{100 * found.count / cells:.4g}",
    }
