"""What the panel shows on the map: the transect that is looked at, and the place under the mouse."""

from __future__ import annotations

import numpy as np
from qgis.core import (
    QgsCoordinateReferenceSystem,
    QgsCoordinateTransform,
    QgsCsException,
    QgsGeometry,
    QgsPointXY,
    QgsProject,
    QgsWkbTypes,
)
from qgis.gui import QgsMapCanvas, QgsRubberBand, QgsVertexMarker
from qgis.PyQt.QtGui import QColor

from ..bridge.outputs import Track
from ..report.figures import LOAD, PLATE

CORNERS = 200
"""Stations that the line on the map goes through."""


class MapPlace:
    """A line and a marker on the map; `shut` takes them off it."""

    def __init__(self, canvas: QgsMapCanvas) -> None:
        self._canvas = canvas
        self._track: Track | None = None
        self._crs = QgsCoordinateReferenceSystem()
        self.line = QgsRubberBand(canvas, QgsWkbTypes.GeometryType.LineGeometry)
        self.line.setColor(QColor(PLATE))
        self.line.setWidth(3)
        self.marker = QgsVertexMarker(canvas)
        self.marker.setIconType(QgsVertexMarker.IconType.ICON_CIRCLE)
        self.marker.setColor(QColor(LOAD))
        self.marker.setFillColor(QColor("#ffffff"))
        self.marker.setPenWidth(3)
        self.marker.setIconSize(12)
        self.marker.hide()
        canvas.destinationCrsChanged.connect(self._redraw)

    def show_track(self, track: Track | None, crs: QgsCoordinateReferenceSystem) -> None:
        """Show the stations of a transect, in their CRS, as a line; None for nothing."""
        self._track, self._crs = track, crs
        self._redraw()

    def show_place(self, distance: float) -> None:
        """Mark a place of the transect by its distance, m; NaN for none."""
        points = []
        if self._track is not None and np.isfinite(distance):
            x, y = self._track.at(distance)
            points = self._on_map([QgsPointXY(float(x), float(y))])
        self.marker.setVisible(bool(points))
        if points:
            self.marker.setCenter(points[0])

    def _redraw(self) -> None:
        self.marker.hide()
        self.line.reset(QgsWkbTypes.GeometryType.LineGeometry)
        if self._track is None:
            return
        every = max(1, self._track.distance.size // CORNERS)
        x, y = (np.append(values[::every], values[-1]).tolist() for values in (self._track.x, self._track.y))
        line = self._on_map([QgsPointXY(*point) for point in zip(x, y)])
        self.line.setToGeometry(QgsGeometry.fromPolylineXY(line), None)

    def _on_map(self, points: list[QgsPointXY]) -> list[QgsPointXY]:
        """Points of the transect's CRS on the map; those that it cannot show are left out."""
        to_map = QgsCoordinateTransform(
            self._crs, self._canvas.mapSettings().destinationCrs(), QgsProject.instance()
        )
        shown = []
        for point in points:
            try:
                shown.append(to_map.transform(point))
            except QgsCsException:
                continue
        return shown

    def shut(self) -> None:
        """Take everything off the map."""
        self._canvas.destinationCrsChanged.disconnect(self._redraw)
        for item in (self.line, self.marker):
            self._canvas.scene().removeItem(item)
