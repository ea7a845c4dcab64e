"""Soil parameter sets with what they mean: the depth at which each class lifts 1 mm/day."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np

from saltrise.io.soil_tables import load_soil_set, shipped_sets
from saltrise.physics.curve import build_curves
from saltrise.physics.soils import TEXTURES, SoilSet


def list_soils(names: Sequence[str]) -> tuple[list[SoilSet], dict[tuple[str, str], float]]:
    """Soil sets by name or CSV path (all shipped ones when none is named).

    Returns
    -------
    sets : list of SoilSet
    depths : dict
        By set and texture, the depth to water table [m] at which E_max is 1 mm/day.

    Raises
    ------
    InputError
        An unknown name or a faulty CSV.
    """
    sets = _sets(names)
    depths: dict[tuple[str, str], float] = {}
    for soils in sets:
        curves = build_curves([row.profile for row in soils.rows.values()])
        which = np.arange(len(soils.rows), dtype=np.int32)
        found = curves.critical_depth(which, np.ones(len(which)))
        depths |= {(soils.name, t): float(d) for t, d in zip(soils.rows, found, strict=True)}
    return sets, depths


def compare_soils(
    names: Sequence[str], depth_m: float
) -> tuple[list[SoilSet], dict[tuple[str, str], float]]:
    """Maximum steady evaporation of every class under every set, over one water table.

    Parameters
    ----------
    names : sequence of str
        As in `list_soils`.
    depth_m : float
        Depth to water table [m], > 0.

    Returns
    -------
    sets : list of SoilSet
    rates : dict
        By set and texture [mm/day], textures from coarse to fine; exact, not interpolated.
    """
    sets = _sets(names)
    at = np.array([depth_m])
    rates = {
        (soils.name, texture): float(soils.rows[texture].profile.evaporation(at)[0][0])
        for texture in TEXTURES
        for soils in sets
        if texture in soils.rows
    }
    return sets, rates


def _sets(names: Sequence[str]) -> list[SoilSet]:
    return [load_soil_set(name, Path.cwd()) for name in names or shipped_sets()]
