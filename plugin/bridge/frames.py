"""Coordinate frames: between a layer's CRS and longitude and latitude in degrees on that CRS's own ellipsoid."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from pyproj import CRS, Geod, Transformer
from pyproj.exceptions import ProjError
from qgis.core import QgsCoordinateReferenceSystem

from ..core.by_pyproj import in_shape
from ..core.errors import DownwarpError

_LONGITUDE_LATITUDE = {
    "subtype": "ellipsoidal",
    "axis": [
        {"name": "Geodetic longitude", "abbreviation": "Lon", "direction": "east", "unit": "degree"},
        {"name": "Geodetic latitude", "abbreviation": "Lat", "direction": "north", "unit": "degree"},
    ],
}


def pyproj_crs(crs: QgsCoordinateReferenceSystem, what: str) -> CRS:
    """A QGIS CRS as pyproj has it; ``what`` names its owner in the error."""
    try:
        return CRS.from_wkt(crs.toWkt(QgsCoordinateReferenceSystem.WktVariant.WKT_PREFERRED))
    except ProjError:
        raise DownwarpError(
            "{what} has a CRS that cannot be read: {crs}.", what=what, crs=crs.userFriendlyIdentifier()
        ) from None


def full_turn(crs: CRS) -> float | None:
    """What 360 degrees of longitude are in the units of a geographic CRS; None for any other CRS."""
    return 2.0 * np.pi / crs.axis_info[0].unit_conversion_factor if crs.is_geographic else None


def transformer(source: CRS, target: CRS, what: str) -> Transformer:
    """From one CRS to another, x before y; ``what`` names the owner of the data in the error."""
    try:
        return Transformer.from_crs(source, target, always_xy=True)
    except ProjError:
        raise DownwarpError(
            "{what} cannot be brought from CRS {own} to CRS {wanted}.", what=what, own=source.name, wanted=target.name
        ) from None


def transformed(
    between: Transformer, x: np.ndarray, y: np.ndarray, direction: str = "FORWARD"
) -> tuple[np.ndarray, np.ndarray]:
    """Positions through a transformer, in the shape they came in."""
    to_x, to_y = in_shape(between.transform, x, y, direction=direction)
    return to_x, to_y


@dataclass(frozen=True)
class Frame:
    """A CRS and, below it, longitude and latitude in degrees on the same datum."""

    crs: CRS
    """The layer's CRS."""
    geographic: CRS
    """Longitude and latitude on its datum, in degrees, from the datum's own prime meridian."""
    owner: str
    """What errors call the layer."""

    @classmethod
    def of(cls, crs: QgsCoordinateReferenceSystem, owner: str) -> Frame:
        """The frame of a QGIS CRS; raises DownwarpError where there is none, or none with an ellipsoid."""
        if not crs.isValid():
            raise DownwarpError("{owner} carries no CRS: give the layer one.", owner=owner)
        plain = pyproj_crs(crs, owner)
        geodetic = plain.geodetic_crs
        # A rotated pole, say, is derived from the frame in which the ellipsoid stands upright.
        while geodetic is not None and geodetic.is_derived:
            geodetic = geodetic.source_crs
        if geodetic is None or plain.is_geocentric:
            raise DownwarpError(
                "{owner} has CRS {crs}, which gives no longitude and latitude on an ellipsoid.",
                owner=owner,
                crs=plain.name,
            )
        if len(geodetic.axis_info) != 2 or not np.isclose(full_turn(geodetic) or 0.0, 360.0):
            description = geodetic.to_json_dict()
            description.pop("id", None)
            geodetic = CRS.from_json_dict(
                {**description, "type": "GeographicCRS", "coordinate_system": _LONGITUDE_LATITUDE}
            )
        return cls(plain, geodetic, owner)

    @cached_property
    def ellipsoid(self) -> Geod:
        """The ellipsoid of the CRS."""
        return self.geographic.get_geod()

    @cached_property
    def _to_degrees(self) -> Transformer:
        return transformer(self.crs, self.geographic, self.owner)

    @cached_property
    def _from_degrees(self) -> Transformer:
        return transformer(self.geographic, self.crs, self.owner)

    def to_degrees(self, x: np.ndarray, y: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Longitude and latitude, degrees, of positions in the CRS; not finite where they have none."""
        return transformed(self._to_degrees, x, y)

    def from_degrees(self, longitude: np.ndarray, latitude: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Positions in the CRS of longitudes and latitudes along a line, degrees, all of shape (n,).

        In a geographic CRS x runs on across its seam, as the longitudes do. Raises DownwarpError where a place cannot
        be expressed in the CRS.
        """
        x, y = transformed(self._from_degrees, longitude, latitude)
        if not (np.isfinite(x).all() and np.isfinite(y).all()):
            raise DownwarpError(
                "{owner} has CRS {crs}, which does not reach all stations.", owner=self.owner, crs=self.crs.name
            )
        turn = full_turn(self.crs)
        # PROJ leaves longitudes as they are, but brings those of a rotated pole to one turn.
        return (x if turn is None or not self.crs.is_derived else np.unwrap(x, period=turn)), y
