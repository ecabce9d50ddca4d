"""Guides and centres of layers to transects as features."""

from __future__ import annotations

from collections.abc import Iterator

from qgis.core import QgsFeatureSource, QgsGeometry

from ..core.errors import DownwarpError
from ..core.lay import LaidTransect, lay_across, lay_round
from ..translation import translated
from . import lines
from .frames import Frame
from .keys import Values
from .rows import Row

KM = 1e3


def laid_across(source: QgsFeatureSource, values: Values) -> Iterator[tuple[Row, QgsGeometry]]:
    """Rows and lines of the transects across every line of a layer."""
    frame = Frame.of(source.sourceCrs(), "GUIDE")
    for feature in source.getFeatures():
        guide = lines.transect(feature, frame, str(feature.id()))
        laid = lay_across(
            guide,
            values.required_number("SPACING_KM") * KM,
            values.required_number("BEFORE_KM") * KM,
            values.required_number("AFTER_KM") * KM,
            values.enum("SIDE"),
            values.required_number("SMOOTH_KM") * KM,
        )
        yield from _features(laid, guide.name, frame)


def laid_round(source: QgsFeatureSource, values: Values) -> Iterator[tuple[Row, QgsGeometry]]:
    """Rows and lines of the transects round every point of a layer."""
    frame = Frame.of(source.sourceCrs(), "CENTRES")
    for feature in source.getFeatures():
        point = next(feature.geometry().vertices(), None)
        if point is None:
            raise DownwarpError("CENTRES: feature {feature} has no geometry.", feature=feature.id())
        longitude, latitude = frame.to_degrees(point.x(), point.y())
        laid = lay_round(
            float(longitude),
            float(latitude),
            frame.ellipsoid,
            values.whole("DIRECTIONS"),
            values.required_number("RADIUS_KM") * KM,
        )
        yield from _features(laid, str(feature.id()), frame)


def _features(laid: tuple[LaidTransect, ...], guide: str, frame: Frame) -> Iterator[tuple[Row, QgsGeometry]]:
    for number, transect in enumerate(laid, 1):
        row: Row = {
            "name": f"{guide}-{number}",
            "guide": guide,
            "along_km": None if transect.along is None else transect.along / KM,
            "azimuth_deg": transect.azimuth,
            "remarks": translated(transect.remark),
        }
        yield row, lines.line(frame, *transect.vertices.T)
