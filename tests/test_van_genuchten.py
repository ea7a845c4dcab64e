"""Steady upward flow in van Genuchten-Mualem soils, against quadrature and published parameters."""

from __future__ import annotations

import itertools
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad

from published import table
from saltrise.io.soil_tables import load_soil_set
from saltrise.physics.profile import VanGenuchten
from saltrise.physics.van_genuchten import relative_conductivity

ROWS = load_soil_set("carsel-parrish1988", Path()).rows


def plain_conductivity(h: float, alpha: float, n: float) -> float:
    """K / Ks as the textbooks print it; loses digits at both ends."""
    m = 1 - 1 / n
    saturation = (1 + (alpha * h) ** n) ** -m
    return saturation**0.5 * (1 - (1 - saturation ** (1 / m)) ** m) ** 2


def test_carsel_parrish_1988_equals_the_printed_table() -> None:
    # Carsel & Parrish (1988) Water Resources Research 24(5):755-769.
    for printed in table("carsel_parrish1988"):
        soil = ROWS[printed["texture"]].profile
        assert soil.alpha_per_m == pytest.approx(float(printed["alpha_1_cm"]) * 100, rel=1e-12)
        assert soil.n == float(printed["n"])
        assert soil.ks_mm_per_day == pytest.approx(float(printed["Ks_cm_d"]) * 10, rel=1e-12)
    assert len(ROWS) == 12


@pytest.mark.parametrize(
    "row", table("steady_evaporation_van_genuchten"), ids=lambda r: r["texture"]
)
def test_reference_grid_of_carsel_parrish(row: dict[str, str]) -> None:
    # The table prints six digits.
    soil = ROWS[row["texture"]].profile
    for depth in (50, 75, 100, 125, 150, 200, 250, 300, 400, 500):
        ours = soil.evaporation(np.array([depth / 100]))[0][0]
        assert ours == pytest.approx(float(row[f"E_mm_d_L{depth}cm"]), rel=6e-6)
    for rate in (1, 0.1, 0.025):
        depth = soil.depth(np.array([rate]))[0][0] * 100
        assert depth == pytest.approx(float(row[f"crit_depth_cm_{rate}mm_d"]), rel=2e-4)


def test_loam_and_clay_over_one_metre() -> None:
    # Carsel & Parrish 1988 parameters, by quadrature in 40 digits outside this project.
    one = np.array([1.0])
    assert ROWS["loam"].profile.evaporation(one)[0][0] == pytest.approx(0.544716, rel=1e-5)
    assert ROWS["clay"].profile.evaporation(one)[0][0] == pytest.approx(0.488932, rel=1e-5)


@pytest.mark.parametrize("texture", list(ROWS))
def test_depth_equals_scipys_quadrature(texture: str) -> None:
    soil = ROWS[texture].profile
    alpha, n, ks = soil.alpha_per_m, soil.n, soil.ks_mm_per_day
    for rate in ks * np.geomspace(1e-9, 1e3, 13):

        def integrand(x: float, rate: float = rate) -> float:
            h = np.exp(x)
            k = ks * float(relative_conductivity(h, alpha, n))
            return h / (1 + rate / k) if k > 0 else 0.0

        edges = np.linspace(np.log(1e-13), np.log(1e15), 60)
        expected = sum(
            quad(integrand, a, b, epsabs=0, epsrel=1e-12, limit=200)[0]
            for a, b in itertools.pairwise(edges)
        )
        assert VanGenuchten(alpha, n, ks).depth(rate)[0][0] == pytest.approx(expected, rel=1e-8)


def test_conductivity_equals_the_printed_form_where_that_keeps_its_digits() -> None:
    for alpha, n in ((14.5, 2.68), (3.6, 1.56), (0.8, 1.09)):
        for h in (0.01, 0.1, 1.0, 10.0):
            ours = float(relative_conductivity(h, alpha, n))
            assert ours == pytest.approx(plain_conductivity(h, alpha, n), rel=1e-9)


@pytest.mark.parametrize(("alpha", "n"), [(0.8, 1.09), (14.5, 2.68)])
def test_nothing_cancels_near_saturation_or_far_into_dryness(alpha: float, n: float) -> None:
    m = 1 - 1 / n
    # Limits of the law: 1 - (alpha h)^(n m) twice near saturation, m^2 (alpha h)^(-2n - (n-1)/2)
    # far into dryness.
    wet = 1e-12 / alpha
    drop = 1.0 - np.sqrt(float(relative_conductivity(wet, alpha, n)))
    assert drop == pytest.approx((alpha * wet) ** (n * m), rel=1e-3)
    dry = 1e14 / alpha
    expected = m**2 * 1e14 ** (-2 * n - (n - 1) / 2)
    assert float(relative_conductivity(dry, alpha, n)) == pytest.approx(expected, rel=1e-3)


@settings(max_examples=30, deadline=None)
@given(st.floats(0.1, 50), st.floats(1.06, 6.0), st.floats(0.1, 1e4))
def test_depth_and_evaporation_are_inverse_and_monotone(alpha: float, n: float, ks: float) -> None:
    depths = np.geomspace(0.01, 30, 9)
    flux, slope = VanGenuchten(alpha, n, ks).evaporation(depths)
    np.testing.assert_allclose(VanGenuchten(alpha, n, ks).depth(flux)[0], depths, rtol=1e-9)
    assert np.all(np.diff(flux) < 0)
    near = VanGenuchten(alpha, n, ks).evaporation(depths * 1.0001)[0]
    far = VanGenuchten(alpha, n, ks).evaporation(depths * 0.9999)[0]
    np.testing.assert_allclose(slope, (near - far) / (depths * 0.0002), rtol=1e-5)


SHAH = {
    "sand": 50,
    "loamy sand": 70,
    "sandy loam": 130,
    "loam": 265,
    "silt loam": 420,
    "silt": 430,
}


@pytest.mark.parametrize("texture", SHAH)
def test_extinction_depths_of_shah_2007(texture: str) -> None:
    """Shah, Nachabe & Ross (2007) Ground Water 45:329-338, Table 5: depth [cm] at which bare-soil
    evaporation falls to 0.5 % of the potential rate. They simulated moving water; the steady rise
    at 0.5 % of 5 mm/day lies within 12 % of it for these six classes."""
    depth = ROWS[texture].profile.depth(np.array([0.005 * 5.0]))[0][0] * 100
    assert depth == pytest.approx(SHAH[texture], rel=0.12)
