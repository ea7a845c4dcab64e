"""Soil parameter sets with what they mean: the depth at which each class lifts 1 mm/day."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np

from saltrise.io.soil_tables import load_soil_set, shipped_sets
from saltrise.physics.curve import build_curves
from saltrise.physics.profile import homogeneous
from saltrise.physics.soils import SoilSet


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
    sets = [load_soil_set(name, Path.cwd()) for name in names or shipped_sets()]
    depths: dict[tuple[str, str], float] = {}
    for soils in sets:
        curves = build_curves([homogeneous(row) for row in soils.rows.values()])
        which = np.arange(len(soils.rows), dtype=np.int32)
        found = curves.critical_depth(which, np.ones(len(which)))
        depths |= {(soils.name, t): float(d) for t, d in zip(soils.rows, found, strict=True)}
    return sets, depths
