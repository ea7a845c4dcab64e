"""The soils that occur in a region: stacks of texture classes, their profiles and their keys."""

from __future__ import annotations

import itertools
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from saltrise.engine.inputs import Inputs, key_of
from saltrise.engine.survey import BlockScan
from saltrise.errors import InputError
from saltrise.physics.column import Column
from saltrise.physics.curve import SURFACE_DEPTH_M, RiseCurves, build_curves
from saltrise.physics.fraction_soils import curves_for
from saltrise.physics.profile import Profile, retains
from saltrise.physics.salt import Curves
from saltrise.physics.soils import NOT_SOIL, SoilSet, soil_for
from saltrise.physics.stacks import BASE, soils_of, stack_of
from saltrise.soil_cells import DENSE, UNKNOWN_STACK, ClassSoil, FractionSoil, Soil

if TYPE_CHECKING:
    from saltrise.settings import Settings

MOST_STACKS, MOST_ROOTS = 20_000, 64

CODE_SPAN = 1 << 24
"""Widest span of texture codes; beyond it a float32 cannot hold every code anyway."""


@dataclass(frozen=True, order=True)
class Stack:
    """Texture classes from the top of the rise down, and the bottoms of all but the last [m below
    that top]."""

    soils: tuple[str, ...]
    bottoms_m: tuple[float, ...] = ()


@dataclass(frozen=True)
class Occurring:
    """What occurs: `stacks` in the order of their profiles, the profile of each key, and the
    depths of the root zone that tell keys apart [m]."""

    stacks: tuple[Stack, ...]
    profiles: Mapping[int, int]
    roots_m: tuple[float, ...] = ()

    @property
    def textures(self) -> tuple[str, ...]:
        """Texture classes that occur, sorted."""
        return tuple(sorted({soil for stack in self.stacks for soil in stack.soils}))


def stack_below(soils: Sequence[str], bottoms_m: Sequence[float], root_m: float) -> Stack:
    """Layers below the roots; what lies above them is ignored, equal neighbours are one layer."""
    names: list[str] = []
    edges: list[float] = []
    for name, bottom in zip(soils, (*bottoms_m, math.inf), strict=True):
        if bottom - root_m <= SURFACE_DEPTH_M:
            continue
        if names and names[-1] == name:
            edges[-1] = bottom - root_m
        else:
            names.append(name)
            edges.append(bottom - root_m)
    return Stack(tuple(names), tuple(edges[:-1]))


def occurring(settings: Settings, inputs: Inputs, found: BlockScan) -> Occurring:
    """Stacks of a surveyed region.

    Raises
    ------
    InputError
        More stacks or depths of the root zone than a run can hold.
    """
    if settings.soil.method != "classes":
        return Occurring((), {})
    seen = set(found.stacks) if inputs.stacked else _single(settings, inputs, found)
    constant = inputs.constants.get("root_depth", 0.0)
    roots = tuple(sorted({root for _, root in seen})) if _tells(inputs) else ()
    if len(roots) > MOST_ROOTS:
        text = (
            f"{len(roots)} depths of the root zone meet layered soils, at most {MOST_ROOTS} can; "
            "round them to fewer classes"
        )
        raise InputError(settings.fault("root_zone.depth", text))
    stacks: dict[int, Stack] = {}
    for key, root in seen:
        soils = soils_of(stack_of(key, len(inputs.layers)))
        if soils is not None:
            place = roots.index(root) if roots else 0
            depth = (root if roots else constant) if inputs.stacked else 0.0
            whole = key + place * BASE ** len(inputs.layers)
            stacks[whole] = stack_below(soils, settings.soil.bottoms, depth)
    distinct = sorted(set(stacks.values()))
    if len(distinct) > MOST_STACKS:
        text = (
            f"{len(distinct)} different stacks of layers occur, at most {MOST_STACKS} can be "
            "solved; use fewer layers, map texture to fewer classes or round the root depth"
        )
        raise InputError(settings.fault("soil.layer", text))
    number = {stack: k for k, stack in enumerate(distinct)}
    return Occurring(tuple(distinct), {key: number[stacks[key]] for key in sorted(stacks)}, roots)


def _tells(inputs: Inputs) -> bool:
    return inputs.stacked and "root_depth" in inputs.rasters


def _single(settings: Settings, inputs: Inputs, found: BlockScan) -> set[tuple[int, float]]:
    """Keys of soils without layers, from the codes that occur."""
    codes = {code for _, code in found.codes} | _constant_codes(settings, inputs)
    known = [code for code in codes if code in settings.soil.codes]
    return {(int(n), 0.0) for n in inputs.codes.stacks([np.array(known, dtype=np.float64)])[0]}


def _constant_codes(settings: Settings, inputs: Inputs) -> set[float]:
    """The texture code that numbers in the config give, if they do."""
    given, end = inputs.constants, inputs.layers[0]
    if f"texture{end}" in given:
        return {given[f"texture{end}"]}
    if not {f"sand{end}", f"clay{end}"} <= given.keys() or f"silt{end}" in inputs.rasters:
        return set()
    try:
        return {float(inputs.texture_number(given, end))}
    except InputError as error:
        raise InputError(settings.fault(key_of(f"sand{end}"), str(error))) from error


def soil_faults(settings: Settings, sets: Sequence[SoilSet], textures: Sequence[str]) -> list[str]:
    """Classes that occur without a row in some set, or none at all."""
    faults = []
    if not textures:
        faults.append(
            settings.fault("soil.classes", f'every cell of the region is mapped to "{NOT_SOIL}"')
        )
    for soils, texture in itertools.product(sets, textures):
        try:
            row = soil_for(soils, texture)
        except InputError as error:
            faults += [settings.fault("soil.parameters", text) for text in error.faults]
            continue
        if _timed(settings) and soils is sets[0] and not retains(row.profile):
            text = (
                f"holds 'response_time', which needs the retention curve of {texture} in set "
                f"{soils.name!r}; add columns theta_s and theta_r, or leave the layer out"
            )
            faults.append(settings.fault("output.layers", text))
    return faults


def code_faults(settings: Settings) -> list[str]:
    """Texture codes that span too far to look up."""
    codes = settings.soil.codes
    if max(codes) - min(codes) <= CODE_SPAN:
        return []
    text = (
        f"codes run from {min(codes)} to {max(codes)}, must span at most {CODE_SPAN}; renumber them"
    )
    return [settings.fault("soil.classes", text)]


def class_soil(inputs: Inputs, found: Occurring) -> ClassSoil:
    """How the region's texture inputs choose a profile."""
    span = BASE ** len(inputs.layers) * max(1, len(found.roots_m))
    keys = np.array(list(found.profiles), dtype=np.int64)
    profiles = np.array(list(found.profiles.values()), dtype=np.int32)
    dense = span <= DENSE
    if dense:
        by_key = np.full(span, UNKNOWN_STACK, dtype=np.int32)
        by_key[keys] = profiles
        profiles = by_key
    return ClassSoil(
        inputs.codes,
        inputs.layers,
        None if dense else keys,
        profiles,
        np.array(found.roots_m),
        inputs.fraction_divisor,
    )


def soil_of(
    settings: Settings, inputs: Inputs, found: Occurring, sets: Sequence[SoilSet]
) -> tuple[list[Curves[Any]], Soil]:
    """Curves of the region's soils under each set, and how its inputs choose among them."""
    method = settings.soil.method
    if method == "classes":
        curves = [
            # Only the first set gives layers, so only it needs response times.
            curves_of(settings, soils, found.stacks, response=k == 0 and _timed(settings))
            for k, soils in enumerate(sets)
        ]
        return [*curves], class_soil(inputs, found)
    return [curves_for(method, top_suction(settings))], FractionSoil(
        method, inputs.fraction_divisor
    )


def top_suction(settings: Settings) -> float:
    """Suction at the top of the rise [m]: infinite where the config has no root zone."""
    return math.inf if settings.root_zone is None else settings.root_zone.suction


def _timed(settings: Settings) -> bool:
    return "response_time" in settings.layers


def curves_of(
    settings: Settings, soils: SoilSet, stacks: Sequence[Stack], *, response: bool
) -> RiseCurves:
    """Rise curves of stacks under one parameter set, with response times if asked for."""
    return build_curves([profile_of(settings, soils, s) for s in stacks], response=response)


def profile_of(settings: Settings, soils: SoilSet, stack: Stack) -> Profile | Column:
    """A stack as the physics takes it: a soil that dries without limit, or a column."""
    layers = tuple(soil_for(soils, name).profile for name in stack.soils)
    suction = top_suction(settings)
    if settings.soil.layer or settings.root_zone is not None:
        return Column(layers, stack.bottoms_m, suction)
    return layers[0]
