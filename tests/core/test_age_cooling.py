"""Cooling against error functions, its limits, and what the sources print.

    T = Tm erf(z / (2 sqrt(kappa t)));    q = k Tm / sqrt(pi kappa t)

Stein & Stein 1992 print for their plate (a 95 km, Tm 1450 C): q = 510 / sqrt(t) up to 55 Myr and 48 + 96 exp(-0.0278 t)
beyond, mW/m2 with t in Myr (from memory). Turcotte & Schubert, Geodynamics, section 4.16: the thermal boundary layer,
where T = 0.9 Tm, is 2.32 sqrt(kappa t) deep (from memory).
"""

import dataclasses

import numpy as np
import pytest
from downwarp_checkout.plugin.core import age_check, cooling
from downwarp_checkout.plugin.core.constants import MYR
from downwarp_checkout.plugin.core.cooling import HALF_SPACE, PLATE, STEADY, Geotherm, age_of_heat_flow, usual
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.result import Estimate
from scipy.integrate import solve_ivp
from scipy.special import erf


@pytest.mark.parametrize("age", [1.0, 30.0, 150.0])
def test_boundary_layer_of_the_half_space(age):
    """z(0.9 Tm) = 2.32 sqrt(kappa t), to the digits printed; depth goes with the root of age."""
    earth = usual(HALF_SPACE, age=age * MYR)
    depth = earth.isotherm(0.9 * earth.mantle)
    assert round(depth / np.sqrt(earth.diffusivity * earth.age), 1) == 2.3
    assert depth / np.sqrt(earth.diffusivity * earth.age) == pytest.approx(2.32, abs=0.01)
    assert dataclasses.replace(earth, age=4 * earth.age).isotherm(500.0) == pytest.approx(2 * earth.isotherm(500.0))


def test_isotherm_is_where_the_temperature_is():
    """Depth of T, then T of that depth, for each kind; the surface's own and the mantle's temperature."""
    for earth in (
        usual(HALF_SPACE, age=40 * MYR, surface=2.0),
        usual(PLATE, age=40 * MYR),
        usual(PLATE, age=0.5 * MYR),
        usual(STEADY, heat_flow=0.06, production=1e-6),
    ):
        for temperature in (300.0, 450.0, 600.0):
            assert earth.temperature(earth.isotherm(temperature)) == pytest.approx(temperature, abs=1e-3)
        assert earth.isotherm(earth.surface) == 0.0
        assert earth.isotherm(earth.mantle) is None


@pytest.mark.parametrize("age", [2.0, 20.0, 50.0, 60.0, 100.0, 160.0])
def test_heat_flow_as_printed(age):
    """The plate's heat flow against the two printed formulas, within 0.5 %."""
    printed = 510 / np.sqrt(age) if age <= 55 else 48 + 96 * np.exp(-0.0278 * age)
    assert usual(PLATE, age=age * MYR).surface_heat_flow() * 1e3 == pytest.approx(printed, rel=5e-3)


def test_plate_limits():
    """Young, a plate is a half-space; old, its temperature is a straight line and isotherms stand at a T / Tm."""
    young, old = usual(PLATE, age=5 * MYR), usual(PLATE, age=4000 * MYR)
    z = np.linspace(0, 20e3, 41)
    half = dataclasses.replace(young, kind=HALF_SPACE)
    assert young.temperature(z) == pytest.approx(half.temperature(z), abs=1e-6)
    assert old.temperature(z) == pytest.approx(1450.0 * z / 95e3, abs=1e-6)
    assert old.isotherm(725.0) == pytest.approx(47.5e3, abs=0.1)
    assert old.surface_heat_flow() == pytest.approx(3.138 * 1450 / 95e3)
    assert old.temperature(np.array([95e3, 200e3])) == pytest.approx(1450.0)


def test_series_and_half_space_meet():
    """Where the series takes over from the half-space, the two agree."""
    limit = cooling.YOUNG_PLATE * 95e3**2 / usual(PLATE, age=MYR).diffusivity
    z = np.linspace(0, 95e3, 96)
    below, above = (usual(PLATE, age=limit * factor).temperature(z) for factor in (1 - 1e-9, 1 + 1e-9))
    assert below == pytest.approx(above, abs=1e-4)


def test_plate_against_finite_differences():
    """dT/dt = kappa d2T/dz2 with T = 0 above and Tm below, stepped by scipy from the half-space at 1 Myr to 80 Myr."""
    plate = usual(PLATE, age=80 * MYR)
    z = np.linspace(0, plate.thickness, 201)
    start = plate.mantle * erf(z / (2 * np.sqrt(plate.diffusivity * MYR)))

    def rate(_, inner):
        full = np.concatenate([[0.0], inner, [plate.mantle]])
        return plate.diffusivity * np.diff(full, 2) / (z[1] - z[0]) ** 2

    end = solve_ivp(rate, (MYR, 80 * MYR), start[1:-1], method="BDF", rtol=1e-6, atol=1e-3).y[:, -1]
    assert plate.temperature(z[1:-1]) == pytest.approx(end, abs=1.0)


def test_steady_heat():
    """Without production a straight line of slope q / k; with it, the slope falls from q / k to (q - A h) / k."""
    plain = usual(STEADY, heat_flow=0.066)
    assert plain.temperature(10e3) == pytest.approx(200.0)
    warm = usual(STEADY, heat_flow=0.066, production=2e-6, production_depth=10e3)
    slope = np.diff(warm.temperature(np.array([0.0, 1.0, 80e3 - 1, 80e3])))[::2]
    assert slope == pytest.approx([0.066 / 3.3, 0.046 / 3.3], rel=1e-3)
    assert plain.temperature(500e3) == plain.mantle


def test_age_of_a_heat_flow_and_back():
    """The age at which a geotherm has a heat flow has it."""
    for kind in (HALF_SPACE, PLATE):
        for age in (3.0, 30.0, 110.0):
            earth = usual(kind, age=age * MYR)
            assert age_of_heat_flow(earth, earth.surface_heat_flow()) == pytest.approx(earth.age, rel=1e-6)
    with pytest.raises(DownwarpError, match=r"HEAT_FLOW is 40 mW/m2, which the cooling plate has at no age .* 47\.9"):
        age_of_heat_flow(usual(PLATE, age=MYR), 0.040)


@pytest.mark.parametrize(
    ("values", "words"),
    [
        ({}, "AGE_MYR is nan"),
        ({"age": -MYR}, "AGE_MYR is -1; it takes a number above 0"),
        ({"age": MYR, "mantle": -5.0}, "MANTLE_C is -5"),
        ({"kind": STEADY}, "HEAT_FLOW is nan"),
        ({"kind": STEADY, "heat_flow": 0.02, "production": 3e-6}, "nothing is left from the mantle"),
        ({"kind": 7, "age": MYR}, "THERMAL is 7"),
    ],
)
def test_rejections(values, words):
    """Each names the key and what it got."""
    with pytest.raises(DownwarpError, match=words):
        Geotherm(**values)


def test_temperature_at_the_base_of_an_elastic_plate():
    """McAdoo & Martin 1984 (abstract) found Te of about 4 km times the root of age in Myr at six outer rises: in a cooling
    half-space that is one isotherm at all ages, erf(4000 / (2 sqrt(kappa 1 Myr))) 1300 C = 501 C, by hand."""
    for age in (20.0, 60.0, 120.0):
        te, earth = 4e3 * np.sqrt(age), usual(HALF_SPACE, age=age * MYR)
        found = age_check.check_age("line", Estimate(te, 0.8 * te, None), age * MYR, 0.0, earth, (300.0,))
        assert found.temperature.value == pytest.approx(501.0, abs=1.0)
        assert found.temperature.low == pytest.approx(float(earth.temperature(0.8 * te)))
        assert found.temperature.high is None


def test_age_of_the_load_counts():
    """A load 40 Myr old on a plate 90 Myr old: isotherms of 50 Myr."""
    found = age_check.check_age("line", Estimate(20e3), 90 * MYR, 40 * MYR, usual(HALF_SPACE, age=MYR), (450.0,))
    assert found.age_at_loading == pytest.approx(50 * MYR)
    assert found.expected[0][1] == pytest.approx(usual(HALF_SPACE, age=50 * MYR).isotherm(450.0))
    with pytest.raises(DownwarpError, match="the load is 90 Myr old and the plate 40 Myr"):
        age_check.check_age("line", Estimate(20e3), 40 * MYR, 90 * MYR, usual(PLATE, age=MYR), (450.0,))
    with pytest.raises(DownwarpError, match="line: te_km is empty"):
        age_check.check_age("line", Estimate(None), 40 * MYR, 0.0, usual(PLATE, age=MYR), (450.0,))


def test_intervals_outside_all_isotherms_are_told():
    """Thicker than the hottest isotherm, thinner than the coolest."""
    earth = usual(PLATE, age=MYR)
    thick = age_check.check_age("a", Estimate(60e3, 50e3, 70e3), 50 * MYR, 0.0, earth, (300.0, 600.0))
    thin = age_check.check_age("b", Estimate(5e3, 4e3, 6e3), 50 * MYR, 0.0, earth, (300.0, 600.0))
    inside = age_check.check_age("c", Estimate(20e3, 10e3, 30e3), 50 * MYR, 0.0, earth, (300.0, 600.0))
    assert "thicker than the hottest" in thick.remarks[0] and "thinner than the coolest" in thin.remarks[0]
    assert inside.remarks == ()


def test_curves_follow_the_isotherms():
    """Curves hold the isotherms' depths at their ages, NaN where there is none."""
    earth = usual(PLATE, age=MYR)
    ages, curves = age_check.isotherm_curves(earth, (600.0, 1500.0), 100 * MYR, count=11)
    assert ages[-1] == pytest.approx(100 * MYR) and curves[600.0].shape == (11,)
    assert curves[600.0][-1] == pytest.approx(usual(PLATE, age=100 * MYR).isotherm(600.0), abs=0.01)
    assert np.isnan(curves[1500.0]).all()
