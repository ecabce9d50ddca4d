"""Runs inside a QGIS window (``qgis --code drive.py``): does what a user does, and writes down what came of it.

Environment: DOWNWARP_RESULTS, the folder for results.json, screenshots and demo layers; DOWNWARP_PLUGIN, the name that
the plugin has among QGIS's; DOWNWARP_STEPS, names of the steps to take where not all are wanted.
"""

import faulthandler
import json
import os
import sys
import time
import traceback
from pathlib import Path

import numpy as np
import qgis.utils
from qgis.core import (
    NULL,
    Qgis,
    QgsApplication,
    QgsCoordinateReferenceSystem,
    QgsFeature,
    QgsGeometry,
    QgsPointXY,
    QgsProcessingContext,
    QgsProcessingFeatureSourceDefinition,
    QgsProcessingFeedback,
    QgsProject,
    QgsRasterLayer,
    QgsSnappingConfig,
    QgsTolerance,
    QgsVectorLayer,
)
from qgis.PyQt.QtCore import QCoreApplication, QEvent, QPoint, QPointF, Qt, QTimer
from qgis.PyQt.QtGui import QMouseEvent, QWheelEvent
from qgis.PyQt.QtTest import QTest
from qgis.PyQt.QtWidgets import (
    QAbstractButton,
    QApplication,
    QComboBox,
    QLabel,
    QMenu,
    QScrollArea,
    QStyle,
    QStyleOptionComboBox,
)
from qgis.utils import iface

FOLDER = Path(os.environ["DOWNWARP_RESULTS"])
NAME = os.environ["DOWNWARP_PLUGIN"]
BAND, WEST, SOUTH = 260e3, 150e3, 5_500e3
PATIENCE = 120.0
"""Time, s, after which the window is given up."""
RIDGE_FROM, RIDGE_TO = 255.0, 405.0
"""Edges of the ridge, km from the map's."""
LEFT, RIGHT = Qt.MouseButton.LeftButton, Qt.MouseButton.RightButton
found: dict = {"steps": [], "log": [], "layout": {}}


def spin(seconds: float) -> None:
    wait(lambda: False, seconds)


def wait(condition, seconds: float = 20.0) -> bool:
    """Let the window work until a condition holds; whether it came to hold."""
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        QApplication.processEvents()
        if condition():
            return True
        time.sleep(0.005)
    return bool(condition())


def need(condition, what: str, seconds: float = 20.0) -> None:
    if not wait(condition, seconds):
        raise AssertionError(f"waited {seconds:g} s in vain: {what}")


def heard(message: str, tag: str, level) -> None:
    if level in (Qgis.MessageLevel.Warning, Qgis.MessageLevel.Critical):
        found["log"].append([tag, int(level), message])


def plain(value):
    return None if value in (None, NULL) else value


def table(layer: QgsVectorLayer) -> list[dict]:
    names = [field.name() for field in layer.fields()]
    return [
        {**{name: plain(each[name]) for name in names}, "geometry": each.geometry().asWkt(9)}
        for each in layer.getFeatures()
    ]


class User:
    """Mouse and eyes."""

    def __init__(self, window) -> None:
        self.window, self.dock = window, window.dock
        self.main, self.canvas = iface.mainWindow(), iface.mapCanvas()

    def pixel(self, east: float, north: float) -> QPoint:
        place = self.canvas.getCoordinateTransform().transform(QgsPointXY(WEST + east, SOUTH + north))
        return QPoint(round(place.x()), round(place.y()))

    def click(self, east: float, north: float, button=LEFT) -> None:
        place = self.pixel(east, north)
        QTest.mouseMove(self.canvas.viewport(), place)
        QTest.mouseClick(self.canvas.viewport(), button, pos=place)

    def move(self, east: float, north: float) -> None:
        QTest.mouseMove(self.canvas.viewport(), self.pixel(east, north))
        QApplication.processEvents()

    def key(self, key) -> None:
        QTest.keyClick(self.canvas, key)

    def begin(self) -> None:
        self.window.draw_action.trigger()
        if self.canvas.mapTool() is not self.window.tool:
            raise AssertionError("the drawing tool is not the map's tool")

    def draw(self, *places) -> None:
        """Draw a line with the mouse, ended by the right button."""
        self.begin()
        for place in places:
            self.click(*place)
        self.click(*places[-1], button=RIGHT)

    def shoot(self, name: str, widget=None) -> None:
        """Save a picture, and what is wrong with the panel's layout at that time."""
        spin(0.3)
        QApplication.processEvents()
        (widget or self.main).grab().save(str(FOLDER / f"{name}.png"))
        if widget is None and self.dock.isVisible():
            found["layout"][name] = crowded(self.dock) + crowded_figure(self.dock.profile)

    def _on_profile(self, km: float, share: float = 0.5, axes: str = "surface") -> QPointF:
        """The place on the profile at a distance and a share of the height of axes."""
        profile = self.dock.profile
        x, _ = profile._surface.transData.transform((km, 0.0))
        box = profile._axes_by_name()[axes].bbox
        ratio = profile.devicePixelRatioF()
        return QPointF(x / ratio, profile.height() - (box.y0 + share * (box.y1 - box.y0)) / ratio)

    def profile_mouse(
        self, kind: str, km: float, buttons=Qt.MouseButton.NoButton, button=None, share: float = 0.5
    ) -> None:
        """A mouse event on the profile at a distance, halfway up the surface axes or at another share of them."""
        profile, place = self.dock.profile, self._on_profile(km, share)
        types = {
            "press": QMouseEvent.Type.MouseButtonPress,
            "move": QMouseEvent.Type.MouseMove,
            "release": QMouseEvent.Type.MouseButtonRelease,
            "double": QMouseEvent.Type.MouseButtonDblClick,
        }
        on_screen = QPointF(profile.mapToGlobal(place.toPoint()))
        which = button or Qt.MouseButton.NoButton
        event = QMouseEvent(types[kind], place, on_screen, which, buttons, Qt.KeyboardModifier.NoModifier)
        QApplication.sendEvent(profile, event)
        QApplication.processEvents()

    def wheel(
        self, km: float, turns: int, share: float = 0.5, axes: str = "surface", control: bool = False, notches: int = 1
    ) -> float:
        """Turn the wheel over the profile, by some notches at a time, and return the time that a turn takes to be seen,
        s."""
        profile = self.dock.profile
        place = self._on_profile(km, share, axes)
        on_screen = QPointF(profile.mapToGlobal(place.toPoint()))
        modifiers = Qt.KeyboardModifier.ControlModifier if control else Qt.KeyboardModifier.NoModifier
        start = time.perf_counter()
        for _ in range(abs(turns)):
            turn = QPoint(0, 120 * notches if turns > 0 else -120 * notches)
            event = QWheelEvent(
                place, on_screen, QPoint(), turn, Qt.MouseButton.NoButton, modifiers, Qt.ScrollPhase.NoScrollPhase,
                False,
            )  # fmt: skip
            QApplication.sendEvent(profile, event)
            QApplication.processEvents()
        return (time.perf_counter() - start) / abs(turns)

    def leave_profile(self) -> None:
        """Take the mouse off the profile."""
        QApplication.sendEvent(self.dock.profile, QEvent(QEvent.Type.Leave))
        QApplication.processEvents()

    def view(self) -> list[list[float]]:
        """Distances, km, and heights of surface and residual that are in view."""
        profile = self.dock.profile
        return [
            list(profile._surface.get_xlim()), list(profile._surface.get_ylim()), list(profile._residual.get_ylim())
        ]  # fmt: skip

    def drag(self, start: float, end: float, button=LEFT) -> None:
        """Drag over the profile between two distances, km."""
        self.profile_mouse("press", start, button, button)
        self.profile_mouse("move", 0.5 * (start + end), button)
        self.profile_mouse("move", end, button)
        self.profile_mouse("release", end, Qt.MouseButton.NoButton, button)


def crowded(dock) -> list[str]:
    """Texts of the panel that are cut off, and pages wider than their place."""
    bad = []
    for area in dock.findChildren(QScrollArea):
        if area.isVisible() and area.widget().minimumSizeHint().width() > area.viewport().width():
            bad.append(f"a page of {area.widget().minimumSizeHint().width()} px in {area.viewport().width()} px")
    for widget in [*dock.findChildren(QLabel), *dock.findChildren(QAbstractButton)]:
        words = widget.text()
        if not widget.isVisible() or not words or "\n" in words or "<" in words:
            continue
        if isinstance(widget, QLabel) and widget.wordWrap():
            if widget.heightForWidth(widget.width()) > widget.height():
                bad.append(f"{words!r} is higher than its label")
        elif widget.fontMetrics().horizontalAdvance(words.replace("&", "")) > widget.width():
            bad.append(f"{words!r} is wider than its widget")
    for box in dock.findChildren(QComboBox):
        option = QStyleOptionComboBox()
        option.initFrom(box)
        field = box.style().subControlRect(
            QStyle.ComplexControl.CC_ComboBox, option, QStyle.SubControl.SC_ComboBoxEditField, box
        )
        room = field.width() - (box.iconSize().width() if not box.itemIcon(box.currentIndex()).isNull() else 0)
        if box.isVisible() and box.fontMetrics().horizontalAdvance(box.currentText()) > room:
            bad.append(f"{box.currentText()!r} is wider than its box")
    return bad


def crowded_figure(profile) -> list[str]:
    """Texts of the figure beyond its edge, and axes that touch the legend."""
    figure = profile.figure
    if not figure.axes:
        return []
    renderer, bad = profile.get_renderer(), []
    edge = figure.bbox
    texts = list(figure.legends[0].get_texts())
    for axes in figure.axes:
        texts += [axes._left_title, axes.xaxis.label]
        for axis in (axes.xaxis, axes.yaxis):
            low, high = sorted(axis.get_view_interval())
            texts += [tick.label1 for tick in axis.get_major_ticks() if low <= tick.get_loc() <= high]
    for text in texts:
        if text.get_visible() and text.get_text():
            box = text.get_window_extent(renderer)
            if box.x0 < edge.x0 - 1 or box.x1 > edge.x1 + 1 or box.y0 < edge.y0 - 1 or box.y1 > edge.y1 + 1:
                bad.append(f"{text.get_text()!r} reaches beyond the figure")
    legend = figure.legends[0].get_window_extent(renderer)
    for axes in figure.axes:
        title = axes._left_title.get_window_extent(renderer)
        if title.y1 > legend.y0 + 1 and title.x1 > legend.x0:
            bad.append(f"{axes.get_title(loc='left')!r} touches the legend")
        if axes.bbox.height < 30:
            bad.append(f"{axes.get_title(loc='left')!r} has axes of {axes.bbox.height:.0f} px")
    return bad


def step(function):
    """A step that is written down with the time it took; what it returns is kept under its name."""
    STEPS.append(function)
    return function


STEPS: list = []


@step
def starts(user: User) -> dict:
    """The demo map is there; menu and toolbar have the plugin's actions."""
    import processing

    demo = FOLDER / "demo"
    processing.run("downwarp:demolayers", {"OUTPUT_FOLDER": str(demo)})
    for name in ("basement", "relief"):
        layer = QgsRasterLayer(str(demo / f"{name}.tif"), name)
        QgsProject.instance().addMapLayer(layer)
    area = QgsVectorLayer(str(demo / "ridge_area.gpkg"), "ridge_area")
    QgsProject.instance().addMapLayer(area, False)
    user.canvas.setDestinationCrs(layer.crs())
    user.canvas.setExtent(layer.extent())
    QgsProject.instance().setCrs(layer.crs())
    spin(0.5)
    menus = [action for action in iface.pluginMenu().actions() if action.text().replace("&", "") == "Downwarp"]
    return {
        "menu": [action.text() for action in menus[0].menu().actions()],
        "toolbar": len(user.window.toolbar.actions()),
    }


@step
def gives_up(user: User) -> dict:
    """Backspace takes a vertex back, Escape forgets the line, one place alone draws nothing.

    Meanwhile a feature is selected in a layer under edit, which QGIS would delete by Backspace.
    """
    victim = QgsVectorLayer("Point?crs=EPSG:32727", "victim", "memory")
    feature = QgsFeature()
    feature.setGeometry(QgsGeometry.fromPointXY(QgsPointXY(WEST, SOUTH)))
    victim.dataProvider().addFeature(feature)
    QgsProject.instance().addMapLayer(victim)
    iface.setActiveLayer(victim)
    victim.startEditing()
    victim.selectAll()
    user.begin()
    user.begin()
    tool = user.window.tool
    user.click(60e3, 1.5 * BAND)
    user.click(200e3, 1.6 * BAND)
    user.click(300e3, 1.6 * BAND)
    counts = [len(tool.vertices)]
    user.key(Qt.Key.Key_Backspace)
    counts.append(len(tool.vertices))
    user.move(400e3, 1.5 * BAND)
    words = tool._tip.text()
    user.shoot("drawing")
    user.key(Qt.Key.Key_Escape)
    counts.append(len(tool.vertices))
    user.click(60e3, 1.5 * BAND)
    user.click(60e3, 1.5 * BAND, button=RIGHT)
    survivors = victim.featureCount()
    victim.rollBack()
    QgsProject.instance().removeMapLayer(victim.id())
    return {
        "counts": counts,
        "tip": words,
        "layers": len(QgsProject.instance().mapLayers()),
        "survivors": survivors,
        "checked": user.window.draw_action.isChecked(),
    }


@step
def length_is_geodesic(user: User) -> dict:
    """The live length beside that of the same places on the ellipsoid (pyproj), in km, on maps in three CRSs.

    Two legs of which the second ends at the cursor, in UTM, in degrees and in a Mercator that stretches lengths by half.
    """
    from pyproj import Geod, Transformer

    own, extent = user.canvas.mapSettings().destinationCrs(), user.canvas.extent()
    tool, lengths = user.window.tool, {}
    for code in ("EPSG:32727", "EPSG:4326", "EPSG:3857"):
        user.canvas.setDestinationCrs(QgsCoordinateReferenceSystem(code))
        spin(0.2)
        user.begin()
        room = user.canvas.viewport().rect()
        for across, down in ((0.1, 0.2), (0.6, 0.3)):
            place = QPoint(round(across * room.width()), round(down * room.height()))
            QTest.mouseMove(user.canvas.viewport(), place)
            QTest.mouseClick(user.canvas.viewport(), LEFT, pos=place)
        QTest.mouseMove(user.canvas.viewport(), QPoint(round(0.8 * room.width()), round(0.9 * room.height())))
        QApplication.processEvents()
        points = [*tool.vertices, tool._cursor]
        transformer = Transformer.from_crs(code, "EPSG:4326", always_xy=True)
        longitude, latitude = transformer.transform([p.x() for p in points], [p.y() for p in points])
        lengths[code] = {
            "places": len(points),
            "shown": float(tool._tip.text().split(" km")[0].replace(",", "")),
            "expected": Geod(ellps="WGS84").line_length(longitude, latitude) / 1e3,
            "plane": float(np.hypot(*np.diff([[p.x(), p.y()] for p in points], axis=0).T).sum() / 1e3),
        }
        user.key(Qt.Key.Key_Escape)
    user.canvas.setDestinationCrs(own)
    user.canvas.setExtent(extent)
    spin(0.2)
    return lengths


@step
def draws(user: User) -> dict:
    """A line drawn by clicks lies in a temporary layer and opens the panel, with its plate."""
    user.draw((60e3, 1.5 * BAND), (375e3, 1.5 * BAND), (690e3, 1.5 * BAND))
    dock = user.dock
    dock.input.setting.setCurrentIndex(1)
    need(lambda: dock.view() is not None, f"the panel's plate: {dock.complaint.text()}")
    layer = dock.input.lines.currentLayer()
    feature = next(layer.getFeatures())
    user.shoot("first_look")
    return {
        "visible": dock.isVisible(),
        "layer": layer.name(),
        "vertices": len(feature.geometry().asPolyline()),
        "dem": dock.input.dem.currentLayer().name(),
        "answer": dock.answer.text(),
        "relief_drawn": bool(dock.profile.figure.axes),
    }


@step
def ends_with_a_double_click(user: User) -> dict:
    """A double click sets the last vertex once and ends the line."""
    layer = user.dock.input.lines.currentLayer()
    user.begin()
    user.click(60e3, 1.4 * BAND)
    place = user.pixel(680e3, 1.4 * BAND)
    viewport = user.canvas.viewport()
    QTest.mouseMove(viewport, place)
    QTest.mouseClick(viewport, LEFT, pos=place)
    QTest.mouseDClick(viewport, LEFT, pos=place)
    need(lambda: layer.featureCount() == 2, "the second line")
    lines = [len(each.geometry().asPolyline()) for each in layer.getFeatures()]
    shown = user.dock.input.feature.currentText()
    user.dock.input.feature.setCurrentIndex(0)
    need(lambda: user.dock.view() is not None, "the first line's plate")
    return {"vertices": lines[1], "shown": shown, "left": len(user.window.tool.vertices)}


@step
def slides(user: User) -> dict:
    """The slider moves the curve; the time of each change until the picture is on the screen, s."""
    dock = user.dock
    dock.tabs.setCurrentIndex(1)
    spin(0.5)
    curve = dock.profile._moving["curve"]
    before, taken = np.array(curve.get_ydata()), []
    dock.thickness.slider.setValue(300)
    middle = np.array(curve.get_ydata())
    spin(0.8)
    for position in range(320, 900, 10):
        start = time.perf_counter()
        dock.thickness.slider.setValue(position)
        QApplication.processEvents()
        taken.append(time.perf_counter() - start)
    after = np.array(curve.get_ydata())
    spin(0.8)
    user.shoot("slid")
    return {
        "moved": [float(np.nanmax(np.abs(middle - before))), float(np.nanmax(np.abs(after - middle)))],
        "median": float(np.median(taken)),
        "changes": len(taken),
        "stations": int(dock.session().profile.distance.size),
        "largest": float(max(taken)),
        "number": dock.thickness.number.value(),
        "thickness": dock.view().bent.thickness,
        "pixels": [dock.profile.width(), dock.profile.height()],
    }


@step
def slides_on_many_stations(user: User) -> dict:
    """The same with about a thousand stations."""
    dock, taken = user.dock, []
    dock.set_key("STEP_KM", 0.6)
    need(lambda: dock.view() is not None and dock.session().profile.distance.size > 1000, "a thousand stations")
    spin(0.8)
    for position in range(500, 800, 10):
        start = time.perf_counter()
        dock.thickness.slider.setValue(position)
        QApplication.processEvents()
        taken.append(time.perf_counter() - start)
    stations = int(dock.session().profile.distance.size)
    dock.set_key("STEP_KM", None)
    need(lambda: dock.view() is not None and dock.session().profile.distance.size < 1000, "the stations as before")
    median, largest = float(np.median(taken)), float(max(taken))
    return {"median": median, "largest": largest, "changes": len(taken), "stations": stations}


@step
def moves_break_and_infill(user: User) -> dict:
    """Break, infill and end forces by hand move the curve, each within the time."""
    dock, taken, moved = user.dock, {}, {}
    dock.plate.break_at.setCurrentIndex(2)
    spin(0.8)
    changes = {
        "break": lambda: dock.plate.break_km.setValue(dock.plate.break_km.value() + 4.0),
        "infill": lambda: dock.plate.infill.setValue(dock.plate.infill.value() + 100),
        "by hand": lambda: dock.plate.by_hand.setChecked(True),
        "shear": lambda: dock.plate.shear.setValue(dock.plate.shear.value() + 0.4),
        "moment": lambda: dock.plate.moment.setValue(dock.plate.moment.value() - 0.3),
    }
    forces = []
    for name, change in changes.items():
        before = np.array(dock.profile._moving["curve"].get_ydata())
        start = time.perf_counter()
        change()
        QApplication.processEvents()
        taken[name] = time.perf_counter() - start
        after = np.array(dock.profile._moving["curve"].get_ydata())
        moved[name] = float(np.nanmax(np.abs(after - before)))
        forces.append([dock.view().bent.end_shear, dock.view().bent.end_moment])
        spin(0.6)
    stated = [dock.plate.shear.value() * 1e12, dock.plate.moment.value() * 1e17]
    user.shoot("by_hand")
    dock.plate.by_hand.setChecked(False)
    dock.plate.reset_button.click()
    dock.plate.break_at.setCurrentIndex(4)
    return {"taken": taken, "moved": moved, "forces": forces[-1], "stated": stated, "infill": dock.plate.infill.value()}


@step
def cancels(user: User) -> dict:
    """A long fit shows progress, and stops when it is cancelled; nothing of it stays."""
    dock = user.dock
    dock.choices.setChecked(True)
    dock.plate.break_from.setValue(30.0)
    dock.plate.break_to.setValue(90.0)
    dock.plate.break_at.setCurrentIndex(3)
    dock.fit_button.click()
    need(lambda: dock.progress.value() > 0, "progress of the fit")
    user.shoot("fitting")
    running = dock.cancel_button.isEnabled()
    start = time.monotonic()
    dock.cancel_button.click()
    need(lambda: not dock._works, "the end of the cancelled fit")
    stopped = time.monotonic() - start
    dock.choices.setChecked(False)
    dock.plate.break_at.setCurrentIndex(4)
    return {"running": running, "stopped": stopped, "fitted": dock.session().result is not None}


@step
def fits(user: User) -> dict:
    """Fit runs in the background, and the posterior stands above the slider where the handle is."""
    dock = user.dock
    turns = 0
    dock.fit_button.click()
    while dock.session().result is None and turns < 5000:
        QApplication.processEvents()
        turns += 1
        time.sleep(0.004)
    need(lambda: dock.session().result is not None, "the fit")
    user.shoot("fitted")
    strip, slider = dock.thickness.strip, dock.thickness.slider
    best = dock.session().result.best
    return {
        "te_km": best.thickness.value / 1e3,
        "low_km": best.thickness.low / 1e3,
        "high_km": best.thickness.high / 1e3,
        "rms": best.rms,
        "answer": dock.answer.text(),
        "posterior": strip._density is not None,
        "apart": abs(strip.place(best.thickness.value) - slider.centre(slider.value() / slider.maximum())),
        "turns": turns,
    }


@step
def agrees(user: User) -> dict:
    """`fittransects` on the same line, relief and setting: all its rows, beside those of the panel's layers."""
    import processing

    dock = user.dock
    before = set(QgsProject.instance().mapLayers())
    dock.keep_button.click()
    spin(0.8)
    user.shoot("kept")
    kept = [layer for key, layer in QgsProject.instance().mapLayers().items() if key not in before]
    names = {layer.name().split(",")[0].upper(): layer for layer in kept}
    layer = dock.input.lines.currentLayer()
    layer.selectByIds([dock.input.feature.currentData()])
    parameters = {**dock.parameters(), "TRANSECTS": QgsProcessingFeatureSourceDefinition(layer.id(), True)}
    outputs = ("PROFILES", "STATIONS", "MARKERS", "PARAMETERS", "MISFIT")
    context = QgsProcessingContext()
    context.setProject(QgsProject.instance())
    results = processing.run(
        "downwarp:fittransects", {**parameters, **dict.fromkeys(outputs, "memory:")},
        context=context, feedback=QgsProcessingFeedback(False),
    )  # fmt: skip
    layer.removeSelection()
    equal = {output: table(names[output]) == table(results[output]) for output in outputs}
    return {
        "names": sorted(names),
        "equal": equal,
        "rows": {output: results[output].featureCount() for output in outputs},
        "te_km": results["TE_KM"],
        "renderers": {output: names[output].renderer().type() for output in outputs[:3]},
        "labels": {output: names[output].labelsEnabled() for output in outputs[:3]},
    }


@step
def hovers(user: User) -> dict:
    """The mouse over the profile marks the place on the map, and says what is there."""
    dock = user.dock
    user.profile_mouse("move", 200.0)
    spin(0.2)
    marker = dock._map.marker
    place = marker.center()
    user.shoot("hovering")
    return {
        "shown": marker.isVisible(),
        "east": place.x() - WEST,
        "north": place.y() - SOUTH,
        "words": dock.reading.text(),
    }


@step
def zooms(user: User) -> dict:
    """Wheel, middle button, hand, double click and button change what is in view, and nothing else does."""
    dock, profile, found = user.dock, user.dock.profile, {}
    whole = user.view()
    seen = {"whole": whole, "enabled": [dock.whole_button.isEnabled()]}
    pixel = user._on_profile(150.0)
    found["redraw"] = user.wheel(150.0, 6)
    found["moved_pixels"] = abs(user._on_profile(150.0).x() - pixel.x())
    seen["wheel"] = user.view()
    seen["enabled"].append(dock.whole_button.isEnabled())
    height = profile._residual.get_ylim()
    at = height[0] + 0.4 * (height[1] - height[0])
    user.wheel(150.0, 1, 0.4, "residual", control=True)
    seen["heights"] = user.view()
    height = profile._residual.get_ylim()
    found["share_after"] = (at - height[0]) / (height[1] - height[0])
    user.wheel(150.0, 3, 0.9, control=True)
    seen["both"] = user.view()
    user.leave_profile()
    user.shoot("zoomed")
    user.profile_mouse("move", 160.0)
    spin(0.1)
    place = dock._map.marker.center()
    found["hovered"] = [place.x() - WEST, place.y() - SOUTH, dock.reading.text()]
    # The curve follows the slider while the view stays.
    curve, taken = profile._moving["curve"], []
    before = np.array(curve.get_ydata())
    position = dock.thickness.slider.value()
    for change in range(1, 31):
        start = time.perf_counter()
        dock.thickness.slider.setValue(position + 4 * change)
        QApplication.processEvents()
        taken.append(time.perf_counter() - start)
    found["curve_moved"] = float(np.nanmax(np.abs(np.array(curve.get_ydata()) - before)))
    spin(0.8)
    seen["slid"] = user.view()
    found["follows"] = {"median": float(np.median(taken)), "largest": float(max(taken))}
    dock.fit_button.click()
    need(lambda: dock.session().is_current and not dock._works, "a fit while zoomed")
    seen["fitted"] = user.view()
    # Past the edge of what is seen a drag leaves no more out than is seen.
    right = profile._surface.get_xlim()[1]
    user.drag(right - 20.0, right + 4.0)
    distance = dock.session().profile.distance / 1e3
    out = distance[dock.session().left_out]
    found["left_out"] = [float(out.min()), float(out.max()), int(out.size)]
    found["expected_out"] = [right - 20.0, right, int(((distance >= right - 20.0) & (distance <= right)).sum())]
    seen["masked"] = user.view()
    user.shoot("zoomed_left_out")
    dock.restore_button.click()
    spin(0.3)
    # The middle button takes what is seen along, the hand does so with the left one, and no station is left out.
    middle = Qt.MouseButton.MiddleButton
    width = profile._surface.bbox.width / profile.devicePixelRatioF()
    for name, button in (("middle", middle), ("hand", LEFT)):
        dock.hand_button.setChecked(name == "hand")
        low, high = profile._surface.get_xlim()
        start, end = user._on_profile(160.0), user._on_profile(160.0 + 0.2 * (high - low))
        user.profile_mouse("press", 160.0, button, button)
        by = 0.2 * (high - low)
        user.profile_mouse("move", 160.0 + by, button)
        # The view has moved, so that the same pixel is where the drag began.
        user.profile_mouse("release", 160.0, Qt.MouseButton.NoButton, button)
        seen[name] = user.view()
        found[f"{name}_by"] = [by, (end.x() - start.x()) / width]
    found["after_hand"] = int(dock.session().left_out.sum())
    dock.hand_button.setChecked(False)
    user.profile_mouse("double", 160.0, LEFT, LEFT)
    seen["double"] = user.view()
    seen["enabled"].append(dock.whole_button.isEnabled())
    user.wheel(20.0, 10, notches=9)
    seen["nearest"] = user.view()
    dock.whole_button.click()
    QApplication.processEvents()
    seen["button"] = user.view()
    user.wheel(20.0, 3)
    user.wheel(300.0, -4, notches=4)
    seen["out"] = user.view()
    found["step"] = float(distance[1] - distance[0])
    return {**found, "seen": seen}


@step
def leaves_stations_out(user: User) -> dict:
    """Dragging over the profile leaves stations out of the fit; dragging with the right button takes them back."""
    dock = user.dock
    counts = [dock.view().count]
    user.drag(300.0, 400.0)
    counts.append(dock.view().count)
    left = int(dock.session().left_out.sum())
    current = dock.session().is_current
    dock.fit_button.click()
    need(lambda: dock.session().is_current, "the fit without them")
    user.leave_profile()
    user.shoot("left_out")
    in_fit = dock.session().result.best.bent.stations.in_fit
    wrong = int((in_fit & dock.session().left_out).sum())
    handed = hands_over(user)
    user.drag(300.0, 350.0, RIGHT)
    counts.append(dock.view().count)
    dock.restore_button.click()
    counts.append(dock.view().count)
    return {"counts": counts, "left": left, "current": current, "wrong": wrong, **handed}


def hands_over(user: User) -> dict:
    """Open the dialog with all keys twice; what it leaves out, in a run of its own, beside what the panel does."""
    import processing

    dock, dialogs = user.dock, []
    before = set(QgsProject.instance().mapLayers())
    for _ in range(2):
        dock.dialog_button.click()
        dialog = user.window._dialogs[-1]
        need(dialog.isVisible, "the dialog of all keys")
        dialogs.append(dialog)
    new = set(QgsProject.instance().mapLayers()) - before
    parameters = dialogs[-1].createProcessingParameters()
    user.shoot("all_keys", dialogs[-1])
    for dialog in dialogs:
        dialog.close()
    context = QgsProcessingContext()
    context.setProject(QgsProject.instance())
    results = processing.run(
        "downwarp:fittransects", {**parameters, **dict.fromkeys(("PROFILES", "STATIONS"), "memory:")},
        context=context, feedback=QgsProcessingFeedback(False),
    )  # fmt: skip
    name = dock.session().profile.name
    theirs = [row for row in table(results["STATIONS"]) if row["transect"] == name]
    stations = dock.session().result.best.bent.stations
    profile = next(row for row in table(results["PROFILES"]) if row["transect"] == name)
    for layer in new:
        QgsProject.instance().removeMapLayer(layer)
    return {
        "excluded": str(parameters["FIT_EXCLUDE"]) in new,
        "new_layers": len(new),
        "same_in_fit": [bool(row["in_fit"]) for row in theirs] == stations.in_fit.tolist(),
        "te_km": [profile["te_km"], dock.session().result.best.thickness.value / 1e3],
    }


@step
def other_settings(user: User) -> dict:
    """A ridge on the same relief, and a front with a bent surface of its own, look as they should."""
    dock, answers = user.dock, {}
    for name, north, setting, observed, keys in (
        ("ridge", 2.5, 0, None, {"RHO_UNDER_LOAD": 2800}),
        ("front", 0.5, 2, "basement", {"REFERENCE_LEVEL": 200, "RHO_UNDER_LOAD": None}),
    ):
        dock.tabs.setCurrentIndex(0)
        for key, value in keys.items():
            dock.set_key(key, value)
        dock.input.setting.setCurrentIndex(setting)
        layers = {layer.name(): layer for layer in QgsProject.instance().mapLayers().values()}
        dock.set_key("LOAD_AREA", layers["ridge_area"].id() if name == "ridge" else None)
        if observed:
            dock.input.observed.setLayer(layers[observed])
        else:
            dock.input.observed.setCurrentIndex(0)
        user.draw((90e3 if name == "front" else 10e3, north * BAND), (690e3, north * BAND))
        need(lambda: dock.view() is not None, f"the plate of the {name}: {dock.complaint.text()}")
        if name == "ridge":
            # Between the last cell of the ridge and the first of the seafloor the relief is a mixture of both.
            for edge in (RIDGE_FROM - 10.0, RIDGE_TO - 10.0):
                user.drag(edge - 5.0, edge + 5.0)
        dock.fit_button.click()
        need(lambda: dock.session().is_current, f"the fit of the {name}")
        user.shoot(name)
        answers[name] = {
            "te_km": dock.session().result.best.thickness.value / 1e3,
            "words": dock.answer.text(),
            "true": 24.0 if name == "ridge" else 18.0,
        }
    return answers


@step
def complains(user: User) -> dict:
    """A value that cannot be is refused in one sentence that names it, and the panel goes on."""
    dock = user.dock
    dock.tabs.setCurrentIndex(2)
    dock.set_key("YOUNG_GPA", "abc")
    words = dock.complaint.text()
    user.shoot("complaint")
    dock.set_key("YOUNG_GPA", "70")
    young = dock.view().bent.problem.options.elastic.young
    return {"words": words, "after": dock.complaint.text(), "young": young}


@step
def draws_into_a_layer(user: User) -> dict:
    """A line drawn into a layer of the user's in another CRS is part of an edit that can be undone."""
    layer = QgsVectorLayer("MultiLineString?crs=EPSG:4326&field=code:integer", "mine", "memory")
    QgsProject.instance().addMapLayer(layer)
    user.window.draw_into(layer.id())
    user.draw((90e3, 0.6 * BAND), (600e3, 0.6 * BAND))
    editing, count = layer.isEditable(), layer.featureCount()
    first = next(layer.getFeatures()).geometry().asMultiPolyline()[0][0]
    layer.undoStack().undo()
    undone = layer.featureCount()
    layer.rollBack()
    user.window.draw_into("")
    return {"editing": editing, "count": count, "undone": undone, "first": [first.x(), first.y()]}


@step
def snaps(user: User) -> dict:
    """Clicks a few pixels off a vertex: with the project's snapping on they are drawn on it, with it off they are not."""
    crs = user.canvas.mapSettings().destinationCrs()
    corners = [(120e3 + 1 / 3, 0.7 * BAND + 1 / 7), (400e3 + 1 / 11, 0.8 * BAND + 1 / 13)]
    layer = QgsVectorLayer("LineString", "corners", "memory")
    layer.setCrs(crs)
    feature = QgsFeature()
    vertices = [QgsPointXY(WEST + east, SOUTH + north) for east, north in corners]
    feature.setGeometry(QgsGeometry.fromPolylineXY(vertices))
    layer.dataProvider().addFeature(feature)
    QgsProject.instance().addMapLayer(layer)
    spin(0.5)
    before, found, tool = QgsProject.instance().snappingConfig(), {}, user.window.tool
    drawn = {each.name(): each for each in QgsProject.instance().mapLayers().values()}["Drawn transects"]
    for name, on in (("on", True), ("off", False)):
        QgsProject.instance().setSnappingConfig(snapping(on))
        spin(0.2)
        count = drawn.featureCount()
        user.begin()
        for corner in corners:
            place = user.pixel(*corner) + QPoint(5, -4)
            if on:
                # QGIS looks for vertices in the background, and snaps once it has them.
                need(lambda place=place: snapped(user, place), "the sign that the cursor snaps")
            QTest.mouseMove(user.canvas.viewport(), place)
            QTest.mouseClick(user.canvas.viewport(), LEFT, pos=place)
        length = float(tool._tip.text().split(" km")[0].replace(",", ""))
        user.click(500e3, 0.2 * BAND, button=RIGHT)
        need(lambda count=count: drawn.featureCount() == count + 1, "the drawn line")
        line = max(drawn.getFeatures(), key=lambda each: each.id()).geometry().asPolyline()
        found[name] = {"drawn": [[p.x(), p.y()] for p in line], "length": length}
    QgsProject.instance().setSnappingConfig(before)
    QgsProject.instance().removeMapLayer(layer.id())
    pixel = user.canvas.mapUnitsPerPixel()
    return {**found, "corners": [[p.x(), p.y()] for p in vertices], "pixel": pixel}


def snapped(user: User, place: QPoint) -> bool:
    """Whether the tool says that it snaps, after the mouse came to a pixel."""
    for pixel in (place + QPoint(1, 0), place):
        QTest.mouseMove(user.canvas.viewport(), pixel)
        spin(0.05)
    return user.window.tool._snap.match().isValid()


def snapping(on: bool) -> QgsSnappingConfig:
    """Snapping to vertices of all layers within 12 pixels, or none. Its enums moved to Qgis in 3.26 and 3.32."""
    modes = Qgis.SnappingMode if hasattr(Qgis, "SnappingMode") else QgsSnappingConfig.SnappingMode
    units = Qgis.MapToolUnit if hasattr(Qgis, "MapToolUnit") else QgsTolerance.UnitType
    config = QgsSnappingConfig(QgsProject.instance())
    config.setEnabled(on)
    config.setMode(modes.AllLayers)
    if hasattr(Qgis, "SnappingType"):
        config.setTypeFlag(Qgis.SnappingTypes(Qgis.SnappingType.Vertex))
    else:
        config.setTypeFlag(QgsSnappingConfig.SnappingTypeFlag(QgsSnappingConfig.SnappingTypes.VertexFlag))
    config.setTolerance(12)
    config.setUnits(units.Pixels)
    return config


@step
def opens_the_dialog(user: User) -> dict:
    """After drawing, the dialog of the fit opens with the drawn line, and it alone, as its transects."""
    for action in user.window._after.actions():
        if action.data() == "dialog":
            action.trigger()
    user.draw((60e3, 1.45 * BAND), (650e3, 1.45 * BAND))
    dialog = user.window._dialogs[-1]
    need(dialog.isVisible, "the dialog")
    user.shoot("dialog", dialog)
    source = dialog.mainWidget().wrappers["TRANSECTS"].parameterValue()
    selected = 0
    if isinstance(source, QgsProcessingFeatureSourceDefinition) and source.selectedFeaturesOnly:
        selected = QgsProject.instance().mapLayer(source.source.staticValue()).selectedFeatureCount()
    title = dialog.windowTitle()
    dialog.close()
    for action in user.window._after.actions():
        if action.data() == "panel":
            action.trigger()
    return {"title": title, "selected": selected}


@step
def opens_the_models(user: User) -> dict:
    """Each entry of the example models opens its file in the modeller, children and all."""
    found = {}
    for action in user.window.models_menu.actions():
        action.trigger()
        modeller = user.window._dialogs[-1]
        need(modeller.isVisible, "the modeller")
        spin(0.5)
        user.shoot("modeller", modeller)
        found[action.text()] = sorted(modeller.model().childAlgorithms())
        modeller.setDirty(False)
        modeller.close()
    return {"models": found}


@step
def map_of_what_was_kept(user: User) -> dict:
    """The kept layers on the map without the panel, for the eye."""
    user.dock.hide()
    spin(1.0)
    user.canvas.zoomToFullExtent()
    spin(1.5)
    user.shoot("map")
    return {"line": user.dock._map.line.size()}


@step
def does_without_matplotlib(user: User) -> dict:
    """Where matplotlib is missing the panel says so in place of the picture, and fits all the same."""
    module = sys.modules[type(user.dock).__module__]
    words = "Figures need the Python package matplotlib, which this QGIS does not have."
    there, module.missing_package = module.missing_package, lambda: words
    dock = module.ProfileDock(user.canvas, user.main)
    module.missing_package = there
    iface.addDockWidget(Qt.DockWidgetArea.BottomDockWidgetArea, dock)
    layers = {layer.name(): layer for layer in QgsProject.instance().mapLayers().values()}
    dock.input.setting.setCurrentIndex(1)
    dock.input.dem.setLayer(layers["relief"])
    dock.show_feature(layers["Drawn transects"], next(layers["Drawn transects"].getFeatures()).id())
    need(lambda: dock.view() is not None, "the plate")
    dock.thickness.slider.setValue(500)
    dock.fit_button.click()
    need(lambda: dock.session().is_current, "the fit")
    spin(0.3)
    user.main.grab().save(str(FOLDER / "without_matplotlib.png"))
    answer, said = dock.answer.text(), dock.findChild(QLabel, "missing").text()
    dock.shut()
    iface.removeDockWidget(dock)
    dock.deleteLater()
    return {"said": said, "expected": words, "answer": answer}


@step
def stops(user: User) -> dict:
    """Unloaded, the plugin leaves neither dock nor toolbar nor tool."""
    done = qgis.utils.unloadPlugin(NAME)
    QCoreApplication.sendPostedEvents(None, QEvent.Type.DeferredDelete)
    spin(0.3)
    left = [child for child in user.main.children() if child.objectName().startswith("Downwarp")]
    # QGIS itself keeps the plugin's menu, emptied and taken out of the menu of plugins.
    names = [child.objectName() for child in left if not isinstance(child, QMenu) or child.actions()]
    return {"done": done, "left": names, "tool": type(user.canvas.mapTool()).__name__}


def go() -> None:
    qgis.utils.iface.mainWindow().resize(1280, 800)
    qgis.utils.iface.mainWindow().move(0, 0)
    QgsApplication.messageLog().messageReceived[str, str, Qgis.MessageLevel].connect(heard)

    def uncaught(kind, error, trace) -> None:
        found["log"].append(["uncaught", 2, "".join(traceback.format_exception(kind, error, trace))])

    def shown(kind, error, trace, message, *rest, **named) -> None:
        uncaught(kind, error, trace)

    sys.excepthook = uncaught
    # QGIS would show a dialog and wait for an answer.
    qgis.utils.showException = shown
    qgis.utils.updateAvailablePlugins()
    found["loaded"] = bool(qgis.utils.loadPlugin(NAME) and qgis.utils.startPlugin(NAME))
    user = User(qgis.utils.plugins[NAME].window)
    wanted = os.environ.get("DOWNWARP_STEPS", "").split()
    for function in STEPS:
        if wanted and function.__name__ not in wanted:
            continue
        start = time.monotonic()
        entry = {"name": function.__name__, "error": "", "found": {}}
        try:
            entry["found"] = function(user)
        except Exception:
            entry["error"] = traceback.format_exc()
        entry["seconds"] = time.monotonic() - start
        found["steps"].append(entry)
        (FOLDER / "results.json").write_text(json.dumps(found, indent=2), encoding="utf-8")
        if entry["error"] and function in (starts, draws):
            break
    os._exit(0)


def started() -> None:
    try:
        go()
    except BaseException:
        found["log"].append(["driver", 2, traceback.format_exc()])
        (FOLDER / "results.json").write_text(json.dumps(found, indent=2), encoding="utf-8")
        os._exit(1)


faulthandler.enable()
# A window that waits for an answer nobody gives would hang for ever: this says where, and ends it.
faulthandler.dump_traceback_later(PATIENCE, exit=True)
QTimer.singleShot(1000, started)
