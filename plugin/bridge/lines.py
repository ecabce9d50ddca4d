"""Line features to transects, and positions along transects back to points and lines."""

from __future__ import annotations

import numpy as np
from qgis.core import QgsFeature, QgsGeometry, QgsLineString, QgsPoint, QgsWkbTypes

from ..core.errors import DownwarpError
from ..core.transect import Transect
from .frames import Frame

_SAME_PLACE = 1e-7
"""Degrees within which the end of one part and the start of the next are one place: a centimetre."""

_POINT_TYPES = {
    (False, False): QgsWkbTypes.Type.Point,
    (True, False): QgsWkbTypes.Type.PointZ,
    (False, True): QgsWkbTypes.Type.PointM,
    (True, True): QgsWkbTypes.Type.PointZM,
}


def transect(feature: QgsFeature, frame: Frame, name: str) -> Transect:
    """The transect that a line feature draws; ``frame`` is that of its layer.

    Curves are turned into short segments, Z and M are not used. A line of several parts must join end to end in the
    direction of drawing, in any order. Raises DownwarpError, naming the transect, for any other geometry.
    """
    parts = [_in_degrees(part, frame, name) for part in _parts(feature.geometry(), name)]
    return Transect(name, _joined(parts, name), frame.ellipsoid)


def _parts(geometry: QgsGeometry, name: str) -> list[np.ndarray]:
    """Vertices in the layer's CRS, (n, 2), of the parts of a line geometry that have any."""
    if geometry.isNull() or geometry.isEmpty():
        raise DownwarpError("Transect {name} has no geometry.", name=name)
    if geometry.type() != QgsWkbTypes.GeometryType.LineGeometry:
        raise DownwarpError(
            "Transect {name} is no line but {kind}.", name=name, kind=QgsWkbTypes.displayString(geometry.wkbType())
        )
    straight = QgsGeometry(geometry.constGet().segmentize())
    return [
        np.array([(vertex.x(), vertex.y()) for vertex in part.vertices()])
        for part in straight.constParts()
        if not part.isEmpty()
    ]


def _in_degrees(part: np.ndarray, frame: Frame, name: str) -> np.ndarray:
    if not np.isfinite(part).all():
        raise DownwarpError("Transect {name} has a vertex that is not finite.", name=name)
    vertices = np.column_stack(frame.to_degrees(*part.T))
    if not np.isfinite(vertices).all():
        raise DownwarpError(
            "Transect {name} has a vertex that lies outside what CRS {crs} can express.", name=name, crs=frame.crs.name
        )
    return vertices


def _joined(parts: list[np.ndarray], name: str) -> np.ndarray:
    chain, rest = [parts[0]], parts[1:]
    while rest:
        for index, part in enumerate(rest):
            if _meet(chain[-1][-1], part[0]):
                chain.append(rest.pop(index))
                break
            if _meet(part[-1], chain[0][0]):
                chain.insert(0, rest.pop(index))
                break
        else:
            raise DownwarpError(
                "Transect {name} has {count} parts that do not join end to end; draw it as one line.",
                name=name,
                count=len(parts),
            )
    return np.concatenate(chain)


def _meet(one: np.ndarray, other: np.ndarray) -> bool:
    """Whether two places in degrees are the same, whole turns of longitude aside (lines are cut at 180 degrees)."""
    longitude, latitude = np.abs(one - other)
    return bool(latitude <= _SAME_PLACE and abs(longitude - 360.0 * round(longitude / 360.0)) <= _SAME_PLACE)


def points(
    frame: Frame, longitude: np.ndarray, latitude: np.ndarray, z: np.ndarray | None = None, m: np.ndarray | None = None
) -> list[QgsPoint]:
    """Points in the frame's CRS from degrees, with Z and M where given; all arrays of shape (n,)."""
    point_type = _POINT_TYPES[z is not None, m is not None]
    return [QgsPoint(*values, wkbType=point_type) for values in zip(*_ordinates(frame, longitude, latitude, z, m))]


def line(
    frame: Frame, longitude: np.ndarray, latitude: np.ndarray, z: np.ndarray | None = None, m: np.ndarray | None = None
) -> QgsLineString:
    """A line in the frame's CRS from degrees, with Z and M where given; all arrays of shape (n,)."""
    x, y, heights, measures = _ordinates(frame, longitude, latitude, z, m)
    return QgsLineString(x, y, heights if z is not None else [], measures if m is not None else [])


def _ordinates(frame, longitude, latitude, z, m) -> list[list[float]]:
    """x, y, z and m as lists of plain numbers, NaN for what is not given."""
    x, y = frame.from_degrees(longitude, latitude)
    missing = np.full(len(x), np.nan)
    return [
        np.asarray(values, dtype=float).tolist()
        for values in (x, y, missing if z is None else z, missing if m is None else m)
    ]
