"""Writes the invented map as files: rasters, lines, areas and picks, and the keys to fit them with."""

from __future__ import annotations

import json
import shutil
from collections.abc import Iterable
from pathlib import Path

import numpy as np
from qgis.core import (
    Qgis,
    QgsCoordinateReferenceSystem,
    QgsCoordinateTransformContext,
    QgsFeature,
    QgsField,
    QgsFields,
    QgsGeometry,
    QgsPointXY,
    QgsRasterBlock,
    QgsRasterFileWriter,
    QgsRectangle,
    QgsVectorFileWriter,
    QgsWkbTypes,
)
from qgis.PyQt.QtCore import QByteArray

from ..core import demo
from ..core.constants import MILLIGAL
from ..core.errors import DownwarpError
from ..core.settings import FORELAND, VOLCANO
from .destinations import folder_in, replace_file
from .fields import TYPES

NODATA = -32768.0


def write_demo(folder: Path, noise: float, gravity_noise: float, seed: int) -> list[Path]:
    """Write the demo into ``folder`` and return its layers, those to be drawn on top last.

    Files of an earlier demo are replaced once the new ones are complete. ``noise``: of the relief, m;
    ``gravity_noise``: m/s2.
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
        part = folder_in(folder)
    except OSError as error:
        raise DownwarpError(
            "OUTPUT_FOLDER: {folder} cannot be written: {reason}.", folder=folder, reason=error.strerror
        ) from None
    try:
        layers = _write(part, noise, gravity_noise, seed)
        for path in sorted(part.iterdir()):
            replace_file(path, folder / path.name)
    except OSError as error:
        raise DownwarpError(
            "OUTPUT_FOLDER: {folder} cannot be written: {reason}.", folder=folder, reason=error.strerror
        ) from None
    finally:
        shutil.rmtree(part, ignore_errors=True)
    return [folder / layer.name for layer in layers]


def _write(folder: Path, noise: float, gravity_noise: float, seed: int) -> list[Path]:
    rng = np.random.default_rng(seed)
    grids = demo.demo_grids(noise, rng)
    relief, basement, gravity = folder / "relief.tif", folder / "basement.tif", folder / "gravity.tif"
    _write_raster(relief, grids.relief)
    _write_raster(basement, grids.basement)
    # Noise of its own: relief, basement and picks of a seed do not depend on it.
    anomaly = demo.demo_gravity(gravity_noise, np.random.default_rng([seed, 1]))
    _write_raster(gravity, anomaly / MILLIGAL.value)
    layers = [gravity, relief, basement]
    entries = []
    for scenario in demo.SCENARIOS:
        lines = folder / f"{scenario.name.replace(' ', '_').lower()}.gpkg"
        features = [
            ([f"{scenario.name} {index}"], QgsGeometry.fromPolylineXY([QgsPointXY(*point) for point in line.tolist()]))
            for index, line in enumerate(demo.demo_lines(scenario), 1)
        ]
        _write_vector(lines, {"name": "text"}, QgsWkbTypes.Type.LineString, features)
        layers.append(lines)
        parameters: dict[str, object] = {
            "TRANSECTS": lines.name,
            "NAME_FIELD": "name",
            "DEM": relief.name,
            "SETTING": scenario.setting,
            **scenario.parameters,
        }
        if scenario.setting == FORELAND:
            parameters["OBSERVED"] = basement.name
            guide = folder / "harrow_front_line.gpkg"
            strike = QgsGeometry.fromPolylineXY([QgsPointXY(*point) for point in demo.demo_guide().tolist()])
            _write_vector(guide, {}, QgsWkbTypes.Type.LineString, [([], strike)])
            layers.append(guide)
            layers.append(_write_picks(folder / "picks.gpkg", grids, rng))
        if scenario.setting == VOLCANO:
            area = folder / "ridge_area.gpkg"
            _write_vector(area, {}, QgsWkbTypes.Type.Polygon, [([], QgsGeometry.fromRect(_ridge_area()))])
            parameters["LOAD_AREA"] = area.name
            layers.append(area)
        crust = scenario.crust
        entries.append({
            "name": scenario.name,
            "true_te_km": scenario.thickness / 1e3,
            "parameters": parameters,
            "gravity": {
                "ANOMALY": gravity.name, "RHO_LOAD": crust.load, "RHO_CRUST": crust.crust,
                "RHO_MANTLE": crust.mantle, "CRUST_KM": crust.thickness / 1e3,
            },
        })  # fmt: skip
    noises = {"noise_m": noise, "noise_mgal": gravity_noise / MILLIGAL.value}
    text = json.dumps({**noises, "seed": seed, "scenarios": entries}, indent=2)
    (folder / "demo.json").write_text(text + "\n", encoding="utf-8")
    return layers


def _ridge_area() -> QgsRectangle:
    """The ground that the ridge stands on."""
    west, east = (
        demo.WEST + demo.RIDGE_CENTRE - demo.RIDGE_HALF_WIDTH,
        demo.WEST + demo.RIDGE_CENTRE + demo.RIDGE_HALF_WIDTH,
    )
    return QgsRectangle(west, demo.SOUTH + 2 * demo.BAND, east, demo.SOUTH + 3 * demo.BAND)


def _write_picks(path: Path, grids: demo.DemoGrids, rng: np.random.Generator) -> Path:
    """Picks of the basement near the front's transects, read from the grid with an error of their own."""
    east, elevation, north = demo.demo_picks(grids, rng)
    features = [
        ([float(z), demo.PICK_SIGMA], QgsGeometry.fromPointXY(QgsPointXY(float(x), float(y))))
        for x, y, z in zip(east, north, elevation)
    ]
    _write_vector(path, {"elevation_m": "real", "sigma_m": "real"}, QgsWkbTypes.Type.Point, features)
    return path


def _write_raster(path: Path, grid: np.ndarray) -> None:
    rows, columns = grid.shape
    extent = QgsRectangle(demo.WEST, demo.SOUTH, demo.WEST + columns * demo.CELL, demo.SOUTH + rows * demo.CELL)
    writer = QgsRasterFileWriter(str(path))
    provider = writer.createOneBandRaster(
        Qgis.DataType.Float32, columns, rows, extent, QgsCoordinateReferenceSystem(demo.CRS)
    )
    if provider is None or not provider.isValid():
        raise DownwarpError("OUTPUT_FOLDER: {file} cannot be written.", file=path.name)
    values = np.where(np.isfinite(grid), grid, NODATA).astype(np.float32)
    block = QgsRasterBlock(Qgis.DataType.Float32, columns, rows)
    block.setData(QByteArray(values.tobytes()))
    provider.setNoDataValue(1, NODATA)
    if not provider.writeBlock(block, 1):
        raise DownwarpError("OUTPUT_FOLDER: {file} cannot be written.", file=path.name)


def _write_vector(path: Path, fields: dict[str, str], kind, features: Iterable[tuple[list, QgsGeometry]]) -> None:
    layout = QgsFields()
    for name, type_name in fields.items():
        layout.append(QgsField(name, TYPES[type_name]))
    options = QgsVectorFileWriter.SaveVectorOptions()
    options.driverName = "GPKG"
    options.layerName = path.stem
    writer = QgsVectorFileWriter.create(
        str(path),
        layout,
        kind,
        QgsCoordinateReferenceSystem(demo.CRS),
        QgsCoordinateTransformContext(),
        options,
    )
    if writer.hasError() != QgsVectorFileWriter.WriterError.NoError:
        raise DownwarpError(
            "OUTPUT_FOLDER: {file} cannot be written: {reason}.", file=path.name, reason=writer.errorMessage()
        )
    for attributes, geometry in features:
        feature = QgsFeature(layout)
        feature.setAttributes(attributes)
        feature.setGeometry(geometry)
        writer.addFeature(feature)
    del writer
