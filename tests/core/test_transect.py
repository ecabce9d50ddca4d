"""Stations along geodesics, against pyproj.Geod's own line functions, brute force and identities."""

import numpy as np
import pytest
from downwarp_checkout.plugin.core import transect as module
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.transect import Transect
from hypothesis import given, settings
from hypothesis import strategies as st
from pyproj import Geod
from scipy.optimize import minimize_scalar

WGS84 = Geod(ellps="WGS84")
BENT = np.array([[12.0, 40.0], [14.5, 41.0], [15.0, 43.5], [19.0, 43.0]])


def separation(longitude, latitude, other_longitude, other_latitude):
    """Geodesic distance, m, by pyproj.Geod.inv."""
    return np.abs(WGS84.inv(longitude, latitude, other_longitude, other_latitude)[2])


def test_length_is_that_of_the_geodesics():
    """Independent reference: pyproj.Geod.line_length."""
    assert Transect("A", BENT, WGS84).length == pytest.approx(WGS84.line_length(*BENT.T), rel=1e-14)


def test_a_degree_on_the_equator_is_that_of_the_circle():
    """On the equator of an ellipsoid of semi-axis a, one degree is pi a / 180."""
    assert Transect("A", [[7.0, 0.0], [8.0, 0.0]], WGS84).length == pytest.approx(np.pi * 6378137 / 180, rel=1e-12)


def test_stations_of_one_geodesic_are_those_of_npts():
    """Independent reference: pyproj.Geod.npts, which cuts a geodesic into equal parts."""
    line = Transect("A", [[-30.0, 55.0], [80.0, -20.0]], WGS84)
    stations = line.stations(line.length / 57)
    inner = np.array(WGS84.npts(-30.0, 55.0, 80.0, -20.0, 56))
    assert stations.distance.size == 58
    assert separation(stations.longitude[1:-1], stations.latitude[1:-1], *inner.T).max() < 1e-6
    assert separation(stations.longitude[[0, -1]], stations.latitude[[0, -1]], *line.vertices.T).max() < 1e-6


def test_stations_are_evenly_spaced_and_lie_on_their_legs():
    """On a leg, distances to its two vertices add up to its length, and the one to its first is the distance run."""
    line = Transect("A", BENT, WGS84)
    stations = line.stations(1e3)
    assert stations.distance[0] == 0.0
    assert stations.distance[-1] == line.length
    np.testing.assert_allclose(np.diff(stations.distance), stations.step, rtol=1e-9)
    assert stations.step == pytest.approx(1e3, rel=1e-3)
    starts = line.vertex_distances
    for leg in range(3):
        on = (stations.distance >= starts[leg]) & (stations.distance <= starts[leg + 1])
        before = separation(stations.longitude[on], stations.latitude[on], *np.tile(BENT[leg], (on.sum(), 1)).T)
        after = separation(stations.longitude[on], stations.latitude[on], *np.tile(BENT[leg + 1], (on.sum(), 1)).T)
        np.testing.assert_allclose(before, stations.distance[on] - starts[leg], rtol=0, atol=1e-6)
        np.testing.assert_allclose(before + after, starts[leg + 1] - starts[leg], rtol=0, atol=1e-6)


def test_azimuth_is_the_direction_to_the_next_station():
    line = Transect("A", BENT[:2], WGS84)
    stations = line.stations(5e3)
    towards, _, _ = WGS84.inv(
        stations.longitude[:-1], stations.latitude[:-1], stations.longitude[1:], stations.latitude[1:]
    )
    np.testing.assert_allclose(stations.azimuth[:-1], towards, rtol=0, atol=1e-6)


def test_azimuth_at_a_vertex_is_halfway():
    """Two legs of equal length, east then north at the equator: 90, 45 at the vertex, 0."""
    line = Transect("A", [[0.0, 0.0], [1.0, 0.0], [1.0, 1.0]], Geod(a=6371000.0, b=6371000.0))
    np.testing.assert_allclose(line.stations(line.length / 4).azimuth, [90, 90, 45, 0, 0], atol=1e-9)


@pytest.mark.parametrize("step", [700.0, 12_345.6, 1e6, 1e9])
def test_reversing_a_line_mirrors_its_stations(step):
    there = Transect("A", BENT, WGS84).stations(step)
    back = Transect("A", BENT[::-1], WGS84).stations(step)
    assert there.distance.size == back.distance.size >= 2
    assert separation(there.longitude, there.latitude, back.longitude[::-1], back.latitude[::-1]).max() < 1e-6
    turn = (there.azimuth - back.azimuth[::-1]) % 360.0
    np.testing.assert_allclose(turn, 180.0, rtol=0, atol=1e-7)
    across = np.array([-20e3, 5e3])
    line = Transect("A", BENT, WGS84)
    beside, reverse = line.offset(there, across), line.offset(back, -across)
    assert separation(beside[0], beside[1], reverse[0][:, ::-1], reverse[1][:, ::-1]).max() < 1e-5


def test_a_vertex_put_in_on_the_path_changes_nothing():
    plain = Transect("A", BENT[:2], WGS84)
    middle = np.array(WGS84.npts(*BENT[0], *BENT[1], 1))
    split = Transect("A", [BENT[0], *middle, BENT[1]], WGS84)
    one, other = plain.stations(1e3), split.stations(1e3)
    assert separation(one.longitude, one.latitude, other.longitude, other.latitude).max() < 1e-5
    assert split.greatest_turn == pytest.approx(0.0, abs=1e-6)


def test_repeated_vertices_are_dropped():
    repeated = np.repeat(BENT, [1, 3, 1, 2], axis=0)
    repeated[2, 0] += 360.0
    np.testing.assert_allclose(Transect("A", repeated, WGS84).vertices, BENT)


def test_across_the_antimeridian_stations_run_on():
    """The same line 178 degrees further east, given with longitudes that jump from 180 to -180."""
    here = np.array([[-2.0, 50.0], [3.0, 51.0], [8.0, 49.0]])
    there = here + np.array([178.0, 0.0])
    there[there[:, 0] > 180.0, 0] -= 360.0
    one, other = (Transect("A", vertices, WGS84) for vertices in (here, there))
    assert one.length == pytest.approx(other.length, rel=1e-13)
    np.testing.assert_allclose(
        other.stations(10e3).longitude, one.stations(10e3).longitude + 178.0, rtol=0, atol=1e-10
    )
    left, right = one.offset(one.stations(10e3), np.array([9e5])), other.offset(other.stations(10e3), np.array([9e5]))
    np.testing.assert_allclose(right[0], left[0] + 178.0, rtol=0, atol=1e-9)
    np.testing.assert_allclose(other.project(-179.0, 50.2), one.project(3.0, 50.2), rtol=0, atol=1e-3)


def test_across_the_pole():
    """From 80 N to the pole and down the other side: latitude rises evenly to 90 and falls, on both meridians."""
    line = Transect("A", [[30.0, 80.0], [-150.0, 80.0]], WGS84)
    stations = line.stations(line.length / 100)
    assert line.length == pytest.approx(2 * separation(30.0, 80.0, 30.0, 90.0), rel=1e-12)
    assert stations.latitude.max() == pytest.approx(90.0, abs=1e-7)
    np.testing.assert_allclose(stations.latitude, stations.latitude[::-1], atol=1e-9)
    along, across = line.project(np.array([30.0, -150.0, 120.0]), np.array([85.0, 85.0, 89.0]))
    np.testing.assert_allclose(along[:2].sum(), line.length, rtol=1e-9)
    assert along[2] == pytest.approx(line.length / 2, abs=0.1)
    np.testing.assert_allclose(across, [0.0, 0.0, separation(120.0, 89.0, 0.0, 90.0)], rtol=0, atol=0.1)


def test_offsets_are_perpendicular_to_the_right():
    """Eastward along the equator right is south; the distance across is geodesic."""
    line = Transect("A", [[10.0, 0.0], [12.0, 0.0]], WGS84)
    longitude, latitude = line.offset(line.stations(50e3), np.array([-30e3, 0.0, 30e3]))
    stations = line.stations(50e3)
    assert longitude.shape == latitude.shape == (3, stations.distance.size)
    assert (latitude[0] > 0).all()
    assert (latitude[2] < 0).all()
    np.testing.assert_allclose(longitude, np.broadcast_to(stations.longitude, longitude.shape), atol=1e-12)
    np.testing.assert_allclose(separation(longitude[2], latitude[2], stations.longitude, stations.latitude), 30e3)


def test_projecting_offset_points_gives_their_distances_back():
    """A point put beside a geodesic at (along, across) lies there, also beyond both ends and far away."""
    random = np.random.default_rng(7)
    for vertices in ([[140.0, 35.0], [155.0, 20.0]], [[-60.0, -70.0], [20.0, -82.0]], [[0.0, 0.0], [0.2, 0.1]]):
        line = Transect("A", vertices, WGS84)
        along = random.uniform(-0.3, 1.3, 300) * line.length
        across = random.uniform(-2e6, 2e6, 300)
        start, _, _ = WGS84.inv(*vertices[0], *vertices[1])
        longitude, latitude, back = WGS84.fwd(*np.tile([*vertices[0], start], (300, 1)).T, along)
        longitude, latitude, _ = WGS84.fwd(longitude, latitude, back + 270.0, across)
        found = line.project(longitude, latitude)
        np.testing.assert_allclose(found[0], along, rtol=0, atol=0.01)
        np.testing.assert_allclose(found[1], across, rtol=0, atol=0.01)


def test_projection_on_a_bent_line_is_the_nearest_place():
    """Independent reference: the least distance to any leg by scipy's bounded minimiser, leg by leg."""
    line = Transect("A", BENT, WGS84)
    random = np.random.default_rng(8)
    longitude, latitude = random.uniform(12.5, 18.0, 40), random.uniform(40.5, 43.4, 40)
    along, across = line.project(longitude, latitude)
    starts = line.vertex_distances
    for point, (east, north) in enumerate(zip(longitude, latitude)):
        least = np.inf
        for leg in range(3):
            azimuth, _, length = WGS84.inv(*BENT[leg], *BENT[leg + 1])

            def away(run, leg=leg, azimuth=azimuth, east=east, north=north):
                there = WGS84.fwd(*BENT[leg], azimuth, run)
                return WGS84.inv(there[0], there[1], east, north)[2]

            best = minimize_scalar(away, bounds=(0.0, length), method="bounded", options={"xatol": 0.01})
            if best.fun < least:
                least, where = best.fun, starts[leg] + best.x
        assert abs(across[point]) == pytest.approx(least, abs=0.1)
        if 1.0 < along[point] < line.length - 1.0:
            assert along[point] == pytest.approx(where, abs=50.0)  # the minimiser's own: flat near the foot


def test_the_foot_just_before_a_vertex_of_a_very_long_line():
    """Put 300 m before the second vertex and 10 m beside the first leg of a line of 20,000 km."""
    line = Transect("A", [[0.0, 0.0], [60.0, 30.0], [170.0, 10.0]], WGS84)
    assert line.length > 1.7e7
    place = line.vertex_distances[1] - 300.0
    longitude, latitude, back = WGS84.fwd(0.0, 0.0, WGS84.inv(0.0, 0.0, 60.0, 30.0)[0], place)
    longitude, latitude, _ = WGS84.fwd(longitude, latitude, back + 270.0, 10.0)
    np.testing.assert_allclose(line.project(longitude, latitude), (place, 10.0), rtol=0, atol=0.01)


def test_outside_a_corner_the_vertex_is_the_foot():
    line = Transect("A", [[0.0, 0.0], [1.0, 0.0], [1.0, 1.0]], WGS84)
    along, across = line.project(np.array([1.2, 0.8]), np.array([-0.3, 0.3]))
    assert along[0] == pytest.approx(line.vertex_distances[1], abs=1e-3)
    assert across[0] == pytest.approx(separation(1.2, -0.3, 1.0, 0.0), abs=1e-3)
    assert across[1] < 0


def test_picks_without_a_place_have_none_and_shapes_are_kept():
    along, across = Transect("A", BENT, WGS84).project(np.array([[13.0, np.nan]]), np.array([[40.0, 41.0]]))
    assert along.shape == across.shape == (1, 2)
    assert np.isnan([along[0, 1], across[0, 1]]).all()
    assert np.isfinite([along[0, 0], across[0, 0]]).all()
    assert Transect("A", BENT, WGS84).project(np.empty(0), np.empty(0))[0].shape == (0,)


def test_greatest_turn():
    """A right angle counts 90 degrees, at once or in nine steps; a zigzag counts one turn; a geodesic 0."""
    sphere = Geod(a=6371000.0, b=6371000.0)
    small = 1e-3
    assert Transect("A", [[0, 0], [small, 0], [small, small]], sphere).greatest_turn == pytest.approx(90.0, abs=1e-4)
    angle = np.radians(np.arange(0, 91, 10))
    steps = np.concatenate([[[0.0, 0.0]], np.cumsum(np.column_stack([np.cos(angle), np.sin(angle)]), axis=0)])
    assert Transect("A", steps * small, sphere).greatest_turn == pytest.approx(90.0, abs=1e-3)
    zigzag = np.column_stack([np.arange(8), np.arange(8) % 2]) * small
    assert Transect("A", zigzag, sphere).greatest_turn == pytest.approx(90.0, abs=1e-4)
    assert Transect("A", [[0, 50], [90, 50]], sphere).greatest_turn == 0.0


@settings(max_examples=60, deadline=None)
@given(
    st.lists(st.tuples(st.floats(-400, 400), st.floats(-90, 90)), min_size=2, max_size=6),
    st.floats(0.001, 3.0),
)
def test_any_line_has_stations_from_its_first_vertex_to_its_last(vertices, share):
    try:
        line = Transect("A", vertices, WGS84)
    except DownwarpError as error:
        assert "fewer than two different vertices" in str(error)
        return
    stations = line.stations(line.length * share)
    assert stations.distance.size == max(1, round(1 / share)) + 1 or abs(1 / share % 1 - 0.5) < 1e-3
    assert separation(stations.longitude[[0, -1]], stations.latitude[[0, -1]], *line.vertices[[0, -1]].T).max() < 1e-3
    assert np.isfinite(stations.azimuth).all()
    assert line.vertices[0, 0] - 1e-9 <= stations.longitude[0] <= line.vertices[0, 0] + 1e-9


@pytest.mark.parametrize(
    ("vertices", "message"),
    [
        ([[1.0, 2.0]], "Transect Ridge 4 has fewer than two different vertices"),
        ([[1.0, 2.0], [1.0, 2.0]], "fewer than two different vertices"),
        ([[180.0, 2.0], [-180.0, 2.0]], "fewer than two different vertices"),
        (np.empty((0, 2)), "fewer than two different vertices"),
        ([[1.0, 2.0], [np.nan, 2.0]], "Transect Ridge 4 holds a value that is not a finite number"),
        ([[1.0, 2.0], [1.0, -90.5]], "Transect Ridge 4 has a latitude of -90.5 degrees"),
        ([[1.0, 2.0, 3.0]], "vertices of shape"),
    ],
)
def test_lines_that_are_none(vertices, message):
    with pytest.raises(DownwarpError, match=message):
        Transect("Ridge 4", vertices, WGS84)


@pytest.mark.parametrize(
    ("step", "message"),
    [(0.0, "STEP_KM is 0"), (-1.0, "STEP_KM is -0.001"), (np.nan, "STEP_KM is nan"), (0.01, "stations; it may have")],
)
def test_steps_that_are_none(step, message):
    with pytest.raises(DownwarpError, match=message):
        Transect("A", BENT, WGS84).stations(step)


def test_the_limit_on_stations_is_reached_exactly():
    line = Transect("A", BENT[:2], WGS84)
    assert line.stations(line.length / (module.MOST_STATIONS - 1)).distance.size == module.MOST_STATIONS
    with pytest.raises(DownwarpError, match="STEP_KM"):
        line.stations(line.length / module.MOST_STATIONS)


class ScalarsForOne(Geod):
    """A Geod that returns scalars for arrays of one element, as pyproj 3.5 does."""

    def inv(self, *arguments, **options):
        return self._plain(super().inv(*arguments, **options))

    def fwd(self, *arguments, **options):
        return self._plain(super().fwd(*arguments, **options))

    @staticmethod
    def _plain(results):
        return tuple(np.ravel(values)[0].item() if np.size(values) == 1 else values for values in results)


def test_a_pyproj_that_returns_scalars_for_arrays_of_one():
    one, other = (Transect("A", BENT[:2], geod(ellps="WGS84")) for geod in (Geod, ScalarsForOne))
    assert other.length == one.length
    np.testing.assert_array_equal(other.stations(1e9).longitude, one.stations(1e9).longitude)
    np.testing.assert_array_equal(other.project(13.0, 41.0), one.project(13.0, 41.0))


def test_inputs_are_left_untouched():
    vertices = np.array([[179.0, 1.0], [-179.0, 2.0], [-179.0, 2.0]])
    before = vertices.copy()
    line = Transect("A", vertices, WGS84)
    longitude = np.array([180.5, -179.5])
    line.project(longitude, np.array([1.0, 1.5]))
    line.offset(line.stations(10e3), np.array([1e3]))
    np.testing.assert_array_equal(vertices, before)
    np.testing.assert_array_equal(longitude, [180.5, -179.5])
