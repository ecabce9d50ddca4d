"""The plate solver: order of convergence, balance of forces, symmetries, signs, ends, and what is refused."""

from itertools import product

import numpy as np
import pytest
from downwarp_checkout.plugin.core import elastic
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.plate import (
    BROKEN,
    CLAMPED,
    CONTINUES,
    PINNED,
    SUPPORT_NAMES,
    Plate,
    gauss_positions,
    half_plate_stiffness,
)
from numpy.polynomial import Polynomial

SUPPORTS = (CONTINUES, BROKEN, PINNED, CLAMPED)
RIGIDITY, STIFFNESS = 2.4e23, 22269.0
ALPHA = float(elastic.flexural_parameter(RIGIDITY, STIFFNESS))
SPAN = 400e3


def names(supports) -> str:
    return "-".join(SUPPORT_NAMES[support] for support in supports)


def varying(nodes) -> tuple[np.ndarray, np.ndarray]:
    """A rigidity and a stiffness that vary along 0..SPAN, at the Gauss points of ``nodes``."""
    s = gauss_positions(nodes) / SPAN
    return RIGIDITY * (1.0 + 0.6 * np.sin(5.0 * s)), STIFFNESS * (1.0 - 0.4 * s**2)


def uneven(elements: int, seed: int = 0) -> np.ndarray:
    """Uneven nodes over 0..SPAN."""
    steps = np.random.default_rng(seed).uniform(0.5, 1.5, elements)
    return SPAN * np.concatenate([[0.0], np.cumsum(steps) / steps.sum()])


def hill(nodes, centre=0.4, width=0.1, height=5e7) -> np.ndarray:
    """A smooth load, Pa."""
    return height * np.exp(-(((nodes / SPAN - centre) / width) ** 2))


# A manufactured solution: any polynomial w, D, k and the load that makes them a plate.


class Manufactured:
    """w(s), D(s), k(s) polynomials of s = x / SPAN and q = (D w'')'' + (P w')' + k w, in SI."""

    in_plane = 1.5e12

    def __init__(self, start: int, finish: int) -> None:
        s = Polynomial([0.0, 1.0])
        order = {BROKEN: 0, PINNED: 1, CLAMPED: 2}
        self.w = 3000.0 * s ** order[start] * (1.0 - s) ** order[finish] * (1.0 - 1.7 * s + 2.0 * s**3 - 0.8 * s**5)
        self.rigidity = RIGIDITY * (1.0 + 0.5 * s - 0.9 * s**2 + 0.6 * s**3)
        self.stiffness = STIFFNESS * (0.6 + s - 0.7 * s**3)
        self.moment = -self.rigidity * self.w.deriv(2) / SPAN**2
        self.shear = self.moment.deriv() / SPAN - self.in_plane * self.w.deriv() / SPAN
        self.load = self.stiffness * self.w - self.shear.deriv() / SPAN
        self.supports = start, finish

    def plate(self, nodes) -> Plate:
        points = gauss_positions(nodes) / SPAN
        return Plate(nodes, self.rigidity(points), self.stiffness(points), self.in_plane, *self.supports)

    def bend(self, nodes, fine: bool = True):
        """Bend the plate under the load and under the end forces that the solution needs.

        At the start V = -V0 and M = -M0, at the finish V = V0 and M = -M0. The load is linear between its values: with
        ``fine`` they stand so close that this does not matter.
        """
        plate = self.plate(nodes)
        forces = plate.end_vector(-self.shear(0.0), -self.moment(0.0))
        forces = forces + plate.end_vector(self.shear(1.0), -self.moment(1.0), finish=True)
        if fine:
            at = np.linspace(0.0, SPAN, 60001)
            return plate.bend(self.load(at / SPAN), forces, at)
        return plate.bend(self.load(nodes / SPAN), forces)


HELD_OR_BROKEN = list(product((BROKEN, PINNED, CLAMPED), repeat=2))


def order_of_convergence(elements, errors) -> float:
    """Slope of the log of the errors over the log of the step, by least squares."""
    return -np.polyfit(np.log(elements), np.log(errors), 1)[0]


@pytest.mark.parametrize("supports", HELD_OR_BROKEN, ids=names)
def test_deflection_converges_at_fourth_order(supports):
    """(D w'')'' + (P w')' + k w = q polynomial w, D and k: the largest error of w falls with the step's 4th power."""
    problem = Manufactured(*supports)
    elements, positions = np.array([32, 48, 64, 96]), np.linspace(0.0, SPAN, 777)
    errors = [
        abs(problem.bend(np.linspace(0.0, SPAN, n + 1)).at(positions)[:, 0] - problem.w(positions / SPAN)).max()
        for n in elements
    ]
    assert order_of_convergence(elements, errors) == pytest.approx(4.0, abs=0.1)
    assert errors[-1] < 1e-6 * abs(problem.w(positions / SPAN)).max()


def test_slope_and_curvature_converge_at_third_and_second_order():
    """Each derivative of a cubic costs one order."""
    problem = Manufactured(BROKEN, CLAMPED)
    elements, positions = np.array([8, 12, 16, 24, 32]), np.linspace(0.0, SPAN, 777)
    for derivative, expected in ((1, 3.0), (2, 2.0)):
        exact = problem.w.deriv(derivative)(positions / SPAN) / SPAN**derivative
        errors = [
            abs(problem.bend(np.linspace(0.0, SPAN, n + 1)).at(positions, derivative)[:, 0] - exact).max()
            for n in elements
        ]
        assert order_of_convergence(elements, errors) == pytest.approx(expected, abs=0.15)


def test_a_load_known_only_at_the_nodes_limits_convergence_to_second_order():
    """Linear between nodes, a smooth load is in error by the step's square, and so is the deflection."""
    problem = Manufactured(BROKEN, BROKEN)
    elements = np.array([16, 24, 32, 48, 64])
    errors = []
    for n in elements:
        nodes = np.linspace(0.0, SPAN, n + 1)
        errors.append(abs(problem.bend(nodes, fine=False).deflection[:, 0] - problem.w(nodes / SPAN)).max())
    assert order_of_convergence(elements, errors) == pytest.approx(2.0, abs=0.1)


@pytest.mark.parametrize("supports", HELD_OR_BROKEN, ids=names)
def test_moment_and_shear_at_nodes(supports):
    """M = -D w'', V = dM/dx - P w', dV/dx = k w - q: at the nodes both converge at fourth order to the exact ones."""
    problem = Manufactured(*supports)
    elements = np.array([8, 12, 16, 24])
    moment_errors, shear_errors = [], []
    for n in elements:
        nodes = np.linspace(0.0, SPAN, n + 1)
        moment, shear = problem.bend(nodes).moment_and_shear()
        moment_errors.append(abs(moment[:, 0] - problem.moment(nodes / SPAN)).max())
        shear_errors.append(abs(shear[:, 0] - problem.shear(nodes / SPAN)).max())
    assert order_of_convergence(elements, moment_errors) > 3.7
    assert order_of_convergence(elements, shear_errors) > 3.7
    s = np.linspace(0.0, 1.0, 11)
    assert moment_errors[-1] < 1e-4 * abs(problem.moment(s)).max()
    assert shear_errors[-1] < 1e-4 * abs(problem.shear(s)).max()


def test_shear_between_nodes_changes_by_foundation_less_load():
    """V(b) - V(a) = int k w - q dx over each element, to rounding."""
    nodes = uneven(50)
    rigidity, stiffness = varying(nodes)
    bending = Plate(nodes, rigidity, stiffness, 1e12).bend(hill(nodes))
    points, lengths = gauss_positions(nodes), np.diff(nodes)
    weights = 0.5 * np.polynomial.legendre.leggauss(4)[1]
    foundation = (stiffness * bending.at(points.ravel())[:, 0].reshape(points.shape)) @ weights * lengths
    load = 0.5 * (hill(nodes)[1:] + hill(nodes)[:-1]) * lengths
    _, shear = bending.moment_and_shear()
    np.testing.assert_allclose(np.diff(shear[:, 0]), foundation - load, atol=1e-9 * abs(load).sum())


def test_moment_and_shear_between_nodes():
    """Between the nodes M converges at fourth order and V at third; at the nodes they are those of the nodes."""
    problem = Manufactured(BROKEN, CLAMPED)
    elements, positions = np.array([16, 24, 32, 48, 64]), np.linspace(0.0, SPAN, 777)
    moment_errors, shear_errors = [], []
    for n in elements:
        bending = problem.bend(np.linspace(0.0, SPAN, n + 1))
        moment, shear = bending.moment_and_shear_at(positions)
        moment_errors.append(abs(moment[:, 0] - problem.moment(positions / SPAN)).max())
        shear_errors.append(abs(shear[:, 0] - problem.shear(positions / SPAN)).max())
        for between, at_nodes in zip(bending.moment_and_shear_at(bending.plate.nodes), bending.moment_and_shear()):
            np.testing.assert_allclose(between, at_nodes, atol=1e-7 * abs(at_nodes).max())
    assert order_of_convergence(elements, moment_errors) == pytest.approx(4.0, abs=0.15)
    assert order_of_convergence(elements, shear_errors) == pytest.approx(3.0, abs=0.15)


def test_shear_jumps_at_a_line_load():
    """A line load V0 at a node: V falls by V0 across it, and half of it hangs on each side of a continuous plate."""
    nodes = ALPHA * np.linspace(-3.0, 3.0, 121)
    plate = Plate(nodes, RIGIDITY, STIFFNESS)
    bending = plate.solve(plate.point_vector(60, 1e12))
    _, shear = bending.moment_and_shear_at([-1e-3, 1e-3])
    np.testing.assert_allclose(shear[:, 0], [0.5e12, -0.5e12], rtol=1e-6)
    assert bending.moment_and_shear()[1][60, 0] == pytest.approx(-0.5e12, rel=1e-6)


# Balance of forces


@pytest.mark.parametrize("step", [10e3, 3e3, 1e3, 300.0, 100.0, 50.0])
@pytest.mark.parametrize("supports", list(product(SUPPORTS, repeat=2)), ids=names)
def test_foundation_and_supports_carry_the_whole_load(step, supports):
    """int k w dx + what lies beyond both ends = int q dx + all nodal forces, to 1e-9, however short the elements."""
    nodes = np.linspace(0.0, SPAN, round(SPAN / step) + 1)
    rigidity, stiffness = varying(nodes)
    plate = Plate(nodes, rigidity, stiffness, 1e12, *supports)
    ends = [(0.7e12, 1e17) if support == BROKEN else (0.0, 0.0) for support in supports]
    forces = (
        plate.end_vector(*ends[0]) + plate.end_vector(*ends[1], finish=True) + plate.point_vector(nodes.size // 3, 2e12)
    )
    load = hill(nodes) + 1e6
    bending = plate.bend(load, forces)
    total = 0.5 * ((load[1:] + load[:-1]) * np.diff(nodes)).sum() + 2e12 + ends[0][0] + ends[1][0]
    start, finish = bending.support_forces()
    assert bending.foundation_force()[0] + start[0] + finish[0] == pytest.approx(total, rel=1e-9)
    for support, force in zip(supports, (start[0], finish[0])):
        assert (force == 0.0) == (support == BROKEN)


def test_support_forces_are_the_shears_at_held_ends():
    """Between a pin and a clamp, what the supports exert upwards is V at the start and -V at the finish."""
    nodes = uneven(60)
    bending = Plate(nodes, *varying(nodes), 1e12, PINNED, CLAMPED).bend(hill(nodes))
    _, shear = bending.moment_and_shear()
    start, finish = bending.support_forces()
    assert start[0] == pytest.approx(shear[0, 0], rel=1e-9)
    assert finish[0] == pytest.approx(-shear[-1, 0], rel=1e-9)


def test_balance_of_moments():
    """Free ends: the moments about the start of k w, of q and of the in-plane couple P (w(L) - w(0)) cancel."""
    nodes = uneven(60)
    rigidity, stiffness = varying(nodes)
    bending = Plate(nodes, rigidity, stiffness, 2e12, BROKEN, BROKEN).bend(hill(nodes))
    points, lengths = gauss_positions(nodes), np.diff(nodes)
    weights = 0.5 * np.polynomial.legendre.leggauss(4)[1]
    foundation = ((stiffness * points * bending.at(points.ravel())[:, 0].reshape(points.shape)) @ weights) @ lengths
    q = hill(nodes)
    linear = q[:-1, None] + (q[1:] - q[:-1])[:, None] * (points - nodes[:-1, None]) / lengths[:, None]
    load = ((linear * points) @ weights) @ lengths
    in_plane = 2e12 * (bending.deflection[-1, 0] - bending.deflection[0, 0])
    assert foundation - in_plane == pytest.approx(load, rel=1e-9)


# Symmetries


@pytest.mark.parametrize("supports", list(product(SUPPORTS, repeat=2)), ids=names)
def test_reversing_the_line_mirrors_the_answer(supports):
    """x -> L - x turns D, k, q and both ends about: the same w and M, and w' and V of the opposite sign."""
    nodes = uneven(70)
    rigidity, stiffness = varying(nodes)
    load = hill(nodes)
    plate = Plate(nodes, rigidity, stiffness, 1e12, *supports)
    turned = Plate(SPAN - nodes[::-1], rigidity[::-1, ::-1], stiffness[::-1, ::-1], 1e12, *supports[::-1])
    there = plate.bend(load, plate.end_vector(1e12, 2e17))
    back = turned.bend(load[::-1], turned.end_vector(1e12, 2e17, finish=True))
    top = abs(there.deflection).max()
    np.testing.assert_allclose(back.deflection[::-1], there.deflection, atol=1e-9 * top)
    np.testing.assert_allclose(-back.slope[::-1], there.slope, atol=1e-9 * abs(there.slope).max())
    moment, shear = there.moment_and_shear()
    back_moment, back_shear = back.moment_and_shear()
    np.testing.assert_allclose(back_moment[::-1], moment, atol=1e-8 * abs(moment).max())
    np.testing.assert_allclose(-back_shear[::-1], shear, atol=1e-7 * abs(shear).max())


def test_answers_add_up():
    """w(a q1 + b q2) = a w(q1) + b w(q2)."""
    nodes = uneven(80)
    plate = Plate(nodes, *varying(nodes), 1e12, BROKEN, CONTINUES)
    first, second = plate.bend(hill(nodes)), plate.bend(hill(nodes, 0.7, 0.2))
    both = plate.bend(2.0 * hill(nodes) - 3.0 * hill(nodes, 0.7, 0.2))
    expected = 2.0 * first.deflection - 3.0 * second.deflection
    np.testing.assert_allclose(both.deflection, expected, atol=1e-11 * abs(expected).max())


def test_many_loads_at_once_equal_one_by_one():
    """Columns of loads and of nodal forces are bent on their own; so are moments, shears and forces of supports."""
    nodes = uneven(80)
    plate = Plate(nodes, *varying(nodes), 1e12, PINNED, CONTINUES)
    loads = np.random.default_rng(3).normal(0.0, 1e7, (81, 5))
    forces = np.hstack([plate.point_vector(10 * i, 1e12, 1e16) for i in range(5)])
    together = plate.bend(loads, forces)
    assert together.deflection.shape == (81, 5)
    for i in range(5):
        alone = plate.bend(loads[:, i], forces[:, i : i + 1])
        top = abs(alone.deflection).max()
        np.testing.assert_allclose(together.deflection[:, i], alone.deflection[:, 0], atol=1e-12 * top)
        for many, one in zip(together.moment_and_shear(), alone.moment_and_shear()):
            np.testing.assert_allclose(many[:, i], one[:, 0], atol=1e-8 * abs(one).max())
        for many, one in zip(together.support_forces(), alone.support_forces()):
            assert many[i] == pytest.approx(one[0], rel=1e-9)
        assert together.foundation_force()[i] == pytest.approx(alone.foundation_force()[0], rel=1e-9)


def test_work_is_reciprocal():
    """Betti: the load of one state on the deflection of another is the same the other way about."""
    nodes = uneven(60)
    plate = Plate(nodes, *varying(nodes), 1e12, BROKEN, CONTINUES)
    vectors = np.hstack([plate.load_vector(hill(nodes)), plate.end_vector(1e12, 1e17), plate.point_vector(40, 3e11)])
    work = vectors.T @ plate.solve(vectors).unknowns
    np.testing.assert_allclose(work, work.T, rtol=1e-10)


def test_inputs_are_left_untouched():
    """Nothing that is passed in changes: not by bending, not by holding ends, not by reading results."""
    nodes = uneven(40)
    rigidity, stiffness = varying(nodes)
    load, at = hill(nodes), nodes.copy()
    plate = Plate(nodes, rigidity, stiffness, 1e12, CLAMPED, PINNED)
    forces = plate.end_vector(1e12, 1e17) + plate.end_vector(1e12, 1e17, finish=True)
    inputs = (nodes, rigidity, stiffness, load, at, forces)
    before = [array.copy() for array in inputs]
    bending = plate.bend(load, forces, at)
    bending.moment_and_shear()
    bending.support_forces()
    plate.solve(forces)
    for array, copy in zip(inputs, before):
        np.testing.assert_array_equal(array, copy)


@pytest.mark.parametrize("order", ["C", "F"])
def test_memory_layout_of_nodal_forces_does_not_matter(order):
    """Row-wise or column-wise, a matrix of nodal forces bends the plate alike."""
    plate = Plate(uneven(20), RIGIDITY, STIFFNESS)
    forces = np.random.default_rng(2).normal(0.0, 1e11, (42, 3))
    expected = np.hstack([plate.solve(forces[:, i]).unknowns for i in range(3)])
    np.testing.assert_allclose(plate.solve(np.array(forces, order=order)).unknowns, expected, rtol=1e-12)


@pytest.mark.parametrize("name", ["rigidity", "stiffness"])
def test_scalar_per_element_and_per_point_are_the_same_plate(name):
    """One value, the same value for every element, and for every Gauss point."""
    nodes = uneven(30)
    values = {"rigidity": RIGIDITY, "stiffness": STIFFNESS}
    deflections = []
    for shape in ((), (30,), (30, 4)):
        given = {**values, name: np.full(shape, values[name])}
        deflections.append(Plate(nodes, **given).bend(hill(nodes)).deflection)
    np.testing.assert_allclose(deflections[1], deflections[0], rtol=1e-10, atol=1e-9)
    np.testing.assert_allclose(deflections[2], deflections[0], rtol=1e-10, atol=1e-9)


# Loads


def test_load_given_between_nodes_as_at_nodes():
    """A load that is linear between nodes is the same load when given at those nodes or at more positions."""
    nodes = uneven(40)
    at = np.union1d(nodes, np.random.default_rng(4).uniform(-10e3, SPAN + 10e3, 333))
    at = np.concatenate([[-20e3], at, [SPAN + 20e3]])
    loads = np.stack([hill(nodes), 1e6 + nodes], axis=1)
    fine = np.stack([np.interp(at, nodes, loads[:, i]) for i in range(2)], axis=1)
    plate = Plate(nodes, *varying(nodes), 1e12, CONTINUES, BROKEN)
    expected = plate.load_vector(loads)
    np.testing.assert_allclose(plate.load_vector(fine, at=at), expected, rtol=1e-9, atol=1e-12 * abs(expected).max())


def test_long_elements_keep_the_detail_of_a_finely_sampled_load():
    """Elements of a tenth of alpha under rough relief sampled each 200 m give what elements of 1 km give, to 1e-5."""
    at = np.linspace(0.0, SPAN, 2001)
    load = hill(at) + np.random.default_rng(5).normal(0.0, 1e7, at.size)
    coarse, fine = np.linspace(0.0, SPAN, 51), np.linspace(0.0, SPAN, 401)
    answers = [Plate(nodes, RIGIDITY, STIFFNESS, 0.0, BROKEN).bend(load, at=at) for nodes in (coarse, fine)]
    top = abs(answers[1].deflection).max()
    np.testing.assert_allclose(answers[0].at(at), answers[1].at(at), atol=1e-5 * top)
    for rough, smooth in zip(answers[0].moment_and_shear(), answers[1].moment_and_shear()):
        np.testing.assert_allclose(rough, smooth[::8], atol=1e-5 * abs(smooth).max())


def test_a_load_may_jump_at_a_node():
    """q given at both ends of every element: a block from one node to another, its total weight to rounding."""
    nodes = uneven(40)
    block = np.zeros((40, 2, 1))
    block[10:20] = 1e7
    vector = Plate(nodes, RIGIDITY, STIFFNESS).load_vector(block)
    assert vector[0::2].sum() == pytest.approx(1e7 * (nodes[20] - nodes[10]), rel=1e-12)
    assert not vector[:20].any()
    assert not vector[42:].any()


@pytest.mark.parametrize("in_plane", [-2e13, 0.0, 5e13])
def test_a_load_that_goes_on_for_ever_sinks_the_plate_evenly(in_plane):
    """q uniform, both ends continue: w = q / k everywhere; cut off at the ends, less."""
    nodes = uneven(30)
    plate = Plate(nodes, RIGIDITY, STIFFNESS, in_plane)
    np.testing.assert_allclose(plate.bend(np.full(31, 1e7)).deflection, 1e7 / STIFFNESS, rtol=1e-10)
    cut = plate.solve(plate.load_vector(np.full(31, 1e7), beyond=False)).deflection
    assert cut[0, 0] < 0.6 * 1e7 / STIFFNESS


# Ends


@pytest.mark.parametrize(("shear", "moment"), [(1e12, 0.0), (0.0, 1e17), (1e12, 1e17), (-0.5e12, 2.2e17)])
@pytest.mark.parametrize("finish", [False, True], ids=["start", "finish"])
def test_end_forces_at_a_break(shear, moment, finish):
    """w = a^2 e^(-x/a) / 2 D [(V0 a + M0) cos x/a - M0 sin x/a], x from the break into the plate, V0 positive down, M0
    positive where it turns the broken end down.

    Source: Turcotte & Schubert, Geodynamics, section 3.17 (from memory).
    """
    nodes = ALPHA * np.linspace(0.0, 3.0, 151)
    supports = (CONTINUES, BROKEN) if finish else (BROKEN, CONTINUES)
    plate = Plate(nodes, RIGIDITY, STIFFNESS, 0.0, *supports)
    bending = plate.solve(plate.end_vector(shear, moment, finish))
    s = (nodes[-1] - nodes if finish else nodes) / ALPHA
    expected = ALPHA**2 * np.exp(-s) / (2.0 * RIGIDITY) * ((shear * ALPHA + moment) * np.cos(s) - moment * np.sin(s))
    np.testing.assert_allclose(bending.deflection[:, 0], expected, atol=1e-7 * abs(expected).max())
    end = -1 if finish else 0
    internal_moment, internal_shear = bending.moment_and_shear()
    reach = abs(shear) * ALPHA + abs(moment)
    assert internal_moment[end, 0] == pytest.approx(-moment, abs=1e-6 * reach)
    assert internal_shear[end, 0] == pytest.approx(shear if finish else -shear, abs=1e-6 * reach / ALPHA)


@pytest.mark.parametrize("supports", list(product(SUPPORTS, repeat=2)), ids=names)
def test_each_end_holds_what_its_support_holds(supports):
    """Pinned: w = M = 0; clamped: w = w' = 0; broken: M = V = 0; continues: none of the four."""
    nodes = uneven(80)
    bending = Plate(nodes, *varying(nodes), 1e12, *supports).bend(hill(nodes, 0.5, 0.3))
    moment, shear = bending.moment_and_shear()
    values = [bending.deflection, bending.slope, moment, shear]
    zeros = {CONTINUES: (), BROKEN: (2, 3), PINNED: (0, 2), CLAMPED: (0, 1)}
    for support, end in zip(supports, (0, -1)):
        for i, value in enumerate(values):
            assert (abs(value[end, 0]) < 1e-9 * abs(value).max()) == (i in zeros[support])


@pytest.mark.parametrize("in_plane", [-5e13, 0.0, 0.9 * 2.0 * np.sqrt(RIGIDITY * STIFFNESS)])
def test_continuation_equals_a_long_padded_plate(in_plane):
    """A plate that continues is one that goes on, with the D, k and q of its ends, until the bend has died out."""
    nodes = np.linspace(0.0, SPAN, 161)
    s = gauss_positions(nodes) / SPAN
    rigidity = RIGIDITY * (1.0 + 0.3 * np.sin(2.0 * np.pi * s) ** 2)
    stiffness = STIFFNESS * (1.0 + 0.2 * np.sin(2.0 * np.pi * s) ** 2)
    load = hill(nodes, 0.2, 0.3) + 2e6
    short = Plate(nodes, rigidity, stiffness, in_plane).bend(load)

    pads = 2400
    step = nodes[1]
    padded = np.concatenate(
        [nodes[0] - step * np.arange(pads, 0, -1), nodes, nodes[-1] + step * np.arange(1, pads + 1)]
    )
    ends = ((pads, pads), (0, 0))
    stretched = Plate(
        padded,
        np.pad(rigidity, ends, constant_values=rigidity[0, 0]),
        np.pad(stiffness, ends, constant_values=stiffness[0, 0]),
        in_plane,
    )
    # The padded load ends far away, where it can no longer be felt.
    vector = stretched.load_vector(np.pad(load, pads, mode="edge"), beyond=False)
    expected = stretched.solve(vector).deflection[pads:-pads]
    np.testing.assert_allclose(short.deflection, expected, atol=2e-7 * abs(expected).max())


def test_half_plate_stiffness_of_a_plate_without_in_plane_force():
    """P = 0: s = sqrt(2) (k / D)^(1/4) = 2 / a and p = 2 / a^2, so the shear that sinks the end without turning it is
    4 D / a^3 per metre, and the moment to turn it without sinking is 2 D / a."""
    matrix = half_plate_stiffness(RIGIDITY, STIFFNESS)
    expected = RIGIDITY * np.array([[4.0 / ALPHA**3, 2.0 / ALPHA**2], [2.0 / ALPHA**2, 2.0 / ALPHA]])
    np.testing.assert_allclose(matrix, expected, rtol=1e-12)


def test_pull_straightens_and_compression_bends():
    """Under the same line load a plate in tension sinks less, one in compression more, than one without force."""
    nodes = uneven(80)
    deepest = []
    for in_plane in (-5e13, 0.0, 5e13):
        plate = Plate(nodes, RIGIDITY, STIFFNESS, in_plane)
        deepest.append(plate.solve(plate.point_vector(40, 1e12)).deflection.max())
    assert deepest[0] < 0.95 * deepest[1]
    assert deepest[2] > 1.05 * deepest[1]


def test_at_agrees_with_the_nodes_and_with_itself():
    """At nodes: the nodal values; between them: each derivative is the derivative of the one below."""
    nodes = uneven(40)
    bending = Plate(nodes, *varying(nodes)).bend(hill(nodes))
    np.testing.assert_allclose(bending.at(nodes), bending.deflection, atol=1e-9)
    np.testing.assert_allclose(bending.at(nodes, 1), bending.slope, atol=1e-13)
    middle = 0.5 * (nodes[1:] + nodes[:-1])
    for derivative in (0, 1, 2):
        rise = (bending.at(middle + 50.0, derivative) - bending.at(middle - 50.0, derivative)) / 100.0
        slope = bending.at(middle, derivative + 1)
        np.testing.assert_allclose(rise, slope, atol=1e-4 * abs(slope).max())


# What is refused

NODES = np.linspace(0.0, SPAN, 41)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"nodes": NODES[::-1]}, "nodes must increase from each value to the next"),
        ({"nodes": [0.0, 1e3, 1e3, 2e3]}, "nodes must increase from each value to the next"),
        ({"nodes": [0.0]}, "nodes holds 1 values; it takes at least 2"),
        ({"nodes": [0.0, np.nan, 2e3]}, "nodes holds a value that is not a finite number"),
        ({"rigidity": 0.0}, "Flexural rigidity must be above 0 everywhere"),
        ({"rigidity": np.r_[np.full(39, 1e23), -1e23]}, "Flexural rigidity must be above 0 everywhere"),
        ({"rigidity": np.nan}, "rigidity holds a value that is not a finite number"),
        ({"rigidity": np.full(41, 1e23)}, r"rigidity has shape \(41,\); it takes a scalar, \(40,\) or \(40, 4\)"),
        ({"rigidity": "thick"}, "rigidity must hold numbers only"),
        ({"stiffness": -1.0}, "Restoring stiffness must be 0 or more everywhere"),
        ({"stiffness": np.full((40, 3), 1e4)}, r"stiffness has shape \(40, 3\); it takes a scalar"),
        ({"stiffness": np.inf}, "stiffness holds a value that is not a finite number"),
        ({"in_plane": np.nan}, "IN_PLANE is nan; it takes a number"),
        ({"in_plane": "strong"}, "IN_PLANE is 'strong'; it takes a number"),
        ({"start": 4}, "start is 4; it takes 0 to 3"),
        ({"finish": "broken"}, "finish is 'broken'; it takes 0 to 3"),
    ],
)
def test_plates_that_cannot_be_are_refused(changes, message):
    """Nodes, rigidity, stiffness, in-plane force and ends: each named with what it takes."""
    with pytest.raises(DownwarpError, match=message):
        Plate(**{"nodes": NODES, "rigidity": RIGIDITY, "stiffness": STIFFNESS, **changes})


@pytest.mark.parametrize(
    ("load", "at", "message"),
    [
        (np.zeros(40), None, r"load has shape \(40,\); it takes \(41,\), \(41, m\) or \(40, 2, m\)"),
        (np.zeros((40, 3, 1)), None, r"load has shape \(40, 3, 1\)"),
        (np.full(41, np.nan), None, "load holds a value that is not a finite number"),
        (np.zeros(3), [0.0, 1.0], r"load has shape \(3,\); it takes \(2,\) or \(2, m\)"),
        (np.zeros(3), [0.0, SPAN, SPAN], "at must increase"),
        (np.zeros(2), [1.0, SPAN], "The positions of the load must reach from the first node to the last one"),
        (np.zeros(2), [0.0, 0.9 * SPAN], "The positions of the load must reach from the first node to the last one"),
    ],
)
def test_loads_that_do_not_fit_are_refused(load, at, message):
    """Shape, NaN, and positions that leave part of the plate without a load."""
    with pytest.raises(DownwarpError, match=message):
        Plate(NODES, RIGIDITY, STIFFNESS).bend(load, at=at)


@pytest.mark.parametrize(
    ("vector", "message"),
    [
        (np.zeros(81), r"has shape \(81,\); it takes 82 rows"),
        (np.zeros((41, 2)), r"has shape \(41, 2\); it takes 82 rows"),
        (np.zeros((82, 1, 1)), r"has shape \(82, 1, 1\); it takes 82 rows"),
        (np.full(82, np.nan), "holds a value that is not a finite number"),
    ],
)
def test_nodal_forces_that_do_not_fit_are_refused(vector, message):
    """Two rows for every node, and numbers in them, whether alone or beside a load."""
    plate = Plate(NODES, RIGIDITY, STIFFNESS)
    with pytest.raises(DownwarpError, match="vector " + message):
        plate.solve(vector)
    with pytest.raises(DownwarpError, match="forces " + message):
        plate.bend(np.zeros(41), vector)


def test_nodal_forces_may_be_one_column_or_a_plain_array():
    """(2 n,) and (2 n, 1) are the same forces."""
    plate = Plate(NODES, RIGIDITY, STIFFNESS)
    forces = plate.point_vector(13, 1e12)
    np.testing.assert_array_equal(plate.solve(forces[:, 0]).unknowns, plate.solve(forces).unknowns)
    np.testing.assert_array_equal(
        plate.bend(hill(NODES), forces[:, 0]).unknowns, plate.bend(hill(NODES), forces).unknowns
    )


@pytest.mark.parametrize("supports", [(CONTINUES, CONTINUES), (BROKEN, CONTINUES), (PINNED, CONTINUES)], ids=names)
def test_buckling_beside_a_continuation_is_refused(supports):
    """P at 2 sqrt(D k): no half-plate carries it, and the sentence says at which force it buckles."""
    critical = 2.0 * np.sqrt(RIGIDITY * STIFFNESS)
    with pytest.raises(DownwarpError, match=r"IN_PLANE is 1.4622e\+14 N/m, at or above the force of 1.462e\+14 N/m"):
        Plate(NODES, RIGIDITY, STIFFNESS, round(critical, -10) + 1e10, *supports).bend(np.zeros(41))


@pytest.mark.parametrize("supports", [(BROKEN, BROKEN), (PINNED, PINNED), (CLAMPED, BROKEN)], ids=names)
def test_buckling_between_ends_is_refused(supports):
    """Well above 2 sqrt(D k) the matrix is not positive definite."""
    with pytest.raises(
        DownwarpError, match=r"IN_PLANE is 2e\+15 N/m: more in-plane compression than the plate can carry"
    ):
        Plate(NODES, RIGIDITY, STIFFNESS, 2e15, *supports).bend(np.zeros(41))


def test_a_broken_end_buckles_before_a_continuous_plate():
    """A half-plate with a free end buckles at sqrt(D k), half of what a continuous plate carries.

    Source: det [[s p, p], [p, s]] + P-terms = 0 for the free end: with w'' = 0 and D w''' + P w' = 0 at x = 0 on the
    decaying roots, P = sqrt(D k); Hetenyi, Beams on Elastic Foundation, semi-infinite beam (from memory, recomputed).
    """
    half = np.sqrt(RIGIDITY * STIFFNESS)
    nodes = np.linspace(0.0, SPAN, 101)
    Plate(nodes, RIGIDITY, STIFFNESS, 0.9999 * half, BROKEN).bend(np.zeros(101))
    with pytest.raises(DownwarpError, match="more in-plane compression than the plate can carry; it buckles"):
        Plate(nodes, RIGIDITY, STIFFNESS, 1.0001 * half, BROKEN).bend(np.zeros(101))


@pytest.mark.parametrize(
    ("supports", "in_plane"), [((BROKEN, BROKEN), 0.0), ((BROKEN, BROKEN), -1e13), ((BROKEN, PINNED), 0.0)]
)
def test_a_plate_that_nothing_holds_is_refused(supports, in_plane):
    """k = 0 with two free ends, pulled or not, or with one pin to swing about: the matrix is singular."""
    with pytest.raises(DownwarpError, match="Nothing holds the plate: give it a restoring stiffness or ends"):
        Plate(NODES, RIGIDITY, 0.0, in_plane, *supports).bend(np.zeros(41))


def test_a_pull_holds_a_plate_on_one_pin():
    """k = 0, pinned and broken, tension T: the free end is pulled along x, so V0 there tilts the whole by V0 / T.

    (D w'')'' - T w'' = 0 with w(0) = w''(0) = w''(L) = 0 and T w'(L) = V0 gives w = V0 x / T.
    """
    plate = Plate(NODES, RIGIDITY, 0.0, -1e13, PINNED, BROKEN)
    bending = plate.solve(plate.end_vector(1e11, finish=True))
    np.testing.assert_allclose(bending.deflection[:, 0], NODES * 1e11 / 1e13, rtol=1e-8)


def test_a_plate_cannot_continue_without_a_foundation():
    """k = 0 at an end that continues: no decaying half-plate."""
    with pytest.raises(DownwarpError, match="continues beyond its end needs a restoring stiffness k above 0"):
        Plate(NODES, RIGIDITY, 0.0, 0.0, CLAMPED, CONTINUES).bend(np.zeros(41))


@pytest.mark.parametrize("supports", [(BROKEN, CONTINUES), (CONTINUES, CONTINUES), (PINNED, CLAMPED)], ids=names)
def test_elements_too_short_for_their_stiffness_are_refused(supports):
    """Steps of 10 m under a plate 100 km thick: rounding would drown the foundation; the sentence says what to do."""
    nodes = np.linspace(0.0, 100e3, 10001)
    with pytest.raises(DownwarpError, match="The nodes stand 10 m apart, too close for so stiff a plate"):
        Plate(nodes, elastic.Elastic().rigidity(100e3), STIFFNESS, 0.0, *supports).solve(np.zeros(20002))


def test_short_elements_close_to_buckling_are_refused():
    """P at 0.95 of what free ends carry, steps that pass without P: refining the answer gets nowhere, and says so."""
    nodes = np.linspace(0.0, 6.0 * ALPHA, 16201)
    Plate(nodes, RIGIDITY, STIFFNESS, 0.0, BROKEN, BROKEN).bend(hill(nodes))
    with pytest.raises(DownwarpError, match="too close for so stiff a plate: rounding would spoil the answer"):
        Plate(nodes, RIGIDITY, STIFFNESS, 0.95 * np.sqrt(RIGIDITY * STIFFNESS), BROKEN, BROKEN).bend(hill(nodes))


def test_a_short_stretch_of_a_continuous_plate_may_have_short_elements():
    """A tenth of alpha in elements of alpha / 4000: the half-plates on both sides hold it, rounding does not matter."""
    nodes = ALPHA * np.linspace(-0.05, 0.05, 401)
    plate = Plate(nodes, RIGIDITY, STIFFNESS)
    s = abs(nodes) / ALPHA
    expected = 1e12 * ALPHA**3 / (8.0 * RIGIDITY) * np.exp(-s) * (np.cos(s) + np.sin(s))
    np.testing.assert_allclose(plate.solve(plate.point_vector(200, 1e12)).deflection[:, 0], expected, rtol=1e-9)


@pytest.mark.parametrize("parts", [200, 800, 1600, 2700])
def test_short_elements_that_are_accepted_give_as_many_digits(parts):
    """Down to the shortest accepted, alpha / 2700: a broken plate under end shear as exactly as with long elements."""
    nodes = np.linspace(0.0, 4.0 * ALPHA, 4 * parts + 1)
    plate = Plate(nodes, RIGIDITY, STIFFNESS, 0.0, BROKEN)
    expected = np.exp(-nodes / ALPHA) * np.cos(nodes / ALPHA) * 1e12 * ALPHA**3 / (2.0 * RIGIDITY)
    forces = plate.end_vector(1e12)
    solved, bent = plate.solve(forces).deflection, plate.bend(np.zeros_like(nodes), forces).deflection
    np.testing.assert_allclose(solved[:, 0], expected, atol=(1e-9 if parts > 200 else 1e-6) * expected[0])
    np.testing.assert_allclose(bent[:, 0], expected, atol=1e-9 * expected[0])
