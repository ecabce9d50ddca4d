"""Writes results into the algorithms' sinks, which are made only once there is something to write."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from qgis.core import (
    QgsCoordinateReferenceSystem,
    QgsFeature,
    QgsFeatureSink,
    QgsGeometry,
    QgsLineString,
    QgsPoint,
    QgsProcessing,
    QgsProcessingException,
    QgsProcessingParameterFeatureSink,
    QgsWkbTypes,
)

from ..core.result import Bent, FitResult
from . import rows
from .fields import GEOMETRY, attributes, layer_fields
from .keys import tr
from .styles import style_on_load

LABELS = {
    "PROFILES": "Profiles",
    "STATIONS": "Stations",
    "MARKERS": "Markers",
    "PARAMETERS": "Parameters",
    "MISFIT": "Misfit",
    "CHOICES": "Choices",
}


@dataclass(frozen=True)
class Track:
    """Where a transect's stations lie, in the CRS of the output."""

    distance: np.ndarray
    """m, shape (n,)."""
    x: np.ndarray
    """Shape (n,)."""
    y: np.ndarray
    """Shape (n,)."""

    def at(self, distance) -> tuple[np.ndarray, np.ndarray]:
        """Positions between stations."""
        return np.interp(distance, self.distance, self.x), np.interp(distance, self.distance, self.y)


def add_sinks(algorithm, names: tuple[str, ...], required: tuple[str, ...]) -> None:
    """Add the sinks of the named outputs to an algorithm; those not required are optional."""
    types = {
        "TRANSECTS": QgsProcessing.SourceType.TypeVectorLine,
        "PROFILES": QgsProcessing.SourceType.TypeVectorLine,
        "STATIONS": QgsProcessing.SourceType.TypeVectorPoint,
        "MARKERS": QgsProcessing.SourceType.TypeVectorPoint,
    }
    for name in names:
        kind = types.get(name, QgsProcessing.SourceType.TypeVector)
        optional = name not in required
        create_by_default = name in types
        algorithm.addParameter(
            QgsProcessingParameterFeatureSink(
                name, tr(LABELS.get(name, name.capitalize())), kind, None, optional, create_by_default
            )
        )


class Outputs:
    """The sinks of one run."""

    def __init__(
        self, algorithm, parameters: dict[str, Any], context, crs: QgsCoordinateReferenceSystem, located: bool = True
    ) -> None:
        """``located``: whether the input has geometry; without it the outputs have none."""
        self._algorithm, self._parameters, self._context = algorithm, parameters, context
        self._crs, self._located = crs, located
        self._sinks: dict[str, tuple[QgsFeatureSink | None, Any]] = {}
        self.results: dict[str, Any] = {}

    def _sink(self, name: str) -> tuple[QgsFeatureSink | None, Any]:
        if name not in self._sinks:
            fields = layer_fields(name)
            kind = GEOMETRY.get(name) if self._located else None
            sink, destination = None, ""
            if self._algorithm.parameterDefinition(name) is not None:
                sink, destination = self._algorithm.parameterAsSink(
                    self._parameters,
                    name,
                    self._context,
                    fields,
                    QgsWkbTypes.Type.NoGeometry if kind is None else kind,
                    QgsCoordinateReferenceSystem() if kind is None else self._crs,
                )
            if sink is not None:
                self.results[name] = destination
                style_on_load(self._context, destination, name)
            elif self._parameters.get(name):
                raise QgsProcessingException(self._algorithm.invalidSinkError(self._parameters, name))
            self._sinks[name] = (sink, fields)
        return self._sinks[name]

    def open(self, names: tuple[str, ...]) -> None:
        """Make the named sinks, so that each exists even where nothing goes into it."""
        for name in names:
            self._sink(name)

    def add(self, name: str, row: rows.Row, geometry: QgsGeometry | None = None) -> None:
        """Write one row, where the sink is wanted."""
        sink, fields = self._sink(name)
        if sink is None:
            return
        feature = QgsFeature(fields)
        feature.setAttributes(attributes(row, fields))
        if geometry is not None and self._located:
            feature.setGeometry(geometry)
        if not sink.addFeature(feature, QgsFeatureSink.Flag.FastInsert):
            raise QgsProcessingException(tr("{name} cannot be written: {why}").format(name=name, why=sink.lastError()))

    def bent(self, bent: Bent, row: rows.Row, track: Track | None, thickness_known: bool = True) -> None:
        """Write PROFILES, STATIONS and MARKERS of a bent plate."""
        self.add("PROFILES", row, self._line(track, bent.stations.predicted))
        points = self._points(track, bent.stations.predicted)
        for index, station in enumerate(rows.station_rows(bent, thickness_known)):
            self.add("STATIONS", station, points[index] if points else None)
        for marker in rows.marker_rows(bent):
            place = None
            if track is not None:
                x, y = track.at(marker["distance_km"] * 1e3)
                place = QgsGeometry(QgsPoint(float(x), float(y), marker["elevation_m"]))
            self.add("MARKERS", marker, place)

    def fitted(self, result: FitResult, track: Track | None) -> None:
        """Write everything about a fitted transect."""
        best = result.best
        self.bent(best.bent, rows.profile_row(result), track, best.thickness.value is not None)
        for row in rows.parameter_rows(result):
            self.add("PARAMETERS", row)
        for row in rows.misfit_rows(best.bent.problem.profile.name, result.fits):
            self.add("MISFIT", row)
        for row in rows.choice_rows(result):
            self.add("CHOICES", row)

    def failed(self, name: str, why: str) -> None:
        """Write a transect that could not be fitted: its name and the reason."""
        self.add("PROFILES", {"transect": name, "remarks": why})

    def _line(self, track: Track | None, z: np.ndarray) -> QgsGeometry | None:
        """The line over the stations that carry the plate, with Z the predicted surface and M the distance in km."""
        if track is None:
            return None
        known = np.isfinite(z)
        if known.sum() < 2:
            return None
        lists = [values[known].tolist() for values in (track.x, track.y, z, track.distance / 1e3)]
        return QgsGeometry(QgsLineString(*lists))

    def _points(self, track: Track | None, z: np.ndarray) -> list[QgsGeometry]:
        if track is None:
            return []
        return [QgsGeometry(QgsPoint(x, y, h)) for x, y, h in zip(track.x.tolist(), track.y.tolist(), z.tolist())]

    def flush(self) -> None:
        """Let the sinks write what they hold."""
        for sink, _ in self._sinks.values():
            if sink is not None:
                sink.flushBuffer()
