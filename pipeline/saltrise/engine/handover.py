"""Hand over: everything in the folder that is made from the finished layers and tables."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict
from datetime import datetime
from pathlib import Path
from typing import Any

import numpy as np

from saltrise.engine.account import CAUTIONS, METHOD
from saltrise.engine.identity import versions
from saltrise.engine.merge import Totals
from saltrise.engine.page_content import draw_page
from saltrise.engine.pictures import Finished, draw_map
from saltrise.engine.region import Region
from saltrise.engine.schedule import on_threads
from saltrise.io import durable
from saltrise.io.fingerprint import fingerprint
from saltrise.io.regrid import epsg_of, outline_in_degrees
from saltrise.io.tables import write_csv
from saltrise.layers import layer_of
from saltrise.report.stac import HandedFile, Place, stac_item
from saltrise.report.styles import attribute_table, sld
from saltrise.zonal import DEPTH_EDGES_M, REGION, SALT_EDGES_G_PER_L
from saltrise.zone_table import MEANINGS

_ITEM = "item.json"


def hand_over(found: Finished) -> None:
    """Write styles, attribute table, column descriptions, maps, page and the STAC Item.

    Raises
    ------
    RunError
        A file cannot be written.
    """
    region, totals, folder = found.region, found.totals, found.folder
    _styles(region, folder)
    if "hazard_class" in region.settings.layers:
        areas = totals.zones.areas(REGION).sum(axis=(1, 2))[1:] / 1e4
        _text(
            folder / "layers" / "hazard_class.tif.aux.xml",
            attribute_table(region.scheme, [float(area) for area in areas]),
        )
    if region.zones is not None:
        _columns(folder)
    _crossed(found)
    if region.settings.output.report:
        _pictures(found)
    item = _item(region, totals, found.date, folder)
    durable.write_json(folder / _ITEM, item)


def _pictures(found: Finished) -> None:
    for name in found.region.settings.layers:
        target = found.folder / "maps" / f"{name}.png"
        if not target.exists():
            target.parent.mkdir(parents=True, exist_ok=True)
            durable.write_whole(target, [draw_map(found, name)])
    durable.write_whole(found.folder / "report.html", [draw_page(found).encode()])


def _text(path: Path, text: str) -> None:
    """Write a file unless an earlier start of the run has: they appear whole."""
    if path.exists():
        return
    path.parent.mkdir(parents=True, exist_ok=True)
    durable.write_whole(path, [text.encode()])


def _styles(region: Region, folder: Path) -> None:
    for name in region.settings.layers:
        style = sld(layer_of(name), region.scheme, region.settings.title)
        _text(folder / "styles" / f"{name}.sld", style)


def _columns(folder: Path) -> None:
    if (folder / "zones_columns.csv").exists():
        return
    head = (folder / "zones.csv").read_text("utf-8").splitlines()[0].split(",")
    table = {
        "column": head,
        "unit": [MEANINGS[name][0] for name in head],
        "meaning": [MEANINGS[name][1] for name in head],
    }
    write_csv(folder / "zones_columns.csv", table)


def _crossed(found: Finished) -> None:
    """Assessed hectares by depth class and salinity class, of the region and each zone."""
    target = found.folder / "depth_by_salinity.csv"
    if target.exists():
        return
    zones = found.region.zones
    known = [("", "whole region", REGION)]
    if zones is not None:
        known += [
            (id_, name, k) for k, (id_, name) in enumerate(zip(zones.ids, zones.names, strict=True))
        ]
    names = ("zone_id", "name", "depth_from_m", "tds_from_g_per_l", "area_ha")
    table: dict[str, list[Any]] = {name: [] for name in names}
    for id_, name, zone in known:
        for (depth, salt), area in np.ndenumerate(found.totals.zones.depth_by_salinity(zone)):
            edges = ((0.0, *DEPTH_EDGES_M)[depth], (0.0, *SALT_EDGES_G_PER_L)[salt])
            for column, cell in zip(table, (id_, name, *edges, float(area) / 1e4), strict=True):
                table[column].append(cell)
    write_csv(target, table)


def _item(region: Region, totals: Totals, date: datetime, folder: Path) -> dict[str, Any]:
    grid = region.inputs.grid
    corners = [
        grid.corner(row, col)
        for row, col in ((0, 0), (grid.height, 0), (grid.height, grid.width), (0, grid.width))
    ]
    place = Place(
        outline_in_degrees(grid.crs_wkt, corners),
        epsg_of(grid.crs_wkt),
        grid.crs_wkt,
        grid.transform,
        grid.width,
        grid.height,
    )
    statistics: dict[str, Mapping[str, float]] = {
        name: asdict(found) for name, found in totals.statistics.items()
    }
    return stac_item(
        region.settings.title,
        f"{region.scheme.title}. {' '.join(CAUTIONS)}",
        date,
        place,
        region.scheme,
        statistics,
        _files(folder, region.settings.workers),
        METHOD,
        versions(),
    )


def _files(folder: Path, workers: int) -> list[HandedFile]:
    """Every file so far but the item itself, in one order."""
    names = {
        path.relative_to(folder).as_posix(): path for path in folder.rglob("*") if path.is_file()
    }
    own = sorted(
        name
        for name in names
        if not name.startswith("work/")
        and name not in (_ITEM, "run.json")
        and not name.endswith(".xml")
    )
    prints = on_threads(lambda name: fingerprint(str(names[name])), own, workers, lambda _: None)
    return [HandedFile(name, p.size, p.sha256) for name, p in zip(own, prints, strict=True)]
