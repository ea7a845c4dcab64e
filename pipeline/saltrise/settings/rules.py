"""Rules between keys, which no single field can tell; they look at the raw content, so that they
speak up beside other faults."""

from __future__ import annotations

import re
from difflib import get_close_matches
from pathlib import Path
from typing import Any, TypeGuard

from saltrise.layers import LAYERS, SEVERAL_SETS
from saltrise.physics.soils import NOT_SOIL, TEXTURES
from saltrise.units import is_conductivity

Fault = tuple[tuple[str | int, ...], str]

WARN_ACCURACY_M, REFUSE_ACCURACY_M = 0.5, 1.0


def rule_faults(raw: dict[str, Any], base: Path) -> list[Fault]:
    """Every broken rule, as key path and message."""
    table = {name: value for name, value in raw.items() if isinstance(value, dict)}
    return [
        *_water(table.get("water_table", {})),
        *_grid(table.get("grid"), table.get("water_table", {})),
        *_soil(raw.get("soil")),
        *_classes(table.get("soil", {})),
        *_salinity(table.get("groundwater", {})),
        *_not_negative(table.get("climate", {}), "climate", "potential_evaporation"),
        *_output(table.get("output", {}), base),
        *_sets(table.get("soil", {}), table.get("output", {})),
        *_scheduler(table.get("run", {})),
    ]


def _water(table: dict[str, Any]) -> list[Fault]:
    key = ("water_table",)
    other: list[str] = [n for n in ("elevation", "ground", "ground_accuracy") if n in table]
    faults: list[Fault] = []
    if "depth" in table:
        for name in other:
            text = "goes with elevation and ground, not with depth; give one or the other"
            faults.append(((*key, name), text))
        return faults
    if not other:
        text = "missing; give depth, or elevation, ground and ground_accuracy"
        return [((*key, "depth"), text)]
    missing: list[str] = [n for n in ("elevation", "ground", "ground_accuracy") if n not in table]
    for name in missing:
        text = "missing; a depth from elevations needs elevation, ground and ground_accuracy"
        faults.append(((*key, name), text))
    accuracy = table.get("ground_accuracy")
    accepted = table.get("accept_ground_error") is True
    if _is_number(accuracy) and accuracy > REFUSE_ACCURACY_M and not accepted:
        text = (
            f"is {accuracy} m: a ground model this coarse makes a depth map of its own errors; "
            "at most 1.0 m, or set accept_ground_error = true"
        )
        faults.append(((*key, "ground_accuracy"), text))
    return faults


def _grid(table: dict[str, Any] | None, water: dict[str, Any]) -> list[Fault]:
    table = table if table is not None else {}
    has_raster = any(
        name in water and not _is_number(water[name]) for name in ("depth", "elevation", "ground")
    )
    if not table:
        if water and not has_raster and ("depth" in water or "ground" in water):
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
    if isinstance(bounds, list) and len(bounds) == 4 and all(map(_is_number, bounds)):
        left, bottom, right, top = bounds
        if left >= right or bottom >= top:
            text = f"is {bounds}, must be left, bottom, right, top with left < right, bottom < top"
            faults.append((("grid", "bounds"), text))
    elif bounds is None and not has_raster and water:
        faults.append((("grid", "bounds"), "missing; the water table is a number"))
    return faults


_FRACTIONS = ("sand", "clay", "silt", "unit", "method")


def _soil(table: Any) -> list[Fault]:
    """Texture codes with their classes, or fractions with their unit; not a mixture."""
    if not isinstance(table, dict):
        return []
    given = [name for name in _FRACTIONS if name in table]
    if "texture" in table:
        faults: list[Fault] = [
            (("soil", name), "goes with sand and clay, not with texture; give one or the other")
            for name in given
        ]
        if "classes" not in table:
            faults.append((("soil", "classes"), "missing; map each texture code to a class"))
        return faults
    if not given:
        text = "missing; give texture and classes, or sand, clay and unit"
        return [(("soil", "texture"), text)]
    return [
        (("soil", name), "missing; soil from fractions needs sand, clay and unit (% or g/kg)")
        for name in ("sand", "clay", "unit")
        if name not in table
    ]


def _classes(table: dict[str, Any]) -> list[Fault]:
    classes = table.get("classes")
    if not isinstance(classes, dict):
        return []
    allowed = (*TEXTURES, NOT_SOIL)
    faults: list[Fault] = []
    for code, name in classes.items():
        key = ("soil", "classes", str(code))
        if "texture" not in table and "sand" in table:
            if code not in TEXTURES:
                text = f"the key is {code!r}, must be a texture class: {', '.join(TEXTURES)}"
                faults.append((key, text))
        elif not re.fullmatch(r"-?\d+", str(code)):
            faults.append((key, f"the key is {code!r}, must be a whole number of the raster"))
        if name not in allowed:
            close = get_close_matches(str(name), allowed, n=1)
            hint = f"; did you mean {close[0]!r}?" if close else ""
            faults.append((key, f"is {name!r}, allowed: {', '.join(allowed)}{hint}"))
    codes = "texture" in table
    if codes and not faults and not any(name != NOT_SOIL for name in classes.values()):
        faults.append((("soil", "classes"), "maps no value to a soil; name at least one class"))
    return faults


def _salinity(table: dict[str, Any]) -> list[Fault]:
    faults = _not_negative(table, "groundwater", "salinity")
    unit = table.get("unit")
    if "tds_per_ec" in table and unit in ("mg/L", "g/L") and not is_conductivity(unit):
        text = f"goes with a conductivity, but unit is {unit!r}; remove it"
        faults.append((("groundwater", "tds_per_ec"), text))
    return faults


def _not_negative(table: dict[str, Any], name: str, key: str) -> list[Fault]:
    value = table.get(key)
    if _is_number(value) and value < 0:
        return [((name, key), f"is {value}, must be 0 or more")]
    return []


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


def _sets(soil: dict[str, Any], output: dict[str, Any]) -> list[Fault]:
    given, layers = soil.get("parameters"), output.get("layers")
    sets = given if isinstance(given, list) else [given]
    faults: list[Fault] = []
    twice = sorted({str(name) for name in sets if sets.count(name) > 1})
    if twice:
        faults.append((("soil", "parameters"), f"names {', '.join(twice)} more than once"))
    alone = [name for name in SEVERAL_SETS if isinstance(layers, list) and name in layers]
    if alone and len(sets) < 2:
        text = f"holds {alone[0]!r}, which needs a list of sets in soil.parameters"
        faults.append((("output", "layers"), text))
    return faults


def _scheduler(table: dict[str, Any]) -> list[Fault]:
    value = table.get("scheduler")
    known = r"threads|processes|(tcp|tls)://[^\s/:]+:\d+"
    if not isinstance(value, str) or re.fullmatch(known, value):
        return []
    text = f"is {value!r}, allowed: 'threads', 'processes', 'tcp://host:port'"
    return [(("run", "scheduler"), text)]


def _is_number(value: Any) -> TypeGuard[float]:
    return isinstance(value, int | float) and not isinstance(value, bool)
