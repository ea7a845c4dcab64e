"""Ratios of time and memory, paired in one go: pytest -n 0 -m bench tests/benchmarks -s.

Every contender runs in a process of its own, turn by turn, `ROUNDS` times; a ratio is the median
of the rounds' ratios. Needs the packages of the usual script beside the tests' own:
pip install xarray rioxarray. BENCH_FOLDER names where the inputs are made and kept (about 0.5 GB
for 8192 x 8192 cells).
"""

from __future__ import annotations

import importlib.util
import os
import shutil
import statistics
import sys
import time
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parent))

from bench_region import make_region

pytestmark = pytest.mark.bench

ROUNDS = 3
SIZE = 8192
CONTENDERS = Path(__file__).with_name("contenders.py")


def once(name: str, config: Path) -> tuple[float, float]:
    """Wall time [s] and peak memory [GB] of one contender."""
    for left in ("out", "out.unfinished", "out_plain", "out_xarray"):
        shutil.rmtree(config.parent / left, ignore_errors=True)
    os.sync()
    began = time.perf_counter()
    process = os.posix_spawn(
        sys.executable, [sys.executable, str(CONTENDERS), name, str(config)], os.environ
    )
    _, status, usage = os.wait4(process, 0)
    assert status == 0, f"{name} failed"
    return time.perf_counter() - began, usage.ru_maxrss / 1e6


def ratio(told, first: tuple[str, Path], second: tuple[str, Path]) -> float:
    """Median over the rounds of the first contender's time over the second's."""
    found = []
    for _ in range(ROUNDS):
        found.append(once(*first)[0] / once(*second)[0])
    middle = statistics.median(found)
    span = f"{min(found):.2f} to {max(found):.2f}"
    told(f"{first[0]} {first[1].stem} / {second[0]}: {middle:.2f} ({span})")
    return middle


def test_the_floors_own_writer_is_no_slow_one(folder: Path, told) -> None:
    config = make_region(folder / str(SIZE), SIZE)
    assert ratio(told, ("cog_floor", config), ("plain_floor", config)) <= 1.7


def test_the_job_against_its_floor(folder: Path, told) -> None:
    config = make_region(folder / str(SIZE), SIZE)
    assert ratio(told, ("saltrise", config), ("cog_floor", config)) <= 1.3


def test_the_job_with_200_zones_against_its_floor(folder: Path, told) -> None:
    plain = make_region(folder / str(SIZE), SIZE)
    zoned = make_region(folder / str(SIZE), SIZE, zones=200)
    assert ratio(told, ("saltrise", zoned), ("cog_floor", plain)) <= 1.6


@pytest.mark.skipif(
    importlib.util.find_spec("rioxarray") is None, reason="pip install xarray rioxarray"
)
def test_the_usual_script_against_the_job(folder: Path, told) -> None:
    config = make_region(folder / str(SIZE), SIZE)
    assert ratio(told, ("xarray_dask", config), ("saltrise", config)) >= 3.5


def test_memory_does_not_grow_with_the_region_and_time_is_linear(folder: Path, told) -> None:
    times, memory = {}, {}
    for size in (4096, 8192, 16384):
        runs = [once("saltrise", make_region(folder / str(size), size)) for _ in range(2)]
        times[size], memory[size] = min(t for t, _ in runs), max(m for _, m in runs)
        told(f"{size} x {size}: peak memory {memory[size]:.2f} GB")
    # A process's start is no part of the growth.
    start = once("nothing", make_region(folder / "4096", 4096))[0]
    cells = np.log([size**2 for size in times])
    slope = np.polyfit(cells, np.log([t - start for t in times.values()]), 1)[0]
    told(f"time grows with cells to the power {slope:.3f}")
    assert memory[8192] < 0.5 + 0.3 * 2
    assert memory[16384] <= 1.25 * memory[4096]
    assert abs(slope - 1.0) <= 0.1
