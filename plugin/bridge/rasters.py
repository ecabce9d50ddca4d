"""Values of a raster layer at places given in degrees: bilinear, read tile by tile, off the main thread."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from qgis.core import Qgis, QgsCoordinateReferenceSystem, QgsRasterLayer, QgsRasterRange, QgsRectangle

from ..core import bilinear, check
from ..core.by_pyproj import in_shape
from ..core.errors import DownwarpError
from ..core.wording import say
from .frames import Frame, full_turn, pyproj_crs, transformed, transformer
from .tiles import Tiles

UNITS = (1.0, 0.3048, 1200.0 / 3937.0, 1000.0)
"""Metres in a metre, a foot, a US survey foot and a kilometre: the factors of RELIEF_UNIT."""

KILOMETRES = 3
"""Place of the kilometre among them."""

_POINTS_AT_ONCE = 16_384
"""Points that are worked on together: few enough for what is made of them to stay in the processor's cache."""

_TYPES: dict[Any, type] = {
    getattr(Qgis.DataType, name): dtype
    for name, dtype in (
        ("Byte", np.uint8),
        ("Int8", np.int8),  # since QGIS 3.30
        ("UInt16", np.uint16),
        ("Int16", np.int16),
        ("UInt32", np.uint32),
        ("Int32", np.int32),
        ("Float32", np.float32),
        ("Float64", np.float64),
    )
    if hasattr(Qgis.DataType, name)
}


class RasterReader:
    """One band of a raster layer. Make it on the main thread; it keeps its own copy of the layer's data provider.

    Cells are read in tiles, and those used last are kept: lines near each other read each tile once.

    Scale, offset and "no data", also what the user has declared as such, count as QGIS has them. Cells follow the
    layer's extent, rows from the top. A raster that is rotated in its file is read as QGIS shows it, resampled to the
    nearest of its cells in upright ones, with 0 in the corners outside it unless it declares "no data".

    In a geographic CRS longitudes may run 0..360, -180..180 or otherwise; where the columns go round the Earth, to
    within half a cell, the first follows the last. In any other CRS no seam is closed.
    """

    def __init__(
        self,
        layer: QgsRasterLayer | None,
        band: int,
        frame: Frame,
        label: str = "DEM",
        crs: QgsCoordinateReferenceSystem | None = None,
        unit: int = 0,
    ) -> None:
        """``band``: from 1; ``frame``: the longitudes and latitudes it will be asked for; ``label``: the key that
        errors name; ``crs``: takes the place of the layer's own where valid; ``unit``: index into `UNITS`.

        Raises DownwarpError for a layer that cannot be read, a band that does not exist, and a missing CRS.
        """
        if layer is None or not layer.isValid() or layer.dataProvider() is None:
            raise DownwarpError("{label} is not a raster that can be read.", label=label)
        self._label = label
        self._frame = frame
        self._band = _whole(f"{label}_BAND", band, 1, layer.bandCount())
        self._factor = UNITS[_whole("RELIEF_UNIT", unit, 0, len(UNITS) - 1)]
        if crs is None or not crs.isValid():
            crs = layer.crs()
        if not crs.isValid():
            raise DownwarpError("{label} carries no CRS: give it as DEM_CRS.", label=label)
        self._provider = layer.dataProvider().clone()
        self._rows, self._columns = self._provider.ySize(), self._provider.xSize()
        if self._rows < 1 or self._columns < 1:
            raise DownwarpError("{label} has no cells of its own (is it a web map?).", label=label)
        kind = self._provider.dataType(self._band)
        if kind not in _TYPES:
            raise DownwarpError(
                "{label} has band {band} in a type that holds no plain numbers.", label=label, band=self._band
            )
        extent = self._provider.extent()
        self._left, self._top = extent.xMinimum(), extent.yMaximum()
        self._width, self._height = extent.width() / self._columns, extent.height() / self._rows
        self._tiles = Tiles(self._read, (self._rows, self._columns), _kept_as(np.dtype(_TYPES[kind])))
        own = pyproj_crs(crs, label)
        self._crs_name = own.name
        self._to_raster = transformer(frame.geographic, own, label)
        turn = full_turn(own)
        self._columns_in_turn = None if turn is None else turn / self._width

    def sample(
        self, longitude: np.ndarray, latitude: np.ndarray, progress: Callable[[float], None] | None = None
    ) -> np.ndarray:
        """Values, m, at places in degrees, in the shape of the input; NaN outside the raster and where it has no data.

        ``progress`` is called with the fraction done before each window is read, and may raise to stop.
        Raises DownwarpError where the coordinates cannot be brought to the raster's CRS or cells cannot be read.
        """
        longitude, latitude = np.broadcast_arrays(np.asarray(longitude, dtype=float), np.asarray(latitude, dtype=float))
        values = np.full(longitude.size, np.nan)
        row, column, closed = self._cells(longitude.ravel(), latitude.ravel())
        for first in range(0, values.size, _POINTS_AT_ONCE):
            part = slice(first, first + _POINTS_AT_ONCE)

            def part_progress(fraction: float, done: int = first) -> None:
                if progress is not None:
                    progress((done + fraction * min(_POINTS_AT_ONCE, values.size - done)) / values.size)

            part_progress(0.0)
            values[part] = self._blended(row[part], column[part], closed, part_progress)
        return values.reshape(longitude.shape) * self._factor

    def cell_size_m(self, longitude: np.ndarray, latitude: np.ndarray) -> np.ndarray:
        """Size of the cells, m, at places in degrees: the root of width times height on the ellipsoid.

        Shaped like the input; NaN outside the raster.
        """
        longitude, latitude = np.broadcast_arrays(np.asarray(longitude, dtype=float), np.asarray(latitude, dtype=float))
        row, column, closed = self._cells(longitude.ravel(), latitude.ravel())
        weights = bilinear.corners(row, column, (self._rows, self._columns), closed)[2]
        inside = weights.sum(axis=0) > 0.0
        # From a cell's centre towards the middle of the raster, so that the neighbour exists (not beyond a pole, say).
        row = np.clip(np.round(np.where(inside, row, 0.0)), 0, self._rows - 1)
        column = np.clip(np.round(np.where(inside, column, 0.0)), 0, self._columns - 1)
        down = np.where(row < 0.5 * (self._rows - 1), 1.0, -1.0)
        right = np.where(column < 0.5 * (self._columns - 1), 1.0, -1.0)
        height = self._separation(row, column, row + down, column)
        width = self._separation(row, column, row, column + right)
        return np.where(inside, np.sqrt(width * height), np.nan).reshape(longitude.shape)

    def _separation(self, row, column, other_row, other_column) -> np.ndarray:
        """Geodesic distance, m, between positions in the grid."""
        ends: list[np.ndarray] = []
        for rows, columns in ((row, column), (other_row, other_column)):
            x = self._left + (columns + 0.5) * self._width
            y = self._top - (rows + 0.5) * self._height
            ends.extend(transformed(self._to_raster, x, y, "INVERSE"))
        known = np.isfinite(ends).all(axis=0)
        _, _, distance = in_shape(self._frame.ellipsoid.inv, *(np.where(known, values, 0.0) for values in ends))
        return np.where(known, distance, np.nan)

    def _cells(self, longitude: np.ndarray, latitude: np.ndarray) -> tuple[np.ndarray, np.ndarray, bool]:
        """Fractional row and column of places, counted in cell centres (NaN where there are none), and whether the
        first column follows the last."""
        x, y = transformed(self._to_raster, longitude, latitude)
        known = np.isfinite(x) & np.isfinite(y)
        if longitude.size and not known.any():
            raise DownwarpError(
                "{label} has CRS {crs}, into which no station can be brought.", label=self._label, crs=self._crs_name
            )
        row = (self._top - np.where(known, y, np.nan)) / self._height - 0.5
        column = (np.where(known, x, np.nan) - self._left) / self._width - 0.5
        turn = self._columns_in_turn
        if turn is None:
            return row, column, False
        if column.size and not (column.min() >= 0.0 and column.max() < turn):
            column = column % turn
        last = self._columns - 1
        gap = turn - last
        if gap > 1.5:
            return row, np.where(column > 0.5 * (last + turn), column - turn, column), False
        # Between the last column and the first, a cell apart or nearly so; none where the columns overlap.
        across_seam = column > last
        column[across_seam] = last + (column[across_seam] - last) / gap
        return row, column, True

    def _blended(
        self, row: np.ndarray, column: np.ndarray, closed: bool, progress: Callable[[float], None]
    ) -> np.ndarray:
        """Values at fractional positions, in the raster's unit."""
        rows, columns, weights = bilinear.corners(row, column, (self._rows, self._columns), closed)
        needed = weights > 0.0
        if needed.all():
            return bilinear.blend(self._tiles.values(rows, columns, progress), weights)
        values = np.full(weights.shape, np.nan)
        values[needed] = self._tiles.values(rows[needed], columns[needed], progress)
        return bilinear.blend(values, weights)

    def _read(self, top: int, left: int, rows: int, columns: int) -> np.ndarray:
        """A window of cells, NaN where there is no data, shape (rows, columns), in a type that holds them exactly."""
        x, y = self._left + left * self._width, self._top - top * self._height
        extent = QgsRectangle(x, y - rows * self._height, x + columns * self._width, y)
        block = self._provider.block(self._band, extent, columns, rows)
        if not block.isValid() or block.width() != columns or block.height() != rows:
            raise DownwarpError(
                "{label} could not be read: {reason}.",
                label=self._label,
                reason=block.error().summary() or say("no reason is given"),
            )
        raw = np.frombuffer(bytes(block.data()), dtype=_TYPES[block.dataType()]).reshape(rows, columns)
        missing = ~np.isfinite(raw)
        if block.hasNoDataValue():
            nodata = np.asarray(block.noDataValue())
            missing |= raw == (nodata.astype(raw.dtype) if raw.dtype.kind == "f" else nodata)
        # Where the source declares no value for "no data", the user's ranges are bits in the block, out of reach.
        for declared in self._provider.userNoDataValues(self._band):
            missing |= _within(raw.astype(float), declared)
        values = raw.astype(_kept_as(raw.dtype))
        values[missing] = np.nan
        return values


def _kept_as(dtype: np.dtype) -> np.dtype:
    """The smallest type of real numbers that holds all values of a type of cells."""
    return np.result_type(dtype, np.float32)


def _within(values: np.ndarray, declared: QgsRasterRange) -> np.ndarray:
    """Which values lie in a range, whose open ends are NaN."""
    bounds, kind = declared.bounds(), QgsRasterRange.BoundsType
    above = values >= declared.min() if bounds in (kind.IncludeMinAndMax, kind.IncludeMin) else values > declared.min()
    below = values <= declared.max() if bounds in (kind.IncludeMinAndMax, kind.IncludeMax) else values < declared.max()
    return (above | np.isnan(declared.min())) & (below | np.isnan(declared.max()))


def _whole(name: str, value: Any, least: int, most: int) -> int:
    result = check.number(name, value, at_least=least, at_most=most)
    if result != int(result):
        raise DownwarpError("{name} is {result:g}; it takes a whole number.", name=name, result=result)
    return int(result)
