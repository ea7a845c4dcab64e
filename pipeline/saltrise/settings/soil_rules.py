"""Rules of `[soil]`; they look at the raw content, so that they speak up beside other faults."""

from __future__ import annotations

import re
from difflib import get_close_matches
from typing import Any

from saltrise.layers import SEVERAL_SETS
from saltrise.physics.soils import NOT_SOIL, TEXTURES
from saltrise.settings.values import Fault, is_number, not_negative

_FRACTIONS = ("sand", "clay", "silt")
_OF_FRACTIONS = (*_FRACTIONS, "unit", "method", "organic_matter", "bulk_density")
_LEAST_LAYER_M = 0.01

_MOST_LAYERS = 8
"""More would be modelling, not mapping."""

_NEEDS = {
    "saxton-rawls2006": ("organic_matter", "organic matter [%]"),
    "campbell1985": ("bulk_density", "bulk density [g/cm3]"),
}
"""The key that a method of fractions needs, and what it holds."""


def soil_faults(table: Any, output: dict[str, Any]) -> list[Fault]:
    """Every broken rule of the soil's table, as key path and message."""
    if not isinstance(table, dict):
        return []
    layers = table.get("layer")
    if isinstance(layers, list) and all(isinstance(part, dict) for part in layers):
        faults, parts = _layers(table, layers), layers
    else:
        faults, parts = _single(table), [table]
    fractions = not any("texture" in part for part in parts) and any("sand" in p for p in parts)
    return faults + _method(table) + _classes(table, fractions=fractions) + _sets(table, output)


def _single(table: dict[str, Any]) -> list[Fault]:
    """Texture codes with their classes, or fractions with their unit; not a mixture."""
    given = [name for name in _OF_FRACTIONS if name in table]
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


def _layers(table: dict[str, Any], layers: list[dict[str, Any]]) -> list[Fault]:
    faults: list[Fault] = [
        (("soil", name), "stands in each [[soil.layer]], not beside them; give one or the other")
        for name in ("texture", *_FRACTIONS)
        if name in table
    ]
    if not 1 <= len(layers) <= _MOST_LAYERS:
        text = f"{len(layers)} layers, must be 1 to {_MOST_LAYERS}; put thin ones together"
        return [*faults, (("soil", "layer"), text)]
    faults += _bottoms(layers)
    if table.get("method", "classes") != "classes":
        text = (
            f"is {table['method']!r}, but layered fractions are reduced to texture classes; "
            'leave it out or set "classes"'
        )
        faults.append((("soil", "method"), text))
    kinds = {"texture" in part for part in layers}
    for k, part in enumerate(layers):
        key = ("soil", "layer", k)
        given = [name for name in _FRACTIONS if name in part]
        if "texture" in part:
            text = "goes with sand and clay, not with texture; give one or the other"
            faults += [((*key, name), text) for name in given]
        elif not given:
            faults.append(((*key, "texture"), "missing; give texture, or sand and clay"))
        else:
            text = "missing; a layer from fractions needs sand and clay"
            faults += [((*key, name), text) for name in ("sand", "clay") if name not in part]
    if len(kinds) > 1:
        text = "some layers have texture, others fractions; give all in one way"
        faults.append((("soil", "layer"), text))
    elif kinds == {False} and "unit" not in table:
        faults.append((("soil", "unit"), "missing; fractions are in % or g/kg"))
    elif kinds == {True} and "classes" not in table:
        faults.append((("soil", "classes"), "missing; map each texture code to a class"))
    return faults


def _bottoms(layers: list[dict[str, Any]]) -> list[Fault]:
    faults: list[Fault] = []
    above = 0.0
    for k, part in enumerate(layers):
        key, bottom = ("soil", "layer", k, "bottom"), part.get("bottom")
        if k == len(layers) - 1:
            if bottom is not None:
                text = f"is {bottom}, but the last layer has no bottom; remove it"
                faults.append((key, text))
        elif bottom is None:
            faults.append((key, "missing; every layer but the last ends at a bottom [m]"))
        elif is_number(bottom):
            if bottom < above + _LEAST_LAYER_M:
                text = (
                    f"is {bottom} m, must be at least {_LEAST_LAYER_M} m below the bottom above "
                    f"({above:g} m); list layers from the top down"
                )
                faults.append((key, text))
            above = max(above, float(bottom))
    return faults


def _method(table: dict[str, Any]) -> list[Fault]:
    method = table.get("method", "classes")
    faults: list[Fault] = [
        *not_negative(table, "soil", "organic_matter"),
        *not_negative(table, "soil", "bulk_density"),
    ]
    for name, (key, what) in _NEEDS.items():
        if method == name and key not in table:
            faults.append((("soil", key), f"missing; method {name!r} needs {what}"))
        elif key in table and method != name:
            text = f"goes with method {name!r}, not with {method!r}; remove it"
            faults.append((("soil", key), text))
    if method in ("cosby1984", *_NEEDS):
        for key in ("parameters", "conductivity", "classes"):
            if key in table:
                text = f"goes with texture classes; method {method!r} has its own parameters"
                faults.append((("soil", key), text))
    return faults


def _classes(table: dict[str, Any], *, fractions: bool) -> list[Fault]:
    classes = table.get("classes")
    if not isinstance(classes, dict):
        return []
    allowed = (*TEXTURES, NOT_SOIL)
    faults: list[Fault] = []
    for code, name in classes.items():
        key = ("soil", "classes", str(code))
        if fractions:
            if code not in TEXTURES:
                text = f"the key is {code!r}, must be a texture class: {', '.join(TEXTURES)}"
                faults.append((key, text))
        elif not re.fullmatch(r"-?\d+", str(code)):
            faults.append((key, f"the key is {code!r}, must be a whole number of the raster"))
        if name not in allowed:
            close = get_close_matches(str(name), allowed, n=1)
            hint = f"; did you mean {close[0]!r}?" if close else ""
            faults.append((key, f"is {name!r}, allowed: {', '.join(allowed)}{hint}"))
    if not fractions and not faults and not any(name != NOT_SOIL for name in classes.values()):
        faults.append((("soil", "classes"), "maps no value to a soil; name at least one class"))
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
    timed = isinstance(layers, list) and "response_time" in layers
    if timed and soil.get("method", "classes") != "classes":
        text = f"holds 'response_time', which method {soil['method']!r} does not give"
        faults.append((("output", "layers"), text))
    return faults
