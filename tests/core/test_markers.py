"""Deepest point, node and bulge against closed forms (Turcotte & Schubert, Geodynamics, chapter 3, from memory)."""

import numpy as np
import pytest
from downwarp_checkout.plugin.core import plate
from downwarp_checkout.plugin.core.markers import find_markers

D, K = 1e23, 22000.0
ALPHA = (4 * D / K) ** 0.25


def bending(start, place=0.0, before=0.0, length=8.0, force=1e12, step=0.05):
    """A line load at ``place`` alpha on a plate from -``before`` alpha on."""
    nodes = np.arange(-before, length + step / 2, step) * ALPHA
    made = plate.Plate(nodes, np.asarray(D), np.asarray(K), 0.0, start, plate.CONTINUES)
    at = int(np.argmin(np.abs(nodes - place * ALPHA)))
    return made.bend(np.zeros(nodes.size), made.point_vector(at, force=force))


def test_line_load_on_a_continuous_plate():
    """Node at 3 pi alpha / 4, bulge at pi alpha, 0.043214 of the deepest deflection V0 alpha^3 / 8 D."""
    marks = find_markers(bending(plate.CONTINUES, before=8))
    assert marks.deepest.distance == pytest.approx(0.0, abs=1.0)
    assert marks.deepest.deflection == pytest.approx(1e12 * ALPHA**3 / (8 * D), rel=1e-6)
    assert marks.node.distance == pytest.approx(0.75 * np.pi * ALPHA, rel=1e-5)
    assert marks.bulge.distance == pytest.approx(np.pi * ALPHA, rel=1e-5)
    assert marks.bulge.deflection == pytest.approx(-0.043214 * marks.deepest.deflection, rel=2e-5)
    assert marks.node.deflection == 0.0


def test_line_load_at_a_break():
    """Node at pi alpha / 2, bulge at 3 pi alpha / 4, 0.067020 of V0 alpha^3 / 2 D (all of V0 on this plate)."""
    marks = find_markers(bending(plate.BROKEN))
    assert marks.deepest.distance == pytest.approx(0.0, abs=1e-6)
    assert marks.deepest.deflection == pytest.approx(1e12 * ALPHA**3 / (2 * D), rel=1e-6)
    assert marks.node.distance == pytest.approx(0.5 * np.pi * ALPHA, rel=1e-5)
    assert marks.bulge.distance == pytest.approx(0.75 * np.pi * ALPHA, rel=1e-5)
    assert marks.bulge.deflection == pytest.approx(-0.067020 * marks.deepest.deflection, rel=2e-5)


def test_a_raised_plate_has_the_same_places():
    """An upward force: everything changes sign, nothing moves."""
    down, up = find_markers(bending(plate.BROKEN)), find_markers(bending(plate.BROKEN, force=-1e12))
    for name in ("deepest", "node", "bulge"):
        one, other = getattr(down, name), getattr(up, name)
        assert other.distance == pytest.approx(one.distance, rel=1e-9, abs=1e-6)
        assert other.deflection == pytest.approx(-one.deflection, rel=1e-9, abs=1e-9)


def test_coarse_elements_do_not_shift_them():
    """Roots of the elements' cubics: with four elements to alpha the bulge is where it is with forty."""
    fine, coarse = (find_markers(bending(plate.CONTINUES, before=8, step=step)) for step in (0.025, 0.25))
    assert coarse.bulge.distance == pytest.approx(fine.bulge.distance, rel=2e-3)
    assert coarse.node.distance == pytest.approx(fine.node.distance, rel=1e-3)


def test_a_line_that_ends_too_soon_has_no_bulge_or_no_node():
    """The plate runs on past the line's end, but what lies there is not marked."""
    to_node = find_markers(bending(plate.BROKEN, length=1.8))
    assert to_node.node is not None
    assert to_node.bulge is None
    short = find_markers(bending(plate.BROKEN, length=1.0))
    assert short.deepest is not None
    assert short.node is short.bulge is None


def test_the_other_side_serves_where_the_line_ends_too_soon():
    """A load near the line's end: node and bulge on its other side."""
    marks = find_markers(bending(plate.CONTINUES, before=8, length=1.0))
    assert marks.node.distance == pytest.approx(-0.75 * np.pi * ALPHA, rel=1e-5)
    assert marks.bulge.distance == pytest.approx(-np.pi * ALPHA, rel=1e-5)


def test_a_plate_without_load_has_no_places():
    """Nothing bends, nothing is marked."""
    marks = find_markers(bending(plate.CONTINUES, force=0.0))
    assert marks.deepest is marks.node is marks.bulge is None
