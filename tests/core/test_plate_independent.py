"""The plate solver against general libraries, and properties that hold for any plate.

Independent answers come from `scikit-fem` (its own Hermite line elements, quadrature and assembly, a general sparse
solver) and from `scipy.integrate.solve_bvp` (collocation on the equation as a first-order system, no elements at all).
"""

import numpy as np
import pytest
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.plate import (
    BROKEN,
    CLAMPED,
    CONTINUES,
    PINNED,
    SUPPORT_NAMES,
    Plate,
    gauss_positions,
)
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_bvp

SPAN = 500e3
IN_PLANE = 2e13
SHEAR, MOMENT = 0.8e12, 1.2e17


def rigidity(x):
    """D(x), N m: weakened where the plate bends most, as near a trench."""
    return 2.4e23 * (1.0 - 0.7 * np.exp(-(((x - 120e3) / 60e3) ** 2)) + 0.2 * x / SPAN)


def rigidity_derivatives(x):
    """D'(x) and D''(x)."""
    s = (x - 120e3) / 60e3
    bell = 2.4e23 * 0.7 * np.exp(-(s**2))
    return 2.0 * s * bell / 60e3 + 0.2 * 2.4e23 / SPAN, (2.0 - 4.0 * s**2) * bell / 60e3**2


def stiffness(x):
    """k(x), Pa/m: infill from sediment to water."""
    return 9.81 * (900.0 + 1370.0 / (1.0 + np.exp(-(x - 200e3) / 30e3)))


def load(x):
    """q(x), Pa."""
    return 6e7 * np.exp(-(((x - 150e3) / 50e3) ** 2)) - 1e7 * np.sin(2.0 * np.pi * x / SPAN)


def bend(start: int, finish: int):
    """The plate of this project under that load and end forces, and where to compare."""
    nodes = np.linspace(0.0, SPAN, 401)
    points = gauss_positions(nodes)
    plate = Plate(nodes, rigidity(points), stiffness(points), IN_PLANE, start, finish)
    forces = plate.end_vector(SHEAR, MOMENT) + plate.end_vector(-0.5 * SHEAR, 0.3 * MOMENT, finish=True)
    at = np.linspace(0.0, SPAN, 20001)
    return plate.bend(load(at), forces, at)


ENDS = [(BROKEN, BROKEN), (BROKEN, PINNED), (BROKEN, CLAMPED), (PINNED, BROKEN), (CLAMPED, PINNED), (PINNED, PINNED)]


@pytest.mark.parametrize(("start", "finish"), ENDS, ids=lambda support: SUPPORT_NAMES[support])
def test_against_collocation(start, finish):
    """w'''' etc. by `scipy.integrate.solve_bvp` on y = (w, w', M, V), M = -D w'', V = M' - P w', V' = k w - q:
    w and w' to 1e-6, M and V to 1e-4 of their largest values."""
    alpha, top = 80e3, 1000.0  # scales that make the unknowns of the first-order system of order 1
    middle = 2.4e23

    def derivatives(s, y):
        x = alpha * s
        moment = y[2] * middle * top / alpha**2
        return np.stack(
            [
                y[1],
                -moment / rigidity(x) * alpha**2 / top,
                y[3] + IN_PLANE * y[1] * alpha**2 / middle,
                (stiffness(x) * y[0] * top - load(x)) * alpha**4 / (middle * top),
            ]
        )

    def at_end(y, support, shear, moment):
        free = [y[2] - moment * alpha**2 / (middle * top), y[3] - shear * alpha**3 / (middle * top)]
        return {BROKEN: free, PINNED: [y[0], free[0]], CLAMPED: [y[0], y[1]]}[support]

    def ends(left, right):
        return np.array(at_end(left, start, -SHEAR, -MOMENT) + at_end(right, finish, -0.5 * SHEAR, -0.3 * MOMENT))

    mesh = np.linspace(0.0, SPAN / alpha, 201)
    reference = solve_bvp(derivatives, ends, mesh, np.zeros((4, mesh.size)), tol=1e-9, max_nodes=200000)
    assert reference.success

    bending = bend(start, finish)
    x = bending.plate.nodes
    deflection, slope, moment, shear = reference.sol(x / alpha)
    moment_here, shear_here = bending.moment_and_shear()
    for found, expected, share in (
        (bending.deflection, deflection * top, 1e-6),
        (bending.slope, slope * top / alpha, 1e-6),
        (moment_here, moment * middle * top / alpha**2, 1e-4),
        (shear_here, shear * middle * top / alpha**3, 1e-4),
    ):
        np.testing.assert_allclose(found[:, 0], expected, atol=share * abs(expected).max())


@pytest.mark.parametrize(("start", "finish"), ENDS, ids=lambda support: SUPPORT_NAMES[support])
def test_against_another_library_of_hermite_elements(start, finish):
    """int D w'' v'' - P w' v' + k w v = int q v + end forces, by `scikit-fem`: w and w' to 1e-6 of their largest."""
    skfem = pytest.importorskip("skfem")
    from skfem.helpers import dd

    alpha, middle = 80e3, 2.4e23  # lengths in alpha and forces per metre in D / alpha^3 keep the matrix well scaled
    mesh = skfem.MeshLine(np.linspace(0.0, SPAN / alpha, 601))
    basis = skfem.Basis(mesh, skfem.ElementLineHermite(), intorder=10)

    @skfem.BilinearForm
    def energy(u, v, w):
        x = alpha * w.x[0]
        bending = rigidity(x) / middle * dd(u)[0][0] * dd(v)[0][0]
        pull = IN_PLANE * alpha**2 / middle * u.grad[0] * v.grad[0]
        return bending - pull + stiffness(x) * alpha**4 / middle * u * v

    @skfem.LinearForm
    def work(v, w):
        return load(alpha * w.x[0]) * alpha**4 / middle * v

    matrix, vector = energy.assemble(basis), work.assemble(basis)
    order = np.argsort(mesh.p[0])
    w_at, slope_at = basis.nodal_dofs[0][order], basis.nodal_dofs[1][order]
    vector[w_at[[0, -1]]] += np.array([SHEAR, -0.5 * SHEAR]) * alpha**3 / middle
    vector[slope_at[[0, -1]]] += np.array([-MOMENT, 0.3 * MOMENT]) * alpha**2 / middle
    held = []
    for support, end in ((start, 0), (finish, -1)):
        held += [w_at[end]] if support in (PINNED, CLAMPED) else []
        held += [slope_at[end]] if support == CLAMPED else []
    reference = skfem.solve(*skfem.condense(matrix, vector, D=np.array(held, dtype=int)))

    bending = bend(start, finish)
    positions = alpha * np.sort(mesh.p[0])
    for derivative, expected in ((0, reference[w_at]), (1, reference[slope_at] / alpha)):
        found = bending.at(positions, derivative)[:, 0]
        np.testing.assert_allclose(found, expected, atol=1e-6 * abs(expected).max())


def test_rigidity_derivatives_agree_with_the_equation():
    """D w'''' + 2 D' w''' + D'' w'' + P w'' + k w = q, by `solve_bvp` on (w, w', w'', w'''), clamped ends:
    the same w to 1e-6. Nothing here goes through moments and shears."""
    alpha, top, middle = 80e3, 1000.0, 2.4e23

    def derivatives(s, y):
        x = alpha * s
        first, second = rigidity_derivatives(x)
        d = rigidity(x) / middle
        rest = 2.0 * first * alpha / middle * y[3] + (second + IN_PLANE) * alpha**2 / middle * y[2]
        rest = rest + stiffness(x) * alpha**4 / middle * y[0]
        return np.stack([y[1], y[2], y[3], (load(x) * alpha**4 / (middle * top) - rest) / d])

    def ends(left, right):
        return np.array([left[0], left[1], right[0], right[1]])

    mesh = np.linspace(0.0, SPAN / alpha, 201)
    reference = solve_bvp(derivatives, ends, mesh, np.zeros((4, mesh.size)), tol=1e-9, max_nodes=200000)
    assert reference.success
    bending = bend(CLAMPED, CLAMPED)
    expected = top * reference.sol(bending.plate.nodes / alpha)[0]
    np.testing.assert_allclose(bending.deflection[:, 0], expected, atol=1e-6 * abs(expected).max())


# Properties of any plate

PLATES = settings(max_examples=30, derandomize=True, deadline=None)
supports = st.sampled_from([CONTINUES, BROKEN, PINNED, CLAMPED])


@st.composite
def plates(draw) -> Plate:
    """Plates with uneven nodes, D and k that jump from element to element, an in-plane pull and any ends.

    (A short plate with free ends topples under any push: what a plate can carry has tests of its own.)
    """
    elements = draw(st.integers(2, 40))
    steps = draw(st.lists(st.floats(2e3, 10e3), min_size=elements, max_size=elements))
    exponents = draw(st.lists(st.floats(21.5, 23.5), min_size=elements, max_size=elements))
    restoring = draw(st.lists(st.floats(1e4, 4e4), min_size=elements, max_size=elements))
    weakest = 2.0 * np.sqrt(10.0 ** min(exponents) * min(restoring))
    in_plane = draw(st.floats(-2.0, 0.0)) * weakest
    nodes = np.concatenate([[0.0], np.cumsum(steps)])
    return Plate(nodes, 10.0 ** np.array(exponents), np.array(restoring), in_plane, draw(supports), draw(supports))


@PLATES
@given(plates(), st.integers(0, 2**32 - 1))
def test_any_plate_balances(plate, seed):
    """Foundation and supports carry the load and the line load within, to 1e-9 of all that pulls and pushes."""
    rng = np.random.default_rng(seed)
    load_at_nodes = rng.normal(0.0, 1e7, plate.nodes.size)
    node = int(rng.integers(1, plate.nodes.size - 1))
    bending = plate.bend(load_at_nodes, plate.point_vector(node, 1e12))
    total = 1e12 + 0.5 * ((load_at_nodes[1:] + load_at_nodes[:-1]) * plate.lengths).sum()
    start, finish = bending.support_forces()
    foundation = bending.foundation_force()[0]
    size = 1e12 + abs(foundation) + abs(start[0]) + abs(finish[0])
    assert abs(foundation + start[0] + finish[0] - total) < 1e-9 * size


@PLATES
@given(plates(), st.integers(0, 2**32 - 1))
def test_any_plate_mirrors(plate, seed):
    """Reversed, any plate bends the other way about."""
    load_at_nodes = np.random.default_rng(seed).normal(0.0, 1e7, plate.nodes.size)
    turned = Plate(
        plate.nodes[-1] - plate.nodes[::-1],
        plate.rigidity[::-1],
        plate.stiffness[::-1],
        plate.in_plane,
        plate.finish,
        plate.start,
    )
    there, back = plate.bend(load_at_nodes).deflection, turned.bend(load_at_nodes[::-1]).deflection
    np.testing.assert_allclose(back[::-1], there, atol=1e-8 * abs(there).max())


@PLATES
@given(plates(), st.integers(0, 2**32 - 1), st.floats(-1e3, 1e3))
def test_any_plate_is_linear_and_yields_to_its_load(plate, seed, factor):
    """A multiple of the load bends in proportion, and the load does positive work on what it bends."""
    vector = plate.load_vector(np.random.default_rng(seed).normal(0.0, 1e7, plate.nodes.size), beyond=False)
    once, more = plate.solve(vector), plate.solve(factor * vector)
    top = abs(once.deflection).max()
    np.testing.assert_allclose(more.deflection, factor * once.deflection, atol=1e-9 * top * (1.0 + abs(factor)))
    held = np.setdiff1d(np.arange(vector.shape[0]), plate._held)
    assert (vector[held] * once.unknowns[held]).sum() > 0.0


@PLATES
@given(plates(), st.integers(1, 5))
def test_any_plate_bends_alike_on_finer_elements(plate, parts):
    """Splitting elements in equal parts moves the deflection under a line load by no more than the coarse mesh errs."""
    load_at_nodes = 1e7 * np.cos(plate.nodes / 50e3)
    share = np.arange(parts) / parts
    nodes = np.append((plate.nodes[:-1, None] + plate.lengths[:, None] * share).ravel(), plate.nodes[-1])
    finer = Plate(
        nodes,
        np.repeat(plate.rigidity, parts),
        np.repeat(plate.stiffness, parts),
        plate.in_plane,
        plate.start,
        plate.finish,
    )
    coarse = plate.bend(load_at_nodes).deflection
    fine = finer.bend(load_at_nodes, at=plate.nodes).deflection[::parts]
    np.testing.assert_allclose(fine, coarse, atol=0.02 * abs(coarse).max())


@PLATES
@given(plates(), st.floats(1.05, 10.0), st.booleans())
def test_any_plate_that_continues_buckles_at_the_force_of_its_end(plate, factor, at_start):
    """P above 2 sqrt(D k) of the end that continues is refused, whatever the rest of the plate."""
    end = 0 if at_start else -1
    critical = 2.0 * np.sqrt(plate.rigidity[end] * plate.stiffness[end])
    ends = (CONTINUES, plate.finish) if at_start else (plate.start, CONTINUES)
    with pytest.raises(DownwarpError, match="at which the plate buckles"):
        Plate(plate.nodes, plate.rigidity, plate.stiffness, factor * critical, *ends).bend(np.zeros(plate.nodes.size))


@PLATES
@given(
    plates(),
    st.integers(0, 1000),
    st.sampled_from(["nodes", "rigidity", "stiffness"]),
    st.sampled_from([np.nan, np.inf]),
)
def test_any_value_that_is_not_finite_is_refused(plate, index, name, value):
    """One NaN or infinity anywhere, and the argument is named."""
    values = {key: getattr(plate, key).copy() for key in ("nodes", "rigidity", "stiffness")}
    values[name][index % values[name].size] = value
    with pytest.raises(DownwarpError, match=f"{name} holds a value that is not a finite number"):
        Plate(**values)


@PLATES
@given(plates(), st.integers(0, 1000), st.floats(0.0, 1e24))
def test_any_rigidity_that_is_not_positive_is_refused(plate, index, size):
    """One element without rigidity, or with a negative one, spoils the plate."""
    values = plate.rigidity.copy()
    values[index % values.size] = -size
    with pytest.raises(DownwarpError, match="Flexural rigidity must be above 0 everywhere"):
        Plate(plate.nodes, values, plate.stiffness)


@PLATES
@given(plates(), st.integers(0, 1000))
def test_any_nodes_that_turn_back_are_refused(plate, index):
    """Two neighbours exchanged."""
    nodes = plate.nodes.copy()
    i = index % (nodes.size - 1)
    assume(nodes.size > 2)
    nodes[[i, i + 1]] = nodes[[i + 1, i]]
    with pytest.raises(DownwarpError, match="nodes must increase from each value to the next"):
        Plate(nodes, plate.rigidity, plate.stiffness)
