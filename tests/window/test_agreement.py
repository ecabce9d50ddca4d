"""The panel's way from keys to layers beside `fittransects`, without a window: every value is the same."""

import importlib.util
import json
import sys

import pytest

if importlib.util.find_spec("qgis") is None:
    pytest.skip("layers need QGIS", allow_module_level=True)

from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.panel.session import Trial
from downwarp_checkout.plugin.panel.source import SAMPLING_KEYS, Source, fit_keys, keep, options_of
from qgis.core import QgsApplication, QgsProcessingContext, QgsProject, QgsRasterLayer, QgsVectorLayer
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
