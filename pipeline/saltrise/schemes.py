"""Class schemes: breaks, names, colours and citation that travel together.

A scheme is data (TOML), shipped or the user's; this module checks it and classifies with it.
"""

from __future__ import annotations

import itertools
import re
import tomllib
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from saltrise.errors import InputError
from saltrise.kernels.cells import classify

CLASS_COUNT = 5
SURFACE_CLASS = 6
"""Class of cells with water at or above the surface."""

CLASSIFIED = ("max_evaporation", "evaporation", "salt_load", "depth_margin")
"""Layers that can be classified; their larger values are the worse ones, so that breaks rise."""

FALLING = ("depth_margin",)
"""But for these: the smaller value is the worse one and breaks fall."""

_REQUIRED = ("breaks", "names", "colours", "citation")
_OPTIONAL = ("title", "layer", "unit", "surface_name", "surface_colour", "name")
_SURFACE = ("water at surface", "#2c7fb8")
_UNITS = {
    "max_evaporation": "mm day-1",
    "evaporation": "mm year-1",
    "salt_load": "t ha-1 year-1",
    "depth_margin": "m",
}


@dataclass(frozen=True)
class Scheme:
    """A class scheme: class k holds `breaks[k-2] <= value < breaks[k-1]` of `layer`, or where
    breaks fall `breaks[k-1] <= value < breaks[k-2]`.

    `names` and `colours` (`#rrggbb`) run over classes 1 to 6, the sixth being water at the
    surface; `breaks` has four values in `unit`, the layer's own.
    """

    name: str
    title: str
    layer: str
    unit: str
    breaks: tuple[float, float, float, float]
    names: tuple[str, ...]
    colours: tuple[str, ...]
    citation: str

    def classify(self, values: NDArray[np.float64]) -> NDArray[np.uint8]:
        """Class 1 to 5 of each value, any shape; a NaN falls into class 1 (mask it yourself)."""
        classes = np.empty(values.size, dtype=np.uint8)
        classify(values.ravel(), self.breaks, self.falls, classes)
        return classes.reshape(values.shape)

    @property
    def falls(self) -> bool:
        """Whether the smaller value is the worse one."""
        return self.layer in FALLING

    def bounds(self) -> list[tuple[float, float]]:
        """Lower and upper end of classes 1 to 5, infinite where open."""
        edges = [-np.inf, *sorted(self.breaks), np.inf]
        if not self.falls:
            edges[0] = 0.0
        pairs = list(itertools.pairwise(edges))
        return pairs[::-1] if self.falls else pairs

    def labels(self) -> list[str]:
        """Classes 1 to 6 in words with their ends and unit."""
        unit = self.unit.replace("-1", "").split()
        shown = "/".join(unit)
        words = []
        for name, (low, high) in zip(self.names, self.bounds(), strict=False):
            if np.isinf(high):
                span = f"{low:g} {shown} and more"
            elif np.isinf(low) or (low == 0 and not self.falls):
                span = f"under {high:g} {shown}"
            else:
                span = f"{low:g} to {high:g} {shown}"
            words.append(f"{name} ({span})")
        return [*words, self.names[-1]]

    def rgb(self) -> dict[int, tuple[int, int, int]]:
        """Colour of each class 1 to 6 as red, green, blue from 0 to 255."""
        return {
            k: (int(c[1:3], 16), int(c[3:5], 16), int(c[5:7], 16))
            for k, c in enumerate(self.colours, start=1)
        }


def parse_scheme(text: str, name: str, source: str) -> Scheme:
    """Read a class scheme from TOML text.

    Parameters
    ----------
    text : str
        TOML with `breaks` (4 rising numbers; falling ones for `depth_margin`), `names` and
        `colours` (5, or 6 with water at the surface last), `citation`; optionally `title`,
        `layer` (the classified layer, default `salt_load`), `unit` (must be the layer's own),
        `surface_name`, `surface_colour`.
    name : str
        Name under which the scheme is recorded.
    source : str
        File name for messages.

    Raises
    ------
    InputError
        Every fault at once, each naming file, key and value.
    """
    try:
        raw = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"{source}: not a TOML file: {error}") from error
    faults = [
        f"{key}: unknown key; allowed: {', '.join(_REQUIRED + _OPTIONAL)}"
        for key in raw
        if key not in _REQUIRED + _OPTIONAL
    ]
    faults += [f"{key}: missing" for key in _REQUIRED if key not in raw]
    faults += _text_faults(raw) + _break_faults(raw) + _list_faults(raw)
    if faults:
        raise InputError(*(f"{source}: {fault}" for fault in faults))
    return _build(raw, name)


def _build(raw: dict[str, Any], name: str) -> Scheme:
    layer = raw.get("layer", "salt_load")
    surface = (raw.get("surface_name", _SURFACE[0]), raw.get("surface_colour", _SURFACE[1]))
    names, colours = list(raw["names"]), list(raw["colours"])
    first, second, third, fourth = raw["breaks"]
    return Scheme(
        name=name,
        title=raw.get("title", name),
        layer=layer,
        unit=_UNITS[layer],
        breaks=(float(first), float(second), float(third), float(fourth)),
        names=tuple(names if len(names) > CLASS_COUNT else [*names, surface[0]]),
        colours=tuple(colours if len(colours) > CLASS_COUNT else [*colours, surface[1]]),
        citation=raw["citation"],
    )


def _is_number(value: object) -> bool:
    return (
        isinstance(value, int | float) and not isinstance(value, bool) and bool(np.isfinite(value))
    )


def _text_faults(raw: dict[str, Any]) -> list[str]:
    faults = [
        f"{key}: is {raw[key]!r}, must be a non-empty text"
        for key in ("title", "citation", "unit", "layer", "surface_name", "surface_colour", "name")
        if key in raw and not (isinstance(raw[key], str) and raw[key].strip())
    ]
    layer = raw.get("layer", "salt_load")
    if layer not in CLASSIFIED:
        faults.append(f"layer: is {layer!r}, allowed: {', '.join(CLASSIFIED)}")
    elif "unit" in raw and raw["unit"] != _UNITS[layer]:
        faults.append(f"unit: is {raw['unit']!r}, {layer} is in {_UNITS[layer]!r}")
    colour = raw.get("surface_colour")
    if isinstance(colour, str) and not _is_colour(colour):
        faults.append(f"surface_colour: is {colour!r}, must be #rrggbb")
    return faults


def _break_faults(raw: dict[str, Any]) -> list[str]:
    edges = raw.get("breaks")
    if "breaks" not in raw:
        return []
    if not isinstance(edges, list) or len(edges) != CLASS_COUNT - 1:
        return [f"breaks: is {edges!r}, must be a list of {CLASS_COUNT - 1} numbers"]
    falls = raw.get("layer") in FALLING
    if falls:
        if not all(map(_is_number, edges)):
            return [f"breaks: is {edges!r}, every value must be a number"]
        if any(b >= a for a, b in itertools.pairwise(edges)):
            return [f"breaks: is {edges!r}, values must fall: less {raw['layer']} is worse"]
        return []
    if not all(_is_number(edge) and edge > 0 for edge in edges):
        return [f"breaks: is {edges!r}, every value must be a positive number"]
    if any(b <= a for a, b in itertools.pairwise(edges)):
        return [f"breaks: is {edges!r}, values must rise"]
    return []


def _is_colour(value: object) -> bool:
    return isinstance(value, str) and re.fullmatch(r"#[0-9a-fA-F]{6}", value) is not None


def _list_faults(raw: dict[str, Any]) -> list[str]:
    faults = []
    for key in ("names", "colours"):
        value = raw.get(key)
        if key not in raw:
            continue
        if not isinstance(value, list) or len(value) not in (CLASS_COUNT, SURFACE_CLASS):
            faults.append(
                f"{key}: is {value!r}, must be a list of {CLASS_COUNT} or {SURFACE_CLASS}"
            )
        elif key == "colours":
            faults += [f"colours: {c!r} must be #rrggbb" for c in value if not _is_colour(c)]
        else:
            faults += [
                f"names: {n!r} must be a non-empty text"
                for n in value
                if not (isinstance(n, str) and n.strip())
            ]
    return faults
