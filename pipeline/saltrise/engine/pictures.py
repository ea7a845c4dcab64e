"""Maps of a finished run, for slides and for its page."""

from __future__ import annotations

import base64
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np

from saltrise.engine.merge import Totals
from saltrise.engine.plan import Plan
from saltrise.engine.region import Region
from saltrise.io.finished import read_reduced
from saltrise.io.regrid import ground_size
from saltrise.layers import layer_of
from saltrise.report.figures import (
    Sheet,
    colours_of,
    drawable,
    length_text,
    map_png,
    png,
    svg_path,
)
from saltrise.report.styles import plain_unit

Table = Mapping[str, list[Any]]

_MOST_OUTLINES = 1000
"""Zones up to which both maps of the page show them; beyond, only the first does."""

_LONGEST = 900
"""Pixels of a map's longer side at most."""


@dataclass(frozen=True)
class Finished:
    """A run whose layers and zone table are made: what its page and maps are drawn from."""

    region: Region
    plan: Plan
    totals: Totals
    table: Table
    warnings: tuple[str, ...]
    date: datetime
    folder: Path


def sheet_of(plan: Plan) -> Sheet:
    """How the reduced pictures of a grid lie on the ground."""
    grid, cells = plan.grid, 1
    while max(grid.width, grid.height) / cells > _LONGEST:
        cells *= 2
    row, col = grid.height // 2, grid.width // 2
    corners = [grid.corner(row + dr, col + dc) for dr, dc in ((0, 0), (0, 1), (1, 0))]
    x, y, north = ground_size(grid.crs_wkt, *corners)
    size = (-(-grid.width // cells), -(-grid.height // cells))
    return Sheet(*size, float(cells), x * cells, y * cells, north)


def draw_map(found: Finished, name: str) -> bytes:
    """One layer as a map for a slide."""
    sheet, layer, settings = sheet_of(found.plan), layer_of(name), found.region.settings
    values = read_reduced(found.folder / "layers" / f"{name}.tif", int(sheet.cells))
    title = f"{drawable(settings.title, 'Region')}: {layer.meaning}"
    caption = (
        f"saltrise {version('saltrise')}, {found.date:%Y-%m-%d}. Screening level, upper estimate "
        "for bare soil; verify with field sampling."
    )
    scheme = found.region.scheme
    picture = colours_of(values, layer, scheme)
    shapes, table = found.plan.zones.shapes, found.table
    names = [drawable(table["name"][k], table["zone_id"][k]) for k in range(len(shapes))]
    return map_png(picture, layer, scheme, sheet, shapes, names, title, caption)


def page_maps(found: Finished) -> list[dict[str, Any]]:
    """Maps of class and load for the page, with outlines, scale and north."""
    sheet, scheme = sheet_of(found.plan), found.region.scheme
    rows = {row["zone"]: k for k, row in enumerate(zone_rows(found.table))}
    zones = found.region.zones
    shapes = found.plan.zones.shapes
    labels = [_label(found.table, k) for k in range(len(shapes))] if zones else []
    outlines = [
        {"d": svg_path(shape, sheet), "row": rows[k], "label": labels[k]}
        for k, shape in enumerate(shapes)
    ]
    length, pixels = sheet.scale_bar()
    maps: list[dict[str, Any]] = []
    for name in ("hazard_class", "salt_load"):
        if name not in found.plan.layers:
            continue
        layer = layer_of(name)
        values = read_reduced(found.folder / "layers" / f"{name}.tif", int(sheet.cells))
        stops = [f"{stop:g} {plain_unit(layer.unit)}" for stop in layer.stops]
        legend = (
            list(zip(layer.ramp, stops, strict=True))
            if layer.continuous
            else [
                (colour, f"{k} {label}")
                for k, (colour, label) in enumerate(
                    zip(scheme.colours, scheme.labels(), strict=True), start=1
                )
            ]
        )
        maps.append(
            {
                "title": scheme.title if not layer.continuous else layer.meaning.capitalize(),
                "source": _source(png(colours_of(values, layer, scheme))),
                "width": sheet.width,
                "height": sheet.height * sheet.stretch,
                "stretch": sheet.stretch,
                "legend": [*legend, ("#e1e1e1", "no answer")],
                "outlines": outlines if not maps or len(outlines) <= _MOST_OUTLINES else [],
                "scale": (length_text(length), pixels),
                "turn": float(np.degrees(np.arctan2(sheet.north[0], -sheet.north[1]))),
            }
        )
    return maps


def _source(image: bytes) -> Any:
    text = f"data:image/png;base64,{base64.b64encode(image).decode()}"
    return lambda: text


def _label(table: Table, zone: int) -> str:
    load = table["salt_load_mean_t_per_ha_per_year"][zone]
    rank = table["rank"][zone]
    shown = "not assessed" if load is None else f"{load:.3g} t/ha/year"
    place = f", rank {rank}" if rank is not None else ""
    return f"{table['name'][zone]}: {shown}{place}"


def zone_rows(table: Table) -> list[dict[str, Any]]:
    """Zones, the worst first."""
    if not table:
        return []
    count = len(table["zone_id"])
    rows = [{key: values[k] for key, values in table.items()} | {"zone": k} for k in range(count)]
    return sorted(rows, key=lambda r: (r["rank"] is None, r["rank"] or 0, r["zone_id"]))
