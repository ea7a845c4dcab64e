"""Regressions of soil parameters on fractions, against what was published and other code."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from published import table
from saltrise.physics import powers, regressions
from saltrise.physics.column import Column
from saltrise.physics.fraction_curves import FractionCells
from saltrise.physics.fraction_soils import curves_for, profile_of_fractions, soils_of
from saltrise.physics.regressions import GRAVITY, M_PER_KPA, METHODS, campbell, cosby, saxton_rawls

PRINTED = table("saxton_rawls2006")
EXTRA = {"saxton-rawls2006": "organic_matter", "campbell1985": "bulk_density"}


def one(value: float) -> np.ndarray:
    return np.array([value])


@given(st.floats(-900, 900))
def test_exp2_is_exact_to_rounding(x: float) -> None:
    assert powers.exp2(one(x))[0] == pytest.approx(2.0**x, rel=5e-16)


@given(st.floats(1e-300, 1e300))
def test_log2_is_exact_to_rounding(x: float) -> None:
    # One rounding of the sum of the exponent and the mantissa's logarithm.
    assert powers.log2(one(x))[0] == pytest.approx(math.log2(x), rel=5e-16, abs=1e-16)


@pytest.mark.parametrize("row", PRINTED, ids=lambda row: row["texture"])
def test_saxton_rawls_2006_table_3(row: dict[str, str]) -> None:
    numbers = {name: float(text) for name, text in row.items() if name != "texture"}
    found = saxton_rawls(one(numbers["sand"]), one(numbers["clay"]), one(2.5))
    ks = found.ks_mm_per_day[0] / 24.0
    # Saxton & Rawls (2006) Table 3, Ks to the printed digit.
    assert round(ks, 1) == pytest.approx(numbers["ks_printed"], abs=1e-9)
    # An independent package, to the digits it was noted with.
    assert ks == pytest.approx(numbers["ks"], abs=6e-5)
    assert 1 / found.b[0] == pytest.approx(numbers["index"], abs=6e-5)
    assert found.air_entry_m[0] / M_PER_KPA == pytest.approx(numbers["air_entry_kpa"], abs=6e-5)
    assert found.theta_33[0] == pytest.approx(numbers["theta_33"], abs=6e-5)
    assert found.theta_s[0] == pytest.approx(numbers["theta_s"], abs=6e-5)
    assert not found.held[0]


def test_saxton_rawls_against_pedon() -> None:
    """Equations of another library; its air entry takes the corrected pores, see the docstring."""
    from pedon.soil import SoilSample

    for sand, clay, organic in itertools.product((20, 45, 60), (10, 25), (1.0, 2.5)):
        theirs = SoilSample(sand_p=sand, silt_p=100 - sand - clay, clay_p=clay, om_p=organic)
        model = theirs.saxton()
        ours = saxton_rawls(one(sand), one(clay), one(organic))
        assert ours.ks_mm_per_day[0] / 10 == pytest.approx(model.k_s, rel=1e-9)
        assert ours.theta_s[0] == pytest.approx(model.theta_s, rel=1e-9)
        assert 1 / ours.b[0] == pytest.approx(model.l, rel=1e-9)


def test_saxton_rawls_against_pedotri() -> None:
    from pedotri.ptf.saxton_rawls import saxton_rawls as theirs

    found = theirs(sand=40.0, clay=20.0, organic_matter=0.0)
    ours = saxton_rawls(one(40.0), one(20.0), one(0.0))
    assert found.field_capacity == pytest.approx(ours.theta_33[0], rel=1e-12)
    assert found.saturation == pytest.approx(ours.theta_s[0], rel=1e-12)
    assert found.saturated_conductivity * 24 == pytest.approx(ours.ks_mm_per_day[0], rel=1e-12)


def test_campbell_1985_loam() -> None:
    # Campbell (1985), loam of 43 % sand and 18 % clay, worked outside this project: b 6.4505,
    # psi_e -1.8869 J/kg, Ks 2.7288e-4 kg s m^-3 at 1.3 g/cm3; -3.5022 and 8.2192e-5 at 1.5.
    per_si = GRAVITY / 1000 * 86_400_000
    for density, tension, ks in ((1.3, 1.8869, 2.7288e-4), (1.5, 3.5022, 8.2192e-5)):
        air_entry, b, conductivity = campbell(one(43.0), one(18.0), one(density))
        assert b[0] == pytest.approx(6.4505, abs=6e-5)
        assert air_entry[0] * GRAVITY == pytest.approx(tension, abs=6e-5)
        assert conductivity[0] / per_si == pytest.approx(ks, rel=3e-5)


def test_campbell_1985_clay() -> None:
    # Clay of 22 % sand and 58 % clay: b 14.008, psi_e -5.3247 J/kg, worked outside this project.
    air_entry, b, _ = campbell(one(22.0), one(58.0), one(1.3))
    assert b[0] == pytest.approx(14.008, abs=6e-4)
    assert air_entry[0] * GRAVITY == pytest.approx(5.3247, abs=6e-5)


@given(st.floats(6, 92), st.floats(3, 58))
def test_cosby_1984_in_natural_logarithms(sand: float, clay: float) -> None:
    # Land-surface models print the same regression with natural logarithms and metres, and three
    # digits of each coefficient: 0.0302 sand for 0.03016 is 0.4 % at 92 % sand.
    air_entry, b, ks = cosby(one(sand), one(clay))
    assert air_entry[0] == pytest.approx(0.01 * math.exp(4.33 - 0.0302 * sand), rel=4e-3)
    assert ks[0] / 86_400_000 == pytest.approx(
        7.0556e-6 * math.exp(0.0352 * sand - 2.035), rel=4e-3
    )
    assert b[0] == 2.91 + 0.159 * clay


def soils(method: str, count: int, seed: int = 0):
    """Random soils of a method inside its range, as arrays and as single profiles."""
    random = np.random.default_rng(seed)
    clay = random.uniform(0, 100, count) * (0.6 if method.startswith("saxton") else 1.0)
    sand = random.uniform(0, 1, count) * (100 - clay)
    given = {"sand": sand, "clay": clay}
    if method in EXTRA:
        low, high = METHODS[method].ranges[EXTRA[method]]
        given[EXTRA[method]] = random.uniform(low, high, count)
    singles = [
        profile_of_fractions(method, {role: float(v[k]) for role, v in given.items()})
        for k in range(count)
    ]
    return soils_of(method, given).cells, singles


def each(cells: FractionCells, change) -> FractionCells:
    """The cells with every array changed alike."""
    return FractionCells(*(None if v is None else change(v) for v in vars(cells).values()))


@pytest.mark.parametrize("suction", [math.inf, 150.0, 5.0, 1.0])
@pytest.mark.parametrize("method", METHODS)
def test_error_of_the_curves(method: str, suction: float) -> None:
    count, depths = 20, np.geomspace(0.05, 30.0, 40)
    cells, singles = soils(method, count)
    curves = curves_for(method, suction)
    grid = each(cells, lambda values: np.repeat(values, depths.size))
    wanted = np.tile(depths, count)
    ours = curves.max_evaporation(grid, wanted).reshape(count, -1)
    exact = np.array([Column((soil,), (), suction).evaporation(depths)[0] for soil in singles])
    counts = exact > 1e-6
    # The contract is 1e-4.
    np.testing.assert_allclose(ours[counts], exact[counts], rtol=4e-5)
    back = curves.critical_depth(grid, np.maximum(exact, 1e-7).ravel()).reshape(count, -1)
    np.testing.assert_allclose(back[counts], np.tile(depths, (count, 1))[counts], rtol=2e-5)


@pytest.mark.parametrize("method", METHODS)
def test_no_soil_lies_beyond_the_tables(method: str) -> None:
    curves = curves_for(method, math.inf)
    many, _ = soils_of_grid(method)
    axis = curves.flux.axis
    assert many.n.min() >= axis.low
    assert many.n.max() <= axis.low + axis.step * (axis.count - 1)
    if curves.middle is not None:
        axis = curves.middle.axis
        assert many.inverse_p.min() >= axis.low
        assert many.inverse_p.max() <= axis.low + axis.step * (axis.count - 1)


def soils_of_grid(method: str):
    clay, share, extra = np.meshgrid(
        np.linspace(0, 100, 101), np.linspace(0, 1, 51), np.linspace(0, 1, 9)
    )
    given = {"sand": share * (100 - clay), "clay": clay}
    if method in EXTRA:
        low, high = METHODS[method].ranges[EXTRA[method]]
        given[EXTRA[method]] = low + extra * (high - low)
    found = soils_of(method, given)
    return found.cells, found.outside


def test_neighbours_do_not_matter() -> None:
    cells, _ = soils("saxton-rawls2006", 50)
    curves = curves_for("saxton-rawls2006", 150.0)
    depths = np.random.default_rng(3).uniform(0.1, 8, 50)
    together = curves.max_evaporation(cells, depths)
    for k in (0, 17, 49):
        alone = curves.max_evaporation(each(cells, lambda v, k=k: v[k : k + 1]), depths[k : k + 1])
        assert alone[0] == together[k]


def test_clamping_is_told() -> None:
    given = {"sand": np.array([50.0, 99.0, 10.0]), "clay": np.array([20.0, 1.0, 80.0])}
    np.testing.assert_array_equal(soils_of("cosby1984", given).outside, [False, True, True])
    held = regressions.clamped("cosby1984", given)[0]
    np.testing.assert_array_equal(held["sand"], [50, 92, 10])
    np.testing.assert_array_equal(held["clay"], [20, 3, 58])
