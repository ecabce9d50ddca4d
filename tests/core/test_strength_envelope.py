"""Friction, flow laws, elastic-plastic moments and the verdict.

Byerlee 1978 prints tau = 0.85 sigma_n up to 200 MPa and 50 MPa + 0.6 sigma_n beyond: both 170 MPa at the corner. Goetze &
Evans 1979 with McNutt & Menard 1982 print rate = 7.0e-14 Pa^-3 s^-1 exp(-520 kJ/mol / RT) sigma^3 below 200 MPa and
5.7e11 s^-1 exp[-535 kJ/mol / RT (1 - sigma / 8.5 GPa)^2] above. These printed numbers are from memory, as `constants` says
beside each; no source printed a stress at a temperature that could be quoted here. What does not hang on memory: identities
of the laws (a strength, put back, flows at the strain rate; what rate and heat do to it), the sliding law's own consistency
at its corner, gas constant and zero of scipy, and ranges of outer rises whose abstracts were read.
"""

import math

import numpy as np
import pytest
from downwarp_checkout.plugin.core import constants as c
from downwarp_checkout.plugin.core import strength
from downwarp_checkout.plugin.core.constants import (
    GAS,
    GRAVITY_CONSTANTS,
    HEAT_CONSTANTS,
    MYR,
    STRENGTH_CONSTANTS,
    YEAR,
    ZERO_CELSIUS,
)
from downwarp_checkout.plugin.core.cooling import HALF_SPACE, PLATE, STEADY, usual
from downwarp_checkout.plugin.core.elastic import Elastic
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.strength import CONTINENTAL, Envelope, Rock
from scipy import constants
from scipy.optimize import brentq

ELASTIC = Elastic()
OLD = usual(PLATE, age=100 * MYR)


def even(strong=400e6, thickness=30e3, steps=6001, tension=1.0):
    """A plate of one strength."""
    depth = np.linspace(0, thickness, steps)
    return Envelope(depth, np.full(steps, tension * strong), np.full(steps, strong), np.zeros(steps))


def test_constants_carry_symbol_unit_and_source():
    """Each has all of it, and says where it is from memory; those that scipy has are scipy's."""
    every = (*GRAVITY_CONSTANTS, *HEAT_CONSTANTS, *STRENGTH_CONSTANTS)
    for each in every:
        assert each.name and each.symbol and each.unit and each.source, each
        assert any(word in each.source for word in ("from memory", "exact", "common practice")), each
    assert GAS.value == pytest.approx(constants.R, rel=1e-9)
    assert ZERO_CELSIUS.value == constants.zero_Celsius
    assert YEAR.value == constants.Julian_year


def test_sliding_corner_as_printed():
    """170 MPa at 200 MPa by both laws; the weaker counts on both sides."""
    assert strength.sliding_shear(np.array([100e6, 200e6, 500e6])) / 1e6 == pytest.approx([85.0, 170.0, 350.0])


@pytest.mark.parametrize("overburden", [20e6, 100e6, 400e6, 1.5e9])
def test_best_oriented_fault(overburden):
    """The Mohr circle of the strength touches the sliding law: no fault of any angle slides before, one does then."""
    tension, compression = strength.sliding_strength(overburden)
    angle = np.radians(np.linspace(0, 180, 20001))
    for greatest, least in ((overburden, overburden - tension), (overburden + compression, overburden)):
        normal = 0.5 * (greatest + least) + 0.5 * (greatest - least) * np.cos(angle)
        shear = 0.5 * (greatest - least) * np.abs(np.sin(angle))
        assert (shear - strength.sliding_shear(normal)).max() == pytest.approx(0.0, abs=1e-6 * overburden)


def test_pore_pressure_takes_its_share_of_the_weight():
    """Dry rock carries its weight, water-filled rock less."""
    dry, wet = Rock(pore_pressure=0.0), Rock(pore_pressure=0.37)
    assert dry.overburden(10e3) == pytest.approx(9.81 * (2800 * 6.5e3 + 3300 * 3.5e3))
    assert wet.overburden(10e3) == pytest.approx(0.63 * dry.overburden(10e3))


@pytest.mark.parametrize(("celsius", "rate"), [(700.0, 1e-15), (850.0, 1e-16), (1000.0, 1e-14)])
def test_olivine_at_test_points(celsius, rate):
    """The printed laws, rates of a stress, solved for the stress by scipy's brentq: creep where it is below 200 MPa, glide
    where that is above."""
    heat = constants.R * (celsius + 273.15)
    creep = brentq(lambda s: math.log(7e-14) - 520e3 / heat + 3 * math.log(s) - math.log(rate), 1.0, 1e12, rtol=1e-14)
    glide = brentq(
        lambda s: math.log(5.7e11) - 535e3 / heat * (1 - s / 8.5e9) ** 2 - math.log(rate), -1e10, 8.5e9, rtol=1e-14
    )
    found = float(strength.olivine_strength(celsius, rate))
    expected = creep if creep <= 200e6 else max(min(creep, glide), 200e6)
    assert found == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize("rate", [1e-18, 1e-15, 1e-13])
def test_strength_put_back_flows_at_the_strain_rate(rate):
    """Each law turned round: the rate of the strength found is the one asked for to 1e-12, olivine at creep and at glide,
    and quartzite; between the two olivine laws the strength stands at 200 MPa, where creep is slower and glide faster."""
    celsius = np.linspace(200.0, 1300.0, 111)
    heat = GAS.value * (celsius + ZERO_CELSIUS.value)
    found = strength.olivine_strength(celsius, rate)
    creep = c.OLIVINE_FACTOR.value * found**c.OLIVINE_POWER.value * np.exp(-c.OLIVINE_ENERGY.value / heat)
    glide = c.PEIERLS_RATE.value * np.exp(-c.PEIERLS_ENERGY.value / heat * (1 - found / c.PEIERLS_STRESS.value) ** 2)
    creeps, glides = found < c.PEIERLS_FROM.value, found > c.PEIERLS_FROM.value
    assert creeps.sum() > 10 and glides.sum() > 10
    assert creep[creeps] == pytest.approx(rate, rel=1e-12)
    # Of the two above 200 MPa, the weaker counts: the faster one has the rate.
    assert np.maximum(creep, glide)[glides] == pytest.approx(rate, rel=1e-12)
    rest = ~creeps & ~glides
    assert (creep[rest] <= rate * (1 + 1e-12)).all() and (glide[rest] >= rate * (1 - 1e-12)).all()
    found = strength.quartz_strength(celsius, rate)
    back = c.QUARTZ_FACTOR.value * found**c.QUARTZ_POWER.value * np.exp(-c.QUARTZ_ENERGY.value / heat)
    assert back == pytest.approx(rate, rel=1e-12)


def test_creep_by_rate_and_by_heat():
    """10^n times the rate is 10 times the stress; d ln sigma / d (1 / T) is Q / (n R)."""
    cold, warm = 900.0, 1000.0
    one = strength.olivine_strength(np.array([cold, warm]), 1e-17)
    ten = strength.olivine_strength(np.array([cold, warm]), 1e-17 * 10**c.OLIVINE_POWER.value)
    assert one.max() < ten.max() < 200e6 and ten / one == pytest.approx(10.0, rel=1e-12)
    slope = np.log(one[0] / one[1]) / (1 / (cold + 273.15) - 1 / (warm + 273.15))
    assert slope == pytest.approx(c.OLIVINE_ENERGY.value / (c.OLIVINE_POWER.value * GAS.value), rel=1e-12)


def test_sliding_laws_meet_at_the_corner():
    """0.85 x 200 MPa = 50 MPa + 0.6 x 200 MPa: the three printed numbers are tied by the fourth, the corner."""
    corner = c.COHESION_HIGH.value / (c.FRICTION_LOW.value - c.FRICTION_HIGH.value)
    assert corner == pytest.approx(200e6, rel=1e-12)


@pytest.mark.parametrize("age", [20, 40, 60, 80, 100])
def test_outer_rises_follow_the_root_of_age(age):
    """McAdoo & Martin 1984 (abstract read): at six outer rises Te is about 4 km times the root of age in Myr. A cooling
    plate of dry olivine has that thickness at a curvature between 1e-7 and 5e-7 /m, which outer rises have."""
    found = strength.envelope(Rock(), usual(PLATE, age=age * MYR))
    gentle, strong = (
        strength.effective_thickness(strength.bend_envelope(found, k, ELASTIC), ELASTIC) for k in (1e-7, 5e-7)
    )
    assert strong < 4e3 * math.sqrt(age) < gentle


def test_old_plates_at_a_western_pacific_trench():
    """Zhang, Lin & Zhou (abstract read): Te 20 to 65 km seaward, 11 to 33 km near the axis, end moments up to 2.2e17 N. A
    plate of 150 Myr is as thick where it is bent little, as thin where it is bent much; the largest moment lies between
    those that a cooling plate and a cooling half-space carry."""
    limits = []
    for kind in (PLATE, HALF_SPACE):
        found = strength.envelope(Rock(), usual(kind, age=150 * MYR))
        limits.append(strength.bend_envelope(found, 1e-3, ELASTIC).moment)
    assert limits[0] < 2.2e17 < limits[1]
    found = strength.envelope(Rock(), usual(PLATE, age=150 * MYR))
    far, near = (
        strength.effective_thickness(strength.bend_envelope(found, k, ELASTIC), ELASTIC) for k in (1e-8, 1e-6)
    )
    assert 20e3 < far < 65e3 and 11e3 < near < 33e3


def test_olivine_glides_in_the_cold():
    """At 300 C and 1e-15 /s: 8.5 GPa [1 - sqrt(R T / 535 kJ ln(5.7e26))] = 2.20 GPa, by hand; and it weakens with heat
    throughout."""
    assert float(strength.olivine_strength(300.0, 1e-15)) / 1e9 == pytest.approx(2.20, abs=0.01)
    temperature = np.linspace(0, 1400, 1401)
    assert (np.diff(strength.olivine_strength(temperature, 1e-15)) <= 0).all()


def test_quartz_at_a_test_point():
    """(1e-15 / 6.7e-6)^(1/2.4) exp(156e3 / (2.4 R 623.15)) MPa at 350 C; the rate of that stress is 1e-15 /s again."""
    found = float(strength.quartz_strength(350.0, 1e-15)) / 1e6
    expected = (1e-15 / 6.7e-6) ** (1 / 2.4) * math.exp(156e3 / (2.4 * constants.R * 623.15))
    assert found == pytest.approx(expected, rel=1e-6)
    assert 6.7e-6 * found**2.4 * math.exp(-156e3 / (constants.R * 623.15)) == pytest.approx(1e-15, rel=1e-6)


@pytest.mark.parametrize(("ratio", "share"), [(0.5, 0.5), (1.0, 1.0), (2.0, 1.375), (3.0, 1.4444), (10.0, 1.495)])
def test_elastic_perfectly_plastic_moments(ratio, share):
    """M / My = 1.5 - 0.5 (kappa_y / kappa)^2 beyond yielding, the ratio before; My = s0 h^2 / 6 (check values)."""
    plate = even()
    yielding = 2 * 400e6 * (1 - 0.25**2) / (100e9 * 30e3)
    bent = strength.bend_envelope(plate, ratio * yielding, ELASTIC)
    assert bent.moment / (400e6 * 30e3**2 / 6) == pytest.approx(share, abs=5e-5)
    assert bent.neutral == pytest.approx(15e3, abs=1.0)
    turned = strength.bend_envelope(plate, -ratio * yielding, ELASTIC)
    assert turned.moment == pytest.approx(-bent.moment, rel=1e-9)


def test_moment_saturates():
    """At s0 h^2 / 4, and the elastic thickness of the moment falls as curvature grows."""
    curve = strength.moment_curve(even(), ELASTIC, 1.0, 1e-9, 1e-4)
    assert curve.moment[-1] == pytest.approx(400e6 * 30e3**2 / 4, rel=1e-4)
    assert curve.thickness[0] == pytest.approx(30e3, rel=1e-5)
    assert (np.diff(curve.thickness) <= 1e-6).all() and (np.diff(curve.moment) > 0).all()


def test_uneven_strength_moves_the_neutral_depth():
    """Tension half as strong as compression: fully yielded, forces balance where 0.5 s z = s (h - z), z = 2 h / 3."""
    bent = strength.bend_envelope(even(tension=0.5), 1e-3, ELASTIC)
    assert bent.neutral == pytest.approx(20e3, rel=1e-3)
    force = (0.5 * (bent.stress[1:] + bent.stress[:-1]) * np.diff(even().depth)).sum()
    assert force == pytest.approx(0.0, abs=1e-6 * 400e6 * 30e3)


def test_in_plane_force():
    """The stress balances it; more than the strength carries is refused."""
    plate = even()
    bent = strength.bend_envelope(plate, 2e-7, ELASTIC, in_plane=2e12)
    gaps = np.diff(plate.depth)
    assert (0.5 * (bent.stress[1:] + bent.stress[:-1]) * gaps).sum() == pytest.approx(-2e12, rel=1e-6)
    with pytest.raises(DownwarpError, match=r"IN_PLANE is 1\.3e\+13 N/m, more than the"):
        strength.bend_envelope(plate, 2e-7, ELASTIC, in_plane=1.3e13)


def test_envelope_of_a_cooling_plate():
    """Friction above, flow below; compression stronger than tension near the top; older is thicker."""
    found = strength.envelope(Rock(), OLD)
    sliding_tension, sliding_compression = strength.sliding_strength(Rock().overburden(found.depth))
    flow = strength.olivine_strength(found.temperature, 1e-15)
    assert found.tension == pytest.approx(np.minimum(sliding_tension, flow))
    assert found.compression == pytest.approx(np.minimum(sliding_compression, flow))
    young = strength.envelope(Rock(), usual(PLATE, age=20 * MYR))
    assert young.mechanical_thickness() < found.mechanical_thickness()
    assert OLD.temperature(found.mechanical_thickness()) == pytest.approx(800, abs=100)


def test_continental_crust_is_weak_below():
    """Dry quartzite above the base of the crust, olivine below: strength jumps up there."""
    earth = usual(STEADY, heat_flow=0.055)
    found = strength.envelope(Rock(CONTINENTAL, crust=35e3), earth)
    above, below = (np.interp(z, found.depth, found.tension) for z in (34.5e3, 35.5e3))
    assert below > 5 * above


def test_verdict_of_a_gently_bent_plate_agrees_with_itself():
    """A plate as thick as its strength makes it at that curvature: the geotherm found is the one given."""
    curvature = 2e-7
    bent = strength.bend_envelope(strength.envelope(Rock(), OLD), curvature, ELASTIC)
    expected = strength.effective_thickness(bent, ELASTIC)
    found = strength.weigh(Rock(), OLD, curvature, expected, ELASTIC)
    assert found.expected_thickness == pytest.approx(expected, rel=1e-9)
    assert found.geotherm_of_fit.age == pytest.approx(OLD.age, rel=0.01)
    assert found.mechanical_of_fit == pytest.approx(found.mechanical, rel=0.005)
    assert found.elastic_moment == pytest.approx(abs(found.bent.moment), rel=1e-6)
    assert 0 < found.moment_share < 1


def test_mechanical_exceeds_elastic_thickness_where_bending_is_strong():
    """McNutt & Menard 1982: the more a plate is bent, the thinner the elastic plate that fits it."""
    thickness = [
        strength.effective_thickness(strength.bend_envelope(strength.envelope(Rock(), OLD), k, ELASTIC), ELASTIC)
        for k in (1e-8, 1e-7, 1e-6)
    ]
    assert thickness[0] > thickness[1] > thickness[2]
    assert thickness[1] < strength.envelope(Rock(), OLD).mechanical_thickness()


def test_too_stiff_a_plate_is_not_carried():
    """60 km bent to 1e-6 /m has more moment than 100 Myr of cooling carries; no plate geotherm explains it."""
    found = strength.weigh(Rock(), OLD, 1e-6, 60e3, ELASTIC)
    assert found.moment_share > 1 and found.overstressed > 0.5
    assert found.geotherm_of_fit is None and found.mechanical_of_fit is None


def test_steady_heat_flow_is_searched_too():
    """From a warm geotherm to the one that has the fitted thickness."""
    rock, earth = Rock(CONTINENTAL, crust=35e3), usual(STEADY, heat_flow=0.05)
    found = strength.weigh(rock, earth, -1e-7, 30e3, ELASTIC)
    again = strength.weigh(rock, found.geotherm_of_fit, -1e-7, 30e3, ELASTIC)
    assert again.expected_thickness == pytest.approx(30e3, rel=1e-3)


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: Rock(kind=4), "ROCK is 4"),
        (lambda: Rock(pore_pressure=1.0), "PORE_PRESSURE is 1"),
        (lambda: Rock(strain_rate=0.0), "STRAIN_RATE is 0"),
        (lambda: strength.weigh(Rock(), OLD, 0.0, 20e3, ELASTIC), "The plate is not bent"),
        (lambda: strength.weigh(Rock(), OLD, 1e-7, -1.0, ELASTIC), "elastic thickness in km is -0.001"),
    ],
)
def test_rejections(call, words):
    """Each names what was wrong."""
    with pytest.raises(DownwarpError, match=words):
        call()


def test_stress_of_the_elastic_plate_is_antisymmetric():
    """E / (1 - nu^2) kappa (Te / 2 - z): tension at the top for a positive curvature, none in the middle."""
    found = strength.elastic_stress(np.array([0.0, 10e3, 20e3]), 1e-7, 20e3, ELASTIC)
    top = 100e9 / (1 - 0.0625) * 1e-7 * 10e3
    assert found == pytest.approx([top, 0.0, -top])
