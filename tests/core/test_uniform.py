"""The closed form of a uniform plate's break against the plate of cubic elements, which solves D w'''' + k w = q anew.

The elements' answer comes nearer to the closed form with the fourth power of their length.
"""

from dataclasses import replace

import numpy as np
import pytest
from downwarp_checkout.plugin.core import forward
from downwarp_checkout.plugin.core.elastic import Elastic
from downwarp_checkout.plugin.core.forward import SinkingFill, TransectModel
from downwarp_checkout.plugin.core.plate import PINNED
from downwarp_checkout.plugin.core.settings import BROKEN, CONTINUOUS
from downwarp_checkout.plugin.core.uniform import UniformBreak, is_uniform

X = np.linspace(0.0, 600e3, 301)
THICKNESSES = np.geomspace(2e3, 90e3, 12)


def line(kind, **changes):
    """Rough mountains over the first 200 km of a line, and the height 2 km all the way before it."""
    relief = np.where(X < 200e3, np.random.default_rng(5).uniform(0.0, 2e3, X.size), 0.0)
    relief[0] = 2e3
    made = TransectModel(X, relief * 2670 * 9.81, np.full(X.size - 1, 900 * 9.81), Elastic(), kind=kind, regional=3)
    return replace(made, shear=True, moment=True, **changes)


def largest_difference(kind, place, elements, monkeypatch):
    """Largest difference beyond the break over the largest deflection, over all thicknesses and columns."""
    monkeypatch.setattr(forward, "ELEMENTS_PER_ALPHA", elements)
    monkeypatch.setattr(forward, "ONE_MESH", 1.0001)
    at = np.append(X, [place + 1.0, 33.3e3])
    model = line(kind)
    seen = at >= place if kind == BROKEN else np.full(at.size, True)
    closed = UniformBreak(model, at).columns(THICKNESSES, place)
    solved = model.columns(THICKNESSES, place, np.maximum(at, place) if kind == BROKEN else at)
    closed, solved = (np.concatenate([offset[:, :, None], columns], axis=2)[:, seen] for offset, columns in (closed, solved))
    return float((abs(closed - solved).max(axis=1) / abs(solved).max(axis=1)).max())


@pytest.mark.parametrize("place", [0.0, 20e3, 41.7e3, 150e3, 189e3], ids="break {:.0f} m".format)
@pytest.mark.parametrize("kind", [BROKEN, CONTINUOUS], ids=["broken", "continuous"])
def test_closed_form_is_what_elements_converge_to(kind, place, monkeypatch):
    """Breaks at the line's start, at a station, between stations, within the load and near its end."""
    coarse = largest_difference(kind, place, 10, monkeypatch)
    fine = largest_difference(kind, place, 30, monkeypatch)
    assert coarse < 1e-5
    assert np.log(coarse / fine) / np.log(3.0) > 3.5


def test_a_load_wholly_before_the_break_bends_nothing():
    """The plate beyond the break does not feel what stands on the other side: the end forces undo all of it."""
    offsets, _ = UniformBreak(line(BROKEN), X).columns(THICKNESSES, 250e3)
    unbroken = abs(line(CONTINUOUS).columns(THICKNESSES, 0.0, X)[0]).max(axis=1)
    assert (abs(offsets[:, X >= 250e3]).max(axis=1) < 3e-6 * unbroken).all()


def test_before_the_break_of_a_broken_plate_is_the_regional_alone():
    """No plate, no deflection."""
    model = line(BROKEN)
    offsets, columns = UniformBreak(model, X).columns(THICKNESSES, 100e3)
    assert (offsets[:, X < 100e3] == 0).all() and (columns[:, X < 100e3, :2] == 0).all()
    assert (columns[:, :, 2:] == model.regional_columns(X)).all()


def test_what_is_uniform():
    """One stiffness, no in-plane force, no infill that follows the deflection, no other support."""
    model = line(BROKEN)
    assert is_uniform(model)
    fill = SinkingFill(model.stiffness, np.zeros(model.stiffness.size))
    other = np.where(np.arange(model.stiffness.size) < 9, 2.0, 1.0) * model.stiffness
    changes = ({"in_plane": 1e11}, {"fill": fill}, {"stiffness": other}, {"start": PINNED}, {"finish": PINNED})
    assert not any(is_uniform(replace(model, **each)) for each in changes)
