"""The panel's way from keys to layers beside `fittransects`, without a window: every value is the same."""

import importlib.util
import json
import sys

import numpy as np
import pytest

if importlib.util.find_spec("qgis") is None:
    pytest.skip("layers need QGIS", allow_module_level=True)

from downwarp_checkout.plugin.bridge.areas import Areas
from downwarp_checkout.plugin.bridge.frames import Frame
from downwarp_checkout.plugin.bridge.outputs import Track
from downwarp_checkout.plugin.bridge.workers import LEAST_TRANSECTS
from downwarp_checkout.plugin.core import one_thread
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.profile import Profile
from downwarp_checkout.plugin.core.settings import FitOptions
from downwarp_checkout.plugin.panel.left_out import add_once, left_out_layer
from downwarp_checkout.plugin.panel.session import Session, Trial
from downwarp_checkout.plugin.panel.source import SAMPLING_KEYS, Source, fit_keys, keep, options_of
from qgis.core import (
    QgsApplication,
    QgsCoordinateReferenceSystem,
    QgsCoordinateTransform,
    QgsFeature,
    QgsGeometry,
    QgsProcessingContext,
    QgsProject,
    QgsRasterLayer,
    QgsVectorLayer,
)
from running import Quiet, rows

TABLES = ("PROFILES", "STATIONS", "MARKERS", "PARAMETERS", "MISFIT", "CHOICES")
_providers = []


@pytest.fixture(scope="module")
def processing(qgis_application):
    """Processing with Downwarp's provider."""
    plugins = QgsApplication.pkgDataPath() + "/python/plugins"
    if plugins not in sys.path:
        sys.path.append(plugins)
    import processing as module
    from downwarp_checkout.plugin.provider import DownwarpProvider
    from processing.core.Processing import Processing

    Processing.initialize()
    if QgsApplication.processingRegistry().providerById("downwarp") is None:
        _providers.append(DownwarpProvider())
        QgsApplication.processingRegistry().addProvider(_providers[0])
    return module


@pytest.fixture(scope="module")
def project(processing, tmp_path_factory):
    """A project with the demo's layers, and its scenarios with the layers' ids."""
    folder = tmp_path_factory.mktemp("demo")
    processing.run("downwarp:demolayers", {"OUTPUT_FOLDER": str(folder), "NOISE_M": 25}, feedback=Quiet())
    scenarios = json.loads((folder / "demo.json").read_text(encoding="utf-8"))["scenarios"]
    project = QgsProject()
    for scenario in scenarios:
        parameters = scenario["parameters"]
        for key, value in parameters.items():
            if isinstance(value, str) and (folder / value).is_file():
                kind = QgsRasterLayer if value.endswith(".tif") else QgsVectorLayer
                layer = kind(str(folder / value), value)
                assert layer.isValid()
                project.addMapLayer(layer)
                parameters[key] = layer.id()
    return project, scenarios


def sampled(project, parameters, place=0):
    """Track, session and CRS of a transect as the panel has them."""
    features = list(project.mapLayer(parameters["TRANSECTS"]).getFeatures())
    source = Source(parameters, features[place], project)
    track, session = source.sample(lambda fraction: None)
    return track, session, source.crs


def without_geometry(table):
    return [{name: value for name, value in row.items() if name != "geometry"} for row in table]


@pytest.mark.parametrize(
    ("scenario", "tables", "more"), [(0, TABLES[:5], {}), (1, TABLES, {}), (2, TABLES[:5], {"PLATE": 2, "REGIONAL": 2})]
)
def test_kept_layers_equal_those_of_the_algorithm(processing, project, scenario, tables, more):
    """All rows of all tables for one transect of each scenario, once with the choices and once with both plates
    compared; geometries to the last bit of every ordinate."""
    project, scenarios = project
    parameters = {**scenarios[scenario]["parameters"], "STEP_KM": 5, **more}
    track, session, crs = sampled(project, parameters, place=1)
    session.job("CHOICES" in tables)(lambda fraction: None)()
    kept = keep(session.view(session.fitted_trial()), track, crs, project)
    name = session.profile.name
    context = QgsProcessingContext()
    context.setProject(project)
    results = processing.run(
        "downwarp:fittransects", {**parameters, **dict.fromkeys(tables, "memory:")}, context=context, feedback=Quiet()
    )
    assert len(kept) == len(tables)
    for layer, output in zip(kept, tables):
        mine = rows(layer)
        theirs = [row for row in rows(results[output]) if row["transect"] == name]
        assert len(mine) == len(theirs) > 0
        assert without_geometry(mine) == without_geometry(theirs)
        for one, other in zip(mine, theirs):
            assert (one["geometry"] is None) == (other["geometry"] is None)
            if one["geometry"] is not None:
                assert bytes(one["geometry"].asWkb()) == bytes(other["geometry"].asWkb())
    assert session.result.best.thickness.value / 1e3 == rows(kept[0])[0]["te_km"]


@pytest.fixture
def many_threads():
    """Linear algebra on four threads in this process, where its library can be told."""
    switches = one_thread._switches()
    before = [switch.number() for switch in switches]
    for switch in switches:
        switch.set_number(4)
    yield
    for switch, number in zip(switches, before):
        switch.set_number(number)


def fitted_layers(processing, project, parameters, tables=TABLES[:5]):
    """Rows of `fittransects` by output."""
    context = QgsProcessingContext()
    context.setProject(project)
    results = processing.run(
        "downwarp:fittransects", {**parameters, **dict.fromkeys(tables, "memory:")}, context=context, feedback=Quiet()
    )
    return {output: rows(results[output]) for output in tables}


def test_panel_agrees_with_workers_on_many_transects(processing, project, many_threads):
    """Seven lines across the trench, which the algorithm fits in workers with one thread of linear algebra each, and the
    panel here, one by one, with four threads at hand: all rows are the same to the last bit."""
    project, scenarios = project
    given = scenarios[1]["parameters"]
    original = project.mapLayer(given["TRANSECTS"])
    line = next(original.getFeatures()).geometry()
    lines = QgsVectorLayer("LineString?field=name:string", "seven", "memory")
    lines.setCrs(original.crs())
    for place in range(7):
        feature = QgsFeature(lines.fields())
        feature.setAttributes([f"line {place}"])
        moved = QgsGeometry(line)
        moved.translate(300.0 * place, 2500.0 * place)
        feature.setGeometry(moved)
        lines.dataProvider().addFeature(feature)
    project.addMapLayer(lines)
    parameters = {**given, "TRANSECTS": lines.id(), "NAME_FIELD": "name", "STEP_KM": 5}
    theirs = fitted_layers(processing, project, parameters)
    assert len(theirs["PROFILES"]) == 7 >= LEAST_TRANSECTS
    for place in range(7):
        track, session, crs = sampled(project, parameters, place)
        session.job()(lambda fraction: None)()
        for layer, output in zip(keep(session.view(session.fitted_trial()), track, crs, project), TABLES[:5]):
            expected = [row for row in theirs[output] if row["transect"] == f"line {place}"]
            assert without_geometry(rows(layer)) == without_geometry(expected)
    project.removeMapLayer(lines.id())


@pytest.mark.parametrize("with_areas", [False, True])
def test_algorithm_leaves_out_what_was_left_out_by_hand(processing, project, with_areas):
    """Stretches at the start, in the middle, of one station and at the end: `fittransects` with the layer that is handed
    over fits the stations that the panel fits, and comes to the same rows; other transects keep all of theirs.

    Once beside areas of the user's in degrees, which go on to count for all transects.
    """
    project, scenarios = project
    parameters = {**scenarios[1]["parameters"], "STEP_KM": 5}
    areas = None
    if with_areas:
        areas = circles(project, parameters)
        parameters["FIT_EXCLUDE"] = areas.id()
    track, session, crs = sampled(project, parameters, place=1)
    end = session.profile.distance[-1]
    for start, stop in ((0.0, 20e3), (201e3, 263e3), (299.9e3, 300.1e3), (end - 31e3, end)):
        assert session.leave_out(start, stop)
    layer = add_once(left_out_layer(session, track, crs, areas), project)
    assert add_once(left_out_layer(session, track, crs, areas), project) is layer
    assert layer.featureCount() == 4 + (1 if with_areas else 0)
    before = fitted_layers(processing, project, parameters)
    after = fitted_layers(processing, project, {**parameters, "FIT_EXCLUDE": layer.id()})
    session.job()(lambda fraction: None)()
    kept = keep(session.view(session.fitted_trial()), track, crs, project)
    mine = {output: rows(each) for output, each in zip(TABLES, kept)}
    name = session.profile.name
    for output in TABLES[:5]:
        theirs = [row for row in after[output] if row["transect"] == name]
        assert without_geometry(mine[output]) == without_geometry(theirs)
    fitted = sum(row["in_fit"] for row in mine["STATIONS"])
    assert 0 < fitted < sum(row["in_fit"] for row in before["STATIONS"] if row["transect"] == name)
    for one, other in zip(before["STATIONS"], after["STATIONS"]):
        assert one["in_fit"] == other["in_fit"] or one["transect"] == name
    if with_areas:
        sampled_all = sampled(project, {**parameters, "FIT_EXCLUDE": None}, place=1)[1].profile
        assert session.profile.excluded.sum() > session.left_out.sum() and sampled_all.excluded is None
    project.removeMapLayer(layer.id())


def circles(project, parameters):
    """A circle in degrees in the middle of the second transect, as the user's areas to be left out."""
    lines = project.mapLayer(parameters["TRANSECTS"])
    to_degrees = QgsCoordinateTransform(lines.crs(), QgsCoordinateReferenceSystem("EPSG:4326"), project)
    line = list(lines.getFeatures())[1].geometry()
    line.transform(to_degrees)
    layer = QgsVectorLayer("Polygon?crs=EPSG:4326", "circles", "memory")
    feature = QgsFeature()
    feature.setGeometry(line.interpolate(0.7 * line.length()).buffer(0.2, 8))
    layer.dataProvider().addFeature(feature)
    project.addMapLayer(layer)
    return layer


@pytest.mark.parametrize("areas_crs", [None, "EPSG:4326", "EPSG:3395", "EPSG:3832"])
@pytest.mark.parametrize("start", [175.0, -185.0])
def test_polygons_hold_the_stations_across_the_seam(qgis_application, areas_crs, start):
    """A line from 175 E to 175 W (or -185 to -175), some of it left out on both sides of the seam and over it: asked as
    the algorithm asks, the polygons hold those stations and no others. EPSG:3395 is cut at the seam, EPSG:3832 is not."""
    longitude = start + np.linspace(0.0, 10.0, 301)
    latitude = -20.0 + 0.3 * (longitude - start)
    distance = np.linspace(0.0, 1100e3, 301)
    session = Session(Profile("across " * 20, distance, np.zeros(301)), FitOptions())
    for low, high in ((0.0, 100e3), (400e3, 700e3), (800e3, 801e3)):
        session.leave_out(low, high)
    crs = QgsCoordinateReferenceSystem("EPSG:4326")
    given = None
    if areas_crs is not None:
        given = QgsVectorLayer("Polygon", "none", "memory")
        given.setCrs(QgsCoordinateReferenceSystem(areas_crs))
    layer = left_out_layer(session, Track(distance, longitude, latitude), crs, given)
    areas = Areas(layer, Frame.of(crs, "TRANSECTS"), "FIT_EXCLUDE")
    np.testing.assert_array_equal(areas.contain(longitude, latitude), session.left_out)


def test_kept_trial_says_that_it_was_not_fitted(project):
    """A plate stated by hand is kept without interval, with what it was tried with and a remark."""
    project, scenarios = project
    track, session, crs = sampled(project, scenarios[1]["parameters"])
    view = session.view(Trial(40e3, forces=(1e12, 0.5e17)))
    profiles, stations, markers = keep(view, track, crs, project)
    (row,) = rows(profiles)
    assert (row["te_km"], row["te_low_km"], row["te_high_km"]) == (40.0, None, None)
    assert (row["end_shear_n_per_m"], row["end_moment_n"]) == (1e12, 0.5e17)
    assert row["rms_m"] == view.rms
    assert row["remarks"].startswith("stated by hand, not fitted")
    assert len(rows(stations)) == session.profile.distance.size
    assert {each["kind"] for each in rows(markers)} >= {"break", "deepest"}


def test_layers_go_into_a_group_on_top(project):
    """The group is named after the transect; in it markers lie over stations, and these over the line."""
    project, scenarios = project
    track, session, crs = sampled(project, scenarios[1]["parameters"])
    keep(session.view(session.first_trial()), track, crs, project)
    group = project.layerTreeRoot().children()[0]
    assert group.name() == f"Downwarp, {session.profile.name}"
    assert [child.name().split(",")[0] for child in group.children()] == ["Markers", "Stations", "Profiles"]


def test_bad_keys_are_refused_in_one_sentence(project):
    """Text for a number, a missing relief and a field that does not exist are named as the algorithm names them."""
    project, scenarios = project
    parameters = scenarios[1]["parameters"]
    feature = next(project.mapLayer(parameters["TRANSECTS"]).getFeatures())
    for wrong, words in (
        ({"STEP_KM": "wide"}, "STEP_KM is 'wide'; it takes a number"),
        ({"NAME_FIELD": "none"}, "NAME_FIELD: TRANSECTS has no field 'none'"),
        ({"TE_FROM": 50, "TE_TO": 20}, "TE_FROM .* must be below TE_TO"),
    ):
        with pytest.raises(DownwarpError, match=words):
            Source({**parameters, **wrong}, feature, project)
    with pytest.raises(DownwarpError, match="BREAK_KM is blank"):
        options_of({"BREAK_AT": 2})


def test_every_key_is_sampled_or_solved():
    """Keys that change the samples are among those of the fit; the layers are among them."""
    assert set(fit_keys()) > SAMPLING_KEYS
    assert {"TRANSECTS", "DEM", "OBSERVED", "PICKS", "LOAD_AREA", "FIT_EXCLUDE"} <= SAMPLING_KEYS
