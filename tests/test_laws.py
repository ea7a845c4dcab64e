"""Exact solutions of steady upward flow, against quadrature, integration and print."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad, solve_ivp

import reference
from published import table
from saltrise.physics import laws

SOILS = [
    (
        row["set"],
        row["texture"],
        float(row["he_cm_or_1/alpha"]),
        float(row["N_or_n"]),
        float(row["Ks_cm_d"]),
        row,
    )
    for row in table("steady_evaporation")
]
B = st.floats(0.5, 50.0)
DEPTH = st.floats(0.05, 30.0)
ENTRY = st.floats(0.005, 1.0)
KS = st.floats(0.1, 2e4)


@given(DEPTH, ENTRY, B, KS)
def test_depth_and_evaporation_are_inverse(depth, entry, b, ks) -> None:
    rate = laws.max_evaporation(depth, entry, b, ks)
    assert laws.rise_depth(rate, entry, b, ks) == pytest.approx(depth, rel=1e-11)


@given(DEPTH, ENTRY, B, KS, st.floats(1.001, 3.0))
def test_evaporation_falls_with_depth_and_grows_with_ks_and_air_entry(
    depth, entry, b, ks, more
) -> None:
    rate = laws.max_evaporation(depth, entry, b, ks)
    assert laws.max_evaporation(depth * more, entry, b, ks) < rate
    assert laws.max_evaporation(depth, entry * more, b, ks) > rate
    assert laws.max_evaporation(depth, entry, b, ks * more) > rate


@given(DEPTH, ENTRY, B, KS)
def test_scaling_lengths_and_rates_changes_nothing(depth, entry, b, ks) -> None:
    rate = laws.max_evaporation(depth, entry, b, ks)
    assert laws.max_evaporation(7 * depth, 7 * entry, b, 3 * ks) == pytest.approx(
        3 * rate, rel=1e-11
    )


@given(ENTRY, B, KS, st.floats(1e-12, 1e6))
def test_the_slope_is_the_derivative(entry, b, ks, e) -> None:
    flux = e * ks
    near = [laws.rise_depth(flux * f, entry, b, ks) for f in (0.999, 1.001)]
    difference = (near[1] - near[0]) / (0.002 * flux)
    assert laws.rise_depth_slope(flux, entry, b, ks) == pytest.approx(difference, rel=1e-5)


def test_hypergeometric_equals_quadrature_n_2_5() -> None:
    # The part of x above air entry, for n = 2.5 and e = 1e-3, by 30-digit quadrature; below air
    # entry the rise is 1/(1+e).
    b, e = 3.0 / 0.5, 1e-3
    above = laws.rise_depth(e, 1.0, b, 1.0) - 1 / (1 + e)
    assert above == pytest.approx(19.9415807278, rel=1e-9)


@pytest.mark.parametrize("texture", list(reference.RAWLS))
def test_depth_equals_quadrature_over_thirty_decades(texture: str) -> None:
    entry, index, ks = reference.RAWLS[texture]
    for rate in np.geomspace(1e-14, 1e6, 41):
        ours = laws.rise_depth(rate, entry / 100, 1 / index, ks * 240)
        assert ours == pytest.approx(reference.rise_depth(rate, texture), rel=1e-9)


@pytest.mark.parametrize(
    ("name", "texture", "entry", "n", "ks", "row"), SOILS, ids=[f"{s[0]}-{s[1]}" for s in SOILS]
)
def test_reference_grid_of_four_sets(name, texture, entry, n, ks, row) -> None:
    # Computed by 30-digit quadrature outside this project; the table prints n to six digits, which
    # moves E by up to 2.5e-5 over the deepest water.
    for depth in (50, 75, 100, 125, 150, 200, 250, 300, 400, 500):
        ours = laws.max_evaporation(depth, entry, 3 / (n - 2), ks * 10)
        assert ours == pytest.approx(float(row[f"E_mm_d_L{depth}cm"]), rel=5e-5)
    for rate in (1, 0.1, 0.025):
        depth = laws.rise_depth(rate, entry, 3 / (n - 2), ks * 10)
        assert depth == pytest.approx(float(row[f"crit_depth_cm_{rate}mm_d"]), rel=1e-4)


@pytest.mark.parametrize(
    ("texture", "depth"), [("sand", 0.3), ("loam", 1.5), ("clay", 1.0), ("clay", 5.0)]
)
def test_integrating_darcy_upward_reaches_the_depth(texture: str, depth: float) -> None:
    # dz/dh = 1 / (1 + E/K(h)) from the water table up; solve_ivp is the independent solver.
    entry, index, ks = reference.RAWLS[texture]
    args = (entry / 100, 1 / index, ks * 240)
    rate = float(laws.max_evaporation(depth, *args))

    def climb(log_h, _z):
        h = np.exp(log_h)
        return [h / (1 + rate / float(laws.conductivity(h, *args)))]

    start = 1e-9
    found = solve_ivp(
        climb, (np.log(start), np.log(1e9)), [start], rtol=1e-10, atol=1e-13, max_step=0.05
    )
    assert found.y[0, -1] == pytest.approx(depth, rel=1e-6)


def test_gardner_1958_constants() -> None:
    # Gardner W.R. (1958) Soil Science 85:228-232: printed 3.77, 2.46, 1.76, 1.52 (from memory;
    # rounded there, hence 0.5 %); exact values from the formula.
    n = np.array([1.5, 2.0, 3.0, 4.0])
    exact = [3.760901619, 2.467401100, 1.768047624, 1.522017047]
    np.testing.assert_allclose(laws.gardner_constant(n), exact, rtol=1e-9)
    np.testing.assert_allclose(laws.gardner_constant(n), [3.77, 2.46, 1.76, 1.52], rtol=5e-3)


def test_gardner_constants_in_closed_form() -> None:
    # Analytic: pi^2/4 for n = 2, pi^4/64 for n = 4.
    assert laws.gardner_constant(2.0) == pytest.approx(np.pi**2 / 4, rel=1e-14)
    assert laws.gardner_constant(4.0) == pytest.approx(np.pi**4 / 64, rel=1e-14)


def test_gardner_fireman_1958_chino_clay() -> None:
    # Gardner & Fireman (1958) Soil Science 85:244-249, K = 1100/(S^2 + 565) cm/day (constants from
    # memory); rates by quadrature. Depths in cm, rates in cm/day.
    for depth, exact in ((90, 0.291449), (180, 0.080446)):
        ours = laws.gardner_max_evaporation(depth, 1100, 565, 2)
        assert ours == pytest.approx(exact, abs=1e-6)
        total, _ = quad(lambda h, e=float(ours): 1 / (1 + e * (h * h + 565) / 1100), 0, np.inf)
        assert total == pytest.approx(depth, rel=1e-8)


def test_gardner_1958_exponential_law() -> None:
    # Exact: E = Ks / (exp(alpha L) - 1); Ks 10 cm/day, alpha 0.05 /cm, L 50 cm.
    assert laws.exponential_max_evaporation(50, 0.05, 10) == pytest.approx(0.8942548984, rel=1e-9)


def test_the_closed_form_is_a_limit_not_the_answer() -> None:
    # Asymptote over exact for Rawls 1982 clay at 1, 2, 3 m, computed by quadrature.
    entry, index, ks = reference.RAWLS["clay"]
    depth = np.array([1.0, 2.0, 3.0])
    args = (depth, entry / 100, 1 / index, ks * 240)
    ratio = laws.closed_form_evaporation(*args) / laws.max_evaporation(*args)
    np.testing.assert_allclose(ratio, [1.0954, 1.0112, 1.0029], atol=1e-3)
    far = laws.closed_form_evaporation(1e5, *args[1:]) / laws.max_evaporation(1e5, *args[1:])
    assert far == pytest.approx(1, abs=1e-6)


@pytest.mark.parametrize(
    ("entry_kpa", "b", "ks_cm_per_h", "printed"), [(2.6, 5.2, 0.23, 3.2), (0.7, 1.7, 21.0, 0.4)]
)
def test_clay_loam_and_sand_over_one_metre(entry_kpa, b, ks_cm_per_h, printed) -> None:
    # Common practice, no single source: 1 kPa is about 10.2 cm of water; such a clay loam lifts at
    # most about 3.2 mm/day over 1 m, such a sand far less, about 0.4 (10 %: "about").
    rate = laws.max_evaporation(1.0, entry_kpa * 0.102, b, ks_cm_per_h * 240)
    assert rate == pytest.approx(printed, rel=0.1)


def test_conductivity_exponents() -> None:
    # Campbell (1974) Soil Science 117:311-314; Brooks & Corey (1964): b = 1/lambda,
    # n = 2 + 3 lambda = 2 + 3/b; in terms of saturation K = Ks S^(2b+3).
    for index in (0.592, 0.22, 0.131):
        b = 1 / index
        assert laws.exponent(b) == pytest.approx(2 + 3 * index)
        suction = 5.0
        saturation = suction ** -(1 / b)
        assert laws.conductivity(suction, 1.0, b, 1.0) == pytest.approx(saturation ** (2 * b + 3))


def test_conductivity_equals_pedon() -> None:
    import pedon

    soil = pedon.Brooks(k_s=31.68, theta_r=0.027, theta_s=0.463, h_b=11.15, l=0.22)
    suction = np.array([1.0, 11.0, 12.0, 50.0, 1000.0])
    ours = laws.conductivity(suction, 11.15, 1 / 0.22, 31.68)
    np.testing.assert_allclose(ours, soil.k(suction), rtol=1e-9)


@pytest.mark.parametrize("wrong", [0.0, -1.0])
def test_impossible_arguments_are_refused(wrong: float) -> None:
    with pytest.raises(ValueError, match="must be > 0"):
        laws.rise_depth(wrong, 0.1, 4.0, 10.0)
    with pytest.raises(ValueError, match="must be > 0"):
        laws.max_evaporation(wrong, 0.1, 4.0, 10.0)
