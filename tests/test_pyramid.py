"""The defined pyramid, against a plain loop over every four cells."""

from __future__ import annotations

from collections import Counter

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays

from saltrise.layers import NODATA
from saltrise.pyramid import halve, level_sizes

SHAPES = st.tuples(st.integers(1, 9), st.integers(1, 9))
CLASSES = SHAPES.flatmap(lambda s: arrays.arrays(np.uint8, s, elements=st.integers(0, 6)))
FLOATS = SHAPES.flatmap(
    lambda s: arrays.arrays(
        np.float32, s, elements=st.sampled_from([NODATA, 0.0, 1.0, 1.5, 2.25, 365.0, -3.0])
    )
)


def by_hand(stored: np.ndarray, cell) -> np.ndarray:
    height, width = stored.shape
    out = np.empty((-(-height // 2), -(-width // 2)), dtype=stored.dtype)
    for r, c in np.ndindex(out.shape):
        out[r, c] = cell(stored[2 * r : 2 * r + 2, 2 * c : 2 * c + 2].ravel())
    return out


def mean_of_valid(four: np.ndarray) -> np.float32:
    valid = [float(v) for v in four if v != NODATA]
    if not valid:
        return np.float32(NODATA)
    # Twelve bits after the leading one; Python rounds ties to even.
    mantissa, exponent = np.frexp(np.float32(sum(valid) / len(valid)))
    return np.float32(np.ldexp(round(float(mantissa) * 2**13), int(exponent) - 13))


def most_frequent(four: np.ndarray) -> int:
    votes = Counter(int(v) for v in four if v)
    return max(votes, key=lambda k: (votes[k], k)) if votes else 0


@given(FLOATS)
def test_a_coarser_cell_is_the_mean_of_the_valid_among_four(stored: np.ndarray) -> None:
    np.testing.assert_array_equal(halve(stored, rounded=True), by_hand(stored, mean_of_valid))


@given(CLASSES)
def test_a_coarser_class_is_the_most_frequent_ties_to_the_severe(stored: np.ndarray) -> None:
    np.testing.assert_array_equal(halve(stored, rounded=True), by_hand(stored, most_frequent))


def test_cutting_at_even_cells_changes_nothing() -> None:
    stored = np.random.default_rng(3).uniform(0, 9, (30, 41)).astype(np.float32)
    whole = halve(stored, rounded=True)
    left, right = halve(stored[:, :16], rounded=True), halve(stored[:, 16:], rounded=True)
    np.testing.assert_array_equal(np.hstack([left, right]), whole)


@pytest.mark.parametrize(
    ("size", "expected"),
    [
        ((512, 512), []),
        ((513, 100), [(257, 50)]),
        ((2049, 1000), [(1025, 500), (513, 250), (257, 125)]),
    ],
)
def test_levels_halve_rounding_up_until_one_block(size, expected) -> None:
    assert level_sizes(*size, 512) == expected
