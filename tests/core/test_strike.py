"""Order and distances along strike, on margins whose spacing is known."""

import numpy as np
import pytest
from downwarp_checkout.plugin.core.strike import LEAST_COMMON, along_strike
from downwarp_checkout.plugin.core.transect import Transect
from pyproj import Geod

WGS84 = Geod(ellps="WGS84")


def margin(along, into, azimuth=90.0, origin=(20.0, 5.0)):
    """Places ``along`` m north of an origin on its meridian, moved ``into`` m along lines of one azimuth there."""
    along, into = np.broadcast_arrays(np.asarray(along, dtype=float), np.asarray(into, dtype=float))
    start = [np.full(along.shape, value) for value in (*origin, 0.0)]
    longitude, latitude, _ = WGS84.fwd(*start, along)
    heading = np.full(along.shape, azimuth)
    longitude, latitude, back = WGS84.fwd(longitude, latitude, heading, into)
    return longitude, latitude, back + 180.0


def test_parallel_lines_are_as_far_apart_as_they_were_laid():
    """30 lines every 25 km, in any order, their breaks up to 100 km to and fro on them: the spacing, to a part in a
    thousand (lines parallel at the start converge on the ellipsoid by less); without the scatter to a part in 1e9."""
    rng = np.random.default_rng(3)
    shuffled = rng.permutation(30)
    for scatter, rel in ((0.0, 1e-9), (100e3, 2e-3)):
        places = margin(25e3 * shuffled, scatter * rng.uniform(0, 1, 30))
        order, distance = along_strike(*places, WGS84)
        ascending = np.argsort(shuffled)
        assert order.tolist() in (ascending.tolist(), ascending[::-1].tolist())
        assert order[0] < order[-1]
        known = 25e3 * np.abs(shuffled - shuffled[order[0]])
        np.testing.assert_allclose(distance, known, rtol=rel, atol=1e-3)


def test_lines_oblique_to_the_row_of_places_count_by_their_own_spacing():
    """Places every 20 km northward, lines at 60 degrees: 20 km sin(60) from one to the next."""
    _, distance = along_strike(*margin(20e3 * np.arange(6), 0.0, azimuth=60.0), WGS84)
    np.testing.assert_allclose(np.diff(distance), 20e3 * np.sin(np.radians(60.0)), rtol=1e-9)


def test_an_arc_is_followed():
    """Lines every 3 degrees outwards from an arc of 180 degrees and 500 km radius: chords at right angles to the mean
    of each two directions. Geodesic circle: Geod.fwd from its centre."""
    bearing = np.arange(0.0, 181.0, 3.0)
    shuffled = np.random.default_rng(5).permutation(bearing)
    middle = np.full(bearing.size, 30.0), np.full(bearing.size, 10.0)
    longitude, latitude, back = WGS84.fwd(*middle, shuffled, np.full(bearing.size, 500e3))
    order, distance = along_strike(longitude, latitude, back + 180.0, WGS84)
    assert shuffled[order].tolist() in (bearing.tolist(), bearing[::-1].tolist())
    # Radius of the circle's curvature on a sphere: R sin(r / R).
    length = np.pi * 6371e3 * np.sin(500e3 / 6371e3)
    assert distance.max() == pytest.approx(length, rel=5e-3)


def test_reversed_lines_and_whole_turns_change_nothing():
    """Identities: a line drawn the other way, the input reversed, longitudes a turn on."""
    longitude, latitude, azimuth = margin(25e3 * np.arange(12), 0.0)
    _, distance = along_strike(longitude, latitude, azimuth, WGS84)
    either_way = azimuth + np.where(np.arange(12) % 2, 180.0, 0.0)
    np.testing.assert_allclose(along_strike(longitude, latitude, either_way, WGS84)[1], distance, rtol=1e-12)
    np.testing.assert_allclose(along_strike(longitude + 360.0, latitude, azimuth, WGS84)[1], distance, rtol=1e-9)
    order, back = along_strike(longitude[::-1], latitude[::-1], azimuth[::-1], WGS84)
    np.testing.assert_allclose(back, distance, rtol=1e-12)
    assert order.tolist() == list(range(12))


def test_across_the_antimeridian():
    """Lines north to south every 30 km along the equator through 180 degrees, given on either side of it."""
    longitude = (179.0 + 30e3 * np.arange(9) / 6378137.0 * 180.0 / np.pi + 180.0) % 360.0 - 180.0
    _, distance = along_strike(longitude, np.zeros(9), np.zeros(9), WGS84)
    np.testing.assert_allclose(distance, 30e3 * np.arange(9), rtol=1e-9)


@pytest.mark.parametrize("directions", [3, 4, 8, 37])
def test_round_a_centre_there_is_no_strike(directions):
    """Transects in all directions, their deepest points near the centre: no distances, the order of the input."""
    azimuth = np.arange(directions) * 360.0 / directions
    middle = np.full(directions, 10.0), np.full(directions, 50.0)
    longitude, latitude, back = WGS84.fwd(*middle, azimuth, np.full(directions, 3e3))
    order, distance = along_strike(longitude, latitude, back + 180.0, WGS84)
    assert distance is None
    assert order.tolist() == list(range(directions))


def test_a_margin_that_turns_by_half_a_circle_has_one():
    """The mean of unit vectors over an arc of angle a has length sin(a / 2) / (a / 2): 2 / pi for 180 degrees."""
    assert 2.0 / np.pi > LEAST_COMMON


@pytest.mark.parametrize("count", [0, 1, 2])
def test_few(count):
    """None, one, and two that stand at right angles."""
    order, distance = along_strike(
        np.array([0.0, 1.0])[:count], np.zeros(2)[:count], np.array([0.0, 90.0])[:count], WGS84
    )
    assert order.tolist() == list(range(count))
    degree = Transect("A", [[0.0, 0.0], [1.0, 0.0]], WGS84).length
    assert distance.tolist() == pytest.approx([0.0, degree * np.sin(np.radians(45.0))][:count])
