"""Layered columns and finite suction at the top, against published laws and other integrators."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from saltrise.io.soil_tables import load_soil_set
from saltrise.physics.column import Column
from saltrise.physics.curve import build_curves
from saltrise.physics.profile import Campbell, GardnerExponential, GardnerPower, VanGenuchten

RAWLS = {t: row.profile for t, row in load_soil_set("rawls1982", Path()).rows.items()}
CARSEL = {t: row.profile for t, row in load_soil_set("carsel-parrish1988", Path()).rows.items()}
LAWS = {
    "campbell": RAWLS["loam"],
    "wet clay": RAWLS["clay"],
    "van Genuchten": CARSEL["loam"],
    "van Genuchten, n = 1.09": CARSEL["clay"],
    "Gardner's power": GardnerPower(30.0, 0.6, 2.0),
    "exponential": GardnerExponential(100.0, 5.0),
}
FLUXES = np.geomspace(1e-6, 1e3, 40)

# Two Brooks-Corey layers, Rawls et al. 1982 geometric means, water table at 1.5 m, continuous
# suction (Willis 1960 in concept), computed by quadrature outside this project: lower and upper
# soil, thickness of the upper layer [m], maximum evaporation [mm/day].
TWO_LAYERS = [
    ("sandy loam", "clay", 0.5, 1.23155308),
    ("sandy loam", "clay", 1.0, 1.0939424),
    ("sandy loam", "clay", 0.1, 1.24347902),
    ("clay", "sandy loam", 0.5, 0.925847928),
    ("clay", "sandy loam", 1.0, 1.04853281),
    ("clay", "sandy loam", 0.1, 0.91665184),
    ("loam", "sand", 0.5, 0.0955106467),
    ("loam", "sand", 1.0, 0.0852696696),
    ("loam", "sand", 0.1, 0.204113247),
    ("sand", "loam", 0.5, 0.331891534),
    ("sand", "loam", 1.0, 0.598286747),
    ("sand", "loam", 0.1, 0.110136154),
]


def rate(column: Column, depth: float) -> float:
    return float(column.evaporation(np.array([depth]))[0][0])


@pytest.mark.parametrize(("lower", "upper", "thickness", "expected"), TWO_LAYERS)
def test_two_layers_at_150_cm(lower, upper, thickness, expected) -> None:
    column = Column((RAWLS[upper], RAWLS[lower]), (thickness,))
    # The reference has nine digits.
    assert rate(column, 1.5) == pytest.approx(expected, rel=1e-8)


@pytest.mark.parametrize("law", LAWS)
def test_one_soil_cut_in_layers_is_the_uncut_soil(law: str) -> None:
    soil = LAWS[law]
    exact, slope = soil.depth(FLUXES)
    for column in (Column((soil, soil), (0.37,)), Column((soil,) * 3, (0.1, 0.9))):
        depth, tilt = column.depth(FLUXES)
        np.testing.assert_allclose(depth, exact, rtol=1e-10)
        np.testing.assert_allclose(tilt, slope, rtol=1e-9)


def test_order_matters() -> None:
    # Checked above against outside numbers; here as the statement itself.
    sand_over_loam = Column((RAWLS["sand"], RAWLS["loam"]), (0.5,))
    loam_over_sand = Column((RAWLS["loam"], RAWLS["sand"]), (0.5,))
    assert rate(loam_over_sand, 1.5) > 3 * rate(sand_over_loam, 1.5)


@pytest.mark.parametrize("suction", [5.0, 150.0])
def test_against_a_general_integrator(suction: float) -> None:
    """dz/dh = 1/(1 + E/K) downwards by scipy's solve_ivp, layer by layer."""
    soils = (RAWLS["silt loam"], CARSEL["loam"], RAWLS["sand"])
    column = Column(soils, (0.3, 1.0), suction)
    for flux in (0.05, 0.5, 5.0):
        at, suction_here = 0.0, suction
        for soil, bottom in zip(soils, (0.3, 1.0, math.inf), strict=True):

            def fall(_, log, soil=soil, flux=flux):
                h = np.exp(log)
                return -(1.0 + flux / soil.conductivity(h)) / h

            def wet(_, log):
                return log[0] - math.log(1e-9)

            wet.terminal = True
            end = min(bottom, 40.0)
            found = solve_ivp(
                fall,
                (at, end),
                [math.log(suction_here)],
                events=wet,
                method="LSODA",
                rtol=1e-11,
                atol=1e-12,
            )
            if found.t_events[0].size:
                at = found.t_events[0][0]
                break
            at, suction_here = end, float(np.exp(found.y[0, -1]))
        # 1e-9 m of suction are left where the integrator stops.
        assert float(column.depth(np.array([flux]))[0][0]) == pytest.approx(at, rel=1e-6)


def test_finite_suction_of_150_m() -> None:
    # Loam, Rawls et al. 1982, water table at 2 m: ratio to infinite suction, computed outside.
    loam = RAWLS["loam"]
    ratio = rate(Column((loam,), (), 150.0), 2.0) / rate(Column((loam,)), 2.0)
    assert ratio == pytest.approx(0.99935, abs=1e-4)


def test_nothing_rises_from_deeper_than_the_suction_reaches() -> None:
    column = Column((RAWLS["loam"], RAWLS["clay"]), (0.8,), 5.0)
    rates = column.evaporation(np.array([1.0, 4.0, 4.99, 5.0, 6.0]))[0]
    assert np.all(np.diff(rates[:4]) < 0)
    assert np.all(rates[3:] == 0)
    # Near the end the flux falls in a straight line (d of the integral at E = 0).
    near = column.evaporation(np.array([4.999, 4.9995]))[0]
    assert near[0] / near[1] == pytest.approx(2.0, rel=1e-3)


def test_suction_lowers_the_flux() -> None:
    soil, depth = CARSEL["silt loam"], np.geomspace(0.1, 4.5, 20)
    rates = [Column((soil,), (), s).evaporation(depth)[0] for s in (5.0, 15.0, 150.0, math.inf)]
    assert np.all(np.diff(rates, axis=0) > 0)


def stacks(soils: dict, count: int, suction: float) -> list[Column]:
    random, profiles = np.random.default_rng(1), list(soils.values())
    return [
        Column(
            tuple(profiles[k] for k in random.integers(0, len(profiles), 3)), (0.3, 1.2), suction
        )
        for _ in range(count)
    ]


@pytest.mark.parametrize("soils", [RAWLS, CARSEL], ids=["rawls", "carsel"])
@pytest.mark.parametrize("suction", [math.inf, 150.0, 5.0])
def test_curves_of_stacks(soils, suction) -> None:
    edges = np.geomspace(1e-5, 1.0, 25)
    depths = np.unique(np.r_[np.geomspace(0.05, 30.0, 80), 0.3 + edges, 1.2 + edges])
    columns = stacks(soils, 4, suction)
    curves = build_curves(columns)
    for number, column in enumerate(columns):
        profile = np.full(depths.size, number, np.int32)
        exact = column.evaporation(depths)[0]
        ours = curves.max_evaporation(profile, depths)
        # The contract; kinks where a layer's top reaches air entry cost what is left of it.
        counts = exact > 1e-6
        np.testing.assert_allclose(ours[counts], exact[counts], rtol=1e-4)
        assert np.all(ours[~counts] <= 1.0001e-6)
        back = curves.critical_depth(profile[counts], exact[counts])
        # Just below an interface van Genuchten's law is as steep as it gets: 0.3 mm in 0.3 m.
        np.testing.assert_allclose(back, depths[counts], rtol=1e-3)


def test_a_curve_knows_its_neighbours_pieces_apart() -> None:
    """What a stack lifts does not depend on which stacks are solved beside it."""
    columns = stacks(RAWLS, 12, math.inf)
    depths = np.geomspace(0.002, 40.0, 500)
    together = build_curves(columns)
    for number in (0, 5, 11):
        ours = together.max_evaporation(np.full(depths.size, number, np.int32), depths)
        alone = build_curves([columns[number]]).max_evaporation(np.zeros(500, np.int32), depths)
        # Another range of fluxes is marched, which moves the last digits.
        np.testing.assert_allclose(ours, alone, rtol=1e-6)


def test_columns_of_different_length_in_one_table() -> None:
    soil = RAWLS["loam"]
    columns = [Column((soil,), (), 150.0), Column((soil, soil, soil), (0.2, 2.0), 150.0)]
    curves = build_curves(columns)
    depths = np.geomspace(0.05, 30.0, 300)
    one, cut = (curves.max_evaporation(np.full(depths.size, k, np.int32), depths) for k in (0, 1))
    np.testing.assert_allclose(one, cut, rtol=1e-5)
    flux = np.geomspace(1e-4, 10.0, 50)
    back = [curves.critical_depth(np.full(50, k, np.int32), flux) for k in (0, 1)]
    np.testing.assert_allclose(*back, rtol=1e-5)


@pytest.mark.parametrize(
    ("layers", "bottoms", "suction"),
    [(2, (), 5.0), (2, (0.0,), 5.0), (3, (1.0, 0.5), 5.0), (1, (), 0.0)],
)
def test_a_column_that_cannot_be(layers, bottoms, suction) -> None:
    with pytest.raises(ValueError, match="bottom"):
        Column((Campbell(0.1, 4.0, 100.0),) * layers, bottoms, suction)


def test_heights_agree_with_the_plain_quadrature() -> None:
    for soil in (VanGenuchten(14.5, 2.68, 7128.0), CARSEL["silty clay"]):
        np.testing.assert_allclose(
            Column((soil,)).depth(FLUXES)[0], soil.depth(FLUXES)[0], rtol=1e-10
        )
