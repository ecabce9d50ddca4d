"""ALONG_STRIKE: all transects of a run in order along strike, with the values of PROFILES."""

import numpy as np
import pytest

pytest.importorskip("qgis")

import invented
from downwarp_checkout.plugin.bridge import run_report
from downwarp_checkout.plugin.bridge.fields import FIELDS
from invented import AXIS_KM, CELL, KM_PER_DEGREE, LENGTH_KM, STEP_KM, lines_layer, write_grid
from pyproj import Geod
from running import column, run

SINKS = ("PROFILES", "STATIONS", "MARKERS", "PARAMETERS", "ALONG_STRIKE")
LATITUDES = np.array([0.3, -0.9, 0.9, 0.0, -0.3, 0.6, -0.6])
"""Lines every 0.3 degrees of latitude, out of order."""
NOT_OF_PROFILES = {
    "along_strike_km", "place_km", "end_shear_low_n_per_m", "end_shear_high_n_per_m", "end_moment_low_n",
    "end_moment_high_n",
}  # fmt: skip


@pytest.fixture(scope="module")
def ground(tmp_path_factory):
    """A trench that runs north, its relief the same on every parallel but for roughness; a line on each latitude."""
    rng = np.random.default_rng(8)
    columns, rows = 500, 120
    longitude = 18.0 + CELL * np.arange(columns)
    relief = invented.trench((longitude - 20.0) * KM_PER_DEGREE) + rng.normal(0.0, 20.0, (rows, columns))
    dem = write_grid(tmp_path_factory.mktemp("margin") / "dem.tif", relief, 18.0 - CELL / 2, rows / 2 * CELL, CELL)
    end = 20.0 + LENGTH_KM / KM_PER_DEGREE
    lines = lines_layer([[(20.0, at), (end, at)] for at in LATITUDES], names=[f"at {at}" for at in LATITUDES])
    return {"TRANSECTS": lines, "NAME_FIELD": "name", "DEM": dem, "SETTING": 1, "STEP_KM": 2 * STEP_KM}


@pytest.fixture(scope="module")
def fitted(ground):
    return run("fittransects", ground, sinks=SINKS)


def test_values_are_those_of_profiles(fitted):
    """Every field that PROFILES has as well is the same there; bounds of the end forces are those of PARAMETERS."""
    profiles = {row["transect"]: row for row in fitted["PROFILES"]}
    assert set(fitted["ALONG_STRIKE"][0]) - {"geometry"} == set(FIELDS["ALONG_STRIKE"])
    shared = set(FIELDS["ALONG_STRIKE"]) & set(FIELDS["PROFILES"])
    assert shared == set(FIELDS["ALONG_STRIKE"]) - NOT_OF_PROFILES
    for row in fitted["ALONG_STRIKE"]:
        for name in shared:
            assert row[name] == profiles[row["transect"]][name], name
        bounds = {
            each["parameter"]: (each["low"], each["high"])
            for each in fitted["PARAMETERS"]
            if each["transect"] == row["transect"]
        }
        assert (row["end_shear_low_n_per_m"], row["end_shear_high_n_per_m"]) == bounds["end_shear"]
        assert (row["end_moment_low_n"], row["end_moment_high_n"]) == bounds["end_moment"]
        assert row["end_shear_low_n_per_m"] < row["end_shear_n_per_m"] < row["end_shear_high_n_per_m"]
        assert row["place_km"] == row["break_km"]


def test_order_and_distances_are_those_of_the_lines(fitted):
    """The geodesic along the meridian from line to line (Geod.inv), from the end whose line comes first."""
    rows = fitted["ALONG_STRIKE"]
    southward = sorted(LATITUDES)
    assert [row["transect"] for row in rows] == [f"at {at}" for at in southward]
    places = at_the_axis(np.array(southward))
    _, _, steps = Geod(ellps="WGS84").inv(np.zeros(6), places[:-1], np.zeros(6), places[1:])
    np.testing.assert_allclose(column(rows, "along_strike_km"), np.append(0, np.cumsum(steps)) / 1e3, rtol=1e-4)
    for at, row in zip(southward, rows):
        point = row["geometry"].asPoint()
        _, _, distance = Geod(ellps="WGS84").inv(20.0, at, point.x(), point.y())
        assert distance / 1e3 == pytest.approx(row["place_km"], abs=0.01)


def test_the_report_takes_the_same_distances(ground, fitted, tmp_path, monkeypatch):
    """Its figure along strike stands over them."""
    taken = {}

    def write_report(path, transects, *more):
        taken.update((each.result.best.bent.problem.profile.name, each.along) for each in transects)
        path.write_text("read", encoding="utf-8")

    monkeypatch.setattr(run_report, "write_report", write_report)
    run("fittransects", {**ground, "REPORT": str(tmp_path / "report.html")}, sinks=("PROFILES", "STATIONS"))
    assert taken == {
        row["transect"]: pytest.approx(1e3 * row["along_strike_km"], abs=1e-6) for row in fitted["ALONG_STRIKE"]
    }
    assert [path.name for path in tmp_path.iterdir()] == ["report.html"]


def test_stations_give_the_same(fitted):
    """fitstations on STATIONS: the same transects in the same order at the same distances."""
    layer = points_layer(fitted["STATIONS"])
    again = run("fitstations", {"INPUT": layer, "SETTING": 1}, sinks=("PROFILES", "STATIONS", "ALONG_STRIKE"))
    one, other = fitted["ALONG_STRIKE"], again["ALONG_STRIKE"]
    assert [row["transect"] for row in other] == [row["transect"] for row in one]
    np.testing.assert_allclose(column(other, "along_strike_km"), column(one, "along_strike_km"), rtol=1e-4)


def test_without_geometry_there_is_the_order_of_the_input_and_no_distance(fitted):
    """A plain table of stations: rows as they came, along_strike_km NULL, no geometry."""
    layer = points_layer(fitted["STATIONS"], located=False)
    again = run("fitstations", {"INPUT": layer, "SETTING": 1}, sinks=("PROFILES", "STATIONS", "ALONG_STRIKE"))
    rows = again["ALONG_STRIKE"]
    assert [row["transect"] for row in rows] == [f"at {at}" for at in LATITUDES]
    assert {row["along_strike_km"] for row in rows} == {None}
    assert {row["geometry"] for row in rows} == {None}
    profiles = {row["transect"]: row["te_km"] for row in again["PROFILES"]}
    assert {row["transect"]: row["te_km"] for row in rows} == profiles


def test_transects_that_fail_are_left_out(ground):
    """A line off the DEM has its row in PROFILES; along strike it has no place. Round the rest it makes no difference."""
    end = 20.0 + LENGTH_KM / KM_PER_DEGREE
    lines = lines_layer([[(20.0, 0.3), (end, 0.3)], [(50.0, 0.0), (55.0, 0.0)], [(20.0, 0.0), (end, 0.0)]])
    result = run("fittransects", {**ground, "TRANSECTS": lines}, sinks=("PROFILES", "STATIONS", "ALONG_STRIKE"))
    assert len(result["PROFILES"]) == 3
    assert [row["transect"] for row in result["ALONG_STRIKE"]] == ["line 1", "line 3"]
    _, _, step = Geod(ellps="WGS84").inv(0.0, 0.0, 0.0, at_the_axis(0.3))
    np.testing.assert_allclose(column(result["ALONG_STRIKE"], "along_strike_km"), [0.0, step / 1e3], rtol=1e-4)


def at_the_axis(latitude):
    """Latitude, degrees, at which a great circle between two places on one parallel crosses the trench's axis."""
    half = np.radians(LENGTH_KM / KM_PER_DEGREE / 2)
    off = np.radians(AXIS_KM / KM_PER_DEGREE) - half
    return np.degrees(np.arctan(np.tan(np.radians(latitude)) * np.cos(off) / np.cos(half)))


def points_layer(stations, located=True):
    """Rows of STATIONS as a layer in memory."""
    from qgis.core import QgsFeature, QgsVectorLayer

    names = ("transect", "distance_km", "dem_m")
    fields = "field=transect:string&field=distance_km:double&field=dem_m:double"
    layer = QgsVectorLayer(f"Point?crs=EPSG:4326&{fields}" if located else f"None?{fields}", "stations", "memory")
    features = []
    for row in stations:
        feature = QgsFeature(layer.fields())
        feature.setAttributes([row[name] for name in names])
        if located:
            feature.setGeometry(row["geometry"])
        features.append(feature)
    layer.dataProvider().addFeatures(features)
    return layer
