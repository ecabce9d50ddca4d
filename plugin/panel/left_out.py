"""The stations left out by hand as polygons that the algorithm can leave out: its FIT_EXCLUDE."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import shapely.geometry
import shapely.ops
import shapely.wkb
from qgis.core import (
    QgsCoordinateReferenceSystem,
    QgsFeature,
    QgsGeometry,
    QgsMapLayer,
    QgsProject,
    QgsVectorLayer,
)

from ..bridge.frames import Frame, full_turn, transformed, transformer
from ..bridge.outputs import Track
from ..bridge.styles import style_left_out
from ..core.errors import DownwarpError
from ..translation import tr
from .session import Session

_HALF_WIDTH = 0.01
"""Half the width of a polygon along a line, in steps between stations: other lines' stations do not lie within it."""
_JUMP = 3.0
"""Distance, in steps, from which on two stations lie on either side of a seam of the CRS."""
_MADE_HERE = "downwarp/left_out"
"""Custom property of the layers made here."""


def left_out_layer(
    session: Session, track: Track, crs: QgsCoordinateReferenceSystem, given: QgsVectorLayer | None = None
) -> QgsVectorLayer:
    """A layer in memory with a narrow polygon along each stretch of stations that were left out by hand.

    Along the session's line it holds those stations and no others. ``crs``: that of the track; ``given``: areas that
    are left out anyhow, whose polygons come along unchanged, in their CRS. Raises DownwarpError where a station has no
    place in that, or the layer cannot be filled.
    """
    own = crs if given is None else given.crs()
    fields = "field=transect:string&field=from_km:double&field=to_km:double"
    layer = QgsVectorLayer(f"MultiPolygon?{fields}", _title(session), "memory")
    layer.setCrs(own)
    layer.setCustomProperty(_MADE_HERE, True)
    features = [] if given is None else [_feature(layer, each.geometry(), []) for each in given.getFeatures()]
    places = _places(track, crs, own)
    for run in _runs(session.left_out):
        area = QgsGeometry()
        area.fromWkb(shapely.wkb.dumps(_along(places, run)))
        km = (track.distance[run] / 1e3).tolist()
        features.append(_feature(layer, area, [session.profile.name, km[0], km[-1]]))
    added, _ = layer.dataProvider().addFeatures(features)
    if not added:
        raise DownwarpError("The stations left out by hand could not be kept in a layer.")
    layer.updateExtents()
    style_left_out(layer)
    return layer


def add_once(layer: QgsVectorLayer, project: QgsProject) -> QgsMapLayer:
    """Add a layer made here to a project; where one with the same polygons is there already, that one."""
    for other in project.mapLayers().values():
        if other.customProperty(_MADE_HERE) and other.crs() == layer.crs() and _content(other) == _content(layer):
            return other
    return project.addMapLayer(layer)


def _title(session: Session) -> str:
    return tr("Left out by hand, {transect}", transect=session.profile.name)


def _feature(layer: QgsVectorLayer, geometry: QgsGeometry, attributes: list) -> QgsFeature:
    feature = QgsFeature(layer.fields())
    feature.setAttributes(attributes or [None] * layer.fields().count())
    if not geometry.isNull():
        geometry = QgsGeometry(geometry.constGet().segmentize())
        geometry.convertToMultiType()
        feature.setGeometry(geometry)
    return feature


def _content(layer: QgsMapLayer) -> list[bytes]:
    return [bytes(feature.geometry().asWkb()) for feature in layer.getFeatures()]


def _places(track: Track, crs: QgsCoordinateReferenceSystem, own: QgsCoordinateReferenceSystem) -> np.ndarray:
    """Where the stations lie in the CRS of the polygons, (n, 2), by the way in which the algorithm finds them."""
    frame, to = Frame.of(crs, "TRANSECTS"), Frame.of(own, "FIT_EXCLUDE")
    longitude, latitude = frame.to_degrees(track.x, track.y)
    x, y = transformed(transformer(frame.geographic, to.crs, "FIT_EXCLUDE"), longitude, latitude)
    if not (np.isfinite(x).all() and np.isfinite(y).all()):
        raise DownwarpError("FIT_EXCLUDE has a CRS that does not reach all stations of the transect.")
    turn = full_turn(to.crs)
    return np.column_stack([x if turn is None else np.unwrap(x, period=turn), y])


def _runs(left_out: np.ndarray) -> Iterator[np.ndarray]:
    """Indices of stations that follow one another."""
    every = np.flatnonzero(left_out)
    yield from np.split(every, np.flatnonzero(np.diff(every) > 1) + 1)


def _along(places: np.ndarray, run: np.ndarray) -> shapely.geometry.base.BaseGeometry:
    """The polygon that holds the stations of a run: halfway to its neighbours on either side."""
    apart = np.hypot(*np.diff(places, axis=0).T)
    step = float(np.median(apart))
    middles = 0.5 * (places[:-1] + places[1:])
    # Where the line leaves the CRS on one side and comes back on the other there is nothing between.
    near = apart < _JUMP * step
    first, last = int(run[0]), int(run[-1])
    way, parts = places[first : last + 1], np.flatnonzero(~near[first:last]) + 1
    if first and near[first - 1]:
        way, parts = np.concatenate([middles[first - 1 : first], way]), parts + 1
    if last < near.size and near[last]:
        way = np.concatenate([way, middles[last : last + 1]])
    lines = [
        shapely.geometry.LineString(part) if len(part) > 1 else shapely.geometry.Point(part[0])
        for part in np.split(way, parts)
    ]
    return shapely.ops.unary_union([line.buffer(_HALF_WIDTH * step) for line in lines])
