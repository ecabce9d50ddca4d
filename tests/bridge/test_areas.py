"""Which places lie inside polygons, in any CRS and on either side of the antimeridian."""

import numpy as np
import pytest
from downwarp_checkout.plugin.bridge.areas import Areas
from downwarp_checkout.plugin.bridge.frames import Frame
from downwarp_checkout.plugin.core.errors import DownwarpError
from qgis.core import QgsCoordinateReferenceSystem, QgsFeature, QgsGeometry, QgsVectorLayer


def areas(*polygons, crs="EPSG:4326", label="LOAD_AREA"):
    layer = QgsVectorLayer(f"Polygon?crs={crs}", "areas", "memory")
    features = []
    for wkt in polygons:
        feature = QgsFeature()
        if wkt:
            feature.setGeometry(QgsGeometry.fromWkt(wkt))
        features.append(feature)
    layer.dataProvider().addFeatures(features)
    frame = Frame.of(QgsCoordinateReferenceSystem("EPSG:4326"), "TRANSECTS")
    return Areas(layer, frame, label)


def test_polygons_count_together_and_holes_do_not():
    """Two squares, one with a hole; a feature without geometry is passed over."""
    with_hole = "Polygon ((0 0, 4 0, 4 4, 0 4, 0 0), (1 1, 2 1, 2 2, 1 2, 1 1))"
    made = areas(with_hole, "Polygon ((10 0, 11 0, 11 1, 10 0))", "")
    inside = made.contain(np.array([0.5, 1.5, 3.0, 10.9, 10.1, 7.0]), np.array([0.5, 1.5, 3.0, 0.5, 0.9, 0.5]))
    np.testing.assert_array_equal(inside, [True, False, True, True, False, False])


def test_share_of_legs():
    """A square from 1 to 2.25 degrees along legs of 1 degree: none, all, a quarter; the same across the antimeridian."""
    made = areas("Polygon ((1 -1, 2.25 -1, 2.25 1, 1 1, 1 -1))")
    np.testing.assert_allclose(made.share(np.arange(5.0), np.zeros(5)), [0.0, 1.0, 0.25, 0.0])
    made = areas("Polygon ((179.5 -1, 181 -1, 181 1, 179.5 1, 179.5 -1))")
    np.testing.assert_allclose(made.share(np.array([178.0, 179.0, -180.0, -179.0]), np.zeros(4)), [0.0, 0.5, 1.0])


def test_shapes_are_kept():
    """A swath's places, (strips, stations)."""
    places = np.full((3, 5), 1.0)
    assert areas("Polygon ((0 0, 4 0, 4 4, 0 4, 0 0))").contain(places, places).shape == (3, 5)


def test_longitudes_count_by_whole_turns():
    """A polygon at 190 degrees holds -170, one at -170 holds 190."""
    for west in (189, -171):
        made = areas(f"Polygon (({west} 0, {west + 2} 0, {west + 2} 2, {west} 2, {west} 0))")
        np.testing.assert_array_equal(made.contain(np.array([190.0, -170.0, 10.0]), np.ones(3)), [True, True, False])


def test_a_projected_layer():
    """UTM zone 33: a square of 20 km round 15 E, 45 N (500000 E; the northing is PROJ's own)."""
    from pyproj import Transformer

    x, y = Transformer.from_crs("EPSG:4326", "EPSG:32633", always_xy=True).transform(15.0, 45.0)
    corners = [(x + a, y + b) for a, b in ((-1e4, -1e4), (1e4, -1e4), (1e4, 1e4), (-1e4, 1e4), (-1e4, -1e4))]
    ring = ", ".join(f"{a} {b}" for a, b in corners)
    made = areas(f"Polygon (({ring}))", crs="EPSG:32633")
    np.testing.assert_array_equal(made.contain(np.array([15.0, 15.12, 15.14]), np.full(3, 45.0)), [True, True, False])


def test_a_bow_tie_is_mended():
    """An outline that crosses itself, as drawn by hand, still holds the places in one of its wings."""
    made = areas("Polygon ((0 0, 4 4, 4 0, 0 4, 0 0))")
    assert made.contain(np.array([3.5]), np.array([2.0]))[0] or made.contain(np.array([0.5]), np.array([2.0]))[0]


def test_a_layer_without_polygons_is_refused():
    """The message names the key."""
    with pytest.raises(DownwarpError, match="FIT_EXCLUDE holds no polygon"):
        areas("", label="FIT_EXCLUDE")
