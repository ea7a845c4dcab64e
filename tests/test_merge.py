"""Region numbers from tile records: statistics of stored values, free of order."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import rasterio

import regions
import saltrise
from saltrise.engine.merge import _statistics


def moments(values: np.ndarray) -> np.ndarray:
    return np.array(
        [values.size, values.min(), values.max(), values.mean(), values.var() * values.size]
    )


@pytest.mark.parametrize("offset", [0.0, 1e7])
def test_blocks_merge_to_the_statistics_of_the_whole(offset: float) -> None:
    random = np.random.default_rng(1)
    values = random.normal(3, 2, 10_000) + offset
    cuts = np.sort(random.choice(np.arange(1, 10_000), 40, replace=False))
    rows = np.stack([moments(part) for part in np.split(values, cuts)])
    found = _statistics(rows)
    assert found is not None
    assert found.count == 10_000
    assert (found.minimum, found.maximum) == (values.min(), values.max())
    assert found.mean == pytest.approx(values.mean(), rel=1e-14)
    assert found.deviation == pytest.approx(values.std(), rel=1e-9)
    assert _statistics(rows[::-1]) == found


def test_blocks_without_a_cell_count_for_nothing() -> None:
    empty = np.array([0.0, np.inf, -np.inf, 0.0, 0.0])
    assert _statistics(empty[None]) is None
    one = _statistics(np.stack([empty, moments(np.array([1.0, 3.0]))]))
    assert one is not None
    assert (one.count, one.mean, one.deviation) == (2, 2.0, 1.0)


def test_tags_describe_the_stored_values(tmp_path: Path) -> None:
    result = saltrise.run(regions.small_region(tmp_path, (60, 70)), block=16)
    for path in (result.folder / "layers").glob("*.tif"):
        with rasterio.open(path) as dataset:
            stored = dataset.read(1, masked=True).compressed().astype(np.float64)
            tags = dataset.tags(1)
        assert float(tags["STATISTICS_MINIMUM"]) == stored.min()
        assert float(tags["STATISTICS_MAXIMUM"]) == stored.max()
        assert float(tags["STATISTICS_MEAN"]) == pytest.approx(stored.mean(), rel=1e-12)
        assert float(tags["STATISTICS_STDDEV"]) == pytest.approx(stored.std(), rel=1e-9)
        share = 100 * stored.size / (60 * 70)
        assert float(tags["STATISTICS_VALID_PERCENT"]) == pytest.approx(share, rel=1e-3)
