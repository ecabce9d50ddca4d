"""The checks of the fuzz suite do object to what is wrong: each is shown a planted fault."""

import math

import pytest

pytest.importorskip("qgis")

import sanity
from qgis.core import QgsFeature, QgsGeometry, QgsProcessingContext, QgsVectorLayer
from qt6 import findings


def layer(kind, fields, *rows):
    """A layer in memory; each row begins with its geometry as WKT."""
    columns = "&".join(f"field={name}:{'string' if name in sanity.TEXTS else 'double'}" for name in fields)
    result = QgsVectorLayer(f"{kind}?crs=EPSG:4326&{columns}" if kind != "None" else f"None?{columns}", "l", "memory")
    for wkt, *values in rows:
        feature = QgsFeature(result.fields())
        feature.setAttributes(list(values))
        if wkt:
            feature.setGeometry(QgsGeometry.fromWkt(wkt))
        result.dataProvider().addFeatures([feature])
    return result


def faults(name, made, **parameters):
    return list(sanity.result_faults({name: made}, QgsProcessingContext(), parameters))


STATION = ("transect", "distance_km", "observed_m", "predicted_m", "residual_m", "predicted_low_m", "predicted_high_m")


@pytest.mark.parametrize(
    ("rows", "words"),
    [
        ([("a", 0.0, 5.0, 3.0, 2.0, 2.0, 4.0), ("a", 1.0, 5.0, 3.0, 2.0, 2.0, 4.0)], None),
        ([("a", 5.0, 5.0, 3.0, 2.0, 2.0, 4.0), ("a", 5.0, 5.0, 3.0, 2.0, 2.0, 4.0)], "distance does not grow"),
        ([("a", 0.0, 5.0, 3.0, 9.0, 2.0, 4.0)], "residual_m is 9.0"),
        ([("a", 0.0, 5.0, 3.0, 2.0, 4.0, 2.0)], "predicted_low_m <= predicted_high_m does not hold"),
        ([("a", 0.0, 5.0, 3.0, 2.0, 2.0, math.inf)], "STATIONS.predicted_high_m is inf"),
        ([("a", None, 5.0, 3.0, 2.0, 2.0, 4.0)], "a station without distance"),
    ],
)
def test_stations(rows, words):
    """Distances that grow, residuals that are differences, bounds in order, finite numbers."""
    found = faults("STATIONS", layer("PointZ", STATION, *(("PointZ (1 2 3)", *row) for row in rows)))
    assert (not found) if words is None else any(words in fault for fault in found), found


PROFILE = (
    "transect", "setting", "te_km", "te_low_km", "te_high_km", "rigidity_nm", "young_gpa", "poisson", "break_low_km",
    "break_km", "break_high_km", "deepest_m", "bulge_m", "rms_m", "stations_fit", "stations_effective",
    "flexural_parameter_km", "remarks",
)  # fmt: skip
SOUND = {
    "transect": "a", "setting": 1.0, "te_km": 30.0, "te_low_km": 25.0, "te_high_km": 35.0, "rigidity_nm": 2.4e23,
    "young_gpa": 100.0, "poisson": 0.25, "rms_m": 10.0, "remarks": "",
}  # fmt: skip


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({}, None),
        ({"te_low_km": 31.0}, "te_low_km <= te_km <= te_high_km does not hold"),
        ({"te_high_km": 120.0}, "te_high_km is 120.0, searched from 1.0 to 100.0"),
        ({"rigidity_nm": 2.5e23}, "rigidity_nm is 2.5e+23"),
        ({"bulge_m": -3.0}, "bulge_m is -3.0"),
        ({"te_km": None, "setting": None}, "a transect failed without a word"),
    ],
)
def test_profiles(changes, words):
    """Bounds in order and within the search, E Te^3 / 12 (1 - nu^2), sizes, and a word on every failure."""
    row = {**SOUND, **changes}
    made = layer("LineStringZM", PROFILE, ("LineStringZM (0 0 0 0, 1 1 1 1)", *(row.get(name) for name in PROFILE)))
    found = faults("PROFILES", made)
    assert (not found) if words is None else any(words in fault for fault in found), found


ALONG_STRIKE = (
    "transect", "along_strike_km", "te_low_km", "te_km", "te_high_km", "break_low_km", "break_km", "break_high_km",
    "end_shear_low_n_per_m", "end_shear_n_per_m", "end_shear_high_n_per_m", "end_moment_low_n", "end_moment_n",
    "end_moment_high_n",
)  # fmt: skip


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ([{}, {"along_strike_km": 25.0}, {"along_strike_km": 25.0}], None),
        ([{"along_strike_km": None}, {"along_strike_km": None}], None),
        ([{}, {"along_strike_km": None}], "along_strike_km is known for some transects only"),
        ([{"along_strike_km": 5.0}], "begins with or falls to 5.0"),
        ([{}, {"along_strike_km": 50.0}, {"along_strike_km": 25.0}], "falls to 25.0 after 50.0"),
        ([{"te_low_km": 31.0}], "low <= value <= high of te_km does not hold"),
        ([{"end_shear_low_n_per_m": 3e12}], "low <= value <= high of end_shear_n_per_m does not hold"),
    ],
)
def test_along_strike(changes, words):
    """Distances from 0 on that do not fall, for all or for none, and bounds in order."""
    sound = {
        "transect": "a", "along_strike_km": 0.0, "te_low_km": 25.0, "te_km": 30.0, "te_high_km": None,
        "end_shear_low_n_per_m": 1e12, "end_shear_n_per_m": 1.5e12, "end_shear_high_n_per_m": 2e12,
    }  # fmt: skip
    rows = [{**sound, **change} for change in changes]
    made = layer("Point", ALONG_STRIKE, *(("Point (1 2)", *(row.get(name) for name in ALONG_STRIKE)) for row in rows))
    found = faults("ALONG_STRIKE", made)
    assert (not found) if words is None else any(words in fault for fault in found), found


@pytest.mark.parametrize(
    ("text", "sound"),
    [
        ("TE_FROM is 'thin'; it takes a number.", True),
        ("", False),
        ("unsupported operand type(s) for -: 'NoneType' and 'float'", False),
        ("Traceback (most recent call last): ...", False),
        ("x" * 2000, False),
    ],
)
def test_refusals(text, sound):
    """Sentences for users pass, Python's words and endless ones do not."""
    assert (not list(sanity.refusal_faults(text))) is sound


@pytest.mark.parametrize(
    ("line", "words"),
    [
        ("from qgis.PyQt.QtCore import Qt\nb = Qt.LeftButton", "Qt.LeftButton is Qt.MouseButton.LeftButton"),
        ("from qgis.core import QgsWkbTypes\nb = QgsWkbTypes.PointZ", "QgsWkbTypes.PointZ is QgsWkbTypes.Type.PointZ"),
        ("from qgis.core import QgsWkbTypes as W\nb = W.Type.PointZ", None),
        ("from qgis.PyQt.QtCore import Qt\nb = Qt.MouseButton.LeftButton", None),
        ("dialog.exec_()", "exec_ is gone"),
        ("from PyQt5.QtCore import Qt", "PyQt5.QtCore is imported"),
    ],
)
def test_lint_for_qt_6(tmp_path, line, words):
    """What PyQt 6 refuses is found, with its line; the forms that work everywhere pass."""
    (tmp_path / "code.py").write_text(line, encoding="utf-8")
    found = [text for _, text in findings(tmp_path / "code.py")]
    assert (not found) if words is None else any(words in text for text in found), found
