"""Where a bent plate matters: its deepest point, the node beyond it and the bulge beyond that."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .plate import Bending


@dataclass(frozen=True)
class Place:
    """One marked place of a bent plate."""

    distance: float
    """m along the transect."""
    deflection: float
    """m, positive down."""


@dataclass(frozen=True)
class Markers:
    """Places of a bent plate; None where the line does not reach them."""

    deepest: Place | None
    node: Place | None
    bulge: Place | None


SUBDIVISIONS = 8
"""Points looked at within each element before roots are refined."""
_THIRDS = np.arange(4) / 3.0
_CUBIC = np.linalg.inv(np.vander(_THIRDS))
"""From the values of a cubic at these parts of a span to its coefficients there, highest power first."""
_HALVINGS = 60
"""Of a span, after which its ends are neighbouring numbers."""


def find_markers(bending: Bending) -> Markers:
    """Deepest point (largest deflection; of a raised plate the highest point), node and bulge of a single bending.

    Node: the first zero of w outward from the deepest point, towards the line's end and, where there is none, towards
    its start. Bulge: the first extreme of the other sign beyond the node. Both are roots of the elements' own cubics.
    """
    nodes = bending.plate.nodes
    part = np.arange(SUBDIVISIONS) / SUBDIVISIONS
    points = np.append((nodes[:-1, None] + bending.plate.lengths[:, None] * part).ravel(), nodes[-1])
    deflection = bending.at(points)[:, 0]
    slope = bending.at(points, derivative=1)[:, 0]
    if not np.abs(deflection).max() > 0:
        return Markers(None, None, None)
    top = int(np.argmax(np.abs(deflection)))
    deepest = _extreme(bending, points, slope, top) or Place(float(points[top]), float(deflection[top]))
    sign = np.sign(deepest.deflection)
    for direction in (1, -1):
        node, bulge = _outward(bending, points, sign * deflection, slope, top, direction)
        if node is not None:
            return Markers(deepest, node, bulge)
    return Markers(deepest, None, None)


def _value(bending: Bending, distance: float) -> Place:
    return Place(float(distance), float(bending.at([distance])[0, 0]))


def _extreme(bending: Bending, points: np.ndarray, slope: np.ndarray, near: int) -> Place | None:
    """The zero of slope in the two spans beside a point, None where there is none (a free end)."""
    for left in (near - 1, near):
        if 0 <= left < points.size - 1 and slope[left] * slope[left + 1] <= 0 and slope[left] != slope[left + 1]:
            return _value(bending, _root(bending, points[left], points[left + 1], 1))
    return None


def _root(bending: Bending, left: float, right: float, derivative: int = 0) -> float:
    """Where w or its slope changes sign in a span within one element, where it is a cubic: by halving."""
    values = bending.at(left + (right - left) * _THIRDS, derivative)[:, 0]
    cubic, square, line, start = (_CUBIC @ values).tolist()
    if values[0] == 0.0 or values[3] == 0.0:
        return float(left if values[0] == 0.0 else right)
    low, high = 0.0, 1.0
    for _ in range(_HALVINGS):
        middle = 0.5 * (low + high)
        at_middle = ((cubic * middle + square) * middle + line) * middle + start
        if (at_middle < 0.0) == (values[0] < 0.0):
            low = middle
        else:
            high = middle
    return float(left + (right - left) * low)


def _outward(bending, points, sunk, slope, top, direction) -> tuple[Place | None, Place | None]:
    """Node and bulge on one side of the deepest point; ``sunk`` is w with the sign of the deepest point's."""
    path = np.arange(top, points.size) if direction > 0 else np.arange(top, -1, -1)
    outside = np.nonzero(sunk[path] <= 0)[0]
    if outside.size == 0:
        return None, None
    after = path[outside[0]]
    before = after - direction
    node = Place(_root(bending, *sorted((points[before], points[after]))), 0.0)
    beyond = path[outside[0] :]
    rising = np.nonzero(np.diff(sunk[beyond]) > 0)[0]
    if rising.size == 0 or sunk[beyond[rising[0]]] >= 0:
        return node, None
    return node, _extreme(bending, points, slope, int(beyond[rising[0]]))
