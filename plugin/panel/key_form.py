"""A form of input widgets made from the algorithms' own keys, so that panel and algorithm never differ in a label."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

from qgis.core import QgsCoordinateReferenceSystem, QgsMapLayerProxyModel, QgsProject
from qgis.gui import QgsFieldComboBox, QgsMapLayerComboBox, QgsProjectionSelectionWidget
from qgis.PyQt.QtCore import pyqtSignal
from qgis.PyQt.QtWidgets import QCheckBox, QComboBox, QLabel, QLineEdit, QVBoxLayout, QWidget

from ..bridge.keys import Key
from ..translation import tr
from .source import fit_keys, help_of

FILTERS = {
    "lines": "LineLayer",
    "points": "PointLayer",
    "polygons": "PolygonLayer",
    "table": "VectorLayer",
    "raster": "RasterLayer",
}


def layer_box(kind: str, empty: str | None = None) -> QgsMapLayerComboBox:
    """A box to choose a layer of a kind from the project; ``empty``: what the choice of none is called."""
    box = QgsMapLayerComboBox()
    box.setFilters(getattr(QgsMapLayerProxyModel.Filter, FILTERS[kind]))
    if empty is not None:
        box.setAllowEmptyLayer(True, empty)
        # Choosing no layer by setLayer would leave the box blank.
        box.setCurrentIndex(0)
    # A long name must not set the width of the panel.
    box.setSizeAdjustPolicy(QComboBox.SizeAdjustPolicy.AdjustToMinimumContentsLengthWithIcon)
    box.setMinimumContentsLength(6)
    return box


def options_box(name: str, labels: dict[int, str] | None = None) -> QComboBox:
    """A box with the options of a key of the fit; ``labels``: words in place of those of some options."""
    key = fit_keys()[name]
    box = QComboBox()
    box.setObjectName(f"key_{name}")
    for place, option in enumerate(key.options):
        box.addItem((labels or {}).get(place, tr(option)))
    box.setCurrentIndex(key.default)
    box.setSizeAdjustPolicy(QComboBox.SizeAdjustPolicy.AdjustToMinimumContentsLengthWithIcon)
    box.setMinimumContentsLength(6)
    box.setToolTip(tr(help_of(name)))
    return box


class KeyForm(QWidget):
    """One row per key; ``changed`` gives the name of a key whose value changed."""

    changed = pyqtSignal(str)

    def __init__(self, keys: Iterable[Key]) -> None:
        super().__init__()
        self.widgets: dict[str, QWidget] = {}
        self._keys = {key.name: key for key in keys}
        layout = QVBoxLayout(self)
        layout.setSpacing(2)
        for key in self._keys.values():
            widget = self._make(key)
            widget.setObjectName(f"key_{key.name}")
            text = tr(help_of(key.name))
            widget.setToolTip(text)
            self.widgets[key.name] = widget
            if key.kind != "flag":
                label = QLabel(tr(key.label))
                label.setWordWrap(True)
                label.setToolTip(text)
                label.setBuddy(widget)
                layout.addWidget(label)
            layout.addWidget(widget)
            layout.addSpacing(4)
        layout.addStretch()
        for key in self._keys.values():
            if key.kind == "field" and key.parent in self.widgets:
                parent_box = self.widgets[key.parent]
                parent_box.layerChanged.connect(self.widgets[key.name].setLayer)
                self.widgets[key.name].setLayer(parent_box.currentLayer())

    def _make(self, key: Key) -> QWidget:
        if key.kind == "enum":
            box = options_box(key.name)
            box.currentIndexChanged.connect(lambda _: self.changed.emit(key.name))
            return box
        if key.kind == "flag":
            check = QCheckBox(tr(key.label))
            check.setChecked(bool(key.default))
            check.toggled.connect(lambda _: self.changed.emit(key.name))
            return check
        if key.kind in FILTERS:
            box = layer_box(key.kind, tr("none"))
            box.layerChanged.connect(lambda _: self.changed.emit(key.name))
            return box
        if key.kind == "field":
            box = QgsFieldComboBox()
            box.setAllowEmptyFieldName(True)
            box.fieldChanged.connect(lambda _: self.changed.emit(key.name))
            return box
        if key.kind == "crs":
            chooser = QgsProjectionSelectionWidget()
            chooser.setOptionVisible(QgsProjectionSelectionWidget.CrsOption.CrsNotSet, True)
            chooser.setNotSetText(tr("the grid's own"))
            chooser.setCrs(QgsCoordinateReferenceSystem())
            chooser.crsChanged.connect(lambda _: self.changed.emit(key.name))
            return chooser
        line = QLineEdit()
        if key.default is not None:
            line.setText(f"{key.default:g}")
        line.editingFinished.connect(lambda: self._edited(key.name))
        return line

    def _edited(self, name: str) -> None:
        line = self.widgets[name]
        if line.isModified():
            line.setModified(False)
            self.changed.emit(name)

    def parameters(self) -> dict[str, Any]:
        """Values by key, as an algorithm takes them; a key that is blank is left out."""
        found = {name: self._value(name) for name in self.widgets}
        return {name: value for name, value in found.items() if value not in (None, "")}

    def _value(self, name: str) -> Any:
        widget = self.widgets[name]
        if isinstance(widget, QgsMapLayerComboBox):
            layer = widget.currentLayer()
            return None if layer is None else layer.id()
        if isinstance(widget, QgsFieldComboBox):
            return widget.currentField()
        if isinstance(widget, QComboBox):
            return widget.currentIndex()
        if isinstance(widget, QCheckBox):
            return widget.isChecked()
        if isinstance(widget, QgsProjectionSelectionWidget):
            return widget.crs() if widget.crs().isValid() else None
        return widget.text().strip()

    def set_value(self, name: str, value: Any) -> None:
        """Set the value of a key: the id of a layer, the place of an option, a field's name, text or a number."""
        widget = self.widgets[name]
        if isinstance(widget, QgsMapLayerComboBox):
            if value is None:
                widget.setCurrentIndex(0)
            else:
                widget.setLayer(QgsProject.instance().mapLayer(value))
        elif isinstance(widget, QgsFieldComboBox):
            widget.setField(value or "")
        elif isinstance(widget, QComboBox):
            widget.setCurrentIndex(value)
        elif isinstance(widget, QCheckBox):
            widget.setChecked(bool(value))
        elif isinstance(widget, QLineEdit):
            widget.setText("" if value is None else str(value))
            self.changed.emit(name)
