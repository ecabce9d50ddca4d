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
from ..core.strip_check import StripCheck
from ..core.wording import say
from ..translation import tr, translated
from . import rows, strip_rows
from .destinations import Destinations
from .fields import FIELDS, GEOMETRY, attributes, layer_fields
from .styles import style_on_load

LABELS = {
    "PROFILES": say("Profiles"),
    "STATIONS": say("Stations"),
    "MARKERS": say("Markers"),
    "PARAMETERS": say("Parameters"),
    "MISFIT": say("Misfit"),
    "CHOICES": say("Choices"),
}
OTHER_LABELS = {
    "TRANSECTS": say("Transects"),
    "ALONG_STRIKE": say("Along strike"),
    "CHECKS": say("Checks"),
    "CHECK_STATIONS": say("Check stations"),
    "ANOMALIES": say("Anomalies"),
    "EVIDENCE": say("Evidence"),
    "VERDICTS": say("Verdicts"),
    "ENVELOPES": say("Envelopes"),
    "MOMENTS": say("Moments"),
    "AGES": say("Ages"),
    "ISOTHERM_DEPTHS": say("Isotherm depths"),
}
"""Those of outputs that the fit does not have."""


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


def place(x: float, y: float, z: float) -> QgsGeometry:
    """A point with Z, also where that is not known (NaN): a point without Z would be stored at sea level."""
    return QgsGeometry(QgsPoint(x, y, z, wkbType=QgsWkbTypes.Type.PointZ))


def add_sinks(algorithm, names: tuple[str, ...], required: tuple[str, ...]) -> None:
    """Add the sinks of the named outputs to an algorithm; those not required are optional."""
    types = {
        "TRANSECTS": QgsProcessing.SourceType.TypeVectorLine,
        "PROFILES": QgsProcessing.SourceType.TypeVectorLine,
        "STATIONS": QgsProcessing.SourceType.TypeVectorPoint,
        "MARKERS": QgsProcessing.SourceType.TypeVectorPoint,
        "CHECKS": QgsProcessing.SourceType.TypeVectorLine,
        "CHECK_STATIONS": QgsProcessing.SourceType.TypeVectorPoint,
        "ANOMALIES": QgsProcessing.SourceType.TypeVectorPoint,
        "VERDICTS": QgsProcessing.SourceType.TypeVectorPoint,
        "AGES": QgsProcessing.SourceType.TypeVectorLine,
        "ALONG_STRIKE": QgsProcessing.SourceType.TypeVectorPoint,
    }
    for name in names:
        kind = types.get(name, QgsProcessing.SourceType.TypeVector)
        optional = name not in required
        create_by_default = name in types and name != "ALONG_STRIKE"
        algorithm.addParameter(
            QgsProcessingParameterFeatureSink(
                name, tr({**LABELS, **OTHER_LABELS}[name]), kind, None, optional, create_by_default
            )
        )


class Outputs:
    """The sinks of one run; `discard` them in the end, whatever came of it."""

    def __init__(
        self, algorithm, parameters: dict[str, Any], context, crs: QgsCoordinateReferenceSystem, located: bool = True
    ) -> None:
        """``located``: whether the input has geometry; without it the outputs have none.

        Raises DownwarpError where a file that is asked for cannot be made, so that nobody waits in vain.
        """
        self._algorithm, self._parameters, self._context = algorithm, parameters, context
        self._crs, self._located = crs, located
        self._destinations = Destinations(algorithm, parameters, context)
        self._sinks: dict[str, tuple[QgsFeatureSink | None, Any]] = {}
        self._left_out: dict[str, int] = {}
        self._bare: set[str] = set()
        """Sinks that can hold rows without geometry."""
        self.results: dict[str, Any] = {}
        for name in FIELDS:
            definition = algorithm.parameterDefinition(name)
            if definition is not None and definition.isDestination():  # TRANSECTS is an input of most
                self._destinations.check(name, self._kind(name) != QgsWkbTypes.Type.NoGeometry)

    def _kind(self, name: str) -> QgsWkbTypes.Type:
        return GEOMETRY.get(name, QgsWkbTypes.Type.NoGeometry) if self._located else QgsWkbTypes.Type.NoGeometry

    def _sink(self, name: str) -> tuple[QgsFeatureSink | None, Any]:
        if name not in self._sinks:
            fields, kind = layer_fields(name), self._kind(name)
            sink, destination = None, ""
            if self._algorithm.parameterDefinition(name) is not None:
                crs = QgsCoordinateReferenceSystem() if kind == QgsWkbTypes.Type.NoGeometry else self._crs
                sink, destination = self._destinations.sink(name, fields, kind, crs)
            if sink is not None:
                self.results[name] = destination
                style_on_load(self._context, destination, name)
            elif self._parameters.get(name):
                raise QgsProcessingException(self._algorithm.invalidSinkError(self._parameters, name))
            self._sinks[name] = (sink, fields)
            if self._destinations.holds_bare_rows(name):
                self._bare.add(name)
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
        if geometry is None and name not in self._bare:
            self._left_out[name] = self._left_out.get(name, 0) + 1
            return
        feature = QgsFeature(fields)
        feature.setAttributes(attributes(row, fields))
        if geometry is not None and self._located:
            feature.setGeometry(geometry)
        if not sink.addFeature(feature, QgsFeatureSink.Flag.FastInsert):
            raise QgsProcessingException(tr("{name} cannot be written: {why}", name=name, why=sink.lastError()))

    def bent(self, bent: Bent, row: rows.Row, track: Track | None, thickness_known: bool = True) -> None:
        """Write PROFILES, STATIONS and MARKERS of a bent plate."""
        self.add("PROFILES", row, self._line(track, bent.stations.predicted))
        points = self._points(track, bent.stations.predicted)
        for index, station in enumerate(rows.station_rows(bent, thickness_known)):
            self.add("STATIONS", station, points[index] if points else None)
        for marker in rows.marker_rows(bent):
            point = None
            if track is not None:
                x, y = track.at(marker["distance_km"] * 1e3)
                point = place(float(x), float(y), marker["elevation_m"])
            self.add("MARKERS", marker, point)

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

    def checked(self, check: StripCheck, track: Track | None) -> None:
        """Write CHECKS and CHECK_STATIONS of a strip beside the load as mapped."""
        surface = check.strip.regional[0] - check.deflection
        self.add("CHECKS", strip_rows.check_row(check), self._line(track, surface))
        points = self._points(track, surface)
        for index, station in enumerate(strip_rows.station_rows(check)):
            self.add("CHECK_STATIONS", station, points[index] if points else None)

    def failed(self, sink: str, name: str, why: str) -> None:
        """Write a transect that could not be worked on: its name and the reason."""
        self.add(sink, {"transect": name, "remarks": translated(why)})

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
        return [place(x, y, h) for x, y, h in zip(track.x.tolist(), track.y.tolist(), z.tolist())]

    def flush(self) -> list[str]:
        """Let the sinks write what they hold and put files into their places; what the user should know of it."""
        for sink, _ in self._sinks.values():
            if sink is not None:
                sink.flushBuffer()
        # A file is closed once nobody holds its sink.
        sink = None
        self._sinks.clear()
        left_out = [
            tr("{name} is a FlatGeobuf, which holds no rows without geometry: {count} left out", name=name, count=count)
            for name, count in self._left_out.items()
        ]
        self._destinations.place()
        return left_out

    def discard(self) -> None:
        """Leave nothing behind that was not finished."""
        self._sinks.clear()
        self._destinations.discard()
