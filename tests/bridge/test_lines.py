"""Line features to transects and back, against pyproj and identities between CRSs."""

import numpy as np
import pytest
from downwarp_checkout.plugin.bridge import lines
from downwarp_checkout.plugin.bridge.frames import Frame
from downwarp_checkout.plugin.core.errors import DownwarpError
from pyproj import Geod, Transformer
from qgis.core import QgsCoordinateReferenceSystem, QgsFeature, QgsGeometry, QgsVectorLayer

WGS84 = Geod(ellps="WGS84")


def frame(crs):
    return Frame.of(QgsCoordinateReferenceSystem(crs), "TRANSECTS")


def feature(wkt):
    result = QgsFeature(7)
    result.setGeometry(QgsGeometry.fromWkt(wkt))
    return result


def wkt_of(vertices):
    return "LineString (" + ", ".join(f"{x:.12f} {y:.12f}" for x, y in vertices) + ")"


def separation(one, other):
    return np.abs(WGS84.inv(one.longitude, one.latitude, other.longitude, other.latitude)[2])


@pytest.mark.parametrize("crs", ["EPSG:32633", "EPSG:3857", "ESRI:54009", "EPSG:3035", "EPSG:32661", "EPSG:4979"])
def test_a_line_gives_the_same_stations_in_every_crs(crs):
    """The same vertices in degrees and in a CRS of the same ellipsoid: stations agree to a millimetre.

    (EPSG:3035 stands on GRS80, whose flattening differs in the eighth digit.)
    """
    vertices = np.array([[10.0, 45.0], [16.0, 48.0], [22.0, 47.0]])
    x, y = Transformer.from_crs("EPSG:4326", crs, always_xy=True).transform(*vertices.T)
    degrees = lines.transect(feature(wkt_of(vertices)), frame("EPSG:4326"), "A")
    projected = lines.transect(feature(wkt_of(np.column_stack([x, y]))), frame(crs), "A")
    assert projected.length == pytest.approx(degrees.length, rel=1e-9)
    assert separation(projected.stations(5e3), degrees.stations(5e3)).max() < 1e-3
    assert projected.length == pytest.approx(WGS84.line_length(*vertices.T), rel=1e-9)


def test_the_ellipsoid_is_that_of_the_crs():
    """EPSG:27700 stands on Airy 1830 (a 6377563.396 m, registry value), EPSG:27572 on Clarke 1880 IGN in grads."""
    assert frame("EPSG:27700").ellipsoid.a == pytest.approx(6377563.396)
    assert frame("EPSG:27572").ellipsoid.a == pytest.approx(6378249.2)


def test_grads_and_a_prime_meridian_other_than_greenwich():
    """EPSG:4807 counts grads from Paris, 2.33722917 degrees east of Greenwich; a grad is 0.9 degrees.

    Its lengths are those of Clarke 1880 IGN, and its datum shift to EPSG:4326 is PROJ's own.
    """
    paris = frame("EPSG:4807")
    line = lines.transect(feature("LineString (1 50, 2 51)"), paris, "A")
    np.testing.assert_allclose(line.vertices, [[0.9, 45.0], [1.8, 45.9]], atol=1e-12)
    clarke = Geod(a=6378249.2, b=6356515.0)
    assert line.length == pytest.approx(clarke.line_length([0.9, 1.8], [45.0, 45.9]), rel=1e-9)
    np.testing.assert_allclose(paris.from_degrees([0.9, 1.8], [45.0, 45.9]), [[1.0, 2.0], [50.0, 51.0]], atol=1e-11)
    direct = Transformer.from_crs("EPSG:4807", "EPSG:4326", always_xy=True).transform(1.0, 50.0)
    stepwise = Transformer.from_crs(paris.geographic, "EPSG:4326", always_xy=True).transform(0.9, 45.0)
    np.testing.assert_allclose(stepwise, direct, rtol=0, atol=1e-9)


def test_a_rotated_pole_is_turned_upright():
    """A grid whose pole is rotated: the line's length is that on the ellipsoid, not that of its rotated degrees."""
    crs = QgsCoordinateReferenceSystem()
    crs.createFromProj("+proj=ob_tran +o_proj=longlat +o_lon_p=-162 +o_lat_p=39.25 +lon_0=180 +datum=WGS84 +no_defs")
    rotated = Frame.of(crs, "TRANSECTS")
    vertices = np.array([[10.0, 50.0], [12.0, 47.0]])
    x, y = rotated.from_degrees(*vertices.T)
    assert np.abs(x - vertices[:, 0]).min() > 5.0
    line = lines.transect(feature(wkt_of(np.column_stack([x, y]))), rotated, "A")
    assert line.length == pytest.approx(WGS84.line_length(*vertices.T), rel=1e-8)
    # Round the pole, the rotated longitude passes 180 degrees and runs on.
    x, _ = rotated.from_degrees(np.linspace(-170.0, 170.0, 100), np.full(100, 60.0))
    assert np.abs(np.diff(x)).max() < 20.0
    assert np.abs(x).max() > 180.0


@pytest.mark.parametrize(
    "wkt",
    [
        "LineString (1 1, 2 2, 3 1)",
        "LineStringZM (1 1 5 6, 2 2 7 8, 3 1 9 0)",
        "MultiLineString ((1 1, 2 2, 3 1))",
        "MultiLineString ((1 1, 2 2), (2 2, 3 1))",
        "MultiLineString ((2 2, 3 1), (1 1, 2 2))",
        "CompoundCurve ((1 1, 2 2), (2 2, 3 1))",
        "MultiCurve ((1 1, 2 2), (2 2, 3 1))",
    ],
)
def test_kinds_of_line(wkt):
    line = lines.transect(feature(wkt), frame("EPSG:4326"), "A")
    np.testing.assert_array_equal(line.vertices, [[1, 1], [2, 2], [3, 1]])
    assert line.name == "A"


def test_curves_become_segments():
    """A half circle of radius 1 km in a projected CRS: pi km long, but for the scale (0.9996 to 1) and the chords."""
    line = lines.transect(
        feature("CircularString (499000 5000000, 500000 5001000, 501000 5000000)"), frame("EPSG:32633"), "A"
    )
    assert len(line.vertices) > 100
    assert line.length == pytest.approx(np.pi * 1e3 / 0.9996, rel=1e-4)
    assert line.greatest_turn == pytest.approx(180.0, abs=3.0)


def test_lines_across_the_antimeridian():
    """Drawn on past 180 degrees, jumping to -180, or cut in two parts there: one transect."""
    texts = (
        "LineString (178 51, 182 50)",
        "LineString (178 51, -178 50)",
        "LineString (-182 51, -178 50)",
        "MultiLineString ((178 51, 180 50.5), (-180 50.5, -178 50))",
    )
    whole, jump, west, cut = (lines.transect(feature(text), frame("EPSG:4326"), "A") for text in texts)
    for other in (jump, west):
        assert separation(whole.stations(1e4), other.stations(1e4)).max() < 1e-3
    np.testing.assert_allclose(cut.vertices, [[178, 51], [180, 50.5], [182, 50]])


@pytest.mark.parametrize("crs", ["EPSG:4326", "EPSG:4269", "EPSG:4807", "EPSG:32633", "EPSG:3857"])
def test_there_and_back(crs):
    """The first and last station written in the layer's CRS are the line's first and last vertices."""
    own = frame(crs)
    x, y = own.from_degrees(np.array([10.0, 16.0]), np.array([44.0, 47.0]))
    line = lines.transect(feature(wkt_of(np.column_stack([x, y]))), own, "A")
    stations = line.stations(1e4)
    written = lines.line(own, stations.longitude, stations.latitude)
    size = np.abs(x).max()
    for index, point in ((0, written.startPoint()), (1, written.endPoint())):
        assert point.x() == pytest.approx(x[index], abs=size * 1e-9)
        assert point.y() == pytest.approx(y[index], abs=size * 1e-9)


@pytest.mark.parametrize(("start", "finish"), [(178.0, 182.0), (178.0, -178.0), (-178.0, 178.0), (358.0, 362.0)])
@pytest.mark.parametrize("crs", ["EPSG:4326", "EPSG:4979"])
def test_written_longitudes_run_on_from_where_the_line_was_drawn(start, finish, crs):
    own = frame(crs)
    stations = lines.transect(feature(f"LineString ({start} 51, {finish} 50)"), own, "A").stations(5e3)
    x = np.array([point.x() for point in lines.points(own, stations.longitude, stations.latitude)])
    assert x[0] == pytest.approx(start, abs=1e-9)
    assert abs(x[-1] - x[0]) == pytest.approx(4.0, abs=1e-9)
    assert np.abs(np.diff(x)).max() < 0.2


def test_z_and_m_are_written_where_given():
    own = frame("EPSG:4326")
    longitude, latitude = np.array([1.0, 2.0]), np.array([3.0, 4.0])
    z, m = np.array([-50.0, np.nan]), np.array([0.0, 9.0])
    assert [point.asWkt() for point in lines.points(own, longitude, latitude)] == ["Point (1 3)", "Point (2 4)"]
    assert [point.is3D() for point in lines.points(own, longitude, latitude, z)] == [True, True]
    first, second = lines.points(own, longitude, latitude, z, m)
    assert (first.z(), first.m(), second.m()) == (-50.0, 0.0, 9.0)
    assert np.isnan(second.z())
    written = lines.line(own, longitude, latitude, z, m)
    assert (written.is3D(), written.isMeasure(), written.numPoints()) == (True, True, 2)
    assert (written.zAt(0), written.mAt(1)) == (-50.0, 9.0)
    assert not lines.line(own, longitude, latitude).is3D()
    assert lines.line(own, longitude, latitude, m=m).isMeasure()


def test_features_of_a_layer():
    layer = QgsVectorLayer("LineString?crs=EPSG:32633", "lines", "memory")
    layer.dataProvider().addFeatures([feature("LineString (400000 5000000, 700000 5100000)")])
    line = lines.transect(next(layer.getFeatures()), Frame.of(layer.crs(), "TRANSECTS"), "1")
    assert line.length == pytest.approx(np.hypot(300e3, 100e3), rel=1e-3)


@pytest.mark.parametrize(
    ("wkt", "message"),
    [
        ("", "Transect Arc 9 has no geometry"),
        ("LineString EMPTY", "Transect Arc 9 has no geometry"),
        ("Point (1 1)", "Transect Arc 9 is no line but Point"),
        ("Polygon ((0 0, 1 0, 1 1, 0 0))", "Transect Arc 9 is no line but Polygon"),
        ("LineString (1 1, 1 1)", "Transect Arc 9 has fewer than two different vertices"),
        ("MultiLineString ((1 1, 2 2), (3 3, 4 4))", "Transect Arc 9 has 2 parts that do not join end to end"),
        ("MultiLineString ((1 1, 2 2), (3 3, 2 2))", "Transect Arc 9 has 2 parts that do not join end to end"),
        ("LineString (1 1, 1 95)", "Transect Arc 9 has"),
        ("LineString (1 1, nan 5)", "Transect Arc 9 has"),
    ],
)
def test_features_that_draw_no_transect(wkt, message):
    with pytest.raises(DownwarpError, match=message):
        lines.transect(feature(wkt) if wkt else QgsFeature(3), frame("EPSG:4326"), "Arc 9")


def test_vertices_that_the_crs_cannot_express():
    with pytest.raises(DownwarpError, match="Transect Arc 9 has a vertex that lies outside"):
        lines.transect(feature("LineString (0 0, 90000000 90000000)"), frame("ESRI:54009"), "Arc 9")


def test_stations_that_the_crs_cannot_express():
    """An orthographic view of the Earth from above 0 N 0 E does not show 180 E."""
    crs = QgsCoordinateReferenceSystem()
    crs.createFromProj("+proj=ortho +lat_0=0 +lon_0=0 +datum=WGS84 +units=m +no_defs")
    with pytest.raises(DownwarpError, match=r"TRANSECTS has CRS .* which does not reach all stations"):
        lines.line(Frame.of(crs, "TRANSECTS"), np.array([0.0, 180.0]), np.array([0.0, 0.0]))


def test_layers_without_a_usable_crs():
    with pytest.raises(DownwarpError, match="TRANSECTS carries no CRS"):
        Frame.of(QgsCoordinateReferenceSystem(), "TRANSECTS")
    with pytest.raises(DownwarpError, match="TRANSECTS has CRS WGS 84, which gives no longitude"):
        frame("EPSG:4978")
