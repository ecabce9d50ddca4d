"""Which places lie inside the polygons of a layer."""

from __future__ import annotations

import numpy as np
import shapely.geometry
import shapely.ops
import shapely.wkb
from qgis.core import QgsFeatureSource, QgsGeometry, QgsWkbTypes

from ..core.errors import DownwarpError
from .frames import Frame, full_turn, transformed, transformer

try:  # shapely 2
    from shapely import contains_xy
except ImportError:  # shapely 1.8

    def contains_xy(geometry, x, y):
        """Whether points lie inside a geometry."""
        from shapely.vectorized import contains

        return contains(geometry, x, y)


PARTS = 16
"""Places at which an interval between stations is asked."""


class Areas:
    """The polygons of a layer as one area; made on the main thread, asked off it."""

    def __init__(self, source: QgsFeatureSource, frame: Frame, label: str) -> None:
        """``frame``: the longitudes and latitudes it will be asked for; ``label``: the key that errors name."""
        own = Frame.of(source.sourceCrs(), label)
        self._to_own = transformer(frame.geographic, own.crs, label)
        self._turn = full_turn(own.crs)
        polygons = []
        for feature in source.getFeatures():
            geometry = feature.geometry()
            if geometry.isNull() or geometry.isEmpty():
                continue
            if geometry.type() != QgsWkbTypes.GeometryType.PolygonGeometry:
                kind = QgsWkbTypes.displayString(geometry.wkbType())
                raise DownwarpError(
                    "{label}: feature {feature} is no polygon but {kind}.", label=label, feature=feature.id(), kind=kind
                )
            if not np.isfinite([(vertex.x(), vertex.y()) for vertex in geometry.vertices()]).all():
                raise DownwarpError(
                    "{label}: feature {feature} has a vertex that is not finite.", label=label, feature=feature.id()
                )
            # shapely knows no curves.
            straight = QgsGeometry(geometry.constGet().segmentize())
            polygons.append(shapely.wkb.loads(bytes(straight.asWkb())).buffer(0))
        if not polygons:
            raise DownwarpError("{label} holds no polygon.", label=label)
        self._area = shapely.ops.unary_union(polygons)

    def contain(self, longitude: np.ndarray, latitude: np.ndarray) -> np.ndarray:
        """Whether places in degrees lie inside, bool, in the shape of the input."""
        x, y = transformed(self._to_own, longitude, latitude)
        turns = (0.0,) if self._turn is None else (0.0, self._turn, -self._turn)
        inside = np.zeros(x.shape, dtype=bool)
        for turn in turns:
            inside |= np.asarray(contains_xy(self._area, x + turn, y), dtype=bool)
        return inside

    def share(self, longitude: np.ndarray, latitude: np.ndarray) -> np.ndarray:
        """Share that lies inside of each leg between neighbouring places in degrees (n,), to 1 / `PARTS`, (n - 1,)."""
        longitude = np.unwrap(longitude, period=360.0)
        part = (np.arange(PARTS) + 0.5) / PARTS
        between = [each[:-1, None] + np.diff(each)[:, None] * part for each in (longitude, np.asarray(latitude))]
        return self.contain(*between).mean(axis=1)
