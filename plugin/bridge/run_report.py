"""The report of a run: what the algorithm knows and the page does not."""

from __future__ import annotations

import configparser
import platform
from collections.abc import Iterator
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

import numpy as np
from qgis.core import Qgis, QgsCoordinateReferenceSystem

from ..core.result import FitResult
from ..report.page import ReportedTransect, write_report
from .frames import Frame
from .outputs import Track
from .runs import Finished

METADATA = Path(__file__).resolve().parents[2] / "metadata.txt"


def write_run_report(
    path: str, finished: Finished, crs: QgsCoordinateReferenceSystem | None, inputs: dict[str, str]
) -> None:
    """Write the report of a finished run; ``crs`` is that of the tracks, None where they have none."""
    frame = None if crs is None or not crs.isValid() else Frame.of(crs, "TRANSECTS")
    write_report(path, _reported(finished, frame), finished.failures, inputs, versions())


def _reported(finished: Finished, frame: Frame | None) -> Iterator[ReportedTransect]:
    for track, result, _, why in finished.entries():
        if not why:
            yield reported(result, track, frame)


def reported(result: FitResult, track: Track | None, frame: Frame | None) -> ReportedTransect:
    """A result with its line in degrees."""
    line = None
    if track is not None and frame is not None:
        line = np.column_stack(frame.to_degrees(track.x, track.y))
    return ReportedTransect(result, line)


def inputs_of(algorithm, parameters: dict[str, Any], context) -> dict[str, str]:
    """Every input of a run by its key, as it would be written in a script; defaults where nothing was given."""
    inputs = {"algorithm": algorithm.id()}
    for definition in algorithm.parameterDefinitions():
        value = parameters.get(definition.name(), definition.defaultValue())
        inputs[definition.name()] = definition.valueAsPythonString(value, context)
    return inputs


def versions() -> dict[str, str]:
    """Versions of what takes part in a run."""
    metadata = configparser.ConfigParser(interpolation=None)
    metadata.read(METADATA, encoding="utf-8")
    found = {
        "Downwarp": metadata.get("general", "version"),
        "QGIS": Qgis.QGIS_VERSION,
        "Python": platform.python_version(),
    }
    for package in ("numpy", "scipy", "shapely", "pyproj", "matplotlib"):
        try:
            found[package] = version(package)
        except PackageNotFoundError:
            found[package] = "not found"
    return found
