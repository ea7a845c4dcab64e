"""Rules between keys, which no single field can tell; they look at the raw content, so that they
speak up beside other faults."""

from __future__ import annotations

import re
from difflib import get_close_matches
from pathlib import Path
from typing import Any

from saltrise.layers import LAYERS
from saltrise.settings.season_rules import all_seasons_have, season_faults
from saltrise.settings.soil_rules import soil_faults
from saltrise.settings.values import Fault, is_number, not_negative
from saltrise.units import is_conductivity

WARN_ACCURACY_M, REFUSE_ACCURACY_M = 0.5, 1.0


def rule_faults(raw: dict[str, Any], base: Path) -> list[Fault]:
    """Every broken rule, as key path and message."""
    table = {name: value for name, value in raw.items() if isinstance(value, dict)}
    return [
        *_water(table.get("water_table", {}), raw.get("season")),
        *_grid(table.get("grid"), table.get("water_table", {}), raw.get("season")),
        *soil_faults(raw.get("soil"), table.get("output", {})),
        *season_faults(raw.get("season"), table.get("water_table", {}), table.get("output", {})),
        *_salinity(table.get("groundwater", {})),
        *not_negative(table.get("climate", {}), "climate", "potential_evaporation"),
        *not_negative(table.get("root_zone", {}), "root_zone", "depth"),
        *_output(table.get("output", {}), base),
        *_scheduler(table.get("run", {})),
    ]


def _water(table: dict[str, Any], seasons: Any) -> list[Fault]:
    key = ("water_table",)
    other: list[str] = [n for n in ("elevation", "ground", "ground_accuracy") if n in table]
    faults: list[Fault] = []
    if "depth" in table:
        for name in other:
            text = "goes with elevation and ground, not with depth; give one or the other"
            faults.append(((*key, name), text))
        return faults
    if not other:
        if all_seasons_have(seasons, "depth"):
            return []
        text = "missing; give depth, or elevation, ground and ground_accuracy"
        return [((*key, "depth"), text)]
    missing: list[str] = [n for n in ("elevation", "ground", "ground_accuracy") if n not in table]
    for name in missing:
        text = "missing; a depth from elevations needs elevation, ground and ground_accuracy"
        faults.append(((*key, name), text))
    accuracy = table.get("ground_accuracy")
    accepted = table.get("accept_ground_error") is True
    if is_number(accuracy) and accuracy > REFUSE_ACCURACY_M and not accepted:
        text = (
            f"is {accuracy} m: a ground model this coarse makes a depth map of its own errors; "
            "at most 1.0 m, or set accept_ground_error = true"
        )
        faults.append(((*key, "ground_accuracy"), text))
    return faults


def _grid(table: dict[str, Any] | None, water: dict[str, Any], seasons: Any) -> list[Fault]:
    table = table if table is not None else {}
    given = [water[name] for name in ("depth", "elevation", "ground") if name in water]
    if isinstance(seasons, list):
        given += [s["depth"] for s in seasons if isinstance(s, dict) and "depth" in s]
    has_raster = not all(map(is_number, given))
    if not table:
        if water and not has_raster and given:
            text = "missing: the water table is a number; give like, or crs, resolution and bounds"
            return [(("grid",), text)]
        return []
    if "like" in table:
        return [
            (("grid", name), "cannot stand beside like; give one or the other")
            for name in ("crs", "resolution", "bounds")
            if name in table
        ]
    faults: list[Fault] = [
        (("grid", name), "missing; a grid needs like, or crs and resolution")
        for name in ("crs", "resolution")
        if name not in table
    ]
    bounds = table.get("bounds")
    if isinstance(bounds, list) and len(bounds) == 4 and all(map(is_number, bounds)):
        left, bottom, right, top = bounds
        if left >= right or bottom >= top:
            text = f"is {bounds}, must be left, bottom, right, top with left < right, bottom < top"
            faults.append((("grid", "bounds"), text))
    elif bounds is None and not has_raster and water:
        faults.append((("grid", "bounds"), "missing; the water table is a number"))
    return faults


def _salinity(table: dict[str, Any]) -> list[Fault]:
    faults = not_negative(table, "groundwater", "salinity")
    unit = table.get("unit")
    if "tds_per_ec" in table and unit in ("mg/L", "g/L") and not is_conductivity(unit):
        text = f"goes with a conductivity, but unit is {unit!r}; remove it"
        faults.append((("groundwater", "tds_per_ec"), text))
    return faults


def _output(table: dict[str, Any], base: Path) -> list[Fault]:
    faults: list[Fault] = []
    folder = table.get("folder")
    if isinstance(folder, str) and folder.strip():
        target = (base / folder).resolve()
        here = base.resolve()
        if target == here or target in here.parents:
            text = f"is {folder!r}, the folder of the config or one above it; name one of its own"
            faults.append((("output", "folder"), text))
    layers = table.get("layers")
    if isinstance(layers, list):
        for name in layers:
            if name not in LAYERS:
                close = get_close_matches(str(name), LAYERS, n=1)
                hint = f"; did you mean {close[0]!r}?" if close else ""
                text = f"holds {name!r}, allowed: {', '.join(LAYERS)}{hint}"
                faults.append((("output", "layers"), text))
        twice = sorted({str(n) for n in layers if layers.count(n) > 1})
        if twice:
            faults.append((("output", "layers"), f"names {', '.join(twice)} more than once"))
    return faults


def _scheduler(table: dict[str, Any]) -> list[Fault]:
    value = table.get("scheduler")
    known = r"threads|processes|(tcp|tls)://[^\s/:]+:\d+"
    if not isinstance(value, str) or re.fullmatch(known, value):
        return []
    text = f"is {value!r}, allowed: 'threads', 'processes', 'tcp://host:port'"
    return [(("run", "scheduler"), text)]
