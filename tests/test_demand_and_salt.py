"""The cap by demand, the load, and the critical depth."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from saltrise.errors import InputError
from saltrise.io.soil_tables import load_soil_set
from saltrise.physics.curve import build_curves
from saltrise.physics.demand import at_surface, capped
from saltrise.physics.salt import critical_depth, leaching_equivalent, salt_load
from saltrise.physics.year import Part
from saltrise.units import depth_in_m, evaporation_in_mm_per_day, tds_in_g_per_l

LOAM = load_soil_set("rawls1982", Path()).rows["loam"].profile
CURVES = build_curves([LOAM])


def one(value: float) -> np.ndarray:
    return np.array([value])


def soil(size: int = 1) -> np.ndarray:
    return np.zeros(size, dtype=np.int32)


def critical(demand: np.ndarray, tds: np.ndarray, target: float) -> np.ndarray:
    """Critical depth [m] of a year without seasons; demand [mm/day], TDS [g/L]."""
    year = [Part(365.0, demand * 365.0, tds)]
    return critical_depth(CURVES, soil(tds.size), year, target)


@given(st.floats(0.002, 30), st.floats(0.1, 20))
def test_evaporation_is_the_lesser_of_soil_and_demand(depth: float, demand: float) -> None:
    most = CURVES.max_evaporation(soil(), one(depth))
    got = capped(most, one(demand), one(depth))
    assert got[0] == min(most[0], demand)


def test_soil_and_demand_are_equal_at_the_switch_depth() -> None:
    demand = 4.0
    switch = CURVES.critical_depth(soil(), one(demand))
    assert CURVES.max_evaporation(soil(), switch)[0] == pytest.approx(demand, rel=1e-5)


def test_at_the_surface_the_demand_evaporates_whatever_the_soil() -> None:
    depth = np.array([-0.5, 0.0, 0.001, 0.0011])
    np.testing.assert_array_equal(at_surface(depth), [True, True, True, False])
    got = capped(np.full(4, 0.5), np.full(4, 6.0), depth)
    np.testing.assert_array_equal(got, [6, 6, 6, 0.5])


def test_one_millimetre_at_one_gram_per_litre_is_ten_kilograms_a_hectare() -> None:
    # Units alone: 1 mm over 1 ha is 10 m3.
    assert salt_load(one(1.0), one(1.0))[0] * 1000 == pytest.approx(10.0, rel=1e-15)


@pytest.mark.parametrize("target", [0.5, 2.0, 10.0])
def test_at_the_critical_depth_the_load_is_the_target(target: float) -> None:
    tds, demand = one(3.0), one(5.0)
    depth = critical(demand, tds, target)
    rate = capped(CURVES.max_evaporation(soil(), depth), demand, depth)
    assert salt_load(rate * 365, tds)[0] == pytest.approx(target, rel=1e-5)


def test_critical_depth_is_zero_without_salt_or_where_the_demand_is_harmless() -> None:
    target = 2.0
    assert critical(one(5.0), one(0.0), target)[0] == 0.0
    harmless = one(target * 100 / 365)  # at 1 g/L just the target
    assert critical(harmless * 0.999, one(1.0), target)[0] == 0.0
    assert critical(harmless * 1.001, one(1.0), target)[0] > 0.0


def test_critical_depth_is_at_most_thirty_metres_and_grows_with_salt() -> None:
    tds = np.geomspace(0.5, 1e9, 60)
    depth = critical(np.full(60, 9.0), tds, 2.0)
    assert np.all(np.diff(depth) >= 0)
    assert depth[-1] == 30.0


def test_nan_in_is_nan_out() -> None:
    nan = one(np.nan)
    assert np.isnan(capped(nan, one(1.0), one(1.0)))
    assert np.isnan(critical(nan, one(1.0), 2.0))
    assert np.isnan(critical(one(1.0), nan, 2.0))


def test_leaching_equivalent_of_the_shipped_breaks() -> None:
    # Project figures, "about 20, 100, 300 and 600 mm/year" for an ECe of 4 dS/m (common practice,
    # no single source: drainage at twice ECe, 640 mg/L per dS/m).
    np.testing.assert_allclose(leaching_equivalent([1, 5, 15, 30]), [20, 100, 300, 600], rtol=0.03)


@pytest.mark.parametrize(
    ("value", "unit", "metres"), [(2, "m", 2), (250, "cm", 2.5), (10, "ft", 3.048)]
)
def test_depth_units(value, unit, metres) -> None:
    assert depth_in_m(value, unit) == pytest.approx(metres, rel=1e-15)


@pytest.mark.parametrize(
    ("value", "unit", "factor", "tds"),
    [
        (2, "dS/m", 640, 1.28),
        (2, "mS/cm", 640, 1.28),
        (2000, "uS/cm", 640, 1.28),
        (2, "dS/m", 800, 1.6),
        (1280, "mg/L", 640, 1.28),
        (1.28, "g/L", 640, 1.28),
    ],
)
def test_salinity_units_and_the_factor_of_handbook_60(value, unit, factor, tds) -> None:
    # USDA Handbook 60 (1954): 640 mg/L per dS/m; about 800 above 5 dS/m.
    assert tds_in_g_per_l(value, unit, factor) == pytest.approx(tds, rel=1e-14)


def test_evaporation_units_have_a_year_of_365_days() -> None:
    assert evaporation_in_mm_per_day(1825.0, "mm/year") == 5.0
    assert evaporation_in_mm_per_day(5.0, "mm/day") == 5.0


@pytest.mark.parametrize("convert", [depth_in_m, tds_in_g_per_l, evaporation_in_mm_per_day])
def test_an_unknown_unit_lists_the_known_ones(convert) -> None:
    with pytest.raises(InputError, match="is 'yd', allowed"):
        convert(1.0, "yd")
