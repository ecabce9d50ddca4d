"""Picks laid onto a transect: along and across on the ellipsoid, within reach, in order."""

import numpy as np
import pytest
from downwarp_checkout.plugin.bridge.frames import Frame
from downwarp_checkout.plugin.bridge.picks import PickReader, number_of
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.transect import Transect
from pyproj import Geod, Transformer
from qgis.core import NULL, QgsCoordinateReferenceSystem, QgsFeature, QgsGeometry, QgsVectorLayer

WGS84 = Geod(ellps="WGS84")
LINE = Transect("A", [[10.0, 45.0], [14.0, 46.0]], WGS84)


def frame():
    return Frame.of(QgsCoordinateReferenceSystem("EPSG:4326"), "TRANSECTS")


def layer(rows, crs="EPSG:4326", kind="Point"):
    """Rows of (x, y, elevation, sigma)."""
    made = QgsVectorLayer(f"{kind}?crs={crs}&field=z:string(20)&field=s:double", "picks", "memory")
    features = []
    for x, y, elevation, sigma in rows:
        feature = QgsFeature(made.fields())
        feature.setAttributes([elevation, sigma])
        if x is not None:
            feature.setGeometry(QgsGeometry.fromWkt(f"{kind} ({x:.12f} {y:.12f})"))
        features.append(feature)
    made.dataProvider().addFeatures(features)
    return made


def beside(along, across):
    """Longitude and latitude at a distance along the line and to its right, m."""
    azimuth, _, _ = WGS84.inv(10.0, 45.0, 14.0, 46.0)
    longitude, latitude, back = WGS84.fwd(10.0, 45.0, azimuth, along)
    longitude, latitude, _ = WGS84.fwd(longitude, latitude, back + 180 + 90, across)
    return longitude, latitude


PLACES = [(200e3, 3e3, "-100", 5.0), (50e3, -9e3, "-200", NULL), (120e3, 11e3, "-300", 7.0), (90e3, 0.0, NULL, 7.0)]


def rows():
    return [(*beside(along, across), elevation, sigma) for along, across, elevation, sigma in PLACES]


def test_picks_within_reach_in_order():
    """Distances to a centimetre; the one too far and the one without elevation are left out; unknown sigma is NaN."""
    picks = PickReader(layer([*rows(), (None, None, "-1", 1.0)]), frame(), "z", "s", 10e3).on(LINE)
    np.testing.assert_allclose(picks.distance, [50e3, 200e3], atol=0.01)
    np.testing.assert_array_equal(picks.elevation, [-200, -100])
    np.testing.assert_array_equal(picks.sigma, [np.nan, 5.0])
    wider = PickReader(layer(rows()), frame(), "z", None, 12e3).on(LINE)
    np.testing.assert_allclose(wider.distance, [50e3, 120e3, 200e3], atol=0.01)
    assert np.isnan(wider.sigma).all()


def test_picks_beyond_the_ends_do_not_count():
    """Not even just beyond."""
    along = (("1", -1e3), ("2", LINE.length + 1e3), ("3", 1e3))
    picks = PickReader(layer([(*beside(x, 0.0), name, 1.0) for name, x in along]), frame(), "z", "s", 10e3).on(LINE)
    np.testing.assert_array_equal(picks.elevation, [3])


def test_a_projected_layer_and_one_of_several_points():
    """UTM zone 32 (WGS84); every vertex of a multipoint is a pick with the feature's elevation."""
    to_metres = Transformer.from_crs("EPSG:4326", "EPSG:32632", always_xy=True)
    projected = [(*to_metres.transform(x, y), z, s) for x, y, z, s in rows()]
    picks = PickReader(layer(projected, "EPSG:32632"), frame(), "z", "s", 10e3).on(LINE)
    np.testing.assert_allclose(picks.distance, [50e3, 200e3], atol=0.01)
    several = QgsVectorLayer("MultiPoint?crs=EPSG:4326&field=z:double", "picks", "memory")
    feature = QgsFeature(several.fields())
    feature.setAttributes([-5.0])
    one, other = beside(10e3, 0.0), beside(20e3, 0.0)
    feature.setGeometry(QgsGeometry.fromWkt(f"MultiPoint (({one[0]} {one[1]}), ({other[0]} {other[1]}))"))
    several.dataProvider().addFeatures([feature])
    picks = PickReader(several, frame(), "z", None, 10e3).on(LINE)
    np.testing.assert_allclose(picks.distance, [10e3, 20e3], atol=0.01)


def test_text_and_nothing_are_refused():
    """The messages name key and field."""
    with pytest.raises(DownwarpError, match="PICK_ELEVATION field z holds 'deep'; it takes numbers"):
        PickReader(layer([(10, 45, "deep", 1.0)]), frame(), "z", "s", 10e3)
    with pytest.raises(DownwarpError, match="PICKS holds no point"):
        PickReader(layer([]), frame(), "z", "s", 10e3)


def test_numbers_of_fields():
    """NULL and empty text are NaN, numbers in text are numbers."""
    assert np.isnan(number_of(NULL, "F"))
    assert np.isnan(number_of("", "F"))
    assert number_of("-12.5", "F") == -12.5
