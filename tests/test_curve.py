"""Rise curves against the exact solution they tabulate."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from saltrise.io.soil_tables import load_soil_set, shipped_sets
from saltrise.physics.curve import build_curves
from saltrise.physics.profile import Campbell, GardnerExponential, GardnerPower

SETS = [load_soil_set(name, Path()) for name in shipped_sets()]
SOILS = {f"{s.name}-{t}": row.profile for s in SETS for t, row in s.rows.items()}
CURVES = build_curves(list(SOILS.values()))
DEPTHS = np.unique(np.r_[np.geomspace(0.05, 30.0, 4001), np.linspace(0.05, 30, 4001)])


@pytest.mark.parametrize("number", range(len(SOILS)), ids=list(SOILS))
def test_error_over_the_contracted_range(number: int) -> None:
    soil = list(SOILS.values())[number]
    profile = np.full(DEPTHS.size, number, dtype=np.int32)
    exact, _ = soil.evaporation(DEPTHS)
    ours = CURVES.max_evaporation(profile, DEPTHS)
    # The contract is 1e-4; a tenth of it is what this node density is chosen for.
    np.testing.assert_allclose(ours, exact, rtol=1e-5)
    assert np.all(np.diff(ours) < 0)
    back = CURVES.critical_depth(profile, exact)
    np.testing.assert_allclose(back, DEPTHS, rtol=1e-5)


@pytest.mark.parametrize("alpha", [0.3, 1.0, 5.0, 20.0])
def test_error_under_the_exponential_law(alpha: float) -> None:
    # Gardner (1958): E = Ks / (exp(alpha L) - 1); the contract holds where E exceeds 1e-6 mm/day.
    curves = build_curves([GardnerExponential(500.0, alpha)])
    exact = 500.0 / np.expm1(alpha * DEPTHS)
    counts = exact > 1e-6
    ours = curves.max_evaporation(np.zeros(DEPTHS.size, np.int32), DEPTHS)
    np.testing.assert_allclose(ours[counts], exact[counts], rtol=1e-4)
    assert np.all(np.isfinite(ours))
    assert np.all(ours >= 0)


@pytest.mark.parametrize("n", [1.5, 2.0, 4.0])
def test_error_under_gardners_power_law(n: float) -> None:
    soil = GardnerPower(30.0, 0.6, n)
    curves = build_curves([soil])
    profile = np.zeros(DEPTHS.size, np.int32)
    exact = soil.evaporation(DEPTHS)[0]
    np.testing.assert_allclose(curves.max_evaporation(profile, DEPTHS), exact, rtol=1e-5)
    np.testing.assert_allclose(curves.critical_depth(profile, exact), DEPTHS, rtol=1e-5)


@given(st.floats(0.5, 50), st.floats(1e-3, 10.0), st.floats(0.01, 1e5))
def test_error_for_any_parameters_a_csv_may_hold(b, entry, ks) -> None:
    soil = Campbell(entry, b, ks)
    depths = np.geomspace(0.05, 30.0, 997)
    profile = np.zeros(depths.size, dtype=np.int32)
    exact, _ = soil.evaporation(depths)
    curves = build_curves([soil])
    np.testing.assert_allclose(curves.max_evaporation(profile, depths), exact, rtol=1e-4)
    # Below 1e-20 mm/day a century lifts less than an atom's breadth.
    counts = exact > 1e-20
    back = curves.critical_depth(profile, exact)
    np.testing.assert_allclose(back[counts], depths[counts], rtol=1e-4)


def test_above_one_millimetre_the_curve_holds_its_value() -> None:
    depths = np.array([-5.0, 0.0, 0.0005, 0.001])
    ours = CURVES.max_evaporation(np.zeros(4, np.int32), depths)
    exact, _ = next(iter(SOILS.values())).evaporation(np.array([0.001]))
    np.testing.assert_allclose(ours, exact[0], rtol=1e-5)
    assert len(set(ours)) == 1


def test_beyond_thirty_metres_the_end_slope_goes_on() -> None:
    number = list(SOILS).index("rawls1982-loam")
    profile = np.full(4, number, dtype=np.int32)
    ours = CURVES.max_evaporation(profile, np.array([30.0, 60.0, 120.0, 1e30]))
    assert ours[0] / ours[1] == pytest.approx(ours[1] / ours[2], rel=1e-5)
    assert 0 < ours[3] < ours[2]


def test_critical_depth_stays_from_one_millimetre_to_thirty_metres() -> None:
    profile = np.zeros(4, dtype=np.int32)
    depth = CURVES.critical_depth(profile, np.array([1e12, 1e-30, np.inf, 1.0]))
    assert depth[0] == 0.001
    assert depth[1] == 30.0
    assert depth[2] == 0.001
    assert 0.001 < depth[3] < 30


def test_nan_and_masked_cells_are_nan_and_leave_the_others_alone() -> None:
    profile = np.array([[0, -1], [3, 5]], dtype=np.int32)
    depth = np.array([[1.0, 1.0], [np.nan, 2.0]])
    flux = CURVES.max_evaporation(profile, depth)
    np.testing.assert_array_equal(np.isnan(flux), [[False, True], [True, False]])
    np.testing.assert_array_equal(np.isnan(CURVES.critical_depth(profile, depth)), np.isnan(flux))


def test_a_cells_answer_does_not_depend_on_its_neighbours_or_profile_number() -> None:
    depth = np.random.default_rng(1).uniform(0.01, 8, 1000)
    soils = list(SOILS.values())
    alone = build_curves([soils[4]]).max_evaporation(np.zeros(1000, np.int32), depth)
    together = CURVES.max_evaporation(np.full(1000, 4, np.int32), depth)
    np.testing.assert_array_equal(alone, together)


@pytest.mark.parametrize("soils", SETS, ids=[s.name for s in SETS])
def test_talsma_1963_intermediate_textures_reach_deepest(soils) -> None:
    # Talsma T. (1963) Meded. Landbouwhogeschool Wageningen 63(10), abstract: the depth at which
    # flow falls to about 1 mm/day is greatest for intermediate textures.
    depth = {t: float(r.profile.depth(np.array([1.0]))[0][0]) for t, r in soils.rows.items()}
    assert depth["silt loam"] > depth["sand"]
    assert depth["silt loam"] > depth["clay"]
