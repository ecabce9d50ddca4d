"""The report of a run: what the algorithm knows and the page does not."""

from __future__ import annotations

import configparser
import platform
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

import numpy as np
from qgis.core import Qgis

from ..core.errors import DownwarpError
from ..core.wording import say
from ..report.page import ReportedTransect, write_report
from .along_strike import AlongStrike
from .destinations import folder_in, replace_file
from .runs import Finished, Progress

METADATA = Path(__file__).resolve().parents[2] / "metadata.txt"


@contextmanager
def staged_report(path: str) -> Iterator[Path | None]:
    """A file to write the report to, which is put into its place at the end, where nothing was raised; None without
    a path. Raises DownwarpError where there is no room for it beside that place."""
    if not path:
        yield None
        return
    place = Path(path)
    try:
        folder = folder_in(place.parent)
    except OSError as error:
        raise DownwarpError("REPORT cannot be written to {path}: {why}.", path=path, why=error.strerror) from None
    try:
        yield folder / place.name
        replace_file(folder / place.name, place)
    finally:
        shutil.rmtree(folder, ignore_errors=True)


def write_run_report(
    path: Path, finished: Finished, strike: AlongStrike, inputs: dict[str, str], progress: Progress
) -> None:
    """Write the report of a finished run; ``strike`` has met all of its results, ``progress`` may raise to stop."""
    write_report(path, _reported(finished, strike, progress), finished.failures, inputs, versions())


def _reported(finished: Finished, strike: AlongStrike, progress: Progress) -> Iterator[ReportedTransect]:
    _, distances = strike.distances()
    fitted = ((track, result) for track, result, _, why in finished.entries() if not why)
    for done, ((track, result), along) in enumerate(zip(fitted, distances)):
        progress(done / finished.count)
        line = None
        if track is not None and strike.frame is not None:
            line = np.column_stack(strike.frame.to_degrees(track.x, track.y))
        yield ReportedTransect(result, line, along)
    progress(1.0)


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
            found[package] = say("not found")
    return found
