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
from qgis.PyQt.QtGui import QColor, QFont

from .keys import tr

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


def _profiles(layer: QgsVectorLayer) -> None:
    """The plate's line with a pale edge, an arrow head at its far end and the thickness beside it."""
    symbol = QgsLineSymbol.createSimple({"line_color": PALE, "line_width": "1.8", "capstyle": "round"})
    plate = QgsSimpleLineSymbolLayer(QColor(PLATE), 0.9)
    symbol.appendSymbolLayer(plate)
    head = QgsMarkerLineSymbolLayer(True)
    head.setSubSymbol(_marker("filled_arrowhead", PLATE, 3.6, PLATE))
    _at_last_vertex(head)
    symbol.appendSymbolLayer(head)
    layer.setRenderer(QgsSingleSymbolRenderer(symbol))
    unknown, open_side, between = (_quoted(tr(word)) for word in ("not resolved", "open", "to"))
    low, high = (f"coalesce(format_number(\"te_{side}_km\", 1), '{open_side}')" for side in ("low", "high"))
    interval = f"' (' || {low} || ' {between} ' || {high} || ')'"
    both_open = '"te_low_km" is null and "te_high_km" is null'
    thickness = f"format_number(\"te_km\", 1) || ' km' || if({both_open}, '', {interval})"
    expression = f"\"transect\" || '\\n' || if(\"te_km\" is null, '{unknown}', {thickness})"
    _label(layer, expression, 9.0, "Line", 1.2, bold=True)


def _quoted(text: str) -> str:
    return text.replace("'", "''")


def _at_last_vertex(head: QgsMarkerLineSymbolLayer) -> None:
    if hasattr(Qgis, "MarkerLinePlacement"):  # since 3.24
        head.setPlacements(Qgis.MarkerLinePlacements(Qgis.MarkerLinePlacement.LastVertex))
    else:
        head.setPlacement(QgsMarkerLineSymbolLayer.Placement.LastVertex)


def _stations(layer: QgsVectorLayer) -> None:
    """Deflection in steps of one size about 0; what is not fitted is small and has a pale edge."""
    largest = _largest(layer, "deflection_m")
    if largest is None:
        layer.setRenderer(QgsSingleSymbolRenderer(_marker("circle", PALE, 1.6)))
    else:
        step = largest / (len(RAMP) // 2)
        ranges = []
        for place, colour in enumerate(RAMP):
            low = (place - len(RAMP) // 2) * step
            words = tr("{low} to {high} m").format(low=_plain(low), high=_plain(low + step))
            ranges.append(QgsRendererRange(low, low + step, _station(colour), words))
        renderer = QgsGraduatedSymbolRenderer("deflection_m", ranges)
        layer.setRenderer(renderer)
    _label(layer, "format_number(\"distance_km\", 0) || ' km'", 7.0, "OrderedPositionsAroundPoint")
    labeling = layer.labeling()
    settings = labeling.settings()
    settings.scaleVisibility = True
    settings.minimumScale = _STATION_LABELS_FROM
    settings.maximumScale = 0
    layer.setLabeling(QgsVectorLayerSimpleLabeling(settings))


def _station(colour: str) -> QgsMarkerSymbol:
    symbol = _marker("circle", colour, 2.2)
    layer = symbol.symbolLayer(0)
    fitted = QgsProperty.fromExpression(f"if(\"in_fit\" = 1, '{INK}', '{PALE}')")
    layer.setDataDefinedProperty(_property("StrokeColor"), fitted)
    smaller = QgsProperty.fromExpression('if("in_fit" = 1, 2.2, 1.7)')
    layer.setDataDefinedProperty(_property("Size"), smaller)
    return symbol


def _property(name: str):
    """A property that may be data-defined; until 3.36 its name began with Property."""
    return getattr(QgsSymbolLayer.Property, name, None) or getattr(QgsSymbolLayer.Property, f"Property{name}")


def _plain(value: float) -> str:
    return f"{value:,.0f}"


def _largest(layer: QgsVectorLayer, field: str) -> float | None:
    """Largest absolute value of a field, rounded up to two digits; None where there is none but 0."""
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
    """The look of transects that are drawn by hand and not fitted yet: thin, with a pale edge and their name."""
    symbol = QgsLineSymbol.createSimple({"line_color": PALE, "line_width": "1.2", "capstyle": "round"})
    symbol.appendSymbolLayer(QgsSimpleLineSymbolLayer(QColor(LOAD), 0.6))
    layer.setRenderer(QgsSingleSymbolRenderer(symbol))
    _label(layer, '"name"', 8.0, "Line", 0.8)


_STYLES = {"PROFILES": _profiles, "STATIONS": _stations, "MARKERS": _markers}


def apply_style(layer: QgsMapLayer, output: str) -> None:
    """Give the layer of an output its look; layers without geometry and other outputs stay as they are."""
    style = _STYLES.get(output)
    if style is None or not isinstance(layer, QgsVectorLayer) or layer.geometryType() == _NO_GEOMETRY:
        return
    style(layer)
    if QgsWkbTypes.hasZ(layer.wkbType()):
        _in_elevation(layer, output == "PROFILES")
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
