"""Compiled loops: what they promise as machine code."""

from __future__ import annotations

import importlib
import pkgutil
from types import ModuleType

import numba
import numpy as np
import pytest

from saltrise import kernels
from saltrise.kernels import compiled as how
from saltrise.kernels import tables

FILES = [
    importlib.import_module(f"saltrise.kernels.{found.name}")
    for found in pkgutil.iter_modules(kernels.__path__)
    if found.name != "compiled"
]


def loops(file: ModuleType) -> dict[str, numba.core.dispatcher.Dispatcher]:
    found = vars(file).items()
    return {n: v for n, v in found if isinstance(v, numba.core.dispatcher.Dispatcher)}


@pytest.mark.parametrize("file", FILES, ids=lambda file: file.__name__.rpartition(".")[2])
def test_loops_stand_alone_release_the_lock_and_round_as_written(file: ModuleType) -> None:
    assert loops(file)
    for loop in loops(file).values():
        # Machine code kept on disk is renewed by the time stamp of its own file alone.
        assert loop.py_func.__module__ == file.__name__
        assert loop.targetoptions["nogil"]
        assert not loop.targetoptions.get("fastmath")


def test_without_a_place_to_keep_machine_code_it_is_made_anew(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    def nowhere(**options: bool):
        if options.get("cache"):
            raise RuntimeError("cannot cache function: no locator available")
        return numba.njit(**options)

    monkeypatch.setattr(how, "njit", nowhere)
    doubled = how.compiled(lambda values: 2.0 * values)
    np.testing.assert_array_equal(doubled(np.arange(3.0)), [0.0, 2.0, 4.0])


@pytest.mark.parametrize("size", [1, 7, 64, 1000])
def test_machine_code_gives_the_bits_of_the_plain_function(size: int) -> None:
    # No contraction of products and sums, which would differ between processors.
    x = np.random.default_rng(size).uniform(-90.0, 90.0, size)
    fast, plain = np.empty(size), np.empty(size)
    tables.exp2(x, 1.0, fast)
    for i in range(size):
        plain[i] = tables._exp2.py_func(np.float64(x[i]))
    np.testing.assert_array_equal(fast, plain)
