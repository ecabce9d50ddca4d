"""Downwarp in the QGIS window: menu, toolbar, the drawing tool and the profile panel."""

from __future__ import annotations

from functools import partial
from pathlib import Path
from typing import Any

from qgis.core import (
    Qgis,
    QgsCsException,
    QgsFeature,
    QgsGeometry,
    QgsMapLayer,
    QgsProcessingFeatureSourceDefinition,
    QgsProject,
    QgsSettings,
    QgsVectorLayer,
    QgsVectorLayerUtils,
    QgsWkbTypes,
)
from qgis.PyQt import sip
from qgis.PyQt.QtCore import Qt, QUrl
from qgis.PyQt.QtGui import QDesktopServices, QIcon
from qgis.PyQt.QtWidgets import QMenu, QToolButton

try:  # Qt 6 has it in QtGui, QGIS 3.22 on Qt 5 in QtWidgets only
    from qgis.PyQt.QtGui import QAction, QActionGroup
except ImportError:
    from qgis.PyQt.QtWidgets import QAction, QActionGroup

from ..bridge.styles import style_drawn
from ..translation import tr
from .draw_tool import TransectTool, in_crs
from .profile_dock import ProfileDock
from .source import ALGORITHM

TITLE = "Downwarp"
ICONS = Path(__file__).resolve().parents[2] / "icons"
PLUGIN = Path(__file__).resolve().parents[1]
GUIDE = PLUGIN / "guide" / "index.html"
MODELS = PLUGIN / "models"
HEIGHT = 400
"""Height, px, that the panel begins with."""
PANEL, DIALOG = "panel", "dialog"
_AFTER_KEY = "downwarp/after_drawing"
_OWN_LAYER = "downwarp/drawn"
"""Custom property of the layer that keeps what is drawn where no layer was chosen."""


class Window:
    """Everything that Downwarp adds to the main window; `shut` takes it back."""

    def __init__(self, iface) -> None:
        self.iface = iface
        main, canvas = iface.mainWindow(), iface.mapCanvas()
        self.dock = ProfileDock(canvas, main)
        self.dock.fit_dialog_wanted.connect(lambda parameters: self.open_dialog(ALGORITHM, parameters))
        self.dock.draw_wanted.connect(self._begin_drawing)
        iface.addDockWidget(Qt.DockWidgetArea.BottomDockWidgetArea, self.dock)
        main.resizeDocks([self.dock], [HEIGHT], Qt.Orientation.Vertical)
        self.dock.hide()
        self.tool = TransectTool(canvas)
        self.tool.drawn.connect(self._drawn)
        self.tool.told.connect(iface.statusBarIface().showMessage)
        self._dialogs: list[Any] = []
        self.draw_action = QAction(QIcon(str(ICONS / "draw_transect.svg")), tr("Draw transect"), main)
        self.draw_action.setObjectName("DownwarpDraw")
        self.draw_action.setCheckable(True)
        self.draw_action.setToolTip(tr("Draw a transect on the map, from the load outwards"))
        self.draw_action.triggered.connect(self._begin_drawing)
        self.tool.setAction(self.draw_action)
        self.panel_action = self.dock.toggleViewAction()
        self.panel_action.setIcon(QIcon(str(ICONS / "profile.svg")))
        self.panel_action.setText(tr("Profile panel"))
        self.panel_action.setToolTip(tr("Show the profile of a transect and its plate"))
        self.fit_action = QAction(QIcon(str(ICONS / "downwarp.svg")), tr("Fit plate along transects…"), main)
        self.fit_action.triggered.connect(lambda: self.open_dialog(ALGORITHM, {}))
        self.demo_action = QAction(tr("Make demo layers…"), main)
        self.demo_action.triggered.connect(lambda: self.open_dialog("downwarp:demolayers", {}))
        self.models_menu = self._make_models_menu(main)
        self.guide_action = QAction(tr("Guide"), main)
        self.guide_action.triggered.connect(lambda: QDesktopServices.openUrl(QUrl.fromLocalFile(str(GUIDE))))
        self.where_menu = QMenu(tr("Draw into"), main)
        self.where_menu.setToolTipsVisible(True)
        self.where_menu.aboutToShow.connect(self._list_layers)
        self._target = ""
        self.after_menu = self._make_after_menu(main)
        self._actions = [
            self.draw_action, self.panel_action, self.fit_action, self.demo_action,
            self.where_menu.menuAction(), self.after_menu.menuAction(), self.models_menu.menuAction(),
            self.guide_action,
        ]  # fmt: skip
        for action in self._actions:
            iface.addPluginToMenu(TITLE, action)
        self.toolbar = iface.addToolBar(TITLE)
        self.toolbar.setObjectName("DownwarpToolBar")
        self._draw_button = QToolButton()
        self._draw_button.setDefaultAction(self.draw_action)
        self._draw_button.setPopupMode(QToolButton.ToolButtonPopupMode.MenuButtonPopup)
        menu = QMenu(self._draw_button)
        menu.addMenu(self.where_menu)
        menu.addMenu(self.after_menu)
        self._draw_button.setMenu(menu)
        self.toolbar.addWidget(self._draw_button)
        self.toolbar.addAction(self.panel_action)
        self.toolbar.addAction(self.fit_action)

    def _make_models_menu(self, main) -> QMenu:
        menu = QMenu(tr("Example models"), main)
        for path in sorted(MODELS.glob("*.model3")):
            action = menu.addAction(tr(path.stem.replace("_", " ").capitalize()))
            action.triggered.connect(partial(self.open_model, path))
        return menu

    def open_model(self, path: Path, *_: object) -> None:
        """Open an example model in the modeller."""
        from processing.modeler.ModelerDialog import ModelerDialog

        dialog = ModelerDialog.create()
        dialog.loadModel(str(path))
        dialog.show()
        self._dialogs.append(dialog)

    def _make_after_menu(self, main) -> QMenu:
        menu = QMenu(tr("After drawing"), main)
        self._after = QActionGroup(main)
        chosen = QgsSettings().value(_AFTER_KEY, PANEL)
        for name, words in ((PANEL, tr("Show the profile panel")), (DIALOG, tr("Open the dialog of the fit"))):
            action = menu.addAction(words)
            action.setCheckable(True)
            action.setData(name)
            action.setChecked(name == chosen)
            self._after.addAction(action)
        self._after.triggered.connect(lambda action: QgsSettings().setValue(_AFTER_KEY, action.data()))
        return menu

    @property
    def after_drawing(self) -> str:
        """What a drawn line opens: `PANEL` or `DIALOG`."""
        action = self._after.checkedAction()
        return PANEL if action is None else action.data()

    def _list_layers(self) -> None:
        """Offer a temporary layer and the project's line layers that can be edited."""
        self.where_menu.clear()
        choices = [("", tr("A temporary layer"))]
        for layer in QgsProject.instance().mapLayers().values():
            if _takes_lines(layer) and not layer.customProperty(_OWN_LAYER):
                choices.append((layer.id(), layer.name()))
        for layer_id, words in choices:
            action = self.where_menu.addAction(words.replace("&", "&&"))
            action.setCheckable(True)
            action.setChecked(layer_id == self._target)
            action.triggered.connect(lambda _, layer_id=layer_id: self.draw_into(layer_id))

    def draw_into(self, layer_id: str) -> None:
        """Keep drawn lines in a layer of the project; an empty id for a temporary one."""
        self._target = layer_id

    def _begin_drawing(self, *arguments: Any) -> None:
        self.iface.mapCanvas().setMapTool(self.tool)
        # A click on the button while the tool is in use would show it as if it were not.
        self.draw_action.setChecked(True)

    def _drawn(self, line: QgsGeometry) -> None:
        """Keep a drawn line and open what the user chose."""
        try:
            kept = self._keep(line)
        except QgsCsException:
            kept = None
        if kept is None:
            self.iface.messageBar().pushWarning(TITLE, tr("The line could not be kept in the layer chosen for it."))
            return
        layer, feature_id = kept
        if self.after_drawing == PANEL:
            self.show_panel(layer, feature_id)
            return
        layer.selectByIds([feature_id])
        definition = QgsProcessingFeatureSourceDefinition(layer.id(), True)
        parameters: dict[str, Any] = {"TRANSECTS": definition}
        if layer.fields().lookupField("name") >= 0:
            parameters["NAME_FIELD"] = "name"
        relief = self.dock.input.dem.currentLayer()
        if relief is not None:
            parameters["DEM"] = relief.id()
        self.open_dialog(ALGORITHM, parameters)

    def show_panel(self, layer: QgsVectorLayer, feature_id: int) -> None:
        """Show the panel with a transect."""
        self.dock.show()
        self.dock.raise_()
        self.dock.show_feature(layer, feature_id)

    def _keep(self, line: QgsGeometry) -> tuple[QgsVectorLayer, int] | None:
        """Layer and id of the line once it is kept; raises QgsCsException where it has no place in the layer's CRS."""
        canvas = self.iface.mapCanvas()
        chosen = QgsProject.instance().mapLayer(self._target) if self._target else None
        if chosen is not None and _takes_lines(chosen):
            return _added_by_edit(chosen, in_crs(line, canvas, chosen.crs()))
        self._target = ""
        layer = self._own_layer()
        feature = QgsFeature(layer.fields())
        count = layer.featureCount() + 1
        feature.setAttributes([tr("Transect {number}").format(number=count)])
        feature.setGeometry(in_crs(line, canvas, layer.crs()))
        added, features = layer.dataProvider().addFeatures([feature])
        if not added:
            return None
        layer.updateExtents()
        layer.triggerRepaint()
        return layer, features[0].id()

    def _own_layer(self) -> QgsVectorLayer:
        """The temporary layer of drawn lines in the map's CRS, made where there is none."""
        crs = self.iface.mapCanvas().mapSettings().destinationCrs()
        for layer in QgsProject.instance().mapLayers().values():
            if layer.customProperty(_OWN_LAYER) and layer.crs() == crs:
                return layer
        layer = QgsVectorLayer("LineString?field=name:string(80)", tr("Drawn transects"), "memory")
        layer.setCrs(crs)
        layer.setCustomProperty(_OWN_LAYER, True)
        style_drawn(layer)
        QgsProject.instance().addMapLayer(layer)
        return layer

    def open_dialog(self, algorithm: str, parameters: dict[str, Any]) -> None:
        """Open the dialog of an algorithm with some of its keys filled in."""
        import processing

        dialog = processing.createAlgorithmDialog(algorithm, parameters)
        if dialog is None:
            self.iface.messageBar().pushMessage(
                TITLE, tr("The dialog could not be opened."), level=Qgis.MessageLevel.Warning
            )
            return
        # Python must hold on to it while it is open; closed, QGIS deletes it.
        self._dialogs = [each for each in self._dialogs if not sip.isdeleted(each)] + [dialog]
        dialog.show()

    def shut(self) -> None:
        """Take back all that was added to the window."""
        for dialog in self._dialogs:
            if not sip.isdeleted(dialog):
                dialog.close()
        for action in self._actions:
            self.iface.removePluginMenu(TITLE, action)
        self.tool.shut()
        self.dock.shut()
        self.iface.removeDockWidget(self.dock)
        self.dock.deleteLater()
        self.iface.mainWindow().removeToolBar(self.toolbar)
        self.toolbar.deleteLater()
        actions = self.draw_action, self.fit_action, self.demo_action, self.guide_action
        for each in (self.where_menu, self.after_menu, self.models_menu, self._after, *actions):
            each.deleteLater()


def _takes_lines(layer: QgsMapLayer) -> bool:
    return (
        isinstance(layer, QgsVectorLayer)
        and layer.geometryType() == QgsWkbTypes.GeometryType.LineGeometry
        and not layer.readOnly()
        and layer.crs().isValid()
    )


def _added_by_edit(layer: QgsVectorLayer, line: QgsGeometry) -> tuple[QgsVectorLayer, int] | None:
    """Add a line within an edit of the user's layer, which they may undo, and save or not."""
    if not layer.isEditable() and not layer.startEditing():
        return None
    if QgsWkbTypes.isMultiType(layer.wkbType()):
        line.convertToMultiType()
    feature = QgsVectorLayerUtils.createFeature(layer, line)
    layer.beginEditCommand(tr("Draw transect"))
    if not layer.addFeature(feature):
        layer.destroyEditCommand()
        return None
    layer.endEditCommand()
    layer.triggerRepaint()
    return layer, feature.id()
