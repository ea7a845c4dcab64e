"""What other soils cost against one class raster: pytest -n 0 -m bench tests/benchmarks -s."""

from __future__ import annotations

import time

import pytest
from bench_region import SOILS, make_region
from test_ratios import SIZE, ratio

pytestmark = pytest.mark.bench

MOST = {"layers": 1.5} | dict.fromkeys(list(SOILS)[2:], 1.3)


@pytest.mark.parametrize("soil", MOST)
def test_soils_against_one_class_raster(folder, told, soil: str) -> None:
    plain = make_region(folder / str(SIZE), SIZE)
    other = make_region(folder / str(SIZE), SIZE, soil=soil)
    assert ratio(told, ("saltrise", other), ("saltrise", plain)) <= MOST[soil]


def test_two_thousand_stacks_are_ready_in_a_minute(told) -> None:
    import itertools
    from pathlib import Path

    from saltrise.io.soil_tables import load_soil_set
    from saltrise.physics.column import Column
    from saltrise.physics.curve import build_curves

    soils = [row.profile for row in load_soil_set("carsel-parrish1988", Path()).rows.values()]
    stacks = [Column(three, (0.3, 1.2)) for three in itertools.product(soils, repeat=3)]
    stacks += [Column(three, (0.4, 1.2)) for three in itertools.product(soils, repeat=3)][:272]
    began = time.perf_counter()
    build_curves(stacks)
    spent = time.perf_counter() - began
    told(f"{len(stacks)} stacks of three layers: {spent:.0f} s")
    assert spent < 60
