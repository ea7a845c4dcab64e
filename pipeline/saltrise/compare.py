"""Two finished runs of one grid: what changed, where, and in what the runs differ."""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from saltrise.coverage import ZoneShapes, block_cover, prepare_zones
from saltrise.engine.identity import SHARED, differences
from saltrise.errors import InputError
from saltrise.grid import Grid, Window, cell_areas
from saltrise.io import durable
from saltrise.io.change import Layers, Strip, write_changes
from saltrise.io.finished import zones_on
from saltrise.io.tables import write_csv
from saltrise.layers import CHANGES, NODATA
from saltrise.result import Result
from saltrise.schemes import SURFACE_CLASS

Array = NDArray[np.float64]

_CODES = SURFACE_CLASS + 1
_NEEDED = ("salt_load", "depth_margin", "critical_depth", "hazard_class")
WITHIN_ERROR = 100
"""Value of `hazard_class_change` where depths differ by no more than their stated error."""

_CLASS_NODATA = -32768
_REGION = ("region", "whole region")


@dataclass
class _Found:
    """Sums of a comparison under way: area [m2] by zone, class before and class after."""

    areas: Array
    doubtful_m2: float = 0.0
    load_t: list[float] = field(default_factory=lambda: [0.0, 0.0])


@dataclass(frozen=True)
class Comparison:
    """What `compare` found.

    `differing` says in words how settings, inputs and software differ; `load_t_per_year` are the
    loads of both runs on land assessed in both; `worse_ha`, `better_ha` areas that changed class;
    `within_error_ha` of them the part whose depth change is within the stated error.
    """

    folder: Path
    differing: tuple[str, ...]
    load_t_per_year: tuple[float, float]
    worse_ha: float
    better_ha: float
    same_ha: float
    within_error_ha: float
    depth_error_m: float

    def lines(self) -> list[str]:
        """The short report."""
        lines = ["The runs have the same settings, inputs and software."]
        if self.differing:
            lines = ["The runs differ in:", *(f"  {text}" for text in self.differing)]
        before, after = self.load_t_per_year
        change = f" ({100 * (after - before) / before:+.3g} %)" if before else ""
        lines += [
            f"Gross salt rise where both assess: {before:,.0f} to {after:,.0f} t/year{change}",
            f"  worse by class  {self.worse_ha:>14,.1f} ha",
            f"  better by class {self.better_ha:>14,.1f} ha",
            f"  same class      {self.same_ha:>14,.1f} ha",
        ]
        if self.depth_error_m > 0:
            lines.append(
                f"  of the changed, {self.within_error_ha:,.1f} ha have depths that differ by no "
                f"more than {self.depth_error_m:g} m, within their error"
            )
        caution = (
            "Screening level; a change of settings or inputs changes the map as the land does."
        )
        return [*lines, caution]


def compare(first: Path, second: Path, folder: Path, depth_error_m: float = 0.0) -> Comparison:
    """Compare two finished runs, the second minus the first, and write the changes.

    Parameters
    ----------
    first, second : Path
        Folders of finished runs.
    folder : Path
        New folder for change layers and transitions.
    depth_error_m : float
        Where depths differ by no more than this, the change of class is marked as within error.

    Raises
    ------
    InputError
        A folder is no finished run, the grids differ, or `folder` exists; nothing is written.
    RunError
        A file cannot be written.
    """
    runs = [_opened(path) for path in (first, second)]
    grids = [run.record["grid"] for run in runs]
    for key in ("crs", "transform", "width", "height"):
        if grids[0][key] != grids[1][key]:
            raise InputError(
                f"{second}: its grid does not match that of {first}: {key} is "
                f"{_short(grids[1][key])}, was {_short(grids[0][key])}; run both on one grid "
                "([grid] in the config)"
            )
    if folder.exists():
        raise InputError(f"{folder}: exists already; name a new folder")
    grid = Grid(
        grids[0]["crs"], tuple(grids[0]["transform"]), grids[0]["width"], grids[0]["height"]
    )
    zones = zones_on(second, grid)
    ids, names, shapes = zones if zones else ([_REGION[0]], [_REGION[1]], None)
    partial = folder.with_name(f"{folder.name}.partial")
    shutil.rmtree(partial, ignore_errors=True)
    found = _Found(np.zeros((len(ids), _CODES * _CODES)))
    whole = _Found(np.zeros((1, _CODES * _CODES)))
    cover = prepare_zones(shapes, grid) if shapes is not None else None
    with Layers(first, _NEEDED) as one, Layers(second, _NEEDED) as other:
        strips = _strips(grid, one, other, (found, whole), cover, depth_error_m)
        tags = {"TITLE": f"{runs[1].record['title']} minus {runs[0].record['title']}"}
        write_changes(partial / "layers", grid, CHANGES, strips, tags)
    differing = differences(
        {part: runs[0].record[part] for part in SHARED},
        {part: runs[1].record[part] for part in SHARED},
    )
    areas = found.areas if cover is not None else whole.areas
    write_csv(partial / "class_transitions.csv", _transitions(ids, names, areas))
    outcome = _outcome(folder, differing, whole, depth_error_m)
    durable.write_json(partial / "change.json", _summary(runs, outcome))
    durable.write_whole(partial / "report.txt", ["\n".join(outcome.lines()).encode()])
    partial.rename(folder)
    return outcome


def _opened(path: Path) -> Result:
    if not (path / "run.json").is_file():
        raise InputError(f"{path}: is no folder of a finished run (it has no run.json)")
    return Result(path)


def _short(value: Any) -> str:
    text = str(value)
    return text if len(text) < 80 else f"{text[:77]}..."


def _strips(
    grid: Grid,
    one: Layers,
    other: Layers,
    sums: tuple[_Found, _Found],
    cover: ZoneShapes | None,
    depth_error_m: float,
) -> Iterator[tuple[Window, Strip]]:
    for block in grid.blocks():
        before, after = one.read(block), other.read(block)
        classes = [np.nan_to_num(v["hazard_class"]).astype(np.int64) for v in (before, after)]
        depths = [v["depth_margin"] + v["critical_depth"] for v in (before, after)]
        doubtful = np.abs(depths[1] - depths[0]) <= depth_error_m
        _add(grid, block, classes, doubtful & (classes[0] != classes[1]), sums, cover)
        _add_loads(grid, block, before["salt_load"], after["salt_load"], classes, sums[1])
        step = (classes[1] - classes[0]).astype(np.int16)
        if depth_error_m > 0:
            step[doubtful] = WITHIN_ERROR
        step[(classes[0] == 0) | (classes[1] == 0)] = _CLASS_NODATA
        yield (
            block,
            {
                "salt_load_change": _filled(after["salt_load"] - before["salt_load"]),
                "depth_margin_change": _filled(after["depth_margin"] - before["depth_margin"]),
                "hazard_class_change": step,
            },
        )


def _filled(values: Array) -> NDArray[np.float32]:
    return np.where(np.isnan(values), NODATA, values).astype(np.float32)


def _add(
    grid: Grid,
    block: Window,
    classes: list[NDArray[np.int64]],
    doubtful: NDArray[np.bool_],
    sums: tuple[_Found, _Found],
    cover: ZoneShapes | None,
) -> None:
    area = cell_areas(grid, block).ravel()
    code = (classes[0] * _CODES + classes[1]).ravel()
    by_zone, whole = sums
    whole.areas[0] += np.bincount(code, area, _CODES * _CODES)
    whole.doubtful_m2 += float(area[doubtful.ravel()].sum())
    if cover is None:
        return
    zone, cell, fraction = block_cover(cover, block).every_cell(area.size)
    place = zone * (_CODES * _CODES) + code[cell]
    counted = np.bincount(place, fraction * area[cell], by_zone.areas.size)
    by_zone.areas += counted.reshape(by_zone.areas.shape)


def _add_loads(
    grid: Grid,
    block: Window,
    before: Array,
    after: Array,
    classes: list[NDArray[np.int64]],
    whole: _Found,
) -> None:
    both = np.logical_and.reduce([(c > 0) & (c < SURFACE_CLASS) for c in classes])
    hectares = cell_areas(grid, block) / 1e4
    for k, load in enumerate((before, after)):
        whole.load_t[k] += float((np.nan_to_num(load) * hectares)[both].sum())


def _transitions(ids: list[str], names: list[str], areas: Array) -> dict[str, list[Any]]:
    table: dict[str, list[Any]] = {
        name: [] for name in ("zone_id", "name", "from_class", "to_class", "area_ha")
    }
    for id_, name, row in zip(ids, names, areas, strict=True):
        for code in np.flatnonzero(row):
            cells = (id_, name, int(code) // _CODES, int(code) % _CODES, float(row[code]) / 1e4)
            for column, cell in zip(table, cells, strict=True):
                table[column].append(cell)
    return table


def _outcome(folder: Path, differing: list[str], whole: _Found, depth_error_m: float) -> Comparison:
    square = whole.areas[0].reshape(_CODES, _CODES)[1:, 1:] / 1e4
    upper, lower = float(np.triu(square, 1).sum()), float(np.tril(square, -1).sum())
    return Comparison(
        folder,
        tuple(differing),
        (whole.load_t[0], whole.load_t[1]),
        upper,
        lower,
        float(np.trace(square)),
        whole.doubtful_m2 / 1e4,
        depth_error_m,
    )


def _summary(runs: list[Result], outcome: Comparison) -> dict[str, Any]:
    return {
        "first": {"title": runs[0].record["title"], "date": runs[0].record["date"]},
        "second": {"title": runs[1].record["title"], "date": runs[1].record["date"]},
        "differing": list(outcome.differing),
        "salt_load_t_per_year": list(outcome.load_t_per_year),
        "worse_ha": outcome.worse_ha,
        "better_ha": outcome.better_ha,
        "same_class_ha": outcome.same_ha,
        "depth_error_m": outcome.depth_error_m,
        "within_error_ha": outcome.within_error_ha if outcome.depth_error_m > 0 else None,
        "use_limits": runs[1].record["use_limits"],
    }
