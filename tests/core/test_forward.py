"""The forward model of a transect against closed forms and scipy, and infill that lies only where the plate sinks.

    predicted = level + tilt x + bow x^2 - w(x),    D w'''' + k w = q,    alpha = (4 D / k)^(1/4)
"""

import numpy as np
import pytest
from downwarp_checkout.plugin.core.elastic import Elastic, flexural_parameter
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.forward import (
    SinkingFill,
    TransectModel,
    fluid_density,
    infill_stiffness,
)
from downwarp_checkout.plugin.core.settings import BROKEN, CONTINUOUS
from scipy.integrate import solve_bvp

ELASTIC = Elastic()
K = 2270 * 9.81
X = np.arange(0.0, 600e3 + 1, 4e3)


def model(**changes):
    given = {"distance": X, "load": np.zeros(X.size), "stiffness": np.full(X.size - 1, K), "elastic": ELASTIC}
    return TransectModel(**{**given, **changes})


def columns_of(plate, thickness, break_at, at):
    """Offset (positions,) and columns (positions, p) of one thickness."""
    offsets, columns = plate.columns(np.array([thickness]), break_at, at)
    return offsets[0], columns[0]


def broken_end(x, thickness, shear, moment):
    """w = alpha^2 e^-s / (2 D) [(V0 alpha + M0) cos s - M0 sin s], s = x / alpha (Turcotte & Schubert, Geodynamics,
    section 3.16, from memory)."""
    rigidity = ELASTIC.rigidity(thickness)
    alpha = flexural_parameter(rigidity, K)
    s = x / alpha
    return (
        alpha**2 * np.exp(-s) / (2 * rigidity) * ((shear * alpha + moment) * np.cos(s) - moment * np.sin(s))
    )


@pytest.mark.parametrize("break_at", [0.0, 100e3, 101.3e3, 99.99e3])
def test_columns_of_a_broken_plate_are_the_closed_form(break_at):
    """Unit shear and moment at a break on, between and close to stations; then level, tilt and bow."""
    thickness = 25e3
    plate = model(kind=BROKEN, shear=True, moment=True, regional=3)
    at = np.linspace(break_at, 590e3, 200)
    offset, columns = columns_of(plate, thickness, break_at, at)
    assert (offset == 0).all()
    scale = broken_end(0.0, thickness, 1.0, 0.0)
    np.testing.assert_allclose(-columns[:, 0], broken_end(at - break_at, thickness, 1.0, 0.0), atol=2e-5 * scale)
    scale = broken_end(0.0, thickness, 0.0, 1.0)
    np.testing.assert_allclose(-columns[:, 1], broken_end(at - break_at, thickness, 0.0, 1.0), atol=5e-5 * scale)
    np.testing.assert_allclose(columns[:, 2:], np.column_stack([np.ones_like(at), at, at**2]))


def test_a_line_load_on_a_continuous_plate():
    """w = V0 alpha^3 / (8 D) e^-s (cos s + sin s) on both sides, whatever the distance to the line's ends."""
    thickness, place = 20e3, 201e3
    plate = model(kind=CONTINUOUS, shear=True, moment=True, regional=0)
    assert plate.end_forces == ("end_shear",)
    _, columns = columns_of(plate, thickness, place, X)
    rigidity = ELASTIC.rigidity(thickness)
    alpha = flexural_parameter(rigidity, K)
    s = np.abs(X - place) / alpha
    expected = alpha**3 / (8 * rigidity) * np.exp(-s) * (np.cos(s) + np.sin(s))
    np.testing.assert_allclose(-columns[:, 0], expected, atol=2e-4 * expected.max())


def test_trials_together_are_the_trials_one_by_one():
    """Plates of about one thickness share their nodes; the elements then taken are finer, which shows at 1e-6."""
    rng = np.random.default_rng(3)
    stiffness = np.where(np.arange(X.size - 1) < 40, 600 * 9.81, K)
    load = np.where(X < 200e3, rng.uniform(0.0, 5e7, X.size), 0.0)
    plate = model(load=load, kind=BROKEN, stiffness=stiffness, shear=True, moment=True, regional=2)
    thicknesses = np.array([40e3, 1e3, 1.3e3, 9e3, 10e3, 11e3, 39e3])
    offsets, columns = plate.columns(thicknesses, 50e3, X[20:])
    for trial, thickness in enumerate(thicknesses):
        offset, alone = columns_of(plate, thickness, 50e3, X[20:])
        np.testing.assert_allclose(offsets[trial], offset, atol=3e-6 * abs(offset).max())
        np.testing.assert_allclose(columns[trial] / abs(alone).max(axis=0), alone / abs(alone).max(axis=0), atol=3e-6)


def test_bending_is_linear_in_load_and_forces():
    """bend() of two forces and a load is the sum of the columns."""
    rng = np.random.default_rng(1)
    plate = model(load=rng.normal(size=X.size) * 1e6, kind=BROKEN, shear=True, moment=True, regional=0)
    forces = np.array([1.1e12, -3e16])
    offset, columns = columns_of(plate, 30e3, 50e3, X[20:])
    np.testing.assert_allclose(-plate.bend(30e3, 50e3, forces).at(X[20:])[:, 0], offset + columns @ forces, rtol=1e-9)


def test_a_thin_plate_floats():
    """alpha far below the load's length: w = q / k."""
    load = 1e7 * np.exp(-(((X - 300e3) / 120e3) ** 2))
    bending = model(load=load, kind=CONTINUOUS, regional=0).bend(500.0, 0.0, np.zeros(0))
    np.testing.assert_allclose(bending.at(X)[:, 0], load / K, atol=1e-3 * load.max() / K)


@pytest.mark.parametrize("thickness", [1e3, 20e3, 80e3])
def test_elements_follow_the_flexural_parameter(thickness):
    """Whatever the stations: nodes at the break, at the line's end and where infill jumps, none closer than needed."""
    stiffness = np.where(X[:-1] < 250e3, K, 0.8 * K)
    nodes = model(kind=BROKEN, stiffness=stiffness).nodes(thickness, 33e3)
    alpha = flexural_parameter(ELASTIC.rigidity(thickness), K)
    assert (nodes[0], nodes[-1]) == (33e3, X[-1])
    assert (np.diff(nodes) > 0).all()
    assert np.diff(nodes).max() <= 0.5 * alpha
    assert np.abs(nodes - 252e3).min() < 1e-6
    coarse = model(kind=BROKEN, distance=X[::10], load=np.zeros(X[::10].size), stiffness=np.full(X[::10].size - 1, K))
    fine = model(kind=BROKEN)
    np.testing.assert_allclose(coarse.nodes(thickness, 0.0), fine.nodes(thickness, 0.0))


def test_a_break_at_the_end_leaves_no_plate():
    """The message says where."""
    with pytest.raises(DownwarpError, match="The break at 600 km leaves no plate before the line's end at 600 km"):
        columns_of(model(kind=BROKEN, shear=True), 20e3, 600e3, X)


def test_infill_jumps_where_the_load_ends():
    """rho_under on the load's ground, rho_infill elsewhere, by its share where it ends between stations."""
    stiffness = infill_stiffness(np.array([0.0, 1.0, 1.0, 0.25]), 3300, 2400, 2800, 10.0)
    np.testing.assert_allclose(stiffness, [9000, 5000, 5000, 8000])


def test_the_fluid_is_water_below_sea_level_and_air_above():
    """No level known: air."""
    assert fluid_density(-1.0, 1030) == 1030
    assert fluid_density(0.0, 1030) == fluid_density(500.0, 1030) == fluid_density(None, 1030) == 0


@pytest.mark.parametrize("depth", [0.0, 300.0])
def test_infill_where_the_plate_sinks_against_solve_bvp(depth):
    """D w'''' + p(w) = q, p = k_f w for w <= d, beyond it k_f w - (k_f - k_i)(w - d): fluid up to the infill's level.

    scipy's collocation solver takes p(w) as it is, without marking intervals. Clamped ends far off; stations 1 km.
    """
    distance = np.arange(0.0, 800e3 + 1, 1e3)
    infill, fluid = 900 * 9.81, 3300 * 9.81
    load = 3e7 * np.exp(-(((distance - 400e3) / 60e3) ** 2))
    thickness = 20e3
    plate = TransectModel(
        distance, load, np.full(distance.size - 1, infill), ELASTIC, kind=CONTINUOUS, regional=0,
        fill=SinkingFill(np.full(distance.size - 1, fluid), np.full(distance.size - 1, depth)),
    )  # fmt: skip
    filled, converged = plate.filled(thickness, 0.0, np.zeros(0))
    assert converged
    deflection = filled.bend(thickness, 0.0, np.zeros(0)).at(distance)[:, 0]
    assert deflection.max() > 600
    assert deflection.min() < -1

    rigidity = ELASTIC.rigidity(thickness)
    length = 100e3

    def slopes(x, y):
        pressure = np.where(y[0] <= depth, fluid * y[0], fluid * y[0] - (fluid - infill) * (y[0] - depth))
        q = 3e7 * np.exp(-(((x * length - 400e3) / 60e3) ** 2))
        return np.vstack([y[1], y[2], y[3], (q - pressure) * length**4 / rigidity])

    def ends(left, right):
        return np.array([left[0], left[1], right[0], right[1]])

    mesh = distance[::4] / length
    guess = np.zeros((4, mesh.size))
    guess[0] = np.interp(mesh * length, distance, load / infill)
    solution = solve_bvp(slopes, ends, mesh, guess, tol=1e-5, max_nodes=100_000)
    assert solution.success
    np.testing.assert_allclose(deflection, solution.sol(distance / length)[0], atol=0.01 * deflection.max())


def test_without_sinking_only_nothing_changes():
    """A model without such infill is its own filled model."""
    plain = model(kind=CONTINUOUS)
    assert plain.filled(20e3, 0.0, np.zeros(0)) == (plain, True)
