"""What only a tile finds amiss: the run stops, surveys everything and tells all at once."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import regions
from runs import make_region, run_small, small_tiles
from saltrise import job
from saltrise.engine import survey
from saltrise.errors import InputError


def test_negative_values_far_from_the_first_look(tmp_path: Path) -> None:
    config = make_region(tmp_path)
    values = regions.fields((70, 80), np.random.default_rng(5))
    values["salinity"][69, 79] = values["salinity"][60, 3] = -4
    values["demand"][66, 70] = -1
    regions.write_raster(tmp_path / "salinity.tif", values["salinity"], nodata=-9999)
    regions.write_raster(tmp_path / "demand.tif", values["demand"], nodata=-9999)
    with pytest.raises(InputError) as caught:
        run_small(config)
    text = str(caught.value)
    assert (
        "groundwater.salinity: 2 cells are negative (lowest -4, first at column 3, row 60" in text
    )
    assert "climate.potential_evaporation: 1 cells are negative" in text
    assert not (tmp_path / "out.unfinished").exists()


def test_a_raster_torn_at_its_end(tmp_path: Path) -> None:
    config = make_region(tmp_path)
    data = (tmp_path / "salinity.tif").read_bytes()
    (tmp_path / "salinity.tif").write_bytes(data[:-2000])
    with pytest.raises(InputError, match=r"groundwater\.salinity: .*salinity\.tif"):
        run_small(config)
    assert not (tmp_path / "out").exists()
    assert not (tmp_path / "out.unfinished").exists()


def test_a_run_warns_of_the_same_ranges_as_a_whole_survey(tmp_path: Path) -> None:
    config = make_region(tmp_path)
    values = regions.fields((70, 80), np.random.default_rng(5))
    values["depth"][50, 60] = -30.0
    regions.write_raster(tmp_path / "depth.tif", values["depth"], nodata=-9999)
    result = run_small(config)
    region = job.survey(small_tiles(config), job.Silent(), block=16)
    assert result.record["warnings"] == [*region.warnings, *job.doubts(region)]
    assert any("water stands up to 30 m above ground" in w for w in result.record["warnings"])


@pytest.mark.parametrize("count", [1, 2, 3, 10, 97, 1000])
def test_the_first_look_visits_every_block_once(count: int) -> None:
    seen = list(survey._spread(count))
    assert sorted(seen) == list(range(count))
    if count > 50:
        steps = np.abs(np.diff(seen[: count // 4]))
        assert steps.min() > count // 5
