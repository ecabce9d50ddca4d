"""Invented relief over known plates, in closed form, and files and layers of it for tests. Needs QGIS and GDAL.

    w(x) = alpha^2 e^(-x/alpha) / (2 D) [(V0 alpha + M0) cos(x/alpha) - M0 sin(x/alpha)]

is a broken plate bent by an end shear V0 and an end moment M0 (Turcotte & Schubert, Geodynamics, section 3.16, from
memory). On the equator of WGS84 the distance is the difference of longitude times the equatorial radius: exact.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from osgeo import gdal, osr
from qgis.core import QgsFeature, QgsGeometry, QgsPointXY, QgsVectorLayer

gdal.UseExceptions()

KM_PER_DEGREE = 6378.137 * np.pi / 180.0
"""Kilometres in a degree of the equator; a = 6378137 m is WGS84's."""

YOUNG, POISSON, GRAVITY, MANTLE, WATER = 100e9, 0.25, 9.81, 3300.0, 1030.0
CELL = 0.02
"""Cells of the grids, degrees."""
STEP_KM = 3 * CELL * KM_PER_DEGREE
"""Stations on every third cell."""
AXIS_KM, LENGTH_KM = 45 * CELL * KM_PER_DEGREE, 315 * CELL * KM_PER_DEGREE
"""The trench's axis lies on a cell's centre and on a station: between cells the bilinear relief would round it off."""
TE_KM, SHEAR, MOMENT, LEVEL, TILT = 30.0, 1.2e12, 0.8e17, -5500.0, 2e-4
"""The trench's plate; TILT in m/m rises from the axis on."""


def bent(x, te_km: float = TE_KM, shear: float = SHEAR, moment: float = MOMENT, infill: float = WATER):
    """Deflection, m, at x m from the broken end (any shape, x from 0)."""
    rigidity = YOUNG * (te_km * 1e3) ** 3 / (12 * (1 - POISSON**2))
    alpha = (4 * rigidity / ((MANTLE - infill) * GRAVITY)) ** 0.25
    s = np.asarray(x) / alpha
    return alpha**2 * np.exp(-s) / (2 * rigidity) * ((shear * alpha + moment) * np.cos(s) - moment * np.sin(s))


def trench(distance_km, te_km: float = TE_KM):
    """Relief, m up, along a line whose trench axis lies at `AXIS_KM`: the other slope before it, the plate beyond."""
    beyond = (np.asarray(distance_km, dtype=float) - AXIS_KM) * 1e3
    plate = np.maximum(beyond, 0.0)
    return LEVEL + TILT * plate - bent(plate, te_km) + 0.06 * np.maximum(-beyond, 0.0)


RIDGE_KM, HALF_WIDTH_KM, HEIGHT, FLOOR = 135 * CELL * KM_PER_DEGREE, 60.0, 3000.0, -5000.0
"""The ridge: its crest on a station, its half width, its height above the sea floor, m, and that, m up."""
RIDGE_TE_KM, ROCK = 20.0, 2800.0


def ridge(distance_km, te_km: float = RIDGE_TE_KM):
    """Relief, m up, of a ridge on a continuous plate under water: the ridge itself, elsewhere the bent sea floor.

    The deflection is the ridge's load times the line load's w = alpha^3 e^-s (cos s + sin s) / 8 D (Turcotte &
    Schubert, Geodynamics, section 3.16, from memory), summed over strips 250 m wide.
    """
    x = np.asarray(distance_km, dtype=float)
    rigidity = YOUNG * (te_km * 1e3) ** 3 / (12 * (1 - POISSON**2))
    alpha = (4 * rigidity / ((MANTLE - WATER) * GRAVITY)) ** 0.25
    width = 0.25
    strips = np.arange(-HALF_WIDTH_KM + width / 2, HALF_WIDTH_KM, width)
    force = (ROCK - WATER) * GRAVITY * HEIGHT * np.cos(0.5 * np.pi * strips / HALF_WIDTH_KM) ** 2 * width * 1e3
    s = np.abs(x[..., None] - RIDGE_KM - strips) * 1e3 / alpha
    bend = (alpha**3 / (8 * rigidity) * np.exp(-s) * (np.cos(s) + np.sin(s))) @ force
    across = np.abs(x - RIDGE_KM) / HALF_WIDTH_KM
    return np.where(across < 1, FLOOR + HEIGHT * np.cos(0.5 * np.pi * np.minimum(across, 1)) ** 2, FLOOR - bend)


def write_grid(path: Path, values, left: float, top: float, cell: float, crs: str | None = "EPSG:4326", nodata=None):
    """Write rows from the top (or bands of rows) as a GeoTIFF and return its path as text."""
    bands = np.asarray(values, dtype=float)
    bands = bands[None] if bands.ndim == 2 else bands
    created = gdal.GetDriverByName("GTiff").Create(
        str(path), bands.shape[2], bands.shape[1], bands.shape[0], gdal.GDT_Float64
    )
    created.SetGeoTransform((left, cell, 0, top, 0, -cell))
    if crs is not None:
        reference = osr.SpatialReference()
        reference.SetFromUserInput(crs)
        created.SetProjection(reference.ExportToWkt())
    for number, band in enumerate(bands, 1):
        if nodata is not None:
            created.GetRasterBand(number).SetNoDataValue(nodata)
        created.GetRasterBand(number).WriteArray(band)
    created.FlushCache()
    del created
    return str(path)


def equator_grid(
    path: Path, start: float, surface, west: float | None = None, columns: int = 500, factor: float = 1.0, **options
) -> str:
    """A grid in degrees about the equator: ``surface`` (m) of the distance in km east of longitude ``start``.

    A cell's centre lies on ``start``. ``west``: longitude of the first centre, ``start`` less 2 degrees if not given;
    places are met from whatever turn of longitude the grid counts in. Values are divided by ``factor``.
    """
    west = start - 2.0 if west is None else west
    longitude = west + CELL * np.arange(columns)
    away = (longitude - start + 180.0) % 360.0 - 180.0
    row = surface(away * KM_PER_DEGREE) / factor
    return write_grid(path, np.tile(row, (8, 1)), west - CELL / 2, 4 * CELL, CELL, **options)


def equator_line(start: float, length_km: float = LENGTH_KM) -> list[tuple[float, float]]:
    """The line of the grid's relief, eastward from ``start``."""
    return [(start, 0.0), (start + length_km / KM_PER_DEGREE, 0.0)]


def lines_layer(lines, crs: str = "EPSG:4326", names=None, kind: str = "LineString") -> QgsVectorLayer:
    """A layer in memory of lines with names, each a sequence of (x, y); WKT is taken as it is."""
    layer = QgsVectorLayer(f"{kind}?crs={crs}&field=name:string(40)", "lines", "memory")
    features = []
    for number, line in enumerate(lines):
        feature = QgsFeature(layer.fields())
        feature.setAttributes([names[number] if names else f"line {number + 1}"])
        if isinstance(line, str):
            feature.setGeometry(QgsGeometry.fromWkt(line))
        else:
            feature.setGeometry(QgsGeometry.fromPolylineXY([QgsPointXY(float(x), float(y)) for x, y in line]))
        features.append(feature)
    layer.dataProvider().addFeatures(features)
    return layer
