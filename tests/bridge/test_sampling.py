"""From a transect to a profile: what is sampled where, swath, alignment, areas, picks, and what is said of it."""

import numpy as np
import pytest
from downwarp_checkout.plugin.bridge.areas import Areas
from downwarp_checkout.plugin.bridge.frames import Frame
from downwarp_checkout.plugin.bridge.rasters import RasterReader
from downwarp_checkout.plugin.bridge.sampling import Sampler
from downwarp_checkout.plugin.core.errors import Cancelled, DownwarpError
from downwarp_checkout.plugin.core.transect import Transect
from pyproj import Geod
from qgis.core import QgsCoordinateReferenceSystem, QgsFeature, QgsGeometry, QgsRasterLayer, QgsVectorLayer

pytest.importorskip("osgeo.gdal")

import invented
from invented import CELL, KM_PER_DEGREE, LENGTH_KM, equator_line, write_grid

WGS84 = Geod(ellps="WGS84")
ROWS, COLUMNS, WEST = 60, 500, 18.0
LONGITUDE = WEST + CELL * np.arange(COLUMNS)
LATITUDE = (ROWS / 2 - 0.5 - np.arange(ROWS)) * CELL
KM_NORTH = 110.574
"""Kilometres in a degree of latitude at the equator, from memory."""


def reader(path, values, label="DEM"):
    write_grid(path, values, WEST - CELL / 2, ROWS / 2 * CELL, CELL)
    frame = Frame.of(QgsCoordinateReferenceSystem("EPSG:4326"), "TRANSECTS")
    return RasterReader(QgsRasterLayer(str(path), label), 1, frame, label)


def grid(east, north):
    """Values from a function of km east of 20 E and km north of the equator."""
    return east[None, :] + north[:, None]


EAST, NORTH = (LONGITUDE - 20.0) * KM_PER_DEGREE, LATITUDE * KM_NORTH
LINE = Transect("A", np.array(equator_line(20.0)), WGS84)


@pytest.fixture(scope="module")
def ramp(tmp_path_factory):
    """Relief that rises by a metre to the km, eastward and northward."""
    return reader(tmp_path_factory.mktemp("ramp") / "dem.tif", grid(EAST, NORTH))


def test_relief_and_step(ramp):
    """Values at the stations; the step is the cell size unless given, and the resolution always the cell size."""
    stations, profile = Sampler(ramp).sample(LINE)
    cell = CELL * (KM_PER_DEGREE * KM_NORTH) ** 0.5 * 1e3
    assert stations.step == pytest.approx(cell, rel=0.01)
    assert profile.resolution == pytest.approx(cell, rel=1e-3)
    np.testing.assert_allclose(profile.relief, profile.distance / 1e3, atol=1e-3)
    assert profile.observed is profile.sigma is profile.in_load_area is profile.excluded is None
    coarse, other = Sampler(ramp, step=50e3).sample(LINE)
    assert coarse.distance.size == round(LENGTH_KM / 50) + 1
    assert other.resolution == pytest.approx(cell, rel=1e-3)


def test_a_swath_is_the_mean_and_leaves_the_strips_levels_to_the_regional(ramp):
    """Two lines at -20 and 20 km, 40 m apart in level all along: the mean is the middle's, and sigma is nothing."""
    _, profile = Sampler(ramp, step=20e3, width=80e3, strips=2).sample(LINE)
    np.testing.assert_allclose(profile.relief, profile.distance / 1e3, atol=0.02)
    np.testing.assert_allclose(profile.sigma, 0.0, atol=0.05)


def test_alignment_brings_a_slanting_trench_together(tmp_path):
    """A V-shaped trench whose axis runs 30 degrees off: aligned strips keep its full depth, averaged ones lose it."""
    axis = 300.0 + NORTH[:, None] * np.tan(np.radians(30))
    slanting = reader(tmp_path / "dem.tif", -6000.0 + 20.0 * np.abs(EAST[None, :] - axis))
    keys = {"step": 2.2e3, "width": 100e3, "strips": 11}
    _, plain = Sampler(slanting, **keys).sample(LINE)
    _, aligned = Sampler(slanting, **keys, align=True).sample(LINE)
    assert np.nanmin(aligned.relief) == pytest.approx(-6000, abs=40)
    assert np.nanmin(plain.relief) > -5800
    lowest = aligned.distance[np.nanargmin(aligned.relief)]
    assert lowest == pytest.approx(300e3, abs=3e3)
    assert aligned.remarks == ()


def test_strips_without_a_low_of_their_own_are_told(tmp_path):
    """The axis runs out of the line's start on one side: those strips are left out, and the remark counts them."""
    axis = 20.0 + NORTH[:, None] * np.tan(np.radians(45))
    slanting = reader(tmp_path / "dem.tif", -6000.0 + 20.0 * np.abs(EAST[None, :] - axis))
    _, profile = Sampler(slanting, step=2.2e3, width=100e3, strips=10, align=True).sample(LINE)
    assert profile.remarks == ("3 of 10 swath lines have no lowest point of their own and are left out",)


def test_observed_comes_with_its_own_sigma_and_resolution(tmp_path, ramp):
    """The swath's spread is that of the bent surface where one is given."""
    level = reader(tmp_path / "below.tif", grid(0 * EAST, 0 * NORTH) - 3000.0, "OBSERVED")
    _, profile = Sampler(ramp, observed=level, step=20e3, width=80e3, strips=4).sample(LINE)
    np.testing.assert_allclose(profile.observed, -3000)
    np.testing.assert_allclose(profile.sigma, 0, atol=1e-9)


def test_areas_mark_stations(ramp):
    """Polygons of load area and exclusion, in longitude."""
    def polygon(west, east, label):
        layer = QgsVectorLayer("Polygon?crs=EPSG:4326", "areas", "memory")
        feature = QgsFeature()
        feature.setGeometry(QgsGeometry.fromWkt(f"Polygon (({west} -1, {east} -1, {east} 1, {west} 1, {west} -1))"))
        layer.dataProvider().addFeatures([feature])
        return Areas(layer, Frame.of(QgsCoordinateReferenceSystem("EPSG:4326"), "TRANSECTS"), label)

    sampler = Sampler(
        ramp, load_area=polygon(21, 22, "LOAD_AREA"), excluded=polygon(23, 24, "FIT_EXCLUDE"), step=10e3
    )
    _, profile = sampler.sample(LINE)
    longitude = 20.0 + profile.distance / 1e3 / KM_PER_DEGREE
    np.testing.assert_array_equal(profile.in_load_area, (longitude > 21) & (longitude < 22))
    np.testing.assert_array_equal(profile.excluded, (longitude > 23) & (longitude < 24))


def test_lines_off_the_grid(tmp_path, ramp):
    """Outside altogether: an error; partly: NaN there; on the grid but without data: another error."""
    with pytest.raises(DownwarpError, match="Transect far lies outside the DEM"):
        Sampler(ramp).sample(Transect("far", [[100.0, 0.0], [105.0, 0.0]], WGS84))
    _, half = Sampler(ramp, step=10e3).sample(Transect("half", [[15.0, 0.0], [21.0, 0.0]], WGS84))
    assert np.isnan(half.relief[0])
    assert np.isfinite(half.relief[-1])
    void = reader(tmp_path / "void.tif", grid(EAST, NORTH) * np.nan)
    with pytest.raises(DownwarpError, match="Transect A: the DEM has no data anywhere along the line"):
        Sampler(void).sample(LINE)
    with pytest.raises(DownwarpError, match="Transect A: OBSERVED has no data anywhere along the line"):
        Sampler(ramp, observed=void).sample(LINE)


def test_cancel_passes_through(ramp):
    """What progress raises while windows are read stops the sampling."""
    def stop(fraction):
        raise Cancelled

    with pytest.raises(Cancelled):
        Sampler(ramp).sample(LINE, stop)


def test_invented_ground_is_sampled_as_made(tmp_path):
    """The trench of the other tests, through a grid of 2.2 km: within a few centimetres of its closed form."""
    trench = reader(tmp_path / "trench.tif", np.tile(invented.trench(EAST), (ROWS, 1)))
    _, profile = Sampler(trench).sample(LINE)
    np.testing.assert_allclose(profile.relief, invented.trench(profile.distance / 1e3), atol=0.3)
