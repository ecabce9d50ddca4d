"""Every key reaches the fit: what it changes, by a known amount where there is one, through Processing."""

import json

import numpy as np
import pytest

pytest.importorskip("qgis")

import invented
from invented import AXIS_KM, KM_PER_DEGREE, STEP_KM, equator_grid, equator_line, lines_layer
from qgis.core import QgsFeature, QgsGeometry, QgsVectorLayer
from running import column, rows, run

SINKS = ("PROFILES", "STATIONS", "MARKERS", "PARAMETERS", "MISFIT")


@pytest.fixture(scope="module")
def ground(tmp_path_factory):
    """The trench, the ridge, and the trench's surface as a layer of its own."""
    folder = tmp_path_factory.mktemp("ground")

    def rough(surface, seed):
        noise = np.random.default_rng(seed).standard_normal(500) * 15.0
        return lambda distance: surface(distance) + noise

    return {
        "trench": equator_grid(folder / "trench.tif", 20.0, rough(invented.trench, 1)),
        "ridge": equator_grid(folder / "ridge.tif", 20.0, rough(invented.ridge, 2)),
    }


def fit(ground, dem="trench", sinks=SINKS, **keys):
    line = equator_line(20.0)
    given = {"TRANSECTS": lines_layer([line]), "DEM": ground[dem], "STEP_KM": STEP_KM, "SETTING": int(dem == "trench")}
    return run("fittransects", {**given, **keys}, sinks=sinks)


def used(result):
    return {row["parameter"]: (row["value"], row["origin"]) for row in result["PARAMETERS"]}


def polygons(*spans):
    """Boxes across the line, from and to km."""
    layer = QgsVectorLayer("Polygon?crs=EPSG:4326", "areas", "memory")
    features = []
    for start, end in spans:
        west, east = 20.0 + start / KM_PER_DEGREE, 20.0 + end / KM_PER_DEGREE
        feature = QgsFeature()
        feature.setGeometry(QgsGeometry.fromWkt(f"Polygon (({west} -1, {east} -1, {east} 1, {west} 1, {west} -1))"))
        features.append(feature)
    layer.dataProvider().addFeatures(features)
    return layer


@pytest.mark.parametrize(
    ("key", "value", "listed"),
    [
        ("TE_FROM", 2, 2), ("TE_TO", 90, 90), ("RHO_MANTLE", 3330, 3330), ("RHO_INFILL", 1025, 1025),
        ("RHO_WATER", 1027, 1027), ("RHO_LOAD", 2650, 2650), ("RHO_UNDER_LOAD", 1500, 1500), ("YOUNG_GPA", 70, 70),
        ("POISSON", 0.3, 0.3), ("GRAVITY", 9.8, 9.8), ("IN_PLANE", 1e11, 1e11), ("CONFIDENCE", 68, 68),
        ("REFERENCE_LEVEL", -5400, -5400), ("FIT_FROM", 150, 150), ("FIT_TO", 600, 600), ("SIGMA_M", 20, 20),
        ("LOAD_FROM", 1, 1), ("LOAD_TO", 2, 2), ("ROBUST", True, 1), ("FILL_SINKING_ONLY", True, 1),
        ("END_FORCES", 1, 1), ("REGIONAL", 3, 3), ("PLATE", 1, 1), ("LOAD", 2, 2), ("BREAK_AT", 1, 1),
    ],
)  # fmt: skip
def test_given_values_are_listed_as_given(ground, key, value, listed):
    """PARAMETERS holds what the user said, with the origin "given" (a break at the lowest station is measured)."""
    assert used(fit(ground, **{key: value}))[key] == (pytest.approx(listed), "given")


def test_blank_values_are_listed_with_where_they_came_from(ground):
    """Setting 0 on the ridge: densities from the setting, the level from the relief or the fit, thickness fitted."""
    listed = used(fit(ground, "ridge"))
    for key, value in (("RHO_LOAD", 2800), ("RHO_INFILL", 1030), ("RHO_MANTLE", 3300), ("PLATE", 0), ("REGIONAL", 1)):
        assert listed[key] == (value, "setting"), key
    assert listed["REFERENCE_LEVEL"][1] in ("measured", "fitted")
    assert listed["te"][1] == "fitted"
    assert listed["rms"][0] > 0


def test_the_break_where_it_is_asked_for(ground):
    """Given, at the line's start, and searched."""
    given = fit(ground, BREAK_AT=2, BREAK_KM=140)
    assert given["PROFILES"][0]["break_km"] == 140
    assert used(given)["break"] == (140, "given")
    first = min(row["distance_km"] for row in given["STATIONS"] if row["deflection_m"] is not None)
    assert 140 <= first < 140 + STEP_KM
    start = fit(ground, BREAK_AT=0)
    assert start["PROFILES"][0]["break_km"] == 0
    searched = fit(ground, BREAK_AT=3, BREAK_FROM=AXIS_KM - 1, BREAK_TO=AXIS_KM + 80)
    assert used(searched)["break"][1] == "fitted"
    assert len({row["break_km"] for row in searched["MISFIT"]}) > 10
    profile = searched["PROFILES"][0]
    assert profile["break_low_km"] is None or profile["break_low_km"] <= profile["break_km"]


def test_the_fit_window_and_excluded_areas(ground):
    """in_fit is 1 inside the window and outside the polygons, and stations_fit counts them."""
    result = fit(ground, FIT_FROM=150, FIT_TO=600, FIT_EXCLUDE=polygons((200, 250), (400, 420)))
    for row in result["STATIONS"]:
        x = row["distance_km"]
        expected = 150 <= x <= 600 and not 200 < x < 250 and not 400 < x < 420
        assert row["in_fit"] == int(expected), x
    assert result["PROFILES"][0]["stations_fit"] == sum(row["in_fit"] for row in result["STATIONS"])


def test_the_load_area_and_window(ground):
    """Load inside both only; the rest of the ridge is neither load nor, in the area, fitted."""
    centre = invented.RIDGE_KM
    result = fit(ground, "ridge", LOAD_AREA=polygons((centre - 200, centre + 20)), LOAD_FROM=centre - 30, FIT_TO=650)
    loaded = column(result["STATIONS"], "load_mpa") > 0
    distance = column(result["STATIONS"], "distance_km")
    np.testing.assert_array_equal(loaded, (distance >= centre - 30) & (distance < centre + 20))


def test_denser_loads_and_infill_move_the_answer_as_they_must(ground):
    """A heavier ridge needs a stiffer plate for the same moat; RHO_UNDER_LOAD shows at the stations under it."""
    first = fit(ground, "ridge")
    denser = fit(ground, "ridge", RHO_LOAD=2950)
    assert denser["PROFILES"][0]["te_km"] > 1.02 * first["PROFILES"][0]["te_km"]
    under = fit(ground, "ridge", RHO_UNDER_LOAD=2000)
    infill = column(under["STATIONS"], "infill_kg_m3")
    on_ridge = np.abs(column(under["STATIONS"], "distance_km") - invented.RIDGE_KM) < 45
    assert np.allclose(infill[on_ridge], 2000)
    assert np.allclose(infill[~on_ridge][:20], 1030)


def test_infill_only_where_the_plate_sinks(ground):
    """Sediment in the moat, water over the bulge."""
    stations = fit(ground, "ridge", FILL_SINKING_ONLY=True, RHO_INFILL=2000, REFERENCE_LEVEL=invented.FLOOR)["STATIONS"]
    infill, deflection = column(stations, "infill_kg_m3"), column(stations, "deflection_m")
    assert set(np.round(infill)) == {1030, 2000}
    clear = np.abs(deflection) > 10
    np.testing.assert_array_equal(infill[clear] > 1500, deflection[clear] > 0)


def test_both_plates_are_compared(ground):
    """PLATE 2 on the trench, where the other side's slope is no part of a continuous plate: broken, with the odds."""
    result = fit(ground, PLATE=2)
    assert result["PROFILES"][0]["plate"] == "broken"
    assert {row["plate"] for row in result["MISFIT"]} == {"continuous", "broken"}
    assert "broken" in result["PROFILES"][0]["remarks"]


def test_a_tighter_confidence_is_a_narrower_interval(ground):
    """68 % lies inside 95 %."""
    narrow, wide = fit(ground, CONFIDENCE=68)["PROFILES"][0], fit(ground, CONFIDENCE=95)["PROFILES"][0]
    assert wide["te_low_km"] < narrow["te_low_km"] < narrow["te_km"] < narrow["te_high_km"] < wide["te_high_km"]


def test_picks_stand_in_for_the_surface(ground):
    """Points on the trench's plate beside the line, text elevations and a sigma; none beyond PICK_REACH."""
    layer = QgsVectorLayer("Point?crs=EPSG:4326&field=z:string(20)&field=s:double", "picks", "memory")
    features = []
    for number, x in enumerate(np.linspace(AXIS_KM + 1, 690, 70).tolist()):
        feature = QgsFeature(layer.fields())
        north = 0.05 if number % 2 else -0.05
        far = number % 10 == 9
        feature.setAttributes([f"{float(invented.trench(x)) + (5000 if far else 0):.3f}", 20.0])
        wkt = f"Point ({20 + x / KM_PER_DEGREE} {0.5 if far else north})"
        feature.setGeometry(QgsGeometry.fromWkt(wkt))
        features.append(feature)
    layer.dataProvider().addFeatures(features)
    result = fit(ground, PICKS=layer, PICK_ELEVATION="z", PICK_SIGMA="s", RHO_INFILL=1030, LOAD=2)
    assert result["PROFILES"][0]["stations_fit"] == 63
    assert result["TE_KM"] == pytest.approx(invented.TE_KM, rel=0.02)


def test_observed_takes_the_dems_place(ground):
    """The trench's surface in OBSERVED under a DEM that is level: the same plate; in feet both are converted."""
    result = fit(ground, OBSERVED=ground["trench"], RHO_INFILL=1030, LOAD=2, BREAK_AT=2, BREAK_KM=AXIS_KM)
    direct = fit(ground, BREAK_AT=2, BREAK_KM=AXIS_KM)
    assert result["TE_KM"] == pytest.approx(direct["TE_KM"], rel=1e-6)
    in_feet = fit(
        ground, OBSERVED=ground["trench"], RHO_INFILL=1030, LOAD=2, BREAK_AT=2, BREAK_KM=AXIS_KM, RELIEF_UNIT=1
    )
    ratio = column(in_feet["STATIONS"], "observed_m") / column(result["STATIONS"], "observed_m")
    np.testing.assert_allclose(ratio, 0.3048, rtol=1e-9)


def test_choices_and_report(ground, tmp_path):
    """CHOICES has a row as fitted and one for each alternative; REPORT is an HTML file that names transect and E."""
    report = tmp_path / "report.html"
    result = fit(ground, sinks=("PROFILES", "STATIONS", "CHOICES"), REPORT=str(report))
    choices = [row["choice"] for row in result["CHOICES"]]
    assert choices[0] == "as fitted"
    assert len(choices) == len(set(choices)) > 4
    assert result["CHOICES"][0]["te_km"] == result["PROFILES"][0]["te_km"]
    text = report.read_text(encoding="utf-8")
    assert text.lstrip().lower().startswith("<!doctype html")
    assert "100 GPa" in text.replace("\u00a0", " ").replace("\u202f", " ")


def test_many_lines_by_workers_are_the_lines_alone(ground):
    """Seven lines in two processes or in one: the same answers, in the order of the layer."""
    line = equator_line(20.0)
    names = [f"line {number}" for number in range(7)]
    shifted = [[(x, y + 0.005 * number) for x, y in line] for number in range(7)]
    keys = {"DEM": ground["trench"], "SETTING": 1, "STEP_KM": 4 * STEP_KM, "NAME_FIELD": "name"}
    results = [
        run("fittransects", {**keys, "TRANSECTS": lines_layer(shifted, names=names), "WORKERS": workers})
        for workers in (1, 2)
    ]
    for result in results:
        assert [row["transect"] for row in result["PROFILES"]] == names
    one, two = (column(result["PROFILES"], "te_km") for result in results)
    np.testing.assert_allclose(one, two, rtol=1e-9)
    assert results[0]["TE_KM"] == pytest.approx(np.median(one))


def test_the_demo_says_how_to_fit_it(tmp_path):
    """demo.json: scenarios with true thicknesses and keys of fittransects and gravitytransects whose files are there."""
    from downwarp_checkout.plugin.provider import FitTransects, GravityTransects

    run("demolayers", {"OUTPUT_FOLDER": str(tmp_path), "NOISE_M": 20, "NOISE_MGAL": 2, "SEED": 3}, sinks=())
    content = json.loads((tmp_path / "demo.json").read_text(encoding="utf-8"))
    assert (content["noise_m"], content["noise_mgal"], content["seed"]) == (20, pytest.approx(2), 3)
    known = {key.name for key in FitTransects.keys}
    assert [scenario["true_te_km"] for scenario in content["scenarios"]] == [24, 34, 18]
    for scenario in content["scenarios"]:
        assert set(scenario["parameters"]) <= known
        assert (tmp_path / scenario["parameters"]["TRANSECTS"]).is_file()
        assert (tmp_path / scenario["parameters"]["DEM"]).is_file()
        assert set(scenario["gravity"]) <= {key.name for key in GravityTransects.keys}
        assert (tmp_path / scenario["gravity"]["ANOMALY"]).is_file()
        table = rows(str(tmp_path / scenario["parameters"]["TRANSECTS"]))
        assert [row["name"] for row in table] == [f"{scenario['name']} {number}" for number in (1, 2, 3)]
