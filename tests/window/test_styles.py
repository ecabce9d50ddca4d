"""How the layers of a run look: labels that evaluate, classes for every value, heights for the elevation tools."""

import importlib.util

import pytest

if importlib.util.find_spec("qgis") is None:
    pytest.skip("styles need QGIS", allow_module_level=True)

from downwarp_checkout.plugin.bridge.fields import GEOMETRY, layer_fields
from downwarp_checkout.plugin.bridge.styles import MARKERS, apply_style, style_on_load
from qgis.core import (
    Qgis,
    QgsExpression,
    QgsExpressionContext,
    QgsFeature,
    QgsGeometry,
    QgsMapLayer,
    QgsProcessingContext,
    QgsProcessingFeedback,
    QgsProcessingLayerPostProcessorInterface,
    QgsProject,
    QgsRenderContext,
    QgsVectorLayer,
    QgsWkbTypes,
)

WHERE = {
    "PROFILES": "LineStringZM (0 0 -5000 0, 1 0 -5100 111)",
    "STATIONS": "PointZ (0 0 -5000)",
    "MARKERS": "PointZ (0 0 -5000)",
}


@pytest.fixture(scope="module", autouse=True)
def running_qgis(qgis_application):
    """QGIS runs through all of them."""
    return qgis_application


def layer(output: str, *rows: dict) -> QgsVectorLayer:
    """A layer in memory with an output's fields, its rows, and its look."""
    kind = QgsWkbTypes.displayString(GEOMETRY[output])
    made = QgsVectorLayer(f"{kind}?crs=EPSG:4326", output, "memory")
    made.dataProvider().addAttributes(layer_fields(output).toList())
    made.updateFields()
    for row in rows:
        feature = QgsFeature(made.fields())
        for name, value in row.items():
            feature[name] = value
        feature.setGeometry(QgsGeometry.fromWkt(WHERE[output]))
        made.dataProvider().addFeature(feature)
    apply_style(made, output)
    return made


def labels(made: QgsVectorLayer) -> list[str]:
    """What stands beside each feature."""
    settings = made.labeling().settings()
    assert settings.isExpression and made.labelsEnabled()
    expression = QgsExpression(settings.fieldName)
    assert not expression.hasParserError(), expression.parserErrorString()
    texts = []
    for feature in made.getFeatures():
        context = QgsExpressionContext()
        context.setFeature(feature)
        texts.append(expression.evaluate(context))
        assert not expression.hasEvalError(), expression.evalErrorString()
    return texts


def symbol_of(made: QgsVectorLayer, feature: QgsFeature):
    """The symbol that a feature is drawn with, None where it is not drawn."""
    context, renderer = QgsRenderContext(), made.renderer().clone()
    renderer.startRender(context, made.fields())
    symbol = renderer.symbolForFeature(feature, context)
    name = None if symbol is None else symbol.clone()
    renderer.stopRender(context)
    return name


def test_profiles_are_labelled_with_thickness_and_interval():
    """A side that is open is said to be; a transect without thickness, and one that failed, are said not resolved."""
    made = layer(
        "PROFILES",
        {"transect": "a", "te_km": 24.34, "te_low_km": 22.0, "te_high_km": 27.06},
        {"transect": "b", "te_km": 50.0, "te_low_km": 40.0},
        {"transect": "c", "te_km": 30.0},
        {"transect": "it's d"},
    )
    expected = ["24.3 km (22.0 to 27.1)", "50.0 km (40.0 to open)", "30.0 km", "not resolved"]
    assert labels(made) == [f"{name}\n{words}" for name, words in zip(("a", "b", "c", "it's d"), expected)]


def test_every_deflection_has_a_class():
    """Deflections from the most raised to the most sunk are all drawn, and 0 parts the colours in the middle."""
    values = [-37.2, -1.0, 0.0, 0.5, 812.0, 2331.7]
    made = layer("STATIONS", *({"deflection_m": value, "distance_km": 7.5, "in_fit": 1} for value in values))
    assert all(symbol_of(made, feature) is not None for feature in made.getFeatures())
    ranges = made.renderer().ranges()
    assert [each.lowerValue() for each in ranges[1:]] == [each.upperValue() for each in ranges[:-1]]
    assert (ranges[0].lowerValue(), ranges[3].lowerValue(), ranges[-1].upperValue()) == (-2400.0, 0.0, 2400.0)
    assert labels(made)[0] == "8 km"


def test_neighbouring_classes_differ_in_grey():
    """Read without colour, classes on one side of 0 get darker step by step, by 8 % of the way to white at least."""
    made = layer("STATIONS", {"deflection_m": 900.0})
    grey = [each.symbol().color().lightnessF() for each in made.renderer().ranges()]
    assert all(inner - outer > 0.08 for outer, inner in zip(grey[:3], grey[1:3]))
    assert all(inner - outer > 0.08 for inner, outer in zip(grey[3:], grey[4:]))


def test_stations_without_a_plate_are_drawn_plainly():
    """Sampled stations have no deflection: they get one symbol."""
    made = layer("STATIONS", {"distance_km": 10.0, "dem_m": -5000.0})
    assert made.renderer().type() == "singleSymbol"
    assert symbol_of(made, next(made.getFeatures())) is not None


def test_marked_places_differ_by_shape():
    """Each kind has its own shape or direction, and a label of its kind, distance and, where it has one, deflection."""
    rows = [{"kind": kind, "distance_km": 49.6, "deflection_m": -217.9} for kind in MARKERS]
    made = layer("MARKERS", *rows)
    symbols = [symbol_of(made, feature).symbolLayer(0) for feature in made.getFeatures()]
    looks = {(each.shape() if hasattr(each, "shape") else each.layerType(), each.angle()) for each in symbols}
    assert len(looks) == len(MARKERS)
    assert labels(made) == ["break 50 km", "deepest 50 km\n218 m", "node 50 km", "bulge 50 km\n218 m"]


@pytest.mark.skipif(not hasattr(Qgis, "AltitudeClamping"), reason="QGIS before 3.26 has no elevation tools for vectors")
@pytest.mark.parametrize("output", list(WHERE))
def test_elevation_tools_take_z_as_height(output):
    """Z is taken as it is, without offset or scale; the line is a continuous surface."""
    made = layer(output, {})
    properties = made.elevationProperties()
    assert properties.clamping() == Qgis.AltitudeClamping.Absolute
    assert (properties.zOffset(), properties.zScale()) == (0.0, 1.0)
    if output == "PROFILES":
        assert properties.type() == Qgis.VectorProfileType.ContinuousSurface


def test_tables_are_left_alone():
    """PARAMETERS has no geometry and keeps what QGIS gives it."""
    made = QgsVectorLayer("NoGeometry?field=transect:string", "table", "memory")
    apply_style(made, "PARAMETERS")
    apply_style(made, "PROFILES")
    assert not made.labelsEnabled()


def test_look_is_applied_on_load_only():
    """A layer that QGIS is to load gets its look by a post-processor that outlives the algorithm; others get none."""
    made = layer("MARKERS")
    made.setLabelsEnabled(False)
    context = QgsProcessingContext()
    style_on_load(context, made.id(), "MARKERS")
    assert not context.willLoadLayerOnCompletion(made.id())
    context.addLayerToLoadOnCompletion(made.id(), QgsProcessingContext.LayerDetails("m", QgsProject.instance()))
    style_on_load(context, made.id(), "MARKERS")
    processor = context.layerToLoadOnCompletionDetails(made.id()).postProcessor()
    assert isinstance(processor, QgsProcessingLayerPostProcessorInterface)
    assert isinstance(made, QgsMapLayer)
    processor.postProcessLayer(made, context, QgsProcessingFeedback())
    assert made.labelsEnabled()
