"""Gravity, strength and age of a fitted plate through Processing: an invented trench whose plate is known in closed form."""

import re

import numpy as np
import pytest

pytest.importorskip("qgis")

import invented
from downwarp_checkout.plugin.bridge.fields import FIELDS
from downwarp_checkout.plugin.core.constants import MILLIGAL
from downwarp_checkout.plugin.core.crust import MIRRORED, Crust, Section, anomaly
from qgis.core import QgsApplication, QgsFeature, QgsGeometry, QgsPointXY, QgsVectorLayer
from running import column, refusal, run

GRAVITY = ("ANOMALIES", "EVIDENCE")
NEW = ("gravitytransects", "platestrength", "agethickness")


def gravity_at(km):
    """Free-air anomaly, mGal, of the trench's plate, mirrored about its axis, at distances in km from the line's start."""
    x = np.arange(0.0, 700e3, 1e3)
    deflection = invented.bent(x)
    level = invented.LEVEL + invented.TILT * x
    section = Section(x, level - deflection, level, deflection, np.full(x.size, 1030.0), np.zeros(x.size, dtype=bool))
    away = np.abs(np.atleast_1d(km) - invented.AXIS_KM) * 1e3
    return anomaly(section, Crust(load=2800.0, mantle=3300.0), away, MIRRORED).free_air / MILLIGAL.value


@pytest.fixture(scope="module")
def fitted(tmp_path_factory):
    """Layers of a fit to the trench, and a gravity grid, as files."""
    folder = tmp_path_factory.mktemp("trench")
    rng = np.random.default_rng(3)

    def surface(km):
        return invented.trench(km) + 15.0 * rng.standard_normal(np.shape(km))

    dem = invented.equator_grid(folder / "dem.tif", 20.0, surface)
    paths = {name: str(folder / f"{name.lower()}.gpkg") for name in ("STATIONS", "PROFILES")}
    run("fittransects", {
        "TRANSECTS": invented.lines_layer([invented.equator_line(20.0)], names=["a & b"]), "NAME_FIELD": "name",
        "DEM": dem, "SETTING": 1, "STEP_KM": invented.STEP_KM, **paths,
    }, sinks=())  # fmt: skip
    noise = np.random.default_rng(4).standard_normal(500)
    paths["ANOMALY"] = invented.equator_grid(
        folder / "gravity.tif", 20.0, lambda km: gravity_at(km) + 7.0 + 1.0 * noise
    )
    paths["AGE"] = invented.equator_grid(folder / "age.tif", 20.0, lambda km: 8000.0 + 0.0 * km)
    return paths


def test_gravity_of_the_known_plate_agrees(fitted, tmp_path):
    """Known plate -> relief and gravity with noise -> fit -> gravity: small residual, thickness back within the interval."""
    report = tmp_path / "gravity.html"
    inputs = {"INPUT": fitted["STATIONS"], "ANOMALY": fitted["ANOMALY"], "REPORT": str(report)}
    found = run("gravitytransects", inputs, sinks=GRAVITY)
    assert found["RMS_MGAL"] < 5
    assert found["TE_LOW_KM"] < invented.TE_KM < found["TE_HIGH_KM"]
    rows = {row["source"]: row for row in found["EVIDENCE"]}
    assert list(rows) == ["plate as given", "surface", "gravity", "surface and gravity"]
    width = {source: row["te_high_km"] - row["te_low_km"] for source, row in rows.items() if row["te_high_km"]}
    assert width["surface and gravity"] < min(width["surface"], width["gravity"])
    anomalies = found["ANOMALIES"]
    parts = column(anomalies, "load_mgal") + column(anomalies, "surface_mgal") + column(anomalies, "moho_mgal")
    assert parts == pytest.approx(column(anomalies, "free_air_mgal"), abs=1e-6)
    assert list(anomalies[0])[:-1][-len(FIELDS["ANOMALIES"]) :] == list(FIELDS["ANOMALIES"])
    text = report.read_text(encoding="utf-8")
    assert "a &amp; b" in text and "no faulting" in text.lower() and "elastic and steady" in text
    assert "<svg" in text and not re.search(r"(src|href)=\"http", text)


def test_gravity_points_and_bouguer(fitted):
    """The same anomaly as points, free-air or turned into Bouguer, gives the same residual as it was made with."""
    plain = run("gravitytransects", {"INPUT": fitted["STATIONS"], "JOINT": False}, sinks=GRAVITY)
    assert plain["RMS_MGAL"] is None and [row["source"] for row in plain["EVIDENCE"]] == ["plate as given"]
    rows = plain["ANOMALIES"][::3]
    rms = []
    for kind, field in enumerate(("free_air_mgal", "bouguer_mgal")):
        layer = QgsVectorLayer("Point?crs=EPSG:4326&field=g:double&field=s:double", "gravity", "memory")
        features = []
        for place, row in enumerate(rows):
            feature = QgsFeature(layer.fields())
            feature.setAttributes([row[field] + (2.0 if place % 2 else -2.0), 1.0])
            point = row["geometry"].asPoint()
            feature.setGeometry(QgsGeometry.fromPointXY(QgsPointXY(point.x(), 0.02)))
            features.append(feature)
        layer.dataProvider().addFeatures(features)
        found = run(
            "gravitytransects",
            {"INPUT": fitted["STATIONS"], "ANOMALY_POINTS": layer, "ANOMALY_FIELD": "g", "ANOMALY_SIGMA": "s",
             "ANOMALY_KIND": kind, "JOINT": False},
            sinks=GRAVITY,
        )  # fmt: skip
        rms.append(found["RMS_MGAL"])
    assert rms == pytest.approx([2.0, 2.0], abs=0.05)


def test_strength_of_the_known_plate(fitted, tmp_path):
    """Verdict at the most bent station, from a raster of age in hundredths of Myr and from the age itself; layers hold the
    curves."""
    report = tmp_path / "strength.html"
    sinks = ("VERDICTS", "ENVELOPES", "MOMENTS")
    by_age = run("platestrength", {"INPUT": fitted["STATIONS"], "AGE_MYR": 80, "REPORT": str(report)}, sinks=sinks)
    by_map = run(
        "platestrength", {"INPUT": fitted["STATIONS"], "AGE": fitted["AGE"], "AGE_UNIT_MYR": 0.01}, sinks=sinks
    )
    row, same = by_age["VERDICTS"][0], by_map["VERDICTS"][0]
    numbers = [key for key in FIELDS["VERDICTS"] if isinstance(row[key], float)]
    assert len(numbers) > 12
    assert [row[key] for key in numbers] == pytest.approx([same[key] for key in numbers], rel=1e-6)
    assert row["verdict"] in ("carried", "carried with yielding", "not carried")
    assert row["moment_n"] == pytest.approx(row["moment_share"] * row["moment_limit_n"])
    assert row["fibre_stress_mpa"] > 0, "the outer rise has its top in tension"
    stations = run("platestrength", {"INPUT": fitted["STATIONS"], "HEAT_FLOW": row["heat_flow_mw_m2"]}, sinks=sinks)
    assert stations["VERDICTS"][0]["age_myr"] == pytest.approx(80, rel=1e-4)
    assert len(by_age["ENVELOPES"]) > 50 and len(by_age["MOMENTS"]) > 50
    assert "Byerlee" in report.read_text(encoding="utf-8")


def test_age_of_the_known_plate(fitted, tmp_path):
    """Temperature at the base of the elastic plate at its age at loading, by value and by raster, and the isotherms."""
    report = tmp_path / "age.html"
    sinks = ("AGES", "ISOTHERM_DEPTHS")
    given = {"INPUT": fitted["PROFILES"], "LOAD_AGE_MYR": 30, "ISOTHERMS": "600; 400"}
    by_age = run("agethickness", {**given, "AGE_MYR": 80, "REPORT": str(report)}, sinks=sinks)
    by_map = run("agethickness", {**given, "AGE": fitted["AGE"], "AGE_UNIT_MYR": 0.01}, sinks=sinks)
    row = by_age["AGES"][0]
    assert row["transect"] == "a & b" and row["age_at_loading_myr"] == pytest.approx(50)
    assert by_map["AGES"][0]["temperature_c"] == pytest.approx(row["temperature_c"], rel=1e-9)
    assert row["temperature_low_c"] < row["temperature_c"] < row["temperature_high_c"]
    depths = {each["temperature_c"]: each["depth_km"] for each in by_age["ISOTHERM_DEPTHS"]}
    assert list(depths) == [400.0, 600.0] and depths[400.0] < depths[600.0]
    assert not row["geometry"].isNull()
    assert "a &amp; b" in report.read_text(encoding="utf-8")


@pytest.mark.parametrize(
    ("name", "values", "words"),
    [
        ("gravitytransects", {"ANOMALY_POINTS": "x", "ANOMALY": "y"}, "ANOMALY and ANOMALY_POINTS are both given"),
        ("gravitytransects", {"RHO_LOAD": 1000}, "RHO_LOAD .1000 kg/m3. must exceed RHO_WATER"),
        ("gravitytransects", {"CRUST_KM": "thick"}, "CRUST_KM is 'thick'; it takes a number"),
        ("gravitytransects", {"RHO_LOAD_FROM": 3300}, "RHO_LOAD_TO is 3200; it takes a number above 3300"),
        ("gravitytransects", {"FIT_FROM": 9, "FIT_TO": 3}, "FIT_FROM .9 km. must be below FIT_TO"),
        ("platestrength", {}, "None of AGE_MYR, AGE, HEAT_FLOW is given"),
        ("platestrength", {"AGE_MYR": 3, "HEAT_FLOW": 50}, "AGE_MYR and HEAT_FLOW are given; it takes one"),
        ("platestrength", {"AGE_MYR": -3}, "AGE_MYR is -3; it takes a number above 0"),
        ("platestrength", {"HEAT_FLOW": 30}, "HEAT_FLOW is 30 mW/m2, which the cooling plate has at no age"),
        ("platestrength", {"THERMAL": 2, "AGE_MYR": 3}, "takes HEAT_FLOW rather than an age"),
        ("platestrength", {"AGE_MYR": 3, "STRAIN_RATE": 0}, "STRAIN_RATE is 0"),
        ("agethickness", {}, "None of AGE_MYR, AGE, AGE_FIELD is given"),
        ("agethickness", {"AGE_MYR": 3, "ISOTHERMS": "hot"}, "ISOTHERMS is 'hot'; it takes temperatures"),
        ("agethickness", {"AGE_MYR": 3, "ISOTHERMS": "0"}, "above 0 and below 2000"),
        ("agethickness", {"AGE_MYR": 3, "LOAD_AGE_MYR": -1}, "LOAD_AGE_MYR is -1"),
        ("agethickness", {"AGE_MYR": 3, "AGE_FIELD": "none"}, "AGE_MYR and AGE_FIELD are given"),
        ("agethickness", {"AGE_MYR": 3, "LOAD_AGE_MYR": 20}, "the load is 20 Myr old and the plate 3 Myr"),
    ],
)
def test_bad_values_are_named(fitted, name, values, words):
    """Each refusal says which key, what it got and what it takes."""
    source = fitted["PROFILES"] if name == "agethickness" else fitted["STATIONS"]
    sinks = {"gravitytransects": GRAVITY, "platestrength": ("VERDICTS",), "agethickness": ("AGES",)}[name]
    assert re.search(words, refusal(name, {"INPUT": source, **values}, sinks=sinks))


@pytest.mark.parametrize("name", NEW)
def test_layers_that_are_no_result_are_refused(name):
    """A layer without the fields of a run is named as such."""
    layer = invented.lines_layer([[(0, 0), (1, 1)]])
    sinks = {"gravitytransects": GRAVITY, "platestrength": ("VERDICTS",), "agethickness": ("AGES",)}[name]
    values = {"INPUT": layer, "DISTANCE": "name"} if name != "agethickness" else {"INPUT": layer}
    if name != "gravitytransects":
        values["AGE_MYR"] = 50
    assert "INPUT has no field" in refusal(name, values, sinks=sinks)


@pytest.mark.parametrize("name", NEW)
def test_everything_has_help(name):
    """Keys, outputs and fields have help; help of keys ends as a sentence does, and names nothing that is not there."""
    each = QgsApplication.processingRegistry().algorithmById(f"downwarp:{name}")
    own = {definition.name() for definition in each.parameterDefinitions()}
    for definition in each.parameterDefinitions():
        text = each.help_of("parameters", definition.name()) or each.help_of("outputs", definition.name())
        assert text.endswith("."), definition.name()
        if definition.type() == "sink":
            for field in FIELDS[definition.name()]:
                assert each.help_of("fields", field), field
    outputs = {output.name() for output in each.outputDefinitions()}
    for output in outputs:
        assert each.help_of("outputs", output), output
    assert set(each.help()["parameters"]) <= own
    assert set(each.help()["outputs"]) <= outputs | own
    sinks = [FIELDS[key] for key in own if key in FIELDS]
    assert set(each.help()["fields"]) <= {field for names in sinks for field in names}


def test_a_transect_without_an_answer_is_a_row(fitted):
    """A second transect whose stations carry no plate: the first is answered, the second a row with the reason."""
    source = QgsVectorLayer(fitted["STATIONS"], "stations", "ogr")
    both = QgsVectorLayer(f"PointZ?crs={source.crs().authid()}", "both", "memory")
    both.dataProvider().addAttributes([field for field in source.fields() if field.name() != "fid"])
    both.updateFields()
    features = []
    for bare in (False, True):
        for station in source.getFeatures():
            feature = QgsFeature(both.fields())
            feature.setGeometry(station.geometry())
            for field in both.fields():
                feature[field.name()] = station[field.name()]
            if bare:
                feature["transect"], feature["deflection_m"] = "bare", None
            features.append(feature)
    both.dataProvider().addFeatures(features)
    for name, sink, values in (
        ("gravitytransects", "EVIDENCE", {"JOINT": False}), ("platestrength", "VERDICTS", {"AGE_MYR": 80}),
    ):  # fmt: skip
        sinks = GRAVITY if name == "gravitytransects" else (sink,)
        rows = {row["transect"]: row for row in run(name, {"INPUT": both, **values}, sinks=sinks)[sink]}
        assert rows["a & b"]["te_km"] is not None
        assert rows["bare"]["te_km"] is None
        assert rows["bare"]["remarks"] == "bare: 0 stations carry a plate (deflection_m); it takes at least 5."
