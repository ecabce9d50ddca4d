"""The map tool that draws a transect: snapping, and the length as it grows."""

from __future__ import annotations

from qgis.core import (
    QgsCoordinateTransform,
    QgsCsException,
    QgsDistanceArea,
    QgsGeometry,
    QgsPointXY,
    QgsProject,
    QgsWkbTypes,
)
from qgis.gui import QgsMapCanvas, QgsMapMouseEvent, QgsMapTool, QgsRubberBand, QgsSnapIndicator
from qgis.PyQt.QtCore import QPoint, Qt, pyqtSignal
from qgis.PyQt.QtGui import QColor
from qgis.PyQt.QtWidgets import QLabel

from ..report.figures import INK, LOAD, PLATE
from ..translation import tr

PIECES = 60
"""Pieces in which the line between two vertices is drawn: it follows the shortest way over the ellipsoid."""
_TIP_OFFSET = QPoint(18, 14)


class TransectTool(QgsMapTool):
    """Left click sets a vertex; Backspace takes the last one back, Escape gives up; right or double click ends.

    ``drawn`` gives the line in the map's CRS, ``told`` words on its length.
    """

    drawn = pyqtSignal(QgsGeometry)
    told = pyqtSignal(str)

    def __init__(self, canvas: QgsMapCanvas) -> None:
        super().__init__(canvas)
        self._canvas = canvas
        self._vertices: list[QgsPointXY] = []
        self._cursor: QgsPointXY | None = None
        self._snap = QgsSnapIndicator(canvas)
        self._line = QgsRubberBand(canvas, QgsWkbTypes.GeometryType.LineGeometry)
        self._line.setColor(QColor(PLATE))
        self._line.setWidth(3)
        self._line.setSecondaryStrokeColor(QColor("#ffffff"))
        self._points = QgsRubberBand(canvas, QgsWkbTypes.GeometryType.PointGeometry)
        self._points.setIcon(QgsRubberBand.IconType.ICON_CIRCLE)
        self._points.setIconSize(9)
        self._points.setColor(QColor(LOAD))
        self._tip = QLabel(canvas.viewport())
        self._tip.setObjectName("downwarp_length")
        self._tip.setStyleSheet(f"background: #ffffff; color: {INK}; border: 1px solid {PLATE}; padding: 2px;")
        self._tip.setAttribute(Qt.WidgetAttribute.WA_TransparentForMouseEvents)
        self._tip.hide()
        self.setCursor(Qt.CursorShape.CrossCursor)

    @property
    def vertices(self) -> list[QgsPointXY]:
        """The vertices set so far, in the map's CRS."""
        return list(self._vertices)

    def length(self, points: list[QgsPointXY]) -> float:
        """Length, m, over the ellipsoid of the map's CRS, of a line in the map's CRS; NaN where it has none."""
        try:
            return self._measure().measureLine(points) if len(points) > 1 else 0.0
        except QgsCsException:
            return float("nan")

    def _measure(self) -> QgsDistanceArea:
        measure = QgsDistanceArea()
        crs = self._canvas.mapSettings().destinationCrs()
        measure.setSourceCrs(crs, QgsProject.instance().transformContext())
        measure.setEllipsoid(crs.ellipsoidAcronym() or "EPSG:7030")
        return measure

    def _along(self, points: list[QgsPointXY]) -> list[QgsPointXY]:
        """The way over the ellipsoid through the points, which is what a transect follows."""
        measure = self._measure()
        way = points[:1]
        for start, end in zip(points, points[1:]):
            try:
                step = max(measure.measureLine(start, end) / PIECES, 1.0)
                parts = measure.geodesicLine(start, end, step, False)
            except QgsCsException:
                parts = []
            way += parts[0][1:] if len(parts) == 1 else [end]
        return way

    def canvasMoveEvent(self, event: QgsMapMouseEvent) -> None:
        """Let the line follow the cursor, snapped where snapping is on."""
        self._cursor = event.snapPoint()
        self._snap.setMatch(event.mapPointMatch())
        self._show(event.pos())

    def canvasPressEvent(self, event: QgsMapMouseEvent) -> None:
        """Set a vertex, or end with the right button."""
        if event.button() == Qt.MouseButton.RightButton:
            self._finish()
        elif event.button() == Qt.MouseButton.LeftButton:
            point = event.snapPoint()
            if not self._vertices or point != self._vertices[-1]:
                self._vertices.append(point)
            self._cursor = point
            self._show(event.pos())

    def canvasDoubleClickEvent(self, event: QgsMapMouseEvent) -> None:
        """End: the first of the two clicks has set the last vertex."""
        if event.button() == Qt.MouseButton.LeftButton:
            self._finish()

    def keyPressEvent(self, event) -> None:
        """Backspace and Delete take the last vertex back, Escape gives up, Return ends."""
        if event.key() in (Qt.Key.Key_Backspace, Qt.Key.Key_Delete):
            if self._vertices:
                self._vertices.pop()
                self._show(None)
            # Of an accepted event QGIS thinks that it may delete the selected features of the current layer.
            event.ignore()
        elif event.key() == Qt.Key.Key_Escape:
            self.give_up()
            event.accept()
        elif event.key() in (Qt.Key.Key_Return, Qt.Key.Key_Enter):
            self._finish()
            event.accept()
        else:
            super().keyPressEvent(event)

    def give_up(self) -> None:
        """Forget the line that was begun."""
        self._vertices.clear()
        self._cursor = None
        for band, kind in (
            (self._line, QgsWkbTypes.GeometryType.LineGeometry), (self._points, QgsWkbTypes.GeometryType.PointGeometry)
        ):  # fmt: skip
            band.reset(kind)
        self._tip.hide()
        self.told.emit("")

    def deactivate(self) -> None:
        """Another tool took over."""
        self.give_up()
        self._snap.setVisible(False)
        super().deactivate()

    def _finish(self) -> None:
        vertices = list(self._vertices)
        self.give_up()
        if len(vertices) > 1:
            self.drawn.emit(QgsGeometry.fromPolylineXY(vertices))
        elif vertices:
            self.told.emit(tr("A transect takes two places at least; nothing was drawn."))

    def _show(self, cursor: QPoint | None) -> None:
        points = list(self._vertices)
        if self._cursor is not None and points and self._cursor != points[-1]:
            points.append(self._cursor)
        self._line.setToGeometry(QgsGeometry.fromPolylineXY(self._along(points)), None)
        self._points.reset(QgsWkbTypes.GeometryType.PointGeometry)
        for vertex in self._vertices:
            self._points.addPoint(vertex)
        if not self._vertices:
            self._tip.hide()
            self.told.emit("")
            return
        words = tr("{length} km").format(length=f"{self.length(points) / 1e3:,.1f}")
        self.told.emit(words)
        if len(self._vertices) == 1:
            words += "\n" + tr("right click ends, Backspace takes back, Escape gives up")
        self._tip.setText(words)
        self._tip.adjustSize()
        if cursor is not None:
            room = self._canvas.viewport().rect()
            place = cursor + _TIP_OFFSET
            place.setX(min(place.x(), room.width() - self._tip.width()))
            place.setY(min(place.y(), room.height() - self._tip.height()))
            self._tip.move(place)
        self._tip.show()

    def shut(self) -> None:
        """Take what the tool drew off the map."""
        self.give_up()
        self._tip.setParent(None)
        for band in (self._line, self._points):
            self._canvas.scene().removeItem(band)
        self._canvas.unsetMapTool(self)


def in_crs(line: QgsGeometry, canvas: QgsMapCanvas, crs) -> QgsGeometry:
    """A line of the map in another CRS; raises QgsCsException where it has no place there."""
    result = QgsGeometry(line)
    result.transform(QgsCoordinateTransform(canvas.mapSettings().destinationCrs(), crs, QgsProject.instance()))
    return result
