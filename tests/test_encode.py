"""Stored numbers: rounding, nodata, and bytes that decode to them."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from rasterio.io import MemoryFile

from saltrise.io.encode import encode
from saltrise.kernels.stored import KEPT_BITS
from saltrise.layers import LAYERS, NODATA
from saltrise.stored import single, store


def as_stored(values: np.ndarray, valid: np.ndarray, *, rounded: bool) -> np.ndarray:
    return single(values[np.newaxis], valid[np.newaxis], rounded=rounded)[0]


VALUES = st.floats(1e-30, 1e30).flatmap(lambda v: st.sampled_from([v, -v]))


@given(VALUES)
def test_rounding_is_to_the_nearest_number_of_twelve_mantissa_bits(value: float) -> None:
    (stored,) = as_stored(np.array([value]), np.array([True]), rounded=True)
    single = np.float32(value)
    step = 2.0 ** (np.floor(np.log2(abs(float(single)))) - KEPT_BITS)
    assert float(stored) / step == round(float(stored) / step)
    assert abs(float(stored) - float(single)) <= step / 2


def test_the_published_bound_on_rounding_holds() -> None:
    values = np.random.default_rng(0).uniform(1, 2, 100_000)
    stored = as_stored(values, np.ones(values.size, bool), rounded=True)
    worst = np.max(np.abs(stored - values) / values)
    assert 1.1e-4 < worst <= 1.25e-4


def test_full_precision_keeps_all_of_float32() -> None:
    values = np.random.default_rng(0).uniform(0, 9, 1000)
    stored = as_stored(values, np.ones(1000, bool), rounded=False)
    np.testing.assert_array_equal(stored, values.astype(np.float32))


def test_invalid_cells_become_nodata_whatever_they_hold() -> None:
    stored = as_stored(
        np.array([np.nan, 3.0, np.inf]), np.array([False, True, False]), rounded=True
    )
    np.testing.assert_array_equal(stored, np.float32([NODATA, 3.0, NODATA]))


def test_zero_and_whole_numbers_stay() -> None:
    values = np.array([0.0, -0.0, 1.0, 30.0, 365.0, 4096.0])
    np.testing.assert_array_equal(as_stored(values, np.ones(6, bool), rounded=True), values)


@pytest.mark.parametrize("dtype", [np.float32, np.uint8])
def test_moments_are_those_of_the_valid_stored_cells(dtype: type) -> None:
    random = np.random.default_rng(1)
    valid = random.random((30, 41)) < 0.7
    values = random.uniform(1000, 1007, valid.shape)
    if dtype is np.uint8:
        values = np.where(valid, random.integers(1, 7, valid.shape), 0).astype(np.uint8)
    layer = np.zeros((50, 60), dtype=dtype)
    count, low, high, mean, spread = store(values, valid, layer, (7, 11), rounded=True)
    seen = layer[7:37, 11:52][valid].astype(np.float64)
    assert (count, low, high) == (seen.size, seen.min(), seen.max())
    # Some thousand sums of float64.
    assert mean == pytest.approx(seen.mean(), rel=1e-13)
    assert spread == pytest.approx(((seen - seen.mean()) ** 2).sum(), rel=1e-12)
    assert not layer[:7].any()
    assert not layer[37:].any()
    nothing = store(values, np.zeros_like(valid), layer, (7, 11), rounded=True)
    assert nothing.tolist() == [0.0, np.inf, -np.inf, 0.0, 0.0]


@pytest.mark.parametrize("compression", ["zstd", "deflate"])
@pytest.mark.parametrize("name", ["salt_load", "hazard_class"])
def test_a_ragged_tile_comes_back_and_is_padded_with_nodata(compression: str, name: str) -> None:
    layer = LAYERS[name]
    values = np.arange(37 * 50).reshape(37, 50).astype(layer.dtype)
    with MemoryFile(encode(values, layer, compression, 32)) as memory, memory.open() as dataset:
        got = dataset.read(1)
        assert dataset.block_shapes == [(32, 32)]
        assert dataset.compression.value.lower() == compression
    assert got.shape == (64, 64)
    np.testing.assert_array_equal(got[:37, :50], values)
    assert np.all(got[37:] == layer.nodata)
    assert np.all(got[:, 50:] == layer.nodata)
