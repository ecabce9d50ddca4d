"""The answers of all transects of a run in their order along strike, of which small records are kept."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from qgis.core import QgsCoordinateReferenceSystem, QgsGeometry, QgsPointXY

from ..core.errors import DownwarpError
from ..core.result import Fit, FitResult
from ..core.strike import along_strike
from .frames import Frame
from .outputs import Track
from .rows import Row, strike_row

ALONG_STRIKE = "ALONG_STRIKE"
"""The output's name."""


class AlongStrike:
    """Takes fitted transects one by one, and knows their order and distances once it has all.

    A transect stands for the place of its break, without one for its deepest point, and without that for its start.
    """

    def __init__(self, crs: QgsCoordinateReferenceSystem | None) -> None:
        """``crs``: that of the tracks; None where they have none."""
        self.frame = _frame(crs)
        """The frame of the tracks; None where they have no longitude and latitude."""
        self._rows: list[Row] = []
        self._places: list[tuple[float, float] | None] = []
        """x and y in the CRS of the tracks."""
        self._headings: list[tuple[float, float, float] | None] = []
        """Longitude, latitude and azimuth, degrees."""

    def add(self, result: FitResult, track: Track | None) -> None:
        """Keep what the output says of a transect."""
        distance = _place(result.best)
        self._rows.append({**strike_row(result), "place_km": distance / 1e3})
        place = heading = None
        if track is not None:
            x, y = track.at(distance)
            place = float(x), float(y)
            if self.frame is not None:
                found = _heading(self.frame, track, distance)
                heading = found if np.isfinite(found).all() else None
        self._places.append(place)
        self._headings.append(heading)

    def distances(self) -> tuple[list[int], list[float | None]]:
        """The transects' order along strike and, in the order in which they came, their distances, m."""
        known = [heading for heading in self._headings if heading is not None]
        if self.frame is None or not known or len(known) < len(self._headings):
            return list(range(len(self._rows))), [None] * len(self._rows)
        longitude, latitude, azimuth = np.array(known).T
        order, distance = along_strike(longitude, latitude, azimuth, self.frame.ellipsoid)
        return order.tolist(), [None] * len(self._rows) if distance is None else distance.tolist()

    def rows(self) -> Iterator[tuple[Row, QgsGeometry | None]]:
        """Rows of the output along strike, each with its place."""
        order, distance = self.distances()
        for index in order:
            along, place = distance[index], self._places[index]
            row = {**self._rows[index], "along_strike_km": None if along is None else along / 1e3}
            yield row, None if place is None else QgsGeometry.fromPointXY(QgsPointXY(*place))


def _frame(crs: QgsCoordinateReferenceSystem | None) -> Frame | None:
    """The frame of the tracks' CRS; None where that gives no longitude and latitude."""
    if crs is None:
        return None
    try:
        return Frame.of(crs, "TRANSECTS")
    except DownwarpError:
        return None


def _place(fit: Fit) -> float:
    """Distance from the line's start, m, of the place that a transect stands for."""
    bent = fit.bent
    if bent.break_position is not None:
        return bent.break_position
    if bent.markers.deepest is not None:
        return bent.markers.deepest.distance
    return float(bent.problem.profile.distance[0])


def _heading(frame: Frame, track: Track, distance: float) -> tuple[float, float, float]:
    """Longitude and latitude of a place on a track and the azimuth from there to the track's end, degrees; of the
    whole track where the place is its end."""
    end = track.distance[-1]
    since = distance if distance < end else track.distance[0]
    x, y = track.at(np.array([distance, since, end]))
    longitude, latitude = frame.to_degrees(x, y)
    azimuth, _, _ = frame.ellipsoid.inv(float(longitude[1]), float(latitude[1]), float(longitude[2]), float(latitude[2]))
    return float(longitude[0]), float(latitude[0]), float(azimuth)
