"""Sinks of a run: made when asked for, with fields and geometry of their output, optional ones left out."""

import numpy as np
import pytest
from downwarp_checkout.plugin.bridge.fields import FIELDS
from downwarp_checkout.plugin.bridge.outputs import LABELS, Outputs, Track, add_sinks
from downwarp_checkout.plugin.bridge.rows import profile_row
from downwarp_checkout.plugin.core.bend import bend_profile
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.fit import fit_profile
from downwarp_checkout.plugin.core.profile import Profile
from downwarp_checkout.plugin.core.settings import BREAK_GIVEN, TRENCH, FitOptions
from qgis.core import (
    QgsCoordinateReferenceSystem,
    QgsProcessingAlgorithm,
    QgsProcessingContext,
    QgsProcessingUtils,
    QgsVectorLayer,
    QgsWkbTypes,
)

X = np.arange(0.0, 500e3 + 1, 10e3)
OPTIONS = FitOptions(setting=TRENCH, plate=1, break_at=BREAK_GIVEN, break_position=55e3)


class Algorithm(QgsProcessingAlgorithm):
    """The least that takes sinks."""

    def initAlgorithm(self, configuration=None):
        add_sinks(self, tuple(LABELS), required=("PROFILES", "STATIONS"))

    def name(self):
        return "least"

    def displayName(self):
        return "Least"

    def createInstance(self):
        return Algorithm()


@pytest.fixture(scope="module")
def result():
    flat = Profile("A", X, np.full(X.size, -5000.0))
    made = bend_profile(flat, OPTIONS, 25e3, end_shear=1e12, end_moment=8e16).stations.predicted
    noise = 10 * np.random.default_rng(1).standard_normal(X.size)
    return fit_profile(Profile("A", X, np.where(X < 55e3, -4000.0, made - 5000.0) + noise), OPTIONS)


@pytest.fixture
def algorithm(qgis_application):
    made = Algorithm()
    made.initAlgorithm()
    return made


TRACK = Track(X, 20.0 + X / 1e5, np.full(X.size, 45.0))


def outputs(algorithm, parameters, **more):
    context = QgsProcessingContext()
    crs = QgsCoordinateReferenceSystem("EPSG:4326")
    return Outputs(algorithm, parameters, context, crs, **more), context


def layers(made, context):
    return {name: QgsProcessingUtils.mapLayerFromString(where, context) for name, where in made.results.items()}


def test_everything_of_a_fit_is_written(algorithm, result):
    """All six outputs: as many rows as there are, in the output's CRS, with Z and M."""
    made, context = outputs(algorithm, dict.fromkeys(LABELS, "memory:"))
    made.open(tuple(LABELS))
    made.fitted(result, TRACK)
    made.failed("PROFILES", "B", "B lies outside the DEM.")
    made.flush()
    read = layers(made, context)
    assert set(read) == set(LABELS)
    for name, layer in read.items():
        assert [field.name() for field in layer.fields() if field.name() != "fid"] == list(FIELDS[name])
    counts = {name: layer.featureCount() for name, layer in read.items()}
    assert counts["PROFILES"] == 2
    assert counts["STATIONS"] == X.size
    assert counts["MARKERS"] == 4
    assert counts["PARAMETERS"] == len(result.parameters)
    assert counts["MISFIT"] == len(result.best.misfit)
    assert counts["CHOICES"] == len(result.choices)
    types = QgsWkbTypes.Type
    kinds = {name: layer.wkbType() for name, layer in read.items()}
    assert kinds["PROFILES"] == types.LineStringZM
    assert kinds["STATIONS"] == kinds["MARKERS"] == types.PointZ
    assert kinds["PARAMETERS"] == kinds["MISFIT"] == kinds["CHOICES"] == types.NoGeometry
    assert read["PROFILES"].crs().authid() == "EPSG:4326"
    line = next(read["PROFILES"].getFeatures()).geometry().constGet()
    on = np.isfinite(result.best.bent.stations.predicted)
    assert [point.m() for point in line.points()] == pytest.approx((X[on] / 1e3).tolist())
    for marker in read["MARKERS"].getFeatures():
        point = marker.geometry().constGet()
        assert point.x() == pytest.approx(20.0 + marker["distance_km"] / 100)
        assert point.z() == pytest.approx(marker["elevation_m"])


def test_optional_sinks_that_are_not_wanted_are_left_out(algorithm, result):
    """Nothing under their names, and no error."""
    made, _ = outputs(algorithm, {"PROFILES": "memory:", "STATIONS": "memory:"})
    made.open(tuple(LABELS))
    made.fitted(result, TRACK)
    assert set(made.results) == {"PROFILES", "STATIONS"}


def test_without_places_the_layers_have_no_geometry(algorithm, result):
    """Stations from a table."""
    made, context = outputs(algorithm, dict.fromkeys(LABELS, "memory:"), located=False)
    made.fitted(result, None)
    made.flush()
    for layer in layers(made, context).values():
        assert layer.wkbType() == QgsWkbTypes.Type.NoGeometry
        assert layer.featureCount() > 0


def test_a_file_that_cannot_be_written_is_said(algorithm):
    """A folder that is not there: before anything is worked on."""
    with pytest.raises(DownwarpError, match="PROFILES cannot be written: there is no folder /nowhere/at"):
        outputs(algorithm, {"PROFILES": "/nowhere/at/all.gpkg", "STATIONS": "memory:"})


def test_files_keep_values_and_nulls(algorithm, result, tmp_path):
    """A GeoPackage read back: numbers to the last digit, NULL where a station carries no plate."""
    made, _ = outputs(algorithm, {"PROFILES": str(tmp_path / "p.gpkg"), "STATIONS": str(tmp_path / "s.gpkg")})
    made.fitted(result, TRACK)
    made.flush()
    where = made.results["STATIONS"]
    del made
    read = list(QgsVectorLayer(where, "stations", "ogr").getFeatures())
    deflection = result.best.bent.stations.deflection
    for feature, value in zip(read, deflection):
        assert (feature["deflection_m"] == value) if np.isfinite(value) else not feature["deflection_m"]


def test_rows_of_unresolved_plates_have_no_thickness(algorithm, result):
    """te_km of STATIONS is NULL where the profile's is."""
    made, context = outputs(algorithm, {"PROFILES": "memory:", "STATIONS": "memory:"})
    made.bent(result.best.bent, {**profile_row(result), "te_km": None}, TRACK, thickness_known=False)
    made.flush()
    stations = layers(made, context)["STATIONS"]
    assert not [feature for feature in stations.getFeatures() if feature["te_km"]]


def test_places_between_stations():
    """A marker lies on the straight line between its neighbours, in the output's CRS."""
    assert TRACK.at(5e3) == (pytest.approx(20.05), 45.0)
