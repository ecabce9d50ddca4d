"""Laid transects, checked with pyproj.Geod (distances, azimuths) and shapely (crossings, on a projected plane)."""

import doctest

import numpy as np
import pytest
from downwarp_checkout.plugin.core import lay
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.lay import MOST_TURN, lay_across, lay_round
from downwarp_checkout.plugin.core.transect import Transect
from pyproj import Geod, Proj
from shapely.geometry import LineString

GEOD = Geod(ellps="WGS84")


def guide_of(start, steps, name="front"):
    """A guide that goes from a place (degrees) by steps of (azimuth, m)."""
    vertices = [start]
    for azimuth, length in steps:
        longitude, latitude, _ = GEOD.fwd(*vertices[-1], azimuth, length)
        vertices.append((longitude, latitude))
    return Transect(name, np.array(vertices), GEOD)


def arc(radius, turn, start=(10.0, 10.0), step=5.0):
    """A guide that turns to the right by ``turn`` degrees in steps on a circle of ``radius`` m."""
    length = 2 * radius * np.sin(np.radians(step) / 2)
    return guide_of(start, [(step * (place + 0.5), length) for place in range(int(turn / step))])


def corner(arm, turn=90.0):
    return guide_of((0.0, 10.0), [(0.0, arm), (turn, arm)])


def ring():
    return arc(300e3, 300.0)


def crossings(laid):
    """Pairs that cross according to shapely, on an equidistant plane about the middle of the transects."""
    middle = np.concatenate([each.vertices for each in laid]).mean(axis=0)
    plane = Proj(f"+proj=aeqd +lon_0={middle[0]} +lat_0={middle[1]} +ellps=WGS84")
    lines = [LineString(np.column_stack(plane(*each.vertices.T))) for each in laid]
    return {(i, j) for i, one in enumerate(lines) for j in range(i + 1, len(lines)) if one.crosses(lines[j])}


def reported(laid):
    return {(i, j) for i, each in enumerate(laid) for j in each.crosses if i < j}


def angle_between(one, other):
    return (one - other + 180.0) % 360.0 - 180.0


def test_the_examples_in_the_docstrings_hold():
    assert doctest.testmod(lay).failed == 0


def test_transects_stand_at_right_angles_on_a_straight_guide_at_the_spacing():
    """On a geodesic from 10 E 45 N towards azimuth 60, every 40 km: feet, ends and directions by pyproj.Geod."""
    guide = guide_of((10.0, 45.0), [(60.0, 330e3)])
    laid = lay_across(guide, 40e3, before=120e3, after=260e3, smoothing=100e3)
    assert [each.along for each in laid] == pytest.approx([40e3 * place for place in range(9)])
    for each in laid:
        longitude, latitude, back = GEOD.fwd(10.0, 45.0, 60.0, each.along)
        assert angle_between(each.azimuth, back + 180.0 + 90.0) == pytest.approx(0.0, abs=1e-6)
        for end, length, turn in ((0, 120e3, 180.0), (-1, 260e3, 0.0)):
            azimuth, _, distance = GEOD.inv(longitude, latitude, *each.vertices[end])
            assert distance == pytest.approx(length, abs=1e-3)
            assert angle_between(azimuth, each.azimuth + turn) == pytest.approx(0.0, abs=1e-6)
        assert Transect("t", each.vertices, GEOD).length == pytest.approx(380e3, abs=1e-3)
        assert Transect("t", each.vertices, GEOD).greatest_turn < 1e-6
        assert each.remark == ""


def test_neighbouring_vertices_are_close_enough_to_be_joined_by_straight_lines():
    laid = lay_across(guide_of((10.0, 60.0), [(0.0, 50e3)]), 50e3, before=330e3, after=500e3)
    longitude, latitude = laid[0].vertices.T
    _, _, lengths = GEOD.inv(longitude[:-1], latitude[:-1], longitude[1:], latitude[1:])
    assert lengths.max() <= 50e3 + 1.0
    azimuth, _, length = GEOD.inv(longitude[0], latitude[0], longitude[1], latitude[1])
    half = GEOD.fwd(longitude[0], latitude[0], azimuth, length / 2)
    assert GEOD.inv(half[0], half[1], longitude[:2].mean(), latitude[:2].mean())[2] < 100.0


def test_the_other_side_gives_the_same_lines_drawn_the_other_way():
    guide = arc(900e3, 60.0)
    one = lay_across(guide, 100e3, 100e3, 300e3, side=0, smoothing=200e3)
    other = lay_across(guide, 100e3, 300e3, 100e3, side=1, smoothing=200e3)
    for left, right in zip(one, other):
        np.testing.assert_allclose(left.vertices, right.vertices[::-1], atol=1e-9)


def test_a_guide_drawn_the_other_way_has_the_same_transects_from_its_other_end():
    guide = guide_of((10.0, 10.0), [(80.0, 150e3), (95.0, 250e3), (85.0, 200e3)])
    back = Transect("front", guide.vertices[::-1], GEOD)
    spacing = guide.length / 6
    one = lay_across(guide, spacing, 100e3, 300e3, side=0, smoothing=150e3)
    other = lay_across(back, spacing * (1 - 1e-15), 100e3, 300e3, side=1, smoothing=150e3)
    for left, right in zip(one, other[::-1]):
        np.testing.assert_allclose(left.vertices, right.vertices, atol=1e-6)


def test_longitudes_run_on_across_the_antimeridian():
    """The same front 170 degrees farther east: everything moves by 170 degrees, without a jump."""
    steps = [(70.0, 200e3), (90.0, 200e3), (60.0, 300e3)]
    here = lay_across(guide_of((8.0, 52.0), steps), 50e3, 150e3, 400e3, smoothing=100e3)
    there = lay_across(guide_of((178.0, 52.0), steps), 50e3, 150e3, 400e3, smoothing=100e3)
    for one, other in zip(here, there):
        np.testing.assert_allclose(one.vertices + np.array([170.0, 0.0]), other.vertices, atol=1e-8)
        assert np.abs(np.diff(other.vertices[:, 0])).max() < 10.0


def test_smoothed_strike_near_a_corner_is_the_triangle_weighted_mean_direction():
    """A corner of 20 degrees at distance d ahead, half window h: beyond it lies the share f = (1 - d/h)^2 / 2 of the
    weight, so the strike turns by arg(1 - f + f e^(i 20 deg)); at the corner itself by half the angle."""
    arm, half = 400e3, 100e3
    guide = guide_of((0.0, 0.0), [(90.0, arm), (110.0, arm)])
    laid = lay_across(guide, 20e3, 10e3, 10e3, smoothing=2 * half)
    plain = lay_across(guide, 20e3, 10e3, 10e3)
    for one, other in zip(laid, plain):
        gap = arm - one.along
        if half < one.along < arm - 1.0:
            share = 0.5 * max(0.0, 1.0 - gap / half) ** 2
            expected = np.degrees(np.angle(1.0 - share + share * np.exp(1j * np.radians(20.0))))
            assert angle_between(one.azimuth, other.azimuth) == pytest.approx(expected, abs=1e-6)
        if abs(gap) < 1.0:
            assert one.azimuth == pytest.approx(190.0, abs=1e-3)
            assert other.azimuth == pytest.approx(190.0, abs=1e-3)


def test_smoothing_takes_the_wiggles_out_of_a_front():
    """A zigzag of +-30 degrees about azimuth 90, 10 km a leg, along the equator: smoothed over 200 km the transects run
    south within a degree, unsmoothed up to 30 degrees off."""
    guide = guide_of((0.0, 0.0), [(60.0 if place % 2 else 120.0, 10e3) for place in range(80)])
    smooth = lay_across(guide, 25e3, 1e3, 1e3, smoothing=200e3)
    inside = [each for each in smooth if 120e3 < each.along < guide.length - 120e3]
    assert max(abs(each.azimuth - 180.0) for each in inside) < 1.0
    rough = lay_across(guide, 25e3, 1e3, 1e3)
    assert max(abs(each.azimuth - 180.0) for each in rough) > 29.0


def test_transects_of_a_circle_point_at_its_centre():
    """Concave side, half the radius long: directions through the centre, no crossing and no turn."""
    radius = 600e3
    guide = arc(radius, 120.0, step=2.0)
    laid = lay_across(guide, 60e3, 0.0, 300e3, smoothing=100e3)
    start = guide.vertices[0]
    centre = GEOD.fwd(*start, 90.0, radius)[:2]
    for each in laid[1:-1]:
        azimuth, _, _ = GEOD.inv(*each.vertices[0], *centre)
        assert angle_between(azimuth, each.azimuth) == pytest.approx(0.0, abs=1.5)
    assert crossings(laid) == set()
    assert all(each.turned == 0.0 for each in laid)


def test_at_a_sharp_corner_transects_are_turned_until_none_cross():
    """Unturned, transects of 400 km on the inner side of a right angle cross; as laid, none do (shapely)."""
    laid = lay_across(corner(600e3), 20e3, 100e3, 400e3, smoothing=50e3)
    assert crossings(laid) == set()
    assert reported(laid) == set()
    turned = [each for each in laid if each.turned]
    assert turned
    assert max(abs(each.turned) for each in laid) <= MOST_TURN
    worst = max(turned, key=lambda each: abs(each.turned))
    assert "so that it crosses no other transect" in worst.remark
    assert "a plate seems thicker" in worst.remark


def test_crossings_that_stay_are_reported_pair_by_pair():
    """Transects longer than the radius of a ring must meet: the pairs reported are those that shapely finds, and all
    keep the direction that was asked for."""
    laid = lay_across(ring(), 60e3, 50e3, 400e3, smoothing=30e3)
    found = crossings(laid)
    assert len(found) > 100
    assert reported(laid) == found
    assert all(each.turned == 0.0 for each in laid)
    assert "crosses transect" in laid[3].remark and "more sharply" in laid[3].remark
    for place, each in enumerate(laid):
        assert all(place in laid[other].crosses for other in each.crosses)


def test_a_wandering_front_gets_transects_that_do_not_cross():
    generator = np.random.default_rng(5)
    azimuths = 90.0 + 35.0 * np.sin(np.arange(100) / 4.0) + generator.normal(0.0, 15.0, 100)
    guide = guide_of((-175.0, 40.0), [(azimuth, 10e3) for azimuth in azimuths])
    laid = lay_across(guide, 20e3, 100e3, 300e3, smoothing=50e3)
    assert crossings(laid) == reported(laid) == set()


def test_away_from_the_bend_the_strike_is_left_alone():
    """A corner at one end of a long front: transects 1,500 km away keep the direction asked for."""
    guide = guide_of((0.0, 10.0), [(0.0, 500e3), (90.0, 2500e3)])
    laid = lay_across(guide, 25e3, 50e3, 300e3, smoothing=50e3)
    assert all(each.turned == 0.0 for each in laid if each.along > 2000e3)
    assert any(each.turned for each in laid)


def test_round_a_centre_transects_start_there_in_equal_directions():
    laid = lay_round(179.0, 60.0, GEOD, 12, 300e3, first=10.0)
    assert [each.azimuth for each in laid] == pytest.approx([10.0 + 30.0 * place for place in range(12)])
    for each in laid:
        np.testing.assert_allclose(each.vertices[0], [179.0, 60.0], atol=1e-9)
        azimuth, _, distance = GEOD.inv(*each.vertices[0], *each.vertices[-1])
        assert distance == pytest.approx(300e3, abs=1e-3)
        assert angle_between(azimuth, each.azimuth) == pytest.approx(0.0, abs=1e-9)
        assert np.abs(np.diff(each.vertices[:, 0])).max() < 10.0
        assert each.along is None and each.crosses == ()


def test_the_guide_is_left_as_it_was():
    guide = corner(300e3)
    before = guide.vertices.copy()
    lay_across(guide, 50e3, 100e3, 200e3)
    np.testing.assert_array_equal(guide.vertices, before)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"spacing": 0.0}, "SPACING_KM is 0; it takes a number above 0"),
        ({"spacing": float("nan")}, "SPACING_KM is nan"),
        ({"spacing": 0.1}, "would get 6001 transects|would get 6000001 transects"),
        ({"before": -1.0}, "BEFORE_KM is -0.001; it takes a number from 0 up to 5000"),
        ({"after": 6000e3}, "AFTER_KM is 6000; it takes a number from 0 up to 5000"),
        ({"before": 0.0, "after": 0.0}, "BEFORE_KM and AFTER_KM are both 0"),
        ({"smoothing": -5.0}, "SMOOTH_KM is -0.005"),
        ({"side": 2}, "SIDE is 2; it takes 0"),
    ],
)
def test_unusable_input_is_named(changes, message):
    values = {"spacing": 50e3, "before": 100e3, "after": 200e3, "side": 0, "smoothing": 0.0, **changes}
    with pytest.raises(DownwarpError, match=message):
        lay_across(corner(300e3), **values)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"directions": 0}, "DIRECTIONS is 0; it takes a number from 1"),
        ({"directions": 2.5}, "DIRECTIONS is 2.5; it takes a whole number"),
        ({"radius": 0.0}, "RADIUS_KM is 0; it takes a number above 0"),
        ({"latitude": 90.0}, "latitude of the centre is 90"),
        ({"longitude": float("inf")}, "longitude of the centre is inf"),
    ],
)
def test_unusable_centres_are_named(changes, message):
    values = {"longitude": 10.0, "latitude": 50.0, "ellipsoid": GEOD, "directions": 4, "radius": 100e3, **changes}
    with pytest.raises(DownwarpError, match=message):
        lay_round(**values)
