"""The panel's first page: which line is looked at, from which rasters, in which setting."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from qgis.core import NULL, QgsFeature, QgsFeatureRequest, QgsProject, QgsRasterLayer, QgsVectorLayer
from qgis.gui import QgsFieldComboBox
from qgis.PyQt.QtCore import pyqtSignal
from qgis.PyQt.QtWidgets import QComboBox, QFormLayout, QHBoxLayout, QToolButton, QWidget

from ..core.settings import REMOVED
from ..translation import tr
from .key_form import layer_box, options_box
from .source import help_of

MOST_FEATURES = 1000
"""Transects offered in the list."""


class InputPage(QWidget):
    """Choice of line, relief, bent surface and setting; ``changed`` gives the name of a key."""

    KEYS = ("TRANSECTS", "NAME_FIELD", "DEM", "OBSERVED", "SETTING")
    changed = pyqtSignal(str)
    draw_wanted = pyqtSignal()

    def __init__(self) -> None:
        super().__init__()
        self._watched: QgsVectorLayer | None = None
        self._quiet = False
        self.lines = layer_box("lines", tr("none"))
        self.lines.setObjectName("lines")
        draw = QToolButton()
        draw.setText(tr("Draw"))
        draw.setToolTip(tr("Draw a transect on the map, from the load outwards"))
        draw.clicked.connect(self.draw_wanted)
        lines_row = QHBoxLayout()
        lines_row.addWidget(self.lines, 1)
        lines_row.addWidget(draw)
        self.name_field = QgsFieldComboBox()
        self.name_field.setAllowEmptyFieldName(True)
        self.feature = QComboBox()
        self.feature.setObjectName("feature")
        self.feature.setSizeAdjustPolicy(QComboBox.SizeAdjustPolicy.AdjustToMinimumContentsLengthWithIcon)
        self.feature.setMinimumContentsLength(6)
        self.dem = layer_box("raster", tr("none"))
        self.dem.setObjectName("dem")
        self.observed = layer_box("raster", tr("the relief outside the load"))
        self.observed.setObjectName("observed")
        self.setting = options_box("SETTING", {REMOVED: tr("Load removed")})
        form = QFormLayout(self)
        form.setFieldGrowthPolicy(QFormLayout.FieldGrowthPolicy.AllNonFixedFieldsGrow)
        form.setVerticalSpacing(4)
        self.lines.setToolTip(tr(help_of("TRANSECTS")))
        form.addRow(tr("Lines"), lines_row)
        for words, widget, key in (
            (tr("Named by"), self.name_field, "NAME_FIELD"),
            (tr("Transect"), self.feature, "TRANSECTS"),
            (tr("Relief"), self.dem, "DEM"),
            (tr("Bent surface"), self.observed, "OBSERVED"),
            (tr("Setting"), self.setting, "SETTING"),
        ):
            form.addRow(words, widget)
            widget.setToolTip(tr(help_of(key)))
        self.lines.layerChanged.connect(self._layer_chosen)
        self.name_field.fieldChanged.connect(self._list_features)
        self.feature.currentIndexChanged.connect(lambda _: self.changed.emit("TRANSECTS"))
        for box, name in ((self.dem, "DEM"), (self.observed, "OBSERVED")):
            box.layerChanged.connect(lambda _, name=name: self.changed.emit(name))
        self.setting.currentIndexChanged.connect(lambda _: self.changed.emit("SETTING"))
        self._layer_chosen()

    def parameters(self) -> dict[str, Any]:
        """The choices as keys of the fit."""
        found: dict[str, Any] = {"SETTING": self.setting.currentIndex()}
        for name, box in (("TRANSECTS", self.lines), ("DEM", self.dem), ("OBSERVED", self.observed)):
            layer = box.currentLayer()
            if layer is not None:
                found[name] = layer.id()
        if self.name_field.currentField():
            found["NAME_FIELD"] = self.name_field.currentField()
        return found

    def chosen(self) -> QgsFeature | None:
        """The transect that is looked at, once a relief is chosen for it, too."""
        layer, feature_id = self.lines.currentLayer(), self.feature.currentData()
        if layer is None or feature_id is None or self.dem.currentLayer() is None:
            return None
        feature = layer.getFeature(feature_id)
        return feature if feature.isValid() else None

    def choose(self, layer: QgsVectorLayer, feature_id: int, project: QgsProject) -> None:
        """Choose a transect; where no relief is chosen yet, the topmost raster of one band is."""
        self._quiet = True
        if self.dem.currentLayer() is None:
            rasters = (each for each in project.layerTreeRoot().layerOrder() if isinstance(each, QgsRasterLayer))
            self.dem.setLayer(next((each for each in rasters if each.bandCount() == 1), None))
        self.lines.setLayer(layer)
        self._quiet = False
        self._follow(layer)
        self._list_features(wanted=feature_id)

    def forget_layer(self) -> None:
        """Follow no layer any longer."""
        self._watch(None)

    def _layer_chosen(self, layer: QgsVectorLayer | None = None) -> None:
        if not self._quiet:
            self._follow(self.lines.currentLayer())
            self._list_features()

    def _follow(self, layer: QgsVectorLayer | None) -> None:
        self._watch(layer)
        blocked = self.name_field.blockSignals(True)
        self.name_field.setLayer(layer)
        names = [] if layer is None else [field.name() for field in layer.fields()]
        self.name_field.setField(next((name for name in names if name.lower() in ("name", "transect")), ""))
        self.name_field.blockSignals(blocked)

    def _watch(self, layer: QgsVectorLayer | None) -> None:
        if self._watched is layer:
            return
        if self._watched is not None:
            for signal, slot in self._signals(self._watched):
                signal.disconnect(slot)
        self._watched = layer
        if layer is not None:
            for signal, slot in self._signals(layer):
                signal.connect(slot)

    def _signals(self, layer: QgsVectorLayer) -> list[tuple[Any, Callable]]:
        return [
            (layer.selectionChanged, self._selected),
            (layer.featureAdded, self._edited),
            (layer.featuresDeleted, self._edited),
            (layer.geometryChanged, self._edited),
            (layer.attributeValueChanged, self._edited),
            (layer.afterRollBack, self._edited),
            (layer.afterCommitChanges, self._edited),
            (layer.willBeDeleted, self._deleted),
        ]

    def _deleted(self) -> None:
        self._watched = None

    def _edited(self, *arguments: Any) -> None:
        self._list_features(wanted=self.feature.currentData())

    def _selected(self, selected: list[int], *rest: Any) -> None:
        """Follow a selection of one transect on the map."""
        if len(selected) == 1:
            place = self.feature.findData(selected[0])
            if place >= 0:
                self.feature.setCurrentIndex(place)

    def _list_features(self, *arguments: Any, wanted: int | None = None) -> None:
        layer, field = self.lines.currentLayer(), self.name_field.currentField()
        blocked = self.feature.blockSignals(True)
        self.feature.clear()
        if layer is not None:
            request = QgsFeatureRequest()
            request.setFlags(QgsFeatureRequest.Flag.NoGeometry)
            request.setLimit(MOST_FEATURES)
            for each in layer.getFeatures(request):
                name = each[field] if field else each.id()
                self.feature.addItem(str(each.id() if name in (None, NULL, "") else name), each.id())
        place = -1 if wanted is None else self.feature.findData(wanted)
        self.feature.setCurrentIndex(max(place, 0) if self.feature.count() else -1)
        self.feature.blockSignals(blocked)
        self.changed.emit("TRANSECTS")
