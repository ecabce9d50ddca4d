"""Infill that lies only where the plate sinks: p(w) = k_f w - (k_f - k_i) max(w - d, 0) in place of k w.

k_f is the stiffness beneath the fluid (water or air), k_i the smaller one beneath the infill, d the deflection from
which the plate lies below the level that the infill reaches.
"""

import numpy as np
import pytest
from downwarp_checkout.plugin.core.elastic import Elastic
from downwarp_checkout.plugin.core.forward import SinkingFill, TransectModel
from downwarp_checkout.plugin.core.settings import BROKEN, CONTINUOUS
from scipy.integrate import solve_bvp

ELASTIC = Elastic()
STATIONS = np.arange(0.0, 800.5e3, 1e3)
GRAVITY = 9.81
FLUID, INFILL = (3300 - 1030) * GRAVITY, (3300 - 2500) * GRAVITY
THICKNESS = 20e3


def model_of(depth: float, kind: int = CONTINUOUS) -> TransectModel:
    """A plate under a rounded load in the middle of the line."""
    load = 5e7 * np.exp(-(((STATIONS - 400e3) / 40e3) ** 2))
    count = STATIONS.size - 1
    fill = SinkingFill(np.full(count, FLUID), np.full(count, depth))
    return TransectModel(STATIONS, load, np.full(count, INFILL), ELASTIC, kind=kind, shear=kind == BROKEN, fill=fill)


def pressure(deflection, depth: float):
    """Restoring pressure, Pa."""
    return FLUID * deflection - (FLUID - INFILL) * np.maximum(deflection - depth, 0.0) * (deflection > 0)


@pytest.mark.parametrize("depth", [0.0, 300.0])
def test_restoring_force_of_the_nonlinear_law_carries_the_load(depth):
    """int p(w) dx = int q dx where the plate is at rest at both ends of the line."""
    model, converged = model_of(depth).filled(THICKNESS, 0.0, np.zeros(0))
    assert converged
    fine = np.linspace(STATIONS[0], STATIONS[-1], 80_001)
    deflection = model.bend(THICKNESS, 0.0, np.zeros(0)).at(fine)[:, 0]
    force = pressure(deflection, depth)
    total = np.sum(0.5 * (force[1:] + force[:-1]) * np.diff(fine))
    load = model_of(depth).load
    assert total == pytest.approx(np.sum(0.5 * (load[1:] + load[:-1]) * np.diff(STATIONS)), rel=5e-3)


@pytest.mark.parametrize("depth", [0.0, 300.0])
def test_against_a_nonlinear_boundary_value_solver(depth):
    """D w'''' + p(w) = q by scipy's `solve_bvp`, deflection to 0.3 % of its largest value.

    The infill begins and ends at stations here and in between there, hence not more digits.
    """
    length = 50e3  # the solver's tolerance wants derivatives near 1: x in this unit, w in km
    factor = length**4 / float(ELASTIC.rigidity(THICKNESS)) / 1e3
    model = model_of(depth)

    def equation(x, state):
        q = np.interp(x * length, STATIONS, model.load)
        return np.vstack([state[1:], (q - pressure(1e3 * state[0], depth)) * factor])

    def ends(left, right):
        return np.array([left[0], left[1], right[0], right[1]])

    filled, _ = model.filled(THICKNESS, 0.0, np.zeros(0))
    ours = filled.bend(THICKNESS, 0.0, np.zeros(0)).at(STATIONS)[:, 0]
    guess = np.zeros((4, STATIONS.size))
    guess[0] = 0.5 * np.exp(-(((STATIONS - 400e3) / 100e3) ** 2))
    solution = solve_bvp(equation, ends, STATIONS / length, guess, tol=1e-6, max_nodes=50_000)
    assert solution.success
    theirs = 1e3 * solution.sol(STATIONS / length)[0]
    assert np.abs(theirs - ours).max() < 3e-3 * np.abs(ours).max()


def test_infill_lies_exactly_where_the_plate_sinks():
    """Filled intervals are those whose middle sinks, fluid ones those that do not."""
    filled, converged = model_of(0.0).filled(THICKNESS, 0.0, np.zeros(0))
    middle = 0.5 * (STATIONS[1:] + STATIONS[:-1])
    sinks = filled.bend(THICKNESS, 0.0, np.zeros(0)).at(middle)[:, 0] > 0
    assert converged
    assert np.array_equal(filled.stiffness == INFILL, sinks)
    assert sinks.any() and not sinks.all()


def test_an_infill_level_below_the_plate_leaves_only_fluid():
    """A level so deep that the plate never reaches it: the plate floats on the fluid's stiffness alone."""
    filled, converged = model_of(1e5).filled(THICKNESS, 0.0, np.zeros(0))
    assert converged
    assert (filled.stiffness == FLUID).all()


def test_a_plate_pushed_up_carries_no_infill_at_its_break():
    """An end shear upward lifts the broken end: no infill there, but some beneath the load."""
    filled, converged = model_of(0.0, BROKEN).filled(THICKNESS, 0.0, np.array([-1e12]))
    assert converged
    assert filled.stiffness[0] == FLUID
    assert (filled.stiffness[395:405] == INFILL).all()
