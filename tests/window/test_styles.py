"""How the layers of a run look: labels that evaluate, classes for every value, heights for the elevation tools."""

import importlib.util

import pytest

if importlib.util.find_spec("qgis") is None:
    pytest.skip("styles need QGIS", allow_module_level=True)

from downwarp_checkout.plugin.bridge.fields import GEOMETRY, layer_fields
from downwarp_checkout.plugin.bridge.styles import MARKERS, apply_style, style_on_load
from downwarp_checkout.plugin.core.strip_check import verdict
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
    QgsSymbolLayer,
    QgsVectorLayer,
    QgsWkbTypes,
)

LINE, POINT = "LineStringZM (0 0 -5000 0, 1 0 -5100 111)", "PointZ (0 0 -5000)"
LINES = ("PROFILES", "CHECKS", "AGES")
POINTS = ("STATIONS", "MARKERS", "CHECK_STATIONS", "ANOMALIES", "VERDICTS")
FLAT = {"TRANSECTS": "LineString (0 0, 1 0)", "ALONG_STRIKE": "Point (0 0)"}
WHERE = {**dict.fromkeys(LINES, LINE), **dict.fromkeys(POINTS, POINT), **FLAT}


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
    context.expressionContext().setFeature(feature)
    renderer.startRender(context, made.fields())
    symbol = renderer.symbolForFeature(feature, context)
    name = None if symbol is None else symbol.clone()
    renderer.stopRender(context)
    return name


def test_profiles_are_labelled_with_thickness_and_interval():
    """A side that is open is said to be; a transect without thickness, and one that failed, are said not resolved."""
    rows = (
        {"transect": "a", "te_km": 24.34, "te_low_km": 22.0, "te_high_km": 27.06},
        {"transect": "b", "te_km": 50.0, "te_low_km": 40.0},
        {"transect": "c", "te_km": 30.0},
        {"transect": "it's d"},
    )
    expected = ["24.3 km (22.0 to 27.1)", "50.0 km (40.0 to open)", "30.0 km", "not resolved"]
    for output in ("PROFILES", "ALONG_STRIKE"):
        words = labels(layer(output, *rows))
        assert words == [f"{name}\n{words}" for name, words in zip(("a", "b", "c", "it's d"), expected)]


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
@pytest.mark.parametrize("output", LINES + POINTS)
def test_elevation_tools_take_z_as_height(output):
    """Z is taken as it is, without offset or scale; the line is a continuous surface."""
    made = layer(output, {})
    properties = made.elevationProperties()
    assert properties.clamping() == Qgis.AltitudeClamping.Absolute
    assert (properties.zOffset(), properties.zScale()) == (0.0, 1.0)
    if output in LINES:
        assert properties.type() == Qgis.VectorProfileType.ContinuousSurface


def test_every_layer_has_a_look():
    """Every output with a geometry gets labels, and draws a row of which nothing but the transect's name is known."""
    assert set(WHERE) == set(GEOMETRY)
    for output in GEOMETRY:
        made = layer(output, {"name" if output == "TRANSECTS" else "transect": "a"})
        assert made.labelsEnabled(), output
        feature = next(made.getFeatures())
        assert made.renderer().type() == "categorizedSymbol" or symbol_of(made, feature) is not None, output


def test_strip_checks_are_told_apart_by_pen():
    """What is enough, rough and wrong differs by its dashes as well as by colour; the errors stand beside the line.

    The limits are those of the verdict: 5 and 15 % of either error, and no thickness at all is wrong.
    """
    cases = [(3.2, -4.9, "enough"), (-12.0, 1.0, "rough"), (2.0, 15.4, "wrong"), (1.0, None, "wrong"), (None, None, "")]
    rows = [{"transect": "a", "deepest_error_percent": one, "te_error_percent": two} for one, two, _ in cases]
    made = layer("CHECKS", *rows)
    for one, two, kind in cases:
        said = verdict(None if one is None else one / 100, None if two is None else two / 100)
        assert f"is {kind} here" in said if kind else "does not bend" in said
    pens = [symbol_of(made, feature).symbolLayer(1).penStyle() for feature in made.getFeatures()]
    assert pens[2] == pens[3]
    assert len({int(pen) for pen in pens[:3]}) == 3
    assert labels(made) == [
        "a\ndeepest +3 %, thickness -5 %", "a\ndeepest -12 %, thickness +1 %", "a\ndeepest +2 %, thickness +15 %",
        "a\ndeepest +1 %", "a\nthe plate does not bend here",
    ]  # fmt: skip


def test_verdicts_differ_by_shape():
    """Carried, carried with yielding and not carried each have a shape, by the numbers that the verdict goes by."""
    cases = [(0.05, 0.45), (0.1, 0.99), (0.4, 0.8), (0.4, 1.0), (0.05, 1.7)]
    rows = [{"transect": "a", "overstressed_share": share, "moment_share": moment} for share, moment in cases]
    made = layer("VERDICTS", *rows)
    shapes = [symbol_of(made, feature).symbolLayer(0).shape() for feature in made.getFeatures()]
    assert shapes[0] == shapes[1] and shapes[3] == shapes[4]
    assert len({int(shape) for shape in shapes}) == 3
    assert labels(made)[:2] == ["a\nmoment 45 % of the largest", "a\nmoment 99 % of the largest"]


def test_ages_are_labelled_with_temperature_and_age():
    """A side that is open is said to be; a thickness that is not resolved has no temperature."""
    made = layer(
        "AGES",
        {"transect": "a", "temperature_c": 441.6, "temperature_low_c": 400.0, "age_at_loading_myr": 29.7},
        {"transect": "b", "age_at_loading_myr": 80.0},
        {"transect": "c"},
    )
    assert labels(made) == [
        "a\n442 °C (400 to open)\nloaded at 30 Myr", "b\nnot resolved\nloaded at 80 Myr", "c\nnot resolved"
    ]  # fmt: skip


@pytest.mark.parametrize(
    ("output", "field", "label"), [("ANOMALIES", "free_air_mgal", "-53 mGal"), ("CHECK_STATIONS", "difference_m", "8 km")]
)
def test_differences_have_classes_about_zero(output, field, label):
    """All values are drawn, and 0 parts the colours; steps below ten keep a digit behind the point."""
    values = [-52.7, -0.1, 0.0, 0.4, 12.0]
    made = layer(output, *({field: value, "distance_km": 7.5} for value in values))
    assert all(symbol_of(made, feature) is not None for feature in made.getFeatures())
    ranges = made.renderer().ranges()
    assert (ranges[0].lowerValue(), ranges[3].lowerValue(), ranges[-1].upperValue()) == (-53.0, 0.0, 53.0)
    assert labels(made)[0] == label
    small = layer(output, {field: 5.2})
    assert small.renderer().ranges()[3].label().startswith("0.0 to 1.7 ")


def test_readings_that_were_not_compared_are_small():
    """They have a pale edge, too; without readings every station is drawn large."""
    rows = [
        {"free_air_mgal": 10.0, "observed_mgal": 9.0, "in_fit": 1},
        {"free_air_mgal": 10.0, "observed_mgal": 9.0, "in_fit": 0},
        {"free_air_mgal": 10.0, "in_fit": 0},
    ]
    made = layer("ANOMALIES", *rows)
    sizes = []
    for feature in made.getFeatures():
        context = QgsExpressionContext()
        context.setFeature(feature)
        symbol = symbol_of(made, feature)
        size = symbol.symbolLayer(0).dataDefinedProperties().property(key("Size")).expressionString()
        sizes.append(QgsExpression(size).evaluate(context))
    assert sizes[0] == sizes[2] > sizes[1] > 0


def key(name):
    """A property that may be data-defined; until 3.36 its name began with Property."""
    return getattr(QgsSymbolLayer.Property, name, None) or getattr(QgsSymbolLayer.Property, f"Property{name}")


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
