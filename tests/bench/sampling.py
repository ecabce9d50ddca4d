"""Sampling of a made DEM beside QGIS's own per-point sampling and GDAL's reading of the block: `make bench`.

The same bilinear values by points take four calls of `provider.sample`, which gives the value of a cell; blending them
is not counted.

    python tests/bench/sampling.py

prints a Markdown table. Each time is the shortest of several, each with files opened anew, so that nobody's cache is
warm; the files themselves lie in the system's memory. Needs QGIS and GDAL. Nothing is asserted: times depend on the
machine, ratios on it less.
"""

from __future__ import annotations

import os
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

# Read when numpy and Qt are loaded.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")
sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

import conftest  # noqa: F401 - makes the checkout importable
import numpy as np
from downwarp_checkout.plugin.bridge.frames import Frame
from downwarp_checkout.plugin.bridge.rasters import RasterReader
from downwarp_checkout.plugin.bridge.sampling import Sampler
from downwarp_checkout.plugin.core import swath
from downwarp_checkout.plugin.core.transect import Transect
from osgeo import gdal
from pyproj import Geod
from qgis.core import QgsApplication, QgsCoordinateReferenceSystem, QgsPointXY, QgsRasterLayer
from scipy.ndimage import gaussian_filter

gdal.UseExceptions()

CELL = 1.0 / 240.0
"""Degrees: 15 seconds, as global relief has them."""
WEST, NORTH, COLUMNS, ROWS = 10.0, 50.0, 2600, 2000
ELLIPSOID = Geod(ellps="WGS84")
REPEATS = 12
FASTER_THAN_POINTS, SLOWER_THAN_BLOCK = 3.0, 3.0
"""At least and at most what is wanted."""

FILES = {
    "Int16, deflated": (gdal.GDT_Int16, ["TILED=YES", "COMPRESS=DEFLATE", "PREDICTOR=2"]),
    "Float32, not compressed": (gdal.GDT_Float32, ["TILED=YES"]),
}
"""Types and creation options of the DEM."""
CASES = {
    "41 lines 10 km apart, swath of 5": (41, 0.0, 10e3, 5),
    "41 lines 10 km apart, oblique": (41, 2.0, 0.0, 1),
    "9 lines 10 km apart": (9, 0.0, 0.0, 1),
    "one line": (1, 0.0, 0.0, 1),
    "one line, oblique": (1, 2.0, 0.0, 1),
}
"""Lines, degrees of latitude by which each climbs, width of the swath in m, lines in it."""


def made_dem(path: Path, kind: int, options: list[str]) -> str:
    """Invented relief, m, hills some 15 cells wide."""
    relief = gaussian_filter(np.random.default_rng(1).standard_normal((ROWS, COLUMNS)), 15.0)
    created = gdal.GetDriverByName("GTiff").Create(str(path), COLUMNS, ROWS, 1, kind, options)
    created.SetGeoTransform((WEST, CELL, 0, NORTH, 0, -CELL))
    created.SetProjection(QgsCoordinateReferenceSystem("EPSG:4326").toWkt())
    created.GetRasterBand(1).WriteArray(1500.0 * relief / relief.std() - 2000.0)
    created.FlushCache()
    return str(path)


def shortest(prepare: Callable[[], Any], call: Callable[[Any], object]) -> float:
    """Shortest time, s, that ``call`` takes with what ``prepare`` makes anew each time."""
    times = []
    for _ in range(REPEATS):
        made = prepare()
        start = time.process_time()
        call(made)
        times.append(time.process_time() - start)
    return min(times)


def window(longitude: np.ndarray, latitude: np.ndarray) -> tuple[int, int, int, int]:
    """First column and row, columns and rows of the block that holds the cells round all places."""
    column, row = (longitude - WEST) / CELL - 0.5, (NORTH - latitude) / CELL - 0.5
    left, top = int(np.floor(column.min())), int(np.floor(row.min()))
    return left, top, int(np.floor(column.max())) + 2 - left, int(np.floor(row.max())) + 2 - top


def measured(path: str, lines: int, climb: float, width: float, strips: int) -> dict[str, float]:
    """Sizes, and seconds of each way to values at the stations of parallel lines 7 degrees long."""
    frame = Frame.of(QgsCoordinateReferenceSystem("EPSG:4326"), "TRANSECTS")
    layer = QgsRasterLayer(path, "relief")
    south = [42.5 + 0.09 * number for number in range(lines)]
    transects = [Transect(str(at), [[12.0, at], [19.0, at + climb]], ELLIPSOID) for at in south]

    def reader() -> RasterReader:
        return RasterReader(layer, 1, frame)

    def stations(transect: Transect) -> tuple[np.ndarray, np.ndarray]:
        step = float(np.nanmedian(reader().cell_size_m(*transect.vertices.T)))
        return transect.offset(transect.stations(step), swath.offsets(width, strips))

    places = [stations(transect) for transect in transects]
    longitude, latitude = (np.concatenate([each[part].ravel() for each in places]) for part in (0, 1))
    # Bilinear values by points take the four cells about each place.
    west = WEST + CELL * (np.floor((longitude - WEST) / CELL - 0.5) + 0.5)
    north = NORTH - CELL * (np.floor((NORTH - latitude) / CELL - 0.5) + 0.5)
    corners = [(west + CELL * right, north - CELL * down) for down in (0, 1) for right in (0, 1)]
    points = [QgsPointXY(*place) for place in zip(*(np.stack(part, axis=1).ravel().tolist() for part in zip(*corners)))]
    block = window(longitude, latitude)

    def ours(made: RasterReader) -> None:
        for place in places:
            made.sample(*place)

    def whole(made: Sampler) -> None:
        for transect in transects:
            made.sample(transect)

    def by_point(provider: Any) -> None:
        for point in points:
            provider.sample(point, 1)

    return {
        "points": longitude.size,
        "cells": block[2] * block[3],
        "ours": shortest(reader, ours),
        "by_point": shortest(lambda: layer.dataProvider().clone(), by_point),
        "block": shortest(lambda: gdal.Open(path), lambda source: source.ReadAsArray(*block)),
        "whole": shortest(lambda: Sampler(reader(), width=width, strips=strips), whole),
    }


def table(folder: Path) -> Iterator[str]:
    """Rows of the table; ratios are of times in the same row."""
    yield "| relief | places | stations | cells of the block | values, ms | QGIS, 4 points each | GDAL's block | all, ms |"
    yield "| --- | --- | ---: | ---: | ---: | ---: | ---: | ---: |"
    for number, (kind, (data_type, options)) in enumerate(FILES.items()):
        path = made_dem(folder / f"relief{number}.tif", data_type, options)
        for name, case in CASES.items():
            found = measured(path, *case)
            ours = found["ours"]
            yield (
                f"| {kind} | {name} | {found['points']:,} | {found['cells']:,} | {ours * 1e3:.1f} "
                f"| {found['by_point'] / ours:.1f} times ours | ours {ours / found['block']:.1f} times it "
                f"| {found['whole'] * 1e3:.1f} |"
            )


def main() -> None:
    """Measure and print."""
    QgsApplication.setPrefixPath("/usr", True)
    application = QgsApplication([], False)
    application.initQgis()
    with tempfile.TemporaryDirectory(prefix="downwarp-bench") as name:
        sys.stdout.write("\n")
        for row in table(Path(name)):
            sys.stdout.write(row + "\n")
            sys.stdout.flush()
    sys.stdout.write(
        f"\nWanted: QGIS's per-point sampling at least {FASTER_THAN_POINTS:g} times ours, ours at most "
        f"{SLOWER_THAN_BLOCK:g} times GDAL's block. \"All\" lays the stations, too, and combines the swath.\n"
    )
    sys.stdout.flush()
    # Closing QGIS while layers are about crashes it.
    os._exit(0)


if __name__ == "__main__":
    main()
