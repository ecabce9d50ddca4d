"""Inside a model, cancelled on the way, and with the progress that a user sees."""

import pytest

pytest.importorskip("qgis")

import invented
from invented import STEP_KM, equator_grid, equator_line, lines_layer
from qgis.core import (
    QgsProcessing,
    QgsProcessingContext,
    QgsProcessingException,
    QgsProcessingModelAlgorithm,
    QgsProcessingModelChildAlgorithm,
    QgsProcessingModelChildParameterSource,
    QgsProcessingModelOutput,
    QgsProcessingModelParameter,
    QgsProcessingParameterNumber,
    QgsProcessingParameterRasterLayer,
    QgsProcessingParameterVectorLayer,
    QgsProcessingUtils,
)
from running import Quiet, rows, run


@pytest.fixture(scope="module")
def dem(tmp_path_factory):
    return equator_grid(tmp_path_factory.mktemp("ground") / "dem.tif", 20.0, invented.trench)


def keys(dem, count=1):
    return {"TRANSECTS": lines_layer([equator_line(20.0)] * count), "DEM": dem, "SETTING": 1, "STEP_KM": STEP_KM}


def model():
    """A model with fittransects inside; its inputs PICKS and INFILL are optional and handed on."""
    built = QgsProcessingModelAlgorithm("Trench", "")
    optional_points = QgsProcessingParameterVectorLayer(
        "picks", "Picks", [QgsProcessing.SourceType.TypeVectorPoint], None, True
    )
    infill = QgsProcessingParameterNumber("infill", "Infill", QgsProcessingParameterNumber.Type.Double, None, True)
    for definition in (
        QgsProcessingParameterVectorLayer("lines", "Lines", [QgsProcessing.SourceType.TypeVectorLine]),
        QgsProcessingParameterRasterLayer("relief", "Relief"),
        optional_points,
        infill,
    ):
        component = QgsProcessingModelParameter(definition.name())
        built.addModelParameter(definition, component)
    child = QgsProcessingModelChildAlgorithm("downwarp:fittransects")
    child.setChildId("fit")
    source = QgsProcessingModelChildParameterSource
    for key, name in (("TRANSECTS", "lines"), ("DEM", "relief"), ("PICKS", "picks"), ("RHO_INFILL", "infill")):
        child.addParameterSources(key, [source.fromModelParameter(name)])
    child.addParameterSources("SETTING", [source.fromStaticValue(1)])
    child.addParameterSources("STEP_KM", [source.fromStaticValue(STEP_KM)])
    output = QgsProcessingModelOutput("profiles", "profiles")
    output.setChildId("fit")
    output.setChildOutputName("PROFILES")
    stations = QgsProcessingModelOutput("stations", "stations")
    stations.setChildId("fit")
    stations.setChildOutputName("STATIONS")
    child.setModelOutputs({"profiles": output, "stations": stations})
    built.addChildAlgorithm(child)
    built.updateDestinationParameters()
    return built


def run_model(parameters):
    """The model's profiles; a fresh context for each run."""
    built = model()
    context, feedback = QgsProcessingContext(), Quiet()
    destinations = {
        definition.name(): QgsProcessing.TEMPORARY_OUTPUT for definition in built.destinationParameterDefinitions()
    }
    assert len(destinations) == 2
    results, good = built.run({**parameters, **destinations}, context, feedback)
    assert good, feedback.errors
    (name,) = (name for name in destinations if name.endswith("profiles"))
    return rows(QgsProcessingUtils.mapLayerFromString(results[name], context))


def test_a_model_runs_with_optional_inputs_unset(dem):
    """PICKS and RHO_INFILL reach the child as None; MARKERS and the other optional sinks are never made."""
    (profile,) = run_model({"lines": lines_layer([equator_line(20.0)]), "relief": dem})
    assert profile["te_km"] == pytest.approx(invented.TE_KM, rel=5e-3)
    assert profile["rho_infill"] == 1030


def test_a_model_hands_its_values_on(dem):
    """A density that the user gave is used, not the setting's."""
    (profile,) = run_model({"lines": lines_layer([equator_line(20.0)]), "relief": dem, "infill": 1025})
    assert profile["rho_infill"] == 1025


def test_a_model_says_why_its_child_failed(dem):
    """The child runs without QGIS's check of values, and still names the key."""
    built = model()
    feedback = Quiet()
    destinations = {
        definition.name(): QgsProcessing.TEMPORARY_OUTPUT for definition in built.destinationParameterDefinitions()
    }
    parameters = {"lines": lines_layer([equator_line(20.0)]), "relief": dem, "infill": 3300, **destinations}
    _, good = built.run(parameters, QgsProcessingContext(), feedback)
    assert not good
    assert "RHO_INFILL (3300 kg/m3) must be below RHO_MANTLE (3300 kg/m3)" in "\n".join(feedback.errors)


class CancelsAt(Quiet):
    """Feedback whose user cancels as soon as progress passes a fraction."""

    def __init__(self, percent):
        super().__init__()
        self.progressChanged.connect(lambda value: self.cancel() if value >= percent else None)


@pytest.mark.parametrize("percent", [0.5, 10, 40, 90])
@pytest.mark.parametrize("count", [1, 3])
def test_cancel_stops_the_run_and_leaves_no_layer(dem, tmp_path, percent, count):
    """Midway through sampling, fitting or writing: an error that says so, and no file."""
    feedback = CancelsAt(percent)
    sinks = {name: str(tmp_path / f"{name.lower()}.gpkg") for name in ("PROFILES", "STATIONS")}
    with pytest.raises(QgsProcessingException, match="Cancelled"):
        run("fittransects", {**keys(dem, count), **sinks}, feedback)
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("name", ["sampletransects", "bendtransects"])
def test_the_others_can_be_cancelled_too(dem, tmp_path, name):
    """The same for the algorithms without a fit."""
    sinks = {"STATIONS": str(tmp_path / "stations.gpkg")}
    given = {key: value for key, value in keys(dem, 3).items() if name == "bendtransects" or key != "SETTING"}
    others = () if name == "sampletransects" else ("PROFILES",)
    with pytest.raises(QgsProcessingException, match="Cancelled"):
        run(name, {**given, **sinks}, CancelsAt(20), others)
    assert list(tmp_path.iterdir()) == []


def test_progress_runs_from_0_to_100_and_never_back(dem):
    """What the progress bar shows over three transects."""
    feedback = Quiet()
    run("fittransects", keys(dem, 3), feedback)
    shown = feedback.fractions
    assert len(shown) > 10
    assert shown == sorted(shown)
    assert 0 <= shown[0] < 20
    assert shown[-1] == pytest.approx(100.0)


def test_nothing_is_printed(dem, capfd):
    """Anything on standard output would break `qgis_process --json`."""
    run("fittransects", keys(dem))
    assert capfd.readouterr().out == ""
