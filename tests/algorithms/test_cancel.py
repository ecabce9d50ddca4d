"""A run that is cancelled ends and keeps nothing, whichever part of the work it is in and however many work on it."""

import contextlib
import os
from pathlib import Path

import invented
import numpy as np
import pytest

pytest.importorskip("qgis")

from invented import CELL, KM_PER_DEGREE, LENGTH_KM, STEP_KM, lines_layer, write_grid
from qgis.core import QgsProcessingException
from running import Quiet, run

LAYERS = ("PROFILES", "STATIONS", "MARKERS", "PARAMETERS", "MISFIT", "ALONG_STRIKE")
COUNT = 14
"""Transects: more than two workers are given at once."""


@pytest.fixture(scope="module")
def ground(tmp_path_factory):
    """A trench that runs north, and lines across it."""
    rng = np.random.default_rng(9)
    relief = invented.trench((np.arange(500) * CELL - 2.0) * KM_PER_DEGREE) + rng.normal(0.0, 20.0, (120, 500))
    dem = write_grid(tmp_path_factory.mktemp("margin") / "dem.tif", relief, 18.0 - CELL / 2, 60 * CELL, CELL)
    end = 20.0 + LENGTH_KM / KM_PER_DEGREE
    lines = lines_layer([[(20.0, at), (end, at)] for at in np.linspace(-1.0, 1.0, COUNT)])
    return {"TRANSECTS": lines, "DEM": dem, "SETTING": 1, "STEP_KM": 4 * STEP_KM}


class CancelledAt(Quiet):
    """Feedback whose user cancels once the run has come so far, %."""

    def __init__(self, percent):
        super().__init__()
        self.progressChanged.connect(lambda value: value >= percent and self.cancel())


def workers_left():
    """Command lines of this process's children that fit."""
    found = []
    for stat in Path("/proc").glob("[0-9]*/stat"):
        with contextlib.suppress(OSError):  # a process that has just ended
            if int(stat.read_text().rpartition(")")[2].split()[1]) == os.getpid():
                found.append(stat.with_name("cmdline").read_bytes().decode())
    return [line for line in found if "worker.py" in line]


def contents(folder):
    """Every file below a folder with what is in it."""
    return {path.name: path.read_bytes() if path.is_file() else None for path in folder.rglob("*")}


@pytest.mark.parametrize(
    ("workers", "percent", "with_report"),
    [(1, 0.0, True), (2, 0.0, True), (1, 20.0, True), (2, 20.0, True), (1, 96.0, False), (2, 96.0, False),
     (2, 98.5, True)],
    ids=["1, at once", "2, at once", "1, some fitted", "2, some fitted", "1, writing", "2, writing", "2, in the report"],
)  # fmt: skip
def test_a_cancelled_run_keeps_nothing(ground, tmp_path, workers, percent, with_report):
    """Earlier files stay as they were, byte for byte; nothing new lies beside them, no worker is left."""
    for name in LAYERS[:2]:
        (tmp_path / f"{name.lower()}.gpkg").write_bytes(b"an earlier result")
    (tmp_path / "report.html").write_text("an earlier report", encoding="utf-8")
    before = contents(tmp_path)
    keys = {**ground, "WORKERS": workers, **{name: str(tmp_path / f"{name.lower()}.gpkg") for name in LAYERS}}
    if with_report:
        keys["REPORT"] = str(tmp_path / "report.html")
    feedback = CancelledAt(percent)
    with pytest.raises(QgsProcessingException, match="Cancelled; nothing was kept"):
        run("fittransects", keys, feedback, sinks=())
    assert percent <= feedback.fractions[-1] < 100.0
    assert contents(tmp_path) == before
    assert workers_left() == []


def test_a_run_that_is_not_cancelled_puts_all_files_into_place(ground, tmp_path):
    """The counterpart: the same outputs, all there, and nothing else."""
    outputs = {name: str(tmp_path / f"{name.lower()}.gpkg") for name in LAYERS}
    few = lines_layer([[(20.0, at), (25.0, at)] for at in (0.0, 0.5)])
    run("fittransects", {**ground, **outputs, "TRANSECTS": few, "REPORT": str(tmp_path / "report.html")}, sinks=())
    assert {path.name for path in tmp_path.iterdir()} == {f"{name.lower()}.gpkg" for name in LAYERS} | {"report.html"}
