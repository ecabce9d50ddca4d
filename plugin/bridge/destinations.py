"""Output layers as files: written beside their place and put into it once all of them are complete.

A run that is killed, cancelled or fails leaves what was there before. QGIS itself deletes the old file first.
"""

from __future__ import annotations

import os
import re
import shutil
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from qgis.core import (
    NULL,
    QgsCoordinateReferenceSystem,
    QgsDataSourceUri,
    QgsFeatureSink,
    QgsFields,
    QgsMapLayer,
    QgsProcessing,
    QgsProcessingContext,
    QgsProcessingFeatureSourceDefinition,
    QgsProcessingOutputLayerDefinition,
    QgsProcessingUtils,
    QgsProperty,
    QgsVectorFileWriter,
    QgsWkbTypes,
)

from ..core.errors import DownwarpError
from ..core.wording import say

FORMATS = {"gpkg": "GPKG", "fgb": "FlatGeobuf", "csv": "CSV", "xlsx": "XLSX"}
"""Drivers of the file formats that hold all names and values of the outputs, by extension; each is a single file."""
_TABLES = ("csv", "xlsx")
"""Formats of which QGIS writes the fields alone."""
DEFAULT_EXTENSION = "gpkg"
_WHY_NOT = {
    "shp": say("a Shapefile cuts field names at 10 characters and numbers at 15 decimals"),
    "dbf": say("a dBase table cuts field names at 10 characters and numbers at 15 decimals"),
    "tab": say("a MapInfo table turns missing numbers into 0"),
    "geojson": say("GeoJSON loses points whose elevation is not known"),
}
_BESIDE = ("-wal", "-shm", "-journal", ".aux.xml")
"""Endings of the files that SQLite and GDAL keep beside a file; those of an old file would spoil a new one."""
_PREFIX = ".downwarp-"
_LEFT_BEHIND = 86400.0
"""Age, s, of a folder of that prefix at which no run can still be writing into it."""
_PROVIDER = re.compile(r"([A-Za-z]{2,}):")
"""A destination that names a data provider; a single letter is a drive."""


@dataclass
class _Staged:
    """A layer that is being written."""

    output: str
    folder: Path
    """Where it is written: a folder of its own, on the same file system as its place."""
    written: Path
    place: Path
    """The file that it will be."""
    table: str
    """The table of ``place`` that it will be; empty where it is the whole file."""
    write: Callable[[], QgsVectorFileWriter]
    """Opens the file, with the driver's own options."""
    sink: QgsVectorFileWriter | None = None


class Destinations:
    """Where the outputs of one run go."""

    def __init__(self, algorithm, parameters: dict[str, Any], context: QgsProcessingContext) -> None:
        """Raises DownwarpError where two outputs, or an output and an input, are one file."""
        self._algorithm, self._parameters, self._context = algorithm, parameters, context
        self._staged: list[_Staged] = []
        taken = {path: key for key, path in self._inputs()}
        for definition in algorithm.destinationParameterDefinitions():
            name = definition.name()
            file = self._file(name)
            if file is None:
                continue
            path, table = file
            path = path.resolve()
            if not table and path in taken:
                raise DownwarpError(
                    "{name} would overwrite {other}: both are {path}.", name=name, other=taken[path], path=path
                )
            taken.setdefault(path, name)

    def check(self, name: str, has_geometry: bool) -> None:
        """Raise DownwarpError where an output cannot become the file that it is to be."""
        file = self._file(name)
        if file is None:
            return
        path, _ = file
        extension = path.suffix[1:].lower()
        if extension not in FORMATS:
            unknown = say(".{extension} is not among the formats that hold all names and numbers", extension=extension)
            why = _WHY_NOT.get(extension, unknown)
            kinds = ", ".join(f".{each}" for each in FORMATS)
            raise DownwarpError(
                "{name} cannot be {file}: {why}; it takes {kinds}.", name=name, file=path.name, why=why, kinds=kinds
            )
        if extension in _TABLES and name == "TRANSECTS":
            raise DownwarpError("{name} cannot be {file}: a table holds no lines.", name=name, file=path.name)
        if extension == "fgb" and not has_geometry:
            raise DownwarpError(
                "{name} cannot be {file}: FlatGeobuf holds no rows without geometry.", name=name, file=path.name
            )
        if not path.parent.is_dir():
            raise DownwarpError("{name} cannot be written: there is no folder {folder}.", name=name, folder=path.parent)
        if path.exists() and not path.is_file():
            raise DownwarpError("{name} cannot be written: {path} is no file.", name=name, path=path)
        if not os.access(path.parent, os.W_OK):
            raise DownwarpError(
                "{name} cannot be written: folder {folder} is read-only.", name=name, folder=path.parent
            )

    def sink(
        self, name: str, fields: QgsFields, kind: QgsWkbTypes.Type, crs: QgsCoordinateReferenceSystem
    ) -> tuple[QgsFeatureSink | None, str]:
        """The sink of an output and what it will be called; None where the output is not wanted."""
        file = self._file(name)
        if file is None:
            return self._algorithm.parameterAsSink(self._parameters, name, self._context, fields, kind, crs)
        place, table = file
        try:
            folder = folder_in(place.parent)
        except OSError as error:
            raise DownwarpError(
                "{name} cannot be written to {folder}: {reason}.", name=name, folder=place.parent, reason=error.strerror
            ) from None
        written = folder / place.name
        options = QgsVectorFileWriter.SaveVectorOptions()
        options.driverName = FORMATS[place.suffix[1:].lower()]
        options.layerName = table or place.stem

        def write(*layer_options: str) -> QgsVectorFileWriter:
            options.layerOptions = list(layer_options)
            transforms = self._context.transformContext()
            return QgsVectorFileWriter.create(str(written), fields, kind, crs, transforms, options)

        staged = _Staged(name, folder, written, place.resolve(), table, write)
        self._staged.append(staged)
        # With the index of a FlatGeobuf its rows would be in another order.
        staged.sink = write("SPATIAL_INDEX=NO") if options.driverName == "FlatGeobuf" else write()
        if staged.sink.hasError() != QgsVectorFileWriter.WriterError.NoError:
            raise DownwarpError(
                "{name} cannot be written to {place}: {reason}.",
                name=name,
                place=place,
                reason=staged.sink.errorMessage(),
            )
        text = f"{place}|layername={table}" if table else str(place)
        self._load_on_completion(name, text)
        return staged.sink, text

    def holds_bare_rows(self, name: str) -> bool:
        """Whether an output can hold rows without geometry; one such row spoils a FlatGeobuf."""
        file = self._file(name)
        return file is None or file[0].suffix.lower() != ".fgb"

    def place(self) -> None:
        """Finish all files and put them into their places; raises DownwarpError where one cannot be completed."""
        for staged in self._staged:
            complete = staged.sink is not None and staged.sink.flushBuffer() is not False
            # Closes the file.
            staged.sink = None
            if complete and staged.place.suffix.lower() == ".fgb" and not staged.written.stat().st_size:
                # Without index and rows it lacks even its head.
                staged.write()
            if not complete or not staged.written.is_file():
                raise DownwarpError(
                    "{output} cannot be written to {place}: is there room for it?",
                    output=staged.output,
                    place=staged.place,
                )
        for staged in self._staged:
            try:
                if staged.table:
                    _into_database(staged.written, staged.place, staged.table)
                else:
                    replace_file(staged.written, staged.place)
            except (OSError, RuntimeError) as error:
                reason = getattr(error, "strerror", None) or str(error)
                raise DownwarpError(
                    "{output} cannot be written to {place}: {reason}.",
                    output=staged.output,
                    place=staged.place,
                    reason=reason,
                ) from None
        self.discard()

    def discard(self) -> None:
        """Take away whatever has not found its place."""
        for staged in self._staged:
            staged.sink = None
            shutil.rmtree(staged.folder, ignore_errors=True)
        self._staged.clear()

    def _load_on_completion(self, name: str, text: str) -> None:
        """Have QGIS load the layer at the end of the run, where the window asks for it."""
        value = self._parameters.get(name)
        if isinstance(value, QgsProcessingOutputLayerDefinition) and value.destinationProject is not None:
            title = value.destinationName or self._algorithm.parameterDefinition(name).description()
            vector = QgsProcessingUtils.LayerHint.Vector
            details = QgsProcessingContext.LayerDetails(title, value.destinationProject, name, vector)
            self._context.addLayerToLoadOnCompletion(text, details)

    def _file(self, name: str) -> tuple[Path, str] | None:
        """The file of an output and its table, where it is added to a database; None where QGIS is to make the layer:
        in memory, in a temporary file, in another kind of database, or as rows of an existing layer."""
        value = self._parameters.get(name)
        if value is None:
            value = self._algorithm.parameterDefinition(name).defaultValue()
        if isinstance(value, QgsProcessingOutputLayerDefinition):
            if value.useRemapping():
                return None
            value = value.sink
        if isinstance(value, QgsProperty):
            value, _ = value.valueAsString(self._context.expressionContext(), "")
        if not isinstance(value, str) or value.strip() in ("", QgsProcessing.TEMPORARY_OUTPUT):
            return None
        if "\0" in value:
            raise DownwarpError("{name} is {value!r}, which no file can be called.", name=name, value=value)
        return file_of(value.strip())

    def _inputs(self) -> Iterator[tuple[str, Path]]:
        """Keys of the inputs that are files, and these."""
        for definition in self._algorithm.parameterDefinitions():
            if definition.isDestination() or definition.type() not in ("source", "raster", "vector"):
                continue
            value = self._parameters.get(definition.name())
            if isinstance(value, QgsProcessingFeatureSourceDefinition):
                value = value.source
            if isinstance(value, QgsProperty):
                value, _ = value.valueAsString(self._context.expressionContext(), "")
            if isinstance(value, str):
                value = QgsProcessingUtils.mapLayerFromString(value, self._context, False) or value
            if isinstance(value, QgsMapLayer):
                value = value.source()
            if value in (None, NULL, "") or not isinstance(value, str):
                continue
            path = Path(value.partition("|")[0])
            with suppress(OSError, ValueError):
                if path.is_file():
                    yield definition.name(), path.resolve()


def file_of(text: str) -> tuple[Path, str] | None:
    """The file that a destination names, and the table where it is added to a GeoPackage; None for anything else."""
    if text.startswith("ogr:"):
        uri = QgsDataSourceUri(text[4:])
        path = Path(uri.database())
        if path.suffix.lower() != ".gpkg" or not uri.table():
            return None
        return path, uri.table()
    if _PROVIDER.match(text) or text.startswith("/vsi"):
        return None
    path = Path(text)
    if not path.suffix or not QgsVectorFileWriter.driverForExtension(path.suffix[1:]):
        # As QGIS does.
        path = path.with_name(f"{path.name}.{DEFAULT_EXTENSION}")
    return path, ""


def folder_in(parent: Path) -> Path:
    """A new folder in which files are written before they are put into ``parent``.

    Takes away what a run left that was killed a day ago or earlier.
    """
    for old in parent.glob(f"{_PREFIX}*"):
        with suppress(OSError):
            if time.time() - old.stat().st_mtime > _LEFT_BEHIND:
                shutil.rmtree(old, ignore_errors=True)
    return Path(tempfile.mkdtemp(prefix=_PREFIX, dir=parent))


def replace_file(written: Path, place: Path) -> None:
    """Put a file into its place in one step."""
    for ending in _BESIDE:
        place.with_name(place.name + ending).unlink(missing_ok=True)
    os.replace(written, place)


def _into_database(written: Path, place: Path, table: str) -> None:
    """Put the table of a GeoPackage into another in one transaction, or the whole file where there is no other."""
    if not place.exists():
        replace_file(written, place)
        return
    from osgeo import gdal

    gave_exceptions = gdal.GetUseExceptions()
    gdal.UseExceptions()
    try:
        source = gdal.OpenEx(str(written), gdal.OF_VECTOR)
        target = gdal.OpenEx(str(place), gdal.OF_VECTOR | gdal.OF_UPDATE)
        target.StartTransaction()
        for index in range(target.GetLayerCount()):
            if target.GetLayer(index).GetName().lower() == table.lower():
                target.DeleteLayer(index)
                break
        old = source.GetLayer(0)
        new = target.CreateLayer(table, old.GetSpatialRef(), old.GetGeomType())
        for index in range(old.GetLayerDefn().GetFieldCount()):
            new.CreateField(old.GetLayerDefn().GetFieldDefn(index))
        for feature in old:
            new.CreateFeature(feature)
        target.CommitTransaction()
        old = new = source = target = None
    finally:
        if not gave_exceptions:
            gdal.DontUseExceptions()
