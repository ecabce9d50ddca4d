"""pyproj's functions keep the shape of arrays, of those of one element, too, and in silence."""

import warnings

import numpy as np
import pytest
from downwarp_checkout.plugin.core.by_pyproj import in_shape
from pyproj import Geod, Proj, Transformer

SHAPES = [(), (0,), (1,), (1, 1), (2, 3)]


@pytest.mark.parametrize("shape", SHAPES)
def test_shape_is_kept_without_a_warning(shape):
    """There and back by each kind of function: places come back, to 1e-9 degrees, in the shape that they had."""
    ellipsoid = Geod(ellps="WGS84")
    to_plane = Transformer.from_crs(4326, 32733, always_xy=True)
    plane = Proj("+proj=aeqd +lon_0=15 +lat_0=-20")
    longitude, latitude = np.full(shape, 14.0), np.full(shape, -21.0)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        azimuth, _, length = in_shape(ellipsoid.inv, np.full(shape, 13.0), latitude, longitude, np.full(shape, -20.5))
        there = in_shape(ellipsoid.fwd, np.full(shape, 13.0), latitude, azimuth, length)
        by_crs = in_shape(to_plane.transform, *in_shape(to_plane.transform, longitude, latitude), direction="INVERSE")
        by_projection = in_shape(plane, *in_shape(plane, longitude, latitude), inverse=True)
    places = [there[0], there[1], *by_crs, *by_projection]
    for found, expected in zip(places, [longitude, np.full(shape, -20.5), *(longitude, latitude) * 2]):
        assert found.shape == shape
        assert found == pytest.approx(expected, abs=1e-9)
