"""How the layers of a run look in the map, told by shape and width as well as by colour."""

from __future__ import annotations

from qgis.core import (
    Qgis,
    QgsCategorizedSymbolRenderer,
    QgsFeatureRequest,
    QgsFillSymbol,
    QgsGraduatedSymbolRenderer,
    QgsLineSymbol,
    QgsMapLayer,
    QgsMarkerLineSymbolLayer,
    QgsMarkerSymbol,
    QgsPalLayerSettings,
    QgsProcessingLayerPostProcessorInterface,
    QgsProperty,
    QgsRendererCategory,
    QgsRendererRange,
    QgsSimpleLineSymbolLayer,
    QgsSingleSymbolRenderer,
    QgsSymbolLayer,
    QgsTextBufferSettings,
    QgsTextFormat,
    QgsVectorLayer,
    QgsVectorLayerSimpleLabeling,
    QgsWkbTypes,
)
from qgis.PyQt.QtCore import Qt
from qgis.PyQt.QtGui import QColor, QFont

from ..core.strength_check import ELASTIC_SHARE
from ..core.strip_check import ENOUGH, ROUGH
from ..translation import tr

INK, PLATE, PALE, LOAD, FAINT = "#26343a", "#1f6f84", "#ffffff", "#e08a2e", "#8a969b"

# From raised to sunk: blue-green over near white to brown, told apart in grey by their darkness from the middle and in
# any kind of colour blindness by blue against yellow.
RAMP = ("#14505f", "#5c9fb0", "#c9dfe4", "#f5e3cc", "#e08a2e", "#8a4a08")
_STATION_LABELS_FROM = 1_500_000
"""Scale from which on stations carry their distance."""


def _text(size: float, colour: str = INK, bold: bool = False) -> QgsTextFormat:
    font = QFont()
    font.setBold(bold)
    text = QgsTextFormat()
    text.setFont(font)
    text.setSize(size)
    text.setColor(QColor(colour))
    halo = QgsTextBufferSettings()
    halo.setEnabled(True)
    halo.setSize(0.9)
    halo.setColor(QColor(PALE))
    text.setBuffer(halo)
    return text


def _placement(name: str):
    """A label placement by its name: an enum of its own in Qgis since 3.26, before that one of the settings."""
    owner = Qgis.LabelPlacement if hasattr(Qgis, "LabelPlacement") else QgsPalLayerSettings.Placement
    return getattr(owner, name)


def _label(
    layer: QgsVectorLayer, expression: str, size: float, placement: str, distance: float = 0.0, bold: bool = False
) -> None:
    settings = QgsPalLayerSettings()
    settings.fieldName = expression
    settings.isExpression = True
    settings.setFormat(_text(size, bold=bold))
    settings.placement = _placement(placement)
    settings.dist = distance
    layer.setLabeling(QgsVectorLayerSimpleLabeling(settings))
    layer.setLabelsEnabled(True)


def _marker(shape: str, fill: str, size: float, stroke: str = INK) -> QgsMarkerSymbol:
    return QgsMarkerSymbol.createSimple({
        "name": shape, "color": fill, "outline_color": stroke, "outline_width": "0.3", "size": str(size)
    })  # fmt: skip


def _line(colour: str = PLATE, pen: Qt.PenStyle = Qt.PenStyle.SolidLine) -> QgsLineSymbol:
    """A line with a pale edge and an arrow head at its far end."""
    symbol = QgsLineSymbol.createSimple({"line_color": PALE, "line_width": "1.8", "capstyle": "round"})
    symbol.appendSymbolLayer(QgsSimpleLineSymbolLayer(QColor(colour), 0.9, pen))
    head = QgsMarkerLineSymbolLayer(True)
    head.setSubSymbol(_marker("filled_arrowhead", colour, 3.6, colour))
    _at_last_vertex(head)
    symbol.appendSymbolLayer(head)
    return symbol


def _label_line(layer: QgsVectorLayer, expression: str) -> None:
    """The transect's name and below it what an expression gives."""
    _label(layer, f"\"transect\" || '\\n' || {expression}", 9.0, "Line", 1.2, bold=True)


def _with_interval(value: str, low: str, high: str, unit: str, digits: int) -> str:
    """An expression for the value of a field with the interval that two others hold."""
    unknown, open_side, between = (_quoted(word) for word in (tr("not resolved"), tr("open"), tr("to")))
    from_low, to_high = (f"coalesce(format_number(\"{side}\", {digits}), '{open_side}')" for side in (low, high))
    interval = f"' (' || {from_low} || ' {between} ' || {to_high} || ')'"
    both_open = f'"{low}" is null and "{high}" is null'
    known = f"format_number(\"{value}\", {digits}) || ' {unit}' || if({both_open}, '', {interval})"
    return f"if(\"{value}\" is null, '{unknown}', {known})"


def _profiles(layer: QgsVectorLayer) -> None:
    """The plate's line with the thickness beside it."""
    layer.setRenderer(QgsSingleSymbolRenderer(_line()))
    _label_line(layer, _with_interval("te_km", "te_low_km", "te_high_km", "km", 1))


def _along_strike(layer: QgsVectorLayer) -> None:
    """A square where each transect stands, with the thickness beside it."""
    layer.setRenderer(QgsSingleSymbolRenderer(_marker("square", PLATE, 2.8)))
    thickness = _with_interval("te_km", "te_low_km", "te_high_km", "km", 1)
    _label(layer, f"\"transect\" || '\\n' || {thickness}", 8.0, "OrderedPositionsAroundPoint", 1.6)


def _ages(layer: QgsVectorLayer) -> None:
    """The transect's line with the temperature at the plate's base and its age when it was loaded."""
    layer.setRenderer(QgsSingleSymbolRenderer(_line()))
    temperature = _with_interval("temperature_c", "temperature_low_c", "temperature_high_c", "°C", 0)
    age = _filled(tr("loaded at {age} Myr"), "age", 'format_number("age_at_loading_myr", 0)')
    _label_line(layer, f"{temperature} || coalesce('\\n' || {age}, '')")


def _checks(layer: QgsVectorLayer) -> None:
    """The transect's line by what the strip's errors come to, with both errors beside it."""
    worst = 'max(abs("deepest_error_percent"), abs("te_error_percent"))'
    kind = (
        "case when \"deepest_error_percent\" is null then 'unknown' when \"te_error_percent\" is null then 'wrong' "
        f"when {worst} <= {100 * ENOUGH:g} then 'enough' when {worst} <= {100 * ROUGH:g} then 'rough' else 'wrong' end"
    )
    unknown = tr("the plate does not bend here")
    layer.setRenderer(QgsCategorizedSymbolRenderer(kind, [
        QgsRendererCategory("enough", _line(), tr("a strip is enough")),
        QgsRendererCategory("rough", _line(LOAD, Qt.PenStyle.DashLine), tr("a strip is rough")),
        QgsRendererCategory("wrong", _line(RAMP[-1], Qt.PenStyle.DotLine), tr("a strip is wrong")),
        QgsRendererCategory("unknown", _line(FAINT), unknown),
    ]))  # fmt: skip
    deepest, thickness = (
        _filled(words, "error", f"if(round({field}) > 0, '+', '') || round({field})")
        for words, field in (
            (tr("deepest {error} %"), '"deepest_error_percent"'), (tr("thickness {error} %"), '"te_error_percent"')
        )
    )  # fmt: skip
    _label_line(layer, f"coalesce({deepest} || coalesce(', ' || {thickness}, ''), '{_quoted(unknown)}')")


VERDICTS = {
    "carried": ("circle", PLATE, 3.4, PALE),
    "yielding": ("diamond", PALE, 4.2, INK),
    "too much": ("cross_fill", LOAD, 5.0, INK),
}
"""Shape, fill, size, mm, and edge of each verdict on a plate's strength."""


def _verdicts(layer: QgsVectorLayer) -> None:
    """A shape of its own for each verdict, with the share of the largest moment beside it."""
    kind = (
        "case when \"moment_share\" >= 1 then 'too much' "
        f"when \"overstressed_share\" <= {ELASTIC_SHARE:g} then 'carried' else 'yielding' end"
    )
    words = {"carried": tr("carried"), "yielding": tr("carried with yielding"), "too much": tr("not carried")}
    layer.setRenderer(QgsCategorizedSymbolRenderer(kind, [
        QgsRendererCategory(name, _marker(*look), words[name]) for name, look in VERDICTS.items()
    ]))  # fmt: skip
    share = _filled(tr("moment {share} % of the largest"), "share", 'format_number(100 * "moment_share", 0)')
    _label(layer, f"\"transect\" || '\\n' || {share}", 8.0, "OrderedPositionsAroundPoint", 1.6)


def _filled(words: str, name: str, expression: str) -> str:
    """An expression for words in which an expression stands in the place ``name``; null where that is."""
    before, _, after = words.partition(f"{{{name}}}")
    return f"'{_quoted(before)}' || {expression} || '{_quoted(after)}'"


def _quoted(text: str) -> str:
    return text.replace("'", "''")


def _at_last_vertex(head: QgsMarkerLineSymbolLayer) -> None:
    if hasattr(Qgis, "MarkerLinePlacement"):  # since 3.24
        head.setPlacements(Qgis.MarkerLinePlacements(Qgis.MarkerLinePlacement.LastVertex))
    else:
        head.setPlacement(QgsMarkerLineSymbolLayer.Placement.LastVertex)


def _stations(layer: QgsVectorLayer) -> None:
    """By deflection; what is not fitted is small and has a pale edge."""
    _by_size(layer, "deflection_m", "m", '"in_fit" = 1')
    _label_near(layer, "format_number(\"distance_km\", 0) || ' km'")


def _check_stations(layer: QgsVectorLayer) -> None:
    """By how much deeper the plate lies under the strip than under the load as mapped."""
    _by_size(layer, "difference_m", "m")
    _label_near(layer, "format_number(\"distance_km\", 0) || ' km'")


def _anomalies(layer: QgsVectorLayer) -> None:
    """By the plate's free-air anomaly; readings that were not compared are small and have a pale edge."""
    _by_size(layer, "free_air_mgal", "mGal", '"in_fit" = 1 or "observed_mgal" is null')
    _label_near(layer, "format_number(\"free_air_mgal\", 0) || ' mGal'")


def _by_size(layer: QgsVectorLayer, field: str, unit: str, in_use: str = "true") -> None:
    """Values in steps of one size about 0; ``in_use``: an expression for what is drawn large."""
    largest = _largest(layer, field)
    if largest is None:
        layer.setRenderer(QgsSingleSymbolRenderer(_marker("circle", PALE, 1.6)))
        return
    step = largest / (len(RAMP) // 2)
    ranges = []
    for place, colour in enumerate(RAMP):
        low = (place - len(RAMP) // 2) * step
        ends = {"low": _plain(low, step), "high": _plain(low + step, step)}
        words = tr("{low} to {high} {unit}", unit=unit, **ends)
        ranges.append(QgsRendererRange(low, low + step, _station(colour, in_use), words))
    layer.setRenderer(QgsGraduatedSymbolRenderer(field, ranges))


def _label_near(layer: QgsVectorLayer, expression: str) -> None:
    """Labels that show once the map is large enough for them."""
    _label(layer, expression, 7.0, "OrderedPositionsAroundPoint")
    settings = layer.labeling().settings()
    settings.scaleVisibility = True
    settings.minimumScale = _STATION_LABELS_FROM
    settings.maximumScale = 0
    layer.setLabeling(QgsVectorLayerSimpleLabeling(settings))


def _station(colour: str, in_use: str) -> QgsMarkerSymbol:
    symbol = _marker("circle", colour, 2.2)
    layer = symbol.symbolLayer(0)
    edge = QgsProperty.fromExpression(f"if({in_use}, '{INK}', '{PALE}')")
    layer.setDataDefinedProperty(_property("StrokeColor"), edge)
    smaller = QgsProperty.fromExpression(f"if({in_use}, 2.2, 1.7)")
    layer.setDataDefinedProperty(_property("Size"), smaller)
    return symbol


def _property(name: str):
    """A property that may be data-defined; until 3.36 its name began with Property."""
    return getattr(QgsSymbolLayer.Property, name, None) or getattr(QgsSymbolLayer.Property, f"Property{name}")


def _plain(value: float, step: float) -> str:
    return f"{value:,.{0 if step >= 10 else 1 if step >= 1 else 3}f}"


def _largest(layer: QgsVectorLayer, field: str) -> float | None:
    """Largest absolute value of a field, rounded up to two digits or a tenth; None where there is none but 0."""
    index = layer.fields().lookupField(field)
    if index < 0:
        return None
    values = (feature.attribute(index) for feature in layer.getFeatures(_only(index)))
    largest = max((abs(value) for value in values if isinstance(value, float)), default=0.0)
    if not largest > 0:
        return None
    unit = 10.0 ** (len(f"{largest:.0f}") - 2)
    return float(-(-largest // unit) * unit)


def _only(index: int) -> QgsFeatureRequest:
    """A request for one field; the smallest and largest value that QGIS offers are no numbers where all are NULL."""
    request = QgsFeatureRequest()
    request.setFlags(QgsFeatureRequest.Flag.NoGeometry)
    request.setSubsetOfAttributes([index])
    return request


MARKERS = {
    "break": ("line", LOAD, 6.0),
    "deepest": ("triangle", PLATE, 3.8),
    "node": ("diamond", PALE, 3.4),
    "bulge": ("triangle", PLATE, 3.8),
}
"""Shape, fill and size, mm, of each kind of marked place; the deepest one's triangle points down."""


def _markers(layer: QgsVectorLayer) -> None:
    """A shape of its own for each kind of place, with its name, distance and deflection beside it."""
    words = {"break": tr("break"), "deepest": tr("deepest"), "node": tr("node"), "bulge": tr("bulge")}
    categories = []
    for kind, (shape, fill, size) in MARKERS.items():
        symbol = _marker(shape, fill, size, LOAD if shape == "line" else INK)
        if shape == "line":
            symbol.symbolLayer(0).setStrokeWidth(0.8)
        if kind == "deepest":
            symbol.setAngle(180.0)
        categories.append(QgsRendererCategory(kind, symbol, words[kind]))
    layer.setRenderer(QgsCategorizedSymbolRenderer("kind", categories))
    names = " ".join(f"when \"kind\" = '{kind}' then '{_quoted(name)}'" for kind, name in words.items())
    expression = (
        f"case {names} end || ' ' || format_number(\"distance_km\", 0) || ' km' || "
        "if(\"kind\" in ('deepest', 'bulge'), '\\n' || format_number(abs(\"deflection_m\"), 0) || ' m', '')"
    )
    _label(layer, expression, 8.0, "OrderedPositionsAroundPoint", 1.6)


def _in_elevation(layer: QgsVectorLayer, is_line: bool) -> None:
    """Let QGIS's own elevation tools take Z as the height of the surface (3.26 and later)."""
    properties = layer.elevationProperties()
    if not hasattr(Qgis, "AltitudeClamping") or not hasattr(properties, "setClamping"):
        return
    properties.setClamping(Qgis.AltitudeClamping.Absolute)
    properties.setBinding(Qgis.AltitudeBinding.Vertex)
    if hasattr(properties, "setRespectLayerSymbology"):
        properties.setRespectLayerSymbology(not is_line)
    if not is_line:
        return
    line = QgsLineSymbol.createSimple({"line_color": PLATE, "line_width": "0.8"})
    properties.setProfileLineSymbol(line)
    if hasattr(Qgis, "VectorProfileType") and hasattr(properties, "setType"):
        properties.setType(Qgis.VectorProfileType.ContinuousSurface)
    if hasattr(properties, "setProfileFillSymbol"):
        properties.setProfileFillSymbol(QgsFillSymbol.createSimple({"color": "31,111,132,60", "outline_style": "no"}))


def style_drawn(layer: QgsVectorLayer) -> None:
    """The look of transects that are drawn or laid and not fitted yet: thin, with a pale edge and their name."""
    symbol = QgsLineSymbol.createSimple({"line_color": PALE, "line_width": "1.2", "capstyle": "round"})
    symbol.appendSymbolLayer(QgsSimpleLineSymbolLayer(QColor(LOAD), 0.6))
    layer.setRenderer(QgsSingleSymbolRenderer(symbol))
    _label(layer, '"name"', 8.0, "Line", 0.8)


def style_left_out(layer: QgsVectorLayer) -> None:
    """The look of narrow polygons along stations that are left out of a fit: an outline that is seen at any scale."""
    outline = {"style": "no", "outline_color": LOAD, "outline_width": "0.8"}
    layer.setRenderer(QgsSingleSymbolRenderer(QgsFillSymbol.createSimple(outline)))


_STYLES = {
    "TRANSECTS": style_drawn,
    "PROFILES": _profiles,
    "STATIONS": _stations,
    "MARKERS": _markers,
    "ALONG_STRIKE": _along_strike,
    "CHECKS": _checks,
    "CHECK_STATIONS": _check_stations,
    "ANOMALIES": _anomalies,
    "VERDICTS": _verdicts,
    "AGES": _ages,
}


def apply_style(layer: QgsMapLayer, output: str) -> None:
    """Give the layer of an output its look; layers without geometry and other outputs stay as they are."""
    style = _STYLES.get(output)
    if style is None or not isinstance(layer, QgsVectorLayer) or layer.geometryType() == _NO_GEOMETRY:
        return
    style(layer)
    if QgsWkbTypes.hasZ(layer.wkbType()):
        _in_elevation(layer, layer.geometryType() == QgsWkbTypes.GeometryType.LineGeometry)
    layer.triggerRepaint()


_NO_GEOMETRY = QgsWkbTypes.GeometryType.NullGeometry


class _Styler(QgsProcessingLayerPostProcessorInterface):
    """Gives a layer its look once QGIS has loaded it."""

    def __init__(self, output: str) -> None:
        super().__init__()
        self._output = output

    def postProcessLayer(self, layer, context, feedback) -> None:
        """Called by QGIS on the main thread."""
        apply_style(layer, self._output)


# QGIS keeps no reference to them.
_STYLERS = {output: _Styler(output) for output in _STYLES}


def style_on_load(context, destination, output: str) -> None:
    """Have the look applied when QGIS loads an output at the end of a run, where it is to be loaded."""
    if output in _STYLERS and isinstance(destination, str) and context.willLoadLayerOnCompletion(destination):
        context.layerToLoadOnCompletionDetails(destination).setPostProcessor(_STYLERS[output])
