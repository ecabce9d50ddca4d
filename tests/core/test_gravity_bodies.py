"""Attraction of bodies against textbook values, general quadrature and each other.

Textbook: Telford, Geldart & Sheriff, Applied Geophysics, section 2.6 (from memory, recomputed): a buried horizontal
cylinder gives 2 pi G rho R^2 z / (x^2 + z^2), an infinite slab 2 pi G rho t. G by scipy.constants (CODATA).
"""

import numpy as np
import pytest
from downwarp_checkout.plugin.core import gravity
from downwarp_checkout.plugin.core.constants import GRAVITATIONAL
from downwarp_checkout.plugin.core.errors import DownwarpError
from scipy import constants
from scipy.integrate import dblquad, quad

G = constants.G


def box(left, right, bottom, top):
    return [(left, bottom), (right, bottom), (right, top), (left, top)]


def test_constant_is_that_of_scipy():
    """G of CODATA as scipy carries it, to the digits that changed since 2010."""
    assert pytest.approx(constants.G, rel=1e-4) == GRAVITATIONAL.value


def test_wide_rectangle_is_a_slab():
    """A rectangle whose half-width L goes to infinity: 2 pi G rho t to 1e-6 at L = 1e9 m, first order in 1 / L."""
    slab = 2 * np.pi * GRAVITATIONAL.value * 500.0 * 2e3
    errors = []
    for half in (1e8, 1e9):
        found = gravity.polygon_attraction([0.0], [0.0], box(-half, half, -5e3, -3e3), 500.0)[0]
        errors.append(abs(found / slab - 1))
    assert errors[1] < 2.6e-6 and errors[0] / errors[1] == pytest.approx(10, rel=0.05)
    assert gravity.slab_attraction(2e3, 500.0) == pytest.approx(slab, rel=1e-14)


def test_buried_cylinder():
    """A regular polygon of n corners with the circle's area: the exact field of the cylinder to 1e-6 at n = 720, with
    second order in 1 / n at least."""
    radius, depth, density = 800.0, 2500.0, 400.0
    x = np.array([0.0, 1e3, 5e3, -2e4])
    exact = 2 * np.pi * GRAVITATIONAL.value * density * radius**2 * depth / (x**2 + depth**2)
    errors = []
    for corners in (90, 720):
        angle = 2 * np.pi * np.arange(corners) / corners
        size = radius * np.sqrt(2 * np.pi / corners / np.sin(2 * np.pi / corners))
        circle = np.column_stack([size * np.cos(angle), -depth + size * np.sin(angle)])
        found = gravity.polygon_attraction(x, np.zeros(4), circle, density)
        errors.append(np.abs(found / exact - 1).max())
    assert errors[1] < 1e-6
    assert errors[0] < 1e-4


@pytest.mark.parametrize("place", [(0.0, 0.0), (4e3, 0.0), (1500.0, 700.0)])
def test_rectangle_is_its_integral(place):
    """int int 2 G rho z / (x^2 + z^2) over a rectangle, by scipy's dblquad, to 1e-6."""
    x0, z0 = place
    found = gravity.polygon_attraction([x0], [z0], box(-1e3, 2e3, -3e3, -1e3), 300.0)[0]
    integral, _ = dblquad(
        lambda z, x: 2 * (z0 - z) / ((x - x0) ** 2 + (z0 - z) ** 2), -1e3, 2e3, -3e3, -1e3, epsabs=1e-9
    )
    assert found == pytest.approx(GRAVITATIONAL.value * 300.0 * integral, rel=1e-6)


def test_layer_is_its_polygon():
    """A layer of one density is the polygon around it, in either sense; its halves add up; twice the density, twice the
    field; a mirrored layer mirrors it."""
    at = np.array([-4e3, -1e3, 0.0, 2e3, 5e3])
    top, bottom = np.array([-900.0, -500, -800, -700, -950]), np.array([-2e3, -1500, -2500, -1800, -2e3])
    x, z = np.linspace(-8e3, 8e3, 17), np.zeros(17)
    corners = np.concatenate([np.column_stack([at, top]), np.column_stack([at, bottom])[::-1]])
    whole = gravity.layer_attraction(x, z, at, top, bottom, 250.0)
    assert whole == pytest.approx(gravity.polygon_attraction(x, z, corners, 250.0), rel=1e-12)
    assert whole == pytest.approx(gravity.polygon_attraction(x, z, corners[::-1], 250.0), rel=1e-12)
    left = gravity.layer_attraction(x, z, at[:3], top[:3], bottom[:3], 250.0)
    right = gravity.layer_attraction(x, z, at[2:], top[2:], bottom[2:], 500.0)
    both = gravity.layer_attraction(x, z, at, top, bottom, np.array([250.0, 250, 500, 500]))
    assert both == pytest.approx(left + right, rel=1e-12)
    mirrored = gravity.layer_attraction(x, z, -at[::-1], top[::-1], bottom[::-1], 250.0)
    assert mirrored == pytest.approx(whole[::-1], rel=1e-12)


def test_surface_that_crosses_its_reference_counts_with_its_sign():
    """A layer whose top lies below its bottom is the negative of the layer turned over, also where it changes sign."""
    at = np.array([-3e3, 0.0, 3e3])
    level, bent = np.full(3, -2e3), np.array([-2500.0, -2e3, -1600.0])
    x, z = np.linspace(-5e3, 5e3, 11), np.zeros(11)
    found = gravity.layer_attraction(x, z, at, level, bent, 100.0)
    sunk = gravity.polygon_attraction(x, z, [(-3e3, -2e3), (0, -2e3), (-3e3, -2500)], 100.0)
    risen = gravity.polygon_attraction(x, z, [(0, -2e3), (3e3, -2e3), (3e3, -1600)], 100.0)
    assert found == pytest.approx(sunk - risen, rel=1e-11)


def test_stations_inside_and_on_the_body():
    """In the middle of a slab nothing pulls, on its top 2 pi G rho t; a station on a corner is finite."""
    at = np.array([-1e9, 0.0, 1e9])
    top, bottom = np.full(3, -1e3), np.full(3, -3e3)
    found = gravity.layer_attraction([0.0, 0.0, 0.0], [-2e3, -1e3, -3e3], at, top, bottom, 300.0)
    slab = gravity.slab_attraction(2e3, 300.0)
    assert found == pytest.approx([0.0, slab, -slab], rel=1e-5, abs=1e-5 * slab)


def test_sheet_is_the_derivative_of_a_layer():
    """(g(top + h) - g(top - h)) / 2 h of a layer equals the sheet's field, for a smooth surface well below."""
    at = np.linspace(-100e3, 100e3, 401)
    height = -6e3 + 500.0 * np.cos(at / 30e3)
    moved = np.exp(-((at / 20e3) ** 2))
    x, z = np.linspace(-50e3, 50e3, 21), np.zeros(21)
    up, down = (
        gravity.layer_attraction(x, z, at, height + sign * moved, np.full(401, -9e3), 1.0) for sign in (1.0, -1.0)
    )
    assert gravity.sheet_matrix(x, z, at, height) @ moved == pytest.approx(0.5 * (up - down), rel=1e-3)


def test_series_and_polygons_agree_on_a_strip():
    """A ridge that runs on along strike: Parker's series and the polygons to 1 % of the largest value (here 0.1 %)."""
    spacing = 1e3
    x = (np.arange(2048) - 1024) * spacing
    top = -5e3 + 3200.0 * np.exp(-((x / 25e3) ** 2))
    bottom = np.full(x.size, -5e3)
    series = gravity.series_attraction(np.tile(top, (2, 1)), np.tile(bottom, (2, 1)), spacing, 1770.0)[0]
    polygons = gravity.layer_attraction(x, np.zeros(x.size), x, top, bottom, 1770.0)
    middle = np.abs(x) < 200e3
    assert np.abs(series - polygons)[middle].max() < 1e-3 * polygons.max()


def test_round_series_against_disks():
    """Over the centre of a Gaussian seamount h(r): disks, g = int 2 pi G rho (1 - z / sqrt(z^2 + r(z)^2)) dz, to 0.1 %.

    A strip of that section pulls more: a round load needs its own shape.
    """
    at = np.linspace(0, 200e3, 401)
    top, bottom = -5e3 + 3e3 * np.exp(-((at / 20e3) ** 2)), np.full(401, -5e3)

    def disk(depth):
        radius = 20e3 * np.sqrt(np.log(3e3 / (5e3 - depth)))
        return 2 * np.pi * GRAVITATIONAL.value * 500.0 * (1 - depth / np.hypot(depth, radius))

    exact = quad(disk, 2e3, 5e3)[0]
    found = gravity.round_attraction([0.0], 0.0, at, top, bottom, 500.0)[0]
    assert found == pytest.approx(exact, rel=1e-3)
    both_sides = np.concatenate([-at[:0:-1], at])
    top, bottom = np.concatenate([top[:0:-1], top]), np.full(both_sides.size, -5e3)
    assert gravity.layer_attraction([0.0], [0.0], both_sides, top, bottom, 500.0)[0] > 1.02 * exact


def test_round_series_takes_densities_by_interval():
    """Rings of two densities add up, and a level layer without end is a slab."""
    at = np.linspace(0, 100e3, 101)
    top, bottom = -3e3 + 0 * at, -4e3 - 500.0 * np.exp(-((at / 30e3) ** 2))
    density = np.where(np.arange(100) < 40, 300.0, 100.0)
    x = np.array([0.0, 20e3, 60e3])
    parts = [
        gravity.round_attraction(x, 0.0, at, top, bottom, np.where(density == each, each, 0.0)) for each in (300, 100)
    ]
    assert gravity.round_attraction(x, 0.0, at, top, bottom, density) == pytest.approx(sum(parts), rel=1e-9)
    level = gravity.round_attraction(x, 0.0, at, np.full(101, -3e3), np.full(101, -4e3), 100.0)
    assert level == pytest.approx(gravity.slab_attraction(1e3, 100.0), rel=1e-9)


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: gravity.polygon_attraction([0.0], [0.0], [(0, 0), (1, 1)], 1.0), r"corners has shape \(2, 2\)"),
        (lambda: gravity.layer_attraction([0.0], [0.0], [0, 1], [0.0], [0.0, 1.0], 1.0), "top and bottom must"),
        (lambda: gravity.layer_attraction([0.0], [0.0], [1, 0], [0.0, 0], [0.0, 1.0], 1.0), "at must increase"),
        (lambda: gravity.series_attraction(np.zeros((2, 2)), -np.ones((2, 2)), 1.0, 1.0), "surfaces reach 0 m"),
    ],
)
def test_rejections(call, words):
    """Each names what was wrong."""
    with pytest.raises(DownwarpError, match=words):
        call()
