"""Input that cannot be used: one clear sentence that names the key or the feature, no traceback, no layer left."""

import math

import numpy as np
import pytest

pytest.importorskip("qgis")

import invented
from invented import STEP_KM, equator_grid, equator_line, lines_layer, write_grid
from qgis.core import QgsFeature, QgsGeometry, QgsPointXY, QgsProject, QgsVectorFileWriter, QgsVectorLayer
from running import refusal, rows, run


def saved(layer, path):
    """A layer written to a GeoPackage; its path."""
    options = QgsVectorFileWriter.SaveVectorOptions()
    options.driverName = "GPKG"
    options.layerName = path.stem
    error, *rest = QgsVectorFileWriter.writeAsVectorFormatV3(
        layer, str(path), QgsProject.instance().transformContext(), options
    )
    assert error == QgsVectorFileWriter.WriterError.NoError, rest
    return str(path)


@pytest.fixture(scope="module")
def ground(tmp_path_factory):
    """Files: the trench's grid, one without data, its line, a line elsewhere, a line of one point, points, polygons."""
    folder = tmp_path_factory.mktemp("ground")
    points = QgsVectorLayer("Point?crs=EPSG:4326&field=height:string(10)", "points", "memory")
    feature = QgsFeature(points.fields())
    feature.setAttributes(["high"])
    feature.setGeometry(QgsGeometry.fromPointXY(QgsPointXY(21.5, 0.0)))
    points.dataProvider().addFeatures([feature])
    empty = QgsVectorLayer("LineString?crs=EPSG:4326", "empty", "memory")
    return {
        "dem": equator_grid(folder / "dem.tif", 20.0, invented.trench),
        "void": write_grid(folder / "void.tif", np.full((8, 500), -9999.0), 17.99, 0.08, 0.02, nodata=-9999.0),
        "line": saved(lines_layer([equator_line(20.0)]), folder / "line.gpkg"),
        "elsewhere": saved(lines_layer([[(70.0, 40.0), (75.0, 40.0)]], names=["far"]), folder / "elsewhere.gpkg"),
        "dot": saved(lines_layer([[(20.0, 0.0), (20.0, 0.0)]], names=["dot"]), folder / "dot.gpkg"),
        "points": saved(points, folder / "points.gpkg"),
        "empty": saved(empty, folder / "empty.gpkg"),
        "picks": str(folder / "points.gpkg"),
    }


# what it is: (changed keys, words of the sentence). Names in braces stand for files of `ground`.
CASES = {
    "TE_FROM above TE_TO": ({"TE_FROM": 50, "TE_TO": 20}, "TE_FROM (50 km) must be below TE_TO (20 km)"),
    "text for a number": ({"TE_FROM": "thin"}, "TE_FROM is 'thin'; it takes a number"),
    "text for a blank number": ({"RHO_INFILL": "mud"}, "RHO_INFILL is 'mud'; it takes a number"),
    "NaN": ({"YOUNG_GPA": "nan"}, "YOUNG_GPA is nan; it takes a number"),
    "infinity": ({"REFERENCE_LEVEL": "inf"}, "REFERENCE_LEVEL is inf; it takes a number"),
    "half a line in a swath": ({"SWATH_LINES": "2.5"}, "SWATH_LINES is 2.5; it takes a whole number"),
    "no DEM": ({"DEM": ""}, "DEM"),
    "an unknown key": ({"TE_FORM": 5}, "TE_FORM is not a key of this algorithm; did you mean TE_FROM?"),
    "an enum out of range": ({"REGIONAL": 9}, "it takes one of: 0 None, 1 Level"),
    "text for an enum": ({"PLATE": "bent"}, "PLATE is 'bent'; it takes one of: 0 Continuous"),
    "text for true or false": ({"ROBUST": "maybe"}, "ROBUST is 'maybe'; it takes true or false"),
    "band 9 of 1": ({"DEM_BAND": 9}, "DEM_BAND"),
    "a step of 0": ({"STEP_KM": 0}, "STEP_KM is 0; it takes a number above 0"),
    "a step below 0": ({"STEP_KM": -3}, "STEP_KM is -3; it takes a number above 0"),
    "a step that makes too many stations": ({"STEP_KM": 1e-4}, "STEP_KM is 0.0001"),
    "a swath below 0": ({"SWATH_KM": -1}, "SWATH_KM is -1; it takes a number from 0"),
    "no line in a swath": ({"SWATH_LINES": 0}, "SWATH_LINES is 0; it takes a whole number from 1"),
    "a line outside the DEM": ({"TRANSECTS": "{elsewhere}", "NAME_FIELD": "name"}, "Transect far lies outside the DEM"),
    "a line of one point": ({"TRANSECTS": "{dot}", "NAME_FIELD": "name"}, "Transect dot has fewer than two different"),
    "a DEM of nodata": ({"DEM": "{void}"}, "the DEM has no data anywhere along the line"),
    "Poisson's ratio of 0.6": ({"POISSON": 0.6}, "POISSON is 0.6; it takes a number above -1 below 0.5"),
    "Young's modulus of 0": ({"YOUNG_GPA": 0}, "YOUNG_GPA is 0; it takes a number above 0"),
    "no restoring force": (
        {"RHO_INFILL": 3300}, "RHO_INFILL (3300 kg/m3) must be below RHO_MANTLE (3300 kg/m3)",
    ),
    "no restoring force under the load": (
        {"RHO_UNDER_LOAD": 3400}, "RHO_UNDER_LOAD (3400 kg/m3) must be below RHO_MANTLE",
    ),
    "a negative density": ({"RHO_LOAD": -5}, "RHO_LOAD is -5; it takes a number above 0"),
    "in-plane force above buckling": ({"IN_PLANE": 1e15}, "IN_PLANE"),
    "a name field that is not there": ({"NAME_FIELD": "title"}, "NAME_FIELD"),
    "a missing layer": ({"TRANSECTS": "/nowhere/lines.gpkg"}, "TRANSECTS"),
    "a missing raster": ({"OBSERVED": "/nowhere/basement.tif"}, "OBSERVED"),
    "points for lines": ({"TRANSECTS": "{points}"}, "Transect 1 is no line but Point"),
    "a layer without features": ({"TRANSECTS": "{empty}"}, "There is no transect: the input holds no feature"),
    "a vector layer for the DEM": ({"DEM": "{line}"}, "DEM"),
    "no place for the break": ({"BREAK_AT": 2}, "BREAK_KM is blank; BREAK_AT 2 takes the distance of the break in it"),
    "a break off the line": ({"BREAK_AT": 2, "BREAK_KM": 9999}, "BREAK_KM must lie on the line"),
    "no range for the break": ({"BREAK_AT": 3, "BREAK_FROM": 10}, "BREAK_FROM and BREAK_TO must both be given"),
    "a window the wrong way round": ({"FIT_FROM": 300, "FIT_TO": 200}, "FIT_FROM (300 km) must be below FIT_TO"),
    "a window without a station": ({"FIT_FROM": 5000}, "nothing is left to fit"),
    "a window of three stations": ({"FIT_FROM": 300, "FIT_TO": 320}, "stations to fit"),
    "a sigma of 0": ({"SIGMA_M": 0}, "SIGMA_M is 0; it takes a number above 0"),
    "a confidence of 100 %": ({"CONFIDENCE": 100}, "CONFIDENCE is 100; it takes a number above 0 below 100"),
    "picks without a field": ({"PICKS": "{picks}"}, "PICK_ELEVATION is blank"),
    "picks with a field that is not there": (
        {"PICKS": "{picks}", "PICK_ELEVATION": "depth"}, "PICK_ELEVATION",
    ),
    "picks of text": (
        {"PICKS": "{picks}", "PICK_ELEVATION": "height"}, "PICK_ELEVATION field height holds 'high'; it takes numbers",
    ),
    "a reach of 0": ({"PICKS": "{picks}", "PICK_ELEVATION": "height", "PICK_REACH": 0}, "PICK_REACH is 0"),
}  # fmt: skip
BY_QGIS = {"a missing layer", "a missing raster", "a vector layer for the DEM", "no DEM",
           "a name field that is not there", "picks with a field that is not there"}  # fmt: skip
"""Cases that QGIS itself may refuse first, in words that change with its version and name the key."""
HEADLESS = (
    "TE_FROM above TE_TO", "text for a number", "NaN", "infinity", "no DEM", "an unknown key", "an enum out of range",
    "band 9 of 1", "a step of 0", "a line outside the DEM", "a line of one point", "a DEM of nodata",
    "Poisson's ratio of 0.6", "no restoring force", "in-plane force above buckling", "a name field that is not there",
    "a missing layer", "points for lines", "no place for the break", "a window without a station",
)
"""Cases that are also run through qgis_process, about a second each."""


def parameters(ground, changes):
    given = {"TRANSECTS": "{line}", "DEM": "{dem}", "SETTING": 1, "STEP_KM": STEP_KM, **changes}
    return {
        key: ground[value[1:-1]] if isinstance(value, str) and value.startswith("{") else value
        for key, value in given.items()
    }


def sentence_of(text, words):
    """The sentence that says what is wrong; all else that is said must not be a traceback."""
    assert "Traceback" not in text, text
    assert "Error:" not in text, text
    assert words in text, text
    (line,) = {line.strip() for line in text.splitlines() if words in line}
    return line


@pytest.mark.parametrize("case", CASES)
def test_in_process(ground, tmp_path, case):
    """Refused with a sentence, and no file made."""
    changes, words = CASES[case]
    sinks = {name: str(tmp_path / f"{name.lower()}.gpkg") for name in ("PROFILES", "STATIONS", "MISFIT")}
    said = refusal("fittransects", {**parameters(ground, changes), **sinks})
    if case in BY_QGIS:
        assert words in said
        assert "Traceback" not in said
    else:
        line = sentence_of(said, words)
        assert line.endswith((".", "?")), line
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("case", HEADLESS)
def test_through_qgis_process(headless, ground, tmp_path, case):
    """Not 0, the same sentence, no traceback on either stream, and no file made."""
    changes, words = CASES[case]
    sinks = {name: str(tmp_path / f"{name.lower()}.gpkg") for name in ("PROFILES", "STATIONS")}
    done = headless.attempt("fittransects", {**parameters(ground, changes), **sinks})
    assert done.returncode != 0
    assert words in done.stdout + done.stderr, done.stdout + done.stderr
    assert "Traceback" not in done.stdout + done.stderr
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("value", [float("nan"), float("inf"), -float("inf"), True, [1], "1,5", "0x1F", "1e999"])
@pytest.mark.parametrize("key", ["TE_FROM", "RHO_WATER", "SWATH_LINES"])
def test_numbers_that_are_none(ground, key, value):
    """Not finite, of another kind, or text that Python would not take for a number."""
    assert f"{key} is " in refusal("fittransects", parameters(ground, {key: value}))


@pytest.mark.parametrize("key", ["TE_FROM", "RHO_INFILL", "CONFIDENCE", "SETTING", "ROBUST", "BREAK_KM"])
@pytest.mark.parametrize("blank", ["", "  ", None])
def test_blank_is_the_default_and_never_0(ground, key, blank):
    """An empty string is a blank, hence the default, as if the key had been left out."""
    from downwarp_checkout.plugin.bridge.keys import Values
    from qgis.core import QgsApplication, QgsProcessingContext

    keys = QgsApplication.processingRegistry().algorithmById("downwarp:fittransects").keys
    values = Values(keys, {key: blank}, QgsProcessingContext())
    definition = values.keys[key]
    reader = {"number": values.number, "enum": values.enum, "flag": values.flag}[definition.kind]
    assert reader(key) == definition.default


def test_blank_text_on_the_command_line_is_the_default(headless, ground, tmp_path):
    """`--TE_FROM=` and `--RHO_INFILL=` run as if left out: Te from 1 km, sea water in the trench."""
    sinks = {name: str(tmp_path / f"{name.lower()}.gpkg") for name in ("PROFILES", "STATIONS", "PARAMETERS")}
    headless.run("fittransects", {**parameters(ground, {"TE_FROM": "", "RHO_INFILL": ""}), **sinks})
    used = {row["parameter"]: row["value"] for row in rows(sinks["PARAMETERS"])}
    assert used["TE_FROM"] == 1
    assert used["RHO_INFILL"] == 1030


def test_one_bad_line_of_many_is_reported_and_the_rest_are_fitted(ground, tmp_path):
    """Remarks of its row say why, its numbers are NULL, and the other lines' answers are the same as without it."""
    good = equator_line(20.0)
    lines = [good, [(70.0, 40.0), (75.0, 40.0)], [(20.0, 0.0), (20.0, 0.0)], [(x, y + 0.01) for x, y in good]]
    keys = {"DEM": ground["dem"], "SETTING": 1, "STEP_KM": STEP_KM, "NAME_FIELD": "name"}
    layer = lines_layer(lines, names=["first", "far", "dot", "second"])
    mixed = run("fittransects", {"TRANSECTS": layer, **keys})
    alone = run("fittransects", {"TRANSECTS": lines_layer([good], names=["first"]), **keys})
    profiles = {row["transect"]: row for row in mixed["PROFILES"]}
    assert list(profiles) == ["first", "far", "dot", "second"]
    assert mixed["TRANSECTS_FITTED"] == 2
    assert profiles["far"]["remarks"] == "Transect far lies outside the DEM."
    assert profiles["dot"]["remarks"].startswith("Transect dot has fewer than two different vertices")
    for name in ("far", "dot"):
        assert profiles[name]["geometry"] is None
        assert {key for key, value in profiles[name].items() if value is not None} == {"transect", "remarks"}
    assert profiles["first"]["te_km"] == pytest.approx(alone["PROFILES"][0]["te_km"], rel=1e-9)
    assert mixed["TE_KM"] == pytest.approx(
        0.5 * (profiles["first"]["te_km"] + profiles["second"]["te_km"]), rel=1e-12
    )
    assert {row["transect"] for row in mixed["STATIONS"]} == {"first", "second"}


def test_where_all_lines_are_bad_no_layer_is_left(headless, ground, tmp_path):
    """Exit code not 0, the first reason, and no file."""
    layer = saved(lines_layer([[(70, 40), (75, 40)], [(20, 0), (20, 0)]], names=["far", "dot"]), tmp_path / "bad.gpkg")
    out = tmp_path / "out"
    out.mkdir()
    sinks = {name: str(out / f"{name.lower()}.gpkg") for name in ("PROFILES", "STATIONS")}
    done = headless.attempt("fittransects", {**parameters(ground, {"TRANSECTS": layer, "NAME_FIELD": "name"}), **sinks})
    assert done.returncode != 0
    assert "None of the 2 transects could be worked on; the first: Transect far lies outside the DEM." in (
        done.stdout + done.stderr
    )
    assert list(out.iterdir()) == []


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"TE_KM": 0}, "TE_KM is 0; it takes a number from 0.1 to 1000"),
        ({"TE_KM": "thick"}, "TE_KM is 'thick'; it takes a number"),
        ({"PLATE": 2}, "PLATE is 2; it takes one of: 0 Continuous, 1 Broken"),
        ({"PLATE": 1, "START_SUPPORT": 0}, "START_SUPPORT is 0 (continues), but PLATE is 1"),
        ({"PLATE": 0, "END_MOMENT": 1e17}, "END_MOMENT acts on a broken plate only, but PLATE is 0"),
        ({"END_SHEAR": math.inf}, "END_SHEAR is inf; it takes a number"),
        ({"BREAK_AT": 2}, "BREAK_KM is blank"),
        ({"IN_PLANE": 1e15}, "IN_PLANE"),
        ({"RHO_MANTLE": 900}, "must be below RHO_MANTLE (900 kg/m3)"),
    ],
)
def test_bendtransects_refuses_too(ground, changes, words):
    """The forward model names its keys as well."""
    said = refusal("bendtransects", parameters(ground, {"SETTING": 4, "RHO_INFILL": 1030, **changes}))
    assert sentence_of(said, words)


def test_a_negative_thickness_of_load_is_refused(ground):
    """LOAD 1 takes thicknesses: the trench's elevations are none."""
    assert "the DEM holds a load thickness below 0 (LOAD is 1)" in refusal(
        "fittransects", parameters(ground, {"SETTING": 3})
    )


def test_the_demo_refuses_bad_noise_and_seeds(tmp_path):
    """No folder is made."""
    folder = str(tmp_path / "demo")
    for changes, words in (
        ({"NOISE_M": -1}, "NOISE_M is -1; it takes a number from 0 to 1000"),
        ({"NOISE_MGAL": 2000}, "NOISE_MGAL is 2000; it takes a number from 0 to 1000"),
        ({"SEED": -1}, "SEED is -1; it takes a whole number from 0"),
        ({"NOISE_M": "loud"}, "NOISE_M is 'loud'; it takes a number"),
    ):
        assert words in refusal("demolayers", {"OUTPUT_FOLDER": folder, **changes}, sinks=())
    assert list(tmp_path.iterdir()) == []
