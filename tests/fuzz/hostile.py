"""Layers, rasters and values that nobody should feed Downwarp, and good ones to mix them with. Needs QGIS and GDAL."""

from __future__ import annotations

import csv
import math
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
from osgeo import gdal, osr
from qgis.core import (
    NULL,
    QgsCoordinateReferenceSystem,
    QgsFeature,
    QgsGeometry,
    QgsLineString,
    QgsProject,
    QgsProperty,
    QgsVectorLayer,
)

gdal.UseExceptions()

WEST, NORTH, CELL, ROWS, COLUMNS = 10.0, 2.0, 0.05, 80, 200
"""The ground: degrees about the equator, from 10 E to 20 E and from 2 S to 2 N."""
GOOD = "LineString (11 0.1, 18.5 0.2)"
NAMES = [
    "plain", "<b>bold</b> & \"quoted\" 'single'", "", None, "ł" * 300, "{0} %s %n \\u0000", "[% 1 + 1 %]", "../../etc",
]  # fmt: skip


def _ring(count: int, radius: float) -> str:
    angle = np.linspace(0.0, 2 * np.pi, count)
    return ", ".join(f"{14 + radius * math.cos(a):.6f} {radius * math.sin(a):.6f}" for a in angle)


def _zigzag(count: int) -> str:
    return ", ".join(f"{11 + 7 * i / count:.6f} {0.01 * (-1) ** i:.3f}" for i in range(count))


# name: (geometry type, CRS, geometries as WKT, or as a callable where WKT cannot say it, or None)
LINES: dict[str, tuple[str, str, list[Any]]] = {
    "good": ("LineString", "EPSG:4326", [GOOD]),
    "three": ("LineString", "EPSG:4326", [GOOD, "LineString (12 -0.5, 19 -0.4)", "LineString (18 1, 11 1)"]),
    "backwards": ("LineString", "EPSG:4326", ["LineString (18.5 0.2, 11 0.1)"]),
    "null": ("LineString", "EPSG:4326", [None]),
    "null among good": ("LineString", "EPSG:4326", [None, GOOD, "LineString EMPTY"]),
    "empty": ("LineString", "EPSG:4326", ["LineString EMPTY"]),
    "no feature": ("LineString", "EPSG:4326", []),
    "multipart that joins": ("MultiLineString", "EPSG:4326", ["MultiLineString ((11 0, 14 0), (14 0, 18 0.2))"]),
    "multipart out of order": ("MultiLineString", "EPSG:4326", ["MultiLineString ((14 0, 18 0.2), (11 0, 14 0))"]),
    "multipart apart": ("MultiLineString", "EPSG:4326", ["MultiLineString ((11 0, 13 0), (15 0, 18 0.2))"]),
    "multipart with an empty part": ("MultiLineString", "EPSG:4326", ["MultiLineString ((11 0, 13 0), EMPTY)"]),
    "self-crossing": ("LineString", "EPSG:4326", ["LineString (11 0, 16 0, 16 1, 13 1, 13 -1, 18 -1)"]),
    "back on itself": ("LineString", "EPSG:4326", ["LineString (11 0, 18 0, 11 0)"]),
    "loop": ("LineString", "EPSG:4326", [f"LineString ({_ring(50, 1.5)})"]),
    "duplicate vertices": ("LineString", "EPSG:4326", ["LineString (11 0, 11 0, 14 0, 14 0, 14 0, 18 0, 18 0)"]),
    "curve": ("CircularString", "EPSG:4326", ["CircularString (11 0, 14.5 1.2, 18 0)"]),
    "compound curve": (
        "CompoundCurve",
        "EPSG:4326",
        ["CompoundCurve (CircularString (11 0, 12 0.5, 13 0), (13 0, 18 0))"],
    ),
    "with Z": ("LineStringZ", "EPSG:4326", ["LineStringZ (11 0 5, 18 0 -3000)"]),
    "with Z that is not a number": ("LineStringZ", "EPSG:4326", ["LineStringZ (11 0 nan, 18 0 nan)"]),
    "with M": ("LineStringM", "EPSG:4326", ["LineStringM (11 0 0, 18 0 1)"]),
    "with Z and M": ("LineStringZM", "EPSG:4326", ["LineStringZM (11 0 0 1, 18 0 1 2)"]),
    "zero length": ("LineString", "EPSG:4326", ["LineString (14 0, 14 0)"]),
    "one vertex": ("LineString", "EPSG:4326", [lambda: QgsGeometry(QgsLineString([14.0], [0.0]))]),
    "a metre": ("LineString", "EPSG:4326", ["LineString (14 0, 14.00001 0)"]),
    "a hair": ("LineString", "EPSG:4326", ["LineString (14 0, 14.0000000001 0)"]),
    "20,000 km": ("LineString", "EPSG:4326", ["LineString (11 0, 100 0, 190 0)"]),
    "antipodes": ("LineString", "EPSG:4326", ["LineString (11 0, 191 0)"]),
    "round the Earth": ("LineString", "EPSG:4326", ["LineString (0 0, 120 0, 240 0, 360 0)"]),
    "polar": ("LineString", "EPSG:4326", ["LineString (15 89.5, -165 89.5)"]),
    "at the pole": ("LineString", "EPSG:4326", ["LineString (15 90, 80 90)"]),
    "beyond the pole": ("LineString", "EPSG:4326", ["LineString (15 80, 15 100)"]),
    "across the antimeridian": ("LineString", "EPSG:4326", ["LineString (178 0, -178 0)"]),
    "another turn": ("LineString", "EPSG:4326", ["LineString (371 0, 378 0)"]),
    "far outside": ("LineString", "EPSG:4326", ["LineString (1e8 1e8, 2e8 1e8)"]),
    "enormous": ("LineString", "EPSG:4326", ["LineString (1e300 0, -1e300 0)"]),
    "not a number": ("LineString", "EPSG:4326", [lambda: QgsGeometry(QgsLineString([11.0, math.nan], [0.0, 0.0]))]),
    "infinite": ("LineString", "EPSG:4326", [lambda: QgsGeometry(QgsLineString([11.0, math.inf], [0.0, 0.0]))]),
    "partly outside": ("LineString", "EPSG:4326", ["LineString (5 0, 15 0)"]),
    "elsewhere": ("LineString", "EPSG:4326", ["LineString (-70 40, -60 40)"]),
    "3,000 vertices": ("LineString", "EPSG:4326", [f"LineString ({_zigzag(3000)})"]),
    "without CRS": ("LineString", "", [GOOD]),
    "in metres": ("LineString", "EPSG:32632", ["LineString (650000 5000, 1200000 6000)"]),
    "in Mercator": ("LineString", "EPSG:3857", ["LineString (1250000 0, 2000000 1000)"]),
    "in feet": ("LineString", "EPSG:2263", ["LineString (900000 150000, 1200000 250000)"]),
    "on the globe's inside": ("LineString", "EPSG:4978", ["LineString (1000 1000, 200000 200000)"]),
    "polygons for lines": ("Polygon", "EPSG:4326", ["Polygon ((11 -1, 18 -1, 18 1, 11 -1))"]),
    "points for lines": ("Point", "EPSG:4326", ["Point (14 0)"]),
    "no geometry": ("None", "", [None, None]),
}

POINTS: dict[str, tuple[str, str, list[Any]]] = {
    "good points": ("Point", "EPSG:4326", [f"Point ({x:.2f} 0.1)" for x in np.arange(12, 18, 0.5)]),
    "point": ("Point", "EPSG:4326", ["Point (14 0)"]),
    "multipoint": ("MultiPoint", "EPSG:4326", ["MultiPoint ((13 0), (14 0), (15 0))"]),
    "point with Z": ("PointZ", "EPSG:4326", ["PointZ (14 0 -4000)"]),
    "null point": ("Point", "EPSG:4326", [None]),
    "empty point": ("Point", "EPSG:4326", ["Point EMPTY"]),
    "no point": ("Point", "EPSG:4326", []),
    "pole": ("Point", "EPSG:4326", ["Point (0 90)"]),
    "infinite point": ("Point", "EPSG:4326", ["Point (1e300 1e300)"]),
    "points elsewhere": ("Point", "EPSG:4326", ["Point (-70 40)"]),
    "points without CRS": ("Point", "", ["Point (14 0)"]),
    "lines for points": ("LineString", "EPSG:4326", [GOOD]),
}

POLYGONS: dict[str, tuple[str, str, list[Any]]] = {
    "good area": ("Polygon", "EPSG:4326", ["Polygon ((10.5 -1, 13 -1, 13 1, 10.5 1, 10.5 -1))"]),
    "all of it": ("Polygon", "EPSG:4326", ["Polygon ((0 -10, 40 -10, 40 10, 0 10, 0 -10))"]),
    "with a hole": (
        "Polygon",
        "EPSG:4326",
        ["Polygon ((10 -2, 20 -2, 20 2, 10 2, 10 -2), (12 -1, 14 -1, 14 1, 12 1, 12 -1))"],
    ),
    "bow tie": ("Polygon", "EPSG:4326", ["Polygon ((11 -1, 15 1, 15 -1, 11 1, 11 -1))"]),
    "of no size": ("Polygon", "EPSG:4326", ["Polygon ((14 0, 14 0, 14 0, 14 0))"]),
    "curved": ("CurvePolygon", "EPSG:4326", ["CurvePolygon (CircularString (11 0, 13 1, 15 0, 13 -1, 11 0))"]),
    "null area": ("Polygon", "EPSG:4326", [None]),
    "empty area": ("Polygon", "EPSG:4326", ["Polygon EMPTY"]),
    "no area": ("Polygon", "EPSG:4326", []),
    "area with Z": ("PolygonZ", "EPSG:4326", ["PolygonZ ((11 -1 5, 13 -1 5, 13 1 5, 11 -1 5))"]),
    "area elsewhere": ("Polygon", "EPSG:4326", ["Polygon ((60 -1, 63 -1, 63 1, 60 -1))"]),
    "area without CRS": ("Polygon", "", ["Polygon ((11 -1, 13 -1, 13 1, 11 -1))"]),
    "area not a number": ("Polygon", "EPSG:4326", ["Polygon ((11 -1, nan -1, 13 1, 11 -1))"]),
    "lines for polygons": ("LineString", "EPSG:4326", [GOOD]),
}


def layer(name: str, kind: str, crs: str, geometries: list[Any]) -> QgsVectorLayer:
    """A layer in memory with a text, a number and a field of text for numbers."""
    fields = "field=name:string(400)&field=height:double&field=words:string(20)"
    result = QgsVectorLayer(f"{kind}?{f'crs={crs}&' if crs else ''}{fields}", name, "memory")
    if not crs:
        result.setCrs(QgsCoordinateReferenceSystem())
    features = []
    for number, geometry in enumerate(geometries):
        feature = QgsFeature(result.fields())
        text = NAMES[number % len(NAMES)]
        feature.setAttributes([NULL if text is None else text, -4000.0 - 10 * number, "high" if number else "-4100"])
        if geometry is not None:
            feature.setGeometry(geometry() if callable(geometry) else QgsGeometry.fromWkt(geometry))
        features.append(feature)
    result.dataProvider().addFeatures(features)
    return result


def ground(rows: int = ROWS, columns: int = COLUMNS) -> np.ndarray:
    """A trench with an outer rise, m up, across the columns, with roughness."""
    x = np.arange(columns) * CELL * 111.3
    beyond = np.maximum(x - 150.0, 0.0) / 70.0
    profile = -5000.0 - 2600.0 * np.exp(-beyond) * np.cos(beyond) + 12.0 * np.maximum(150.0 - x, 0.0)
    rough = np.random.default_rng(7).normal(0.0, 20.0, (rows, columns))
    return profile[None, :] + rough


def ridge() -> np.ndarray:
    """A ridge of 4 km at the west end of a level sea floor, with roughness."""
    x = np.arange(COLUMNS) * CELL * 111.3
    rough = np.random.default_rng(8).normal(0.0, 20.0, (ROWS, COLUMNS))
    return -5000.0 + 4000.0 * np.clip(1.5 - x / 150.0, 0.0, 1.0)[None, :] + rough


def _write(path: Path, bands: list[np.ndarray], kind=gdal.GDT_Float32, **how: Any) -> str:
    rows, columns = bands[0].shape
    created = gdal.GetDriverByName("GTiff").Create(str(path), columns, rows, len(bands), kind, how.get("options", []))
    transform = how.get("transform", (WEST, CELL, 0, NORTH, 0, -CELL))
    if transform is not None:
        created.SetGeoTransform(transform)
    if how.get("crs", "EPSG:4326"):
        reference = osr.SpatialReference()
        reference.SetFromUserInput(how.get("crs", "EPSG:4326"))
        created.SetProjection(reference.ExportToWkt())
    for number, values in enumerate(bands, 1):
        band = created.GetRasterBand(number)
        if "nodata" in how:
            band.SetNoDataValue(how["nodata"])
        band.WriteArray(values)
        if "scale" in how:
            band.SetScale(how["scale"])
            band.SetOffset(how["offset"])
    created.FlushCache()
    return str(path)


def _billion(path: Path) -> str:
    """1e9 cells of which none is stored."""
    created = gdal.GetDriverByName("GTiff").Create(
        str(path), 40_000, 25_000, 1, gdal.GDT_Int16, ["SPARSE_OK=TRUE", "TILED=YES"]
    )
    created.SetGeoTransform((WEST, 10 / 40_000, 0, 3.0, 0, -6 / 25_000))
    reference = osr.SpatialReference()
    reference.ImportFromEPSG(4326)
    created.SetProjection(reference.ExportToWkt())
    created.FlushCache()
    return str(path)


def _with_holes(values: np.ndarray) -> np.ndarray:
    values = values.copy()
    values[np.random.default_rng(3).random(values.shape) < 0.3] = -9999.0
    return values


RASTERS: dict[str, Callable[[Path], str]] = {
    "good": lambda p: _write(p, [ground()]),
    "ridge": lambda p: _write(p, [ridge()]),
    "two bands": lambda p: _write(p, [ground(), ground() - 2000.0]),
    "rotated": lambda p: _write(p, [ground()], transform=(WEST, CELL, 0.01, NORTH, 0.01, -CELL)),
    "upside down": lambda p: _write(p, [ground()], transform=(WEST, CELL, 0, -NORTH, 0, CELL)),
    "without CRS": lambda p: _write(p, [ground()], crs=""),
    "without place": lambda p: _write(p, [ground()], transform=None, crs=""),
    "scale and offset": lambda p: _write(
        p, [((ground() + 5000) / 0.5).astype(np.int16)], gdal.GDT_Int16, scale=0.5, offset=-5000.0
    ),
    "integers": lambda p: _write(p, [ground().astype(np.int16)], gdal.GDT_Int16),
    "bytes": lambda p: _write(p, [np.clip(ground() / 100 + 100, 0, 255).astype(np.uint8)], gdal.GDT_Byte),
    "feet": lambda p: _write(p, [ground() / 0.3048]),
    "holes": lambda p: _write(p, [_with_holes(ground())], nodata=-9999.0),
    "holes not a number": lambda p: _write(p, [np.where(_with_holes(ground()) == -9999.0, np.nan, ground())]),
    "nothing but holes": lambda p: _write(p, [np.full((ROWS, COLUMNS), -9999.0)], nodata=-9999.0),
    "infinite": lambda p: _write(p, [np.where(ground() < -5500, np.inf, ground())]),
    "enormous values": lambda p: _write(p, [ground() * 1e30]),
    "tiny values": lambda p: _write(p, [ground() * 1e-30]),
    "flat": lambda p: _write(p, [np.full((ROWS, COLUMNS), -5000.0)]),
    "zero": lambda p: _write(p, [np.zeros((ROWS, COLUMNS))]),
    "noise": lambda p: _write(p, [np.random.default_rng(5).normal(0, 3000, (ROWS, COLUMNS))]),
    "above the sea": lambda p: _write(p, [ground() + 9000.0]),
    "thickness of a load": lambda p: _write(p, [np.maximum(ground() + 5200.0, 0.0)]),
    "one column": lambda p: _write(p, [ground()[:, :1]], transform=(14.0, CELL, 0, NORTH, 0, -CELL)),
    "one row": lambda p: _write(p, [ground()[:1]], transform=(WEST, CELL, 0, 0.2, 0, -CELL)),
    "one cell": lambda p: _write(p, [ground()[:1, :1]], transform=(WEST, 10.0, 0, 2.0, 0, -4.0)),
    "a billion cells": _billion,
    "complex": lambda p: _write(p, [ground().astype(np.complex64)], gdal.GDT_CFloat32),
    "0 to 360": lambda p: _write(p, [np.tile(ground(80, 200), (1, 4))], transform=(0, 0.45, 0, 18, 0, -0.45)),
    "polar": lambda p: _write(p, [ground()], transform=(-500e3, 5000, 0, 200e3, 0, -5000), crs="EPSG:3413"),
    "in metres": lambda p: _write(p, [ground()], transform=(600e3, 5000, 0, 200e3, 0, -5000), crs="EPSG:32632"),
    "cells of a nanometre": lambda p: _write(p, [ground()], transform=(14.0, 1e-14, 0, 0.1, 0, -1e-14)),
    "cells of a continent": lambda p: _write(p, [ground()[:2, :2]], transform=(-180, 180, 0, 90, 0, -90)),
}


def _stations() -> dict[str, list[tuple]]:
    """Tables: transect, distance_km, dem_m, observed_m, sigma_m."""
    distance = np.arange(0.0, 600.0, 4.0)
    beyond = np.maximum(distance - 100.0, 0.0) / 70.0
    height = -5000.0 - 2600.0 * np.exp(-beyond) * np.cos(beyond) + 12.0 * np.maximum(100.0 - distance, 0.0)
    height = height + np.random.default_rng(11).normal(0.0, 15.0, height.size)
    good = [("a", float(x), float(z), float(z), 20.0) for x, z in zip(distance, height)]
    return {
        "good": good,
        "two": good + [("b", *row[1:]) for row in good],
        "shuffled": good[::-1],
        "repeated": good + good[:3],
        "one station": good[:1],
        "two stations": good[:2],
        "no station": [],
        "without numbers": [("a", None, None, None, None)] * 20,
        "gaps": [(*row[:3], None if number % 3 else row[3], None) for number, row in enumerate(good)],
        "negative distances": [("a", row[1] - 300.0, *row[2:]) for row in good],
        "enormous": [("a", row[1] * 1e9, row[2] * 1e9, row[3] * 1e9, 1.0) for row in good],
        "microscopic": [("a", row[1] * 1e-9, *row[2:]) for row in good],
        "sigma of 0": [(*row[:4], 0.0) for row in good],
        "sigma below 0": [(*row[:4], -5.0) for row in good],
        "not a number": [("a", row[1], math.nan, math.nan, math.nan) for row in good],
        "infinite": [("a", row[1], math.inf, -math.inf, math.inf) for row in good],
        "flat": [("a", row[1], -5000.0, -5000.0, 10.0) for row in good],
        "odd names": [(NAMES[number % 2], *row[1:]) for number, row in enumerate(good)],
        "names missing": [(None, *row[1:]) for row in good],
    }


def _station_layer(name: str, rows: list[tuple], located: bool) -> QgsVectorLayer:
    fields = "field=transect:string&" + "&".join(
        f"field={column}:double" for column in ("distance_km", "dem_m", "observed_m", "sigma_m")
    )
    result = QgsVectorLayer(f"Point?crs=EPSG:4326&{fields}" if located else f"None?{fields}", name, "memory")
    features = []
    for number, row in enumerate(rows):
        feature = QgsFeature(result.fields())
        feature.setAttributes([NULL if value is None else value for value in row])
        if located:
            feature.setGeometry(QgsGeometry.fromWkt(f"Point ({10 + 0.1 * number} 0)"))
        features.append(feature)
    result.dataProvider().addFeatures(features)
    return result


class World:
    """All of it, made when first asked for, in a folder."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        folder.mkdir(parents=True, exist_ok=True)
        self._kept: dict[tuple[str, str], Any] = {}
        self.stations = _stations()
        self.made: dict[str, QgsVectorLayer] = {}
        """Layers that a run of the plugin made: `bent` stations and `profiles`."""
        self._write_odd_files()

    def _write_odd_files(self) -> None:
        (self.folder / "words.txt").write_text("no layer at all\n", encoding="utf-8")
        (self.folder / "nothing.tif").write_bytes(b"")
        (self.folder / "broken.gpkg").write_bytes(b"SQLite format 3\0" + b"\xff" * 200)
        (self.folder / "broken.tif").write_bytes(b"II*\0" + b"\x08\0\0\0" + b"\xff" * 100)
        for name in ("good", "words"):
            with (self.folder / f"{name}.csv").open("w", encoding="utf-8", newline="") as stream:
                table = csv.writer(stream)
                table.writerow(("transect", "distance_km", "dem_m", "observed_m", "sigma_m"))
                for row in self.stations["good"]:
                    table.writerow(row if name == "good" else (*row[:2], "deep", row[3], row[4]))

    def _keep(self, kind: str, name: str, make: Callable[[], Any]) -> Any:
        if (kind, name) not in self._kept:
            made = make()
            if isinstance(made, QgsVectorLayer):
                # Sources given by id are looked up there.
                QgsProject.instance().addMapLayer(made, False)
            self._kept[kind, name] = made
        return self._kept[kind, name]

    def vector(self, kind: str, name: str) -> Any:
        """A layer of `LINES`, `POINTS`, `POLYGONS` or the stations (``kind``: lines, points, polygons, table)."""
        if kind == "table":
            located = not name.endswith(" (table)")
            plain = name.removesuffix(" (table)")
            if name in self.made:
                return self._keep(kind, name, lambda: self.made[name])
            return self._keep(kind, name, lambda: _station_layer(name, self.stations[plain], located))
        every = {"lines": LINES, "points": POINTS, "polygons": POLYGONS}[kind]
        return self._keep(kind, name, lambda: layer(name, *every[name]))

    def names(self, kind: str) -> list[str]:
        """Names that `vector` or `raster` takes for a kind."""
        if kind == "raster":
            return list(RASTERS)
        if kind == "table":
            return [*self.stations, *(f"{name} (table)" for name in self.stations), *self.made]
        return list({"lines": LINES, "points": POINTS, "polygons": POLYGONS}[kind])

    def raster(self, name: str) -> str:
        """The file of one of `RASTERS`."""
        path = self.folder / f"{name.replace(' ', '_')}.tif"
        return self._keep("raster", name, lambda: str(path) if path.exists() else RASTERS[name](path))

    def odd_sources(self) -> list[Any]:
        """What is no layer."""
        names = (
            "words.txt",
            "nothing.tif",
            "broken.gpkg",
            "broken.tif",
            "good.csv",
            "words.csv",
            "missing.gpkg",
            "a.tif",
        )
        files = [str(self.folder / name) for name in names]
        return [
            *files, str(self.folder), "", None, "layer that is not", "memory:", "/", "\0", "http://", 5, True, [], {},
            "file:///nowhere.csv?delimiter=;", QgsProperty.fromExpression("1/0"), QgsProperty.fromExpression("'x' || "),
        ]  # fmt: skip


def odd_numbers() -> list[Any]:
    """What is no number, or none that anybody means."""
    return [
        0, -1, 1, 1e-300, -1e-300, 1e300, -1e300, math.inf, -math.inf, math.nan, "nan", "inf", "-inf", "abc", "", " ",
        None, NULL, True, False, [], {}, [1, 2], "1e5", "0x10", "1,5", "\uff11\uff12", "1_000", "1 km", 2**63, -(2**63),
        2**70, 0.1 + 0.2, 5e-324, 1.7976931348623157e308, "__import__('os')", "'; DROP TABLE x; --",
        "<script>alert(1)</script>", QgsProperty.fromExpression("1/0"), QgsProperty.fromExpression("no_such(1)"),
        QgsProperty.fromExpression("20+5"), QgsProperty.fromField("nowhere"),
    ]  # fmt: skip


def odd_texts() -> list[Any]:
    """Names of fields and the like."""
    return ["", " ", None, "no such field", "name", "height", "words", 5, "ł", "\0", "name; DROP", [], {}, True, "fid",
            "distance_km", "dem_m", "x" * 300]  # fmt: skip


def odd_crs() -> list[Any]:
    """What is no CRS, and some that are."""
    return ["", None, "garbage", "EPSG:0", "EPSG:999999", "EPSG:4326", "EPSG:3857", "EPSG:32632", "EPSG:4978", 5, [],
            QgsCoordinateReferenceSystem(), QgsCoordinateReferenceSystem("EPSG:4326"), "USER:100000", "EPSG:5773",
            "PROJ:+proj=longlat +R=1737400", "\0"]  # fmt: skip
