"""Mulch on the bare soil."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import regions
import saltrise
from saltrise.errors import InputError


def run_with(folder: Path, **tables) -> saltrise.Result:
    folder.mkdir()
    output = {"folder": str(folder / "out"), "precision": "full"}
    return saltrise.run(regions.small_region(folder, output=output, **tables))


def test_mulch_takes_its_part_of_the_demand(tmp_path: Path) -> None:
    mulched = run_with(tmp_path / "mulched", surface={"mulch": 0.4})
    lowered = run_with(tmp_path / "lowered", climate={"coefficient": 0.6})
    bare = run_with(tmp_path / "bare")
    for name in ("evaporation", "salt_load", "critical_depth", "hazard_class"):
        np.testing.assert_array_equal(
            mulched.layer(name)[0].filled(), lowered.layer(name)[0].filled()
        )
    most = [r.layer("max_evaporation")[0].filled() for r in (mulched, bare)]
    np.testing.assert_array_equal(*most)
    assert mulched.layer("salt_load")[0].sum() < bare.layer("salt_load")[0].sum()
    assert mulched.record["config"]["surface"] == {"mulch": 0.4}


def test_under_full_mulch_no_salt_rises(tmp_path: Path) -> None:
    covered = run_with(tmp_path / "covered", surface={"mulch": 1})
    assert covered.layer("salt_load")[0].max() == 0
    assert covered.layer("critical_depth")[0].max() == 0


@pytest.mark.parametrize(("mulch", "words"), [(1.5, "1 or less"), (-0.1, "0 or more")])
def test_mulch_is_a_fraction(tmp_path: Path, mulch: float, words: str) -> None:
    with pytest.raises(InputError, match=rf"surface\.mulch: is {mulch}, must be {words}"):
        run_with(tmp_path / "wrong", surface={"mulch": mulch})
