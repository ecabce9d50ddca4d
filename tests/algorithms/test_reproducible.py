"""A run can be repeated from what it wrote: its report holds every input, its PARAMETERS every value in use."""

import ast
import html
import re
from pathlib import Path

import invented
import pytest

pytest.importorskip("qgis")

from invented import STEP_KM, equator_grid, equator_line, lines_layer
from qgis.core import QgsApplication, QgsProject, QgsVectorFileWriter
from running import run

SINKS = ("PROFILES", "STATIONS", "MARKERS", "PARAMETERS", "MISFIT")


@pytest.fixture(scope="module")
def ground(tmp_path_factory):
    """A trench with roughness and a line across it, as files whose names need quoting."""
    import numpy as np

    folder = tmp_path_factory.mktemp('it\'s "rough" é')
    rng = np.random.default_rng(4)
    options = QgsVectorFileWriter.SaveVectorOptions()
    options.driverName = "GPKG"
    lines = str(folder / "lines.gpkg")
    QgsVectorFileWriter.writeAsVectorFormatV3(
        lines_layer([equator_line(20.0)]), lines, QgsProject.instance().transformContext(), options
    )
    dem = equator_grid(
        folder / "dem.tif", 20.0, lambda distance: invented.trench(distance) + rng.normal(0.0, 30.0, np.shape(distance))
    )
    return {"TRANSECTS": lines, "DEM": dem}


RUNS = {
    "as the setting": {"SETTING": 1},
    "much stated": {
        "SETTING": 1, "STEP_KM": 2 * STEP_KM, "PLATE": 1, "TE_FROM": 5, "TE_TO": 77.7, "RHO_INFILL": 1100,
        "RHO_MANTLE": 3333.3, "YOUNG_GPA": 70, "GRAVITY": 10, "FIT_FROM": 110, "FIT_TO": 590, "CONFIDENCE": 95,
        "REGIONAL": 1, "END_FORCES": 1, "SIGMA_M": 33.3, "SWATH_KM": 4, "SWATH_LINES": 3,
    },
    "break stated": {"SETTING": 1, "BREAK_AT": 2, "BREAK_KM": 104.5, "ROBUST": True, "IN_PLANE": -1e11},
    "load in the plate's way": {"SETTING": 0, "LOAD_FROM": 0, "LOAD_TO": 150, "PLATE": 0, "FILL_SINKING_ONLY": True},
}  # fmt: skip


def inputs_of(report: Path) -> dict:
    """The table of inputs of a report, as values."""
    text = report.read_text(encoding="utf-8")
    (table,) = (each for each in re.findall(r"<table.*?</table>", text, re.DOTALL) if "Inputs" in each)
    cells = [
        [
            html.unescape(re.sub(r"<[^>]*>", "", cell))
            for cell in re.findall(r"<t[hd][^>]*>(.*?)</t[hd]>", line, re.DOTALL)
        ]
        for line in re.findall(r"<tr>(.*?)</tr>", table, re.DOTALL)
    ]
    return {key: value for key, value in cells if key not in ("input", "algorithm")}


def numbers(results: dict) -> dict:
    """Everything in the tables of a run, rows as they are but for their geometry."""
    return {
        name: [
            {key: value for key, value in row.items() if key not in ("geometry", "remarks")} for row in results[name]
        ]
        for name in SINKS
    }


@pytest.mark.parametrize("case", RUNS)
def test_repeated_from_the_report(ground, tmp_path, case):
    """Each input of the report, read as Python, given again: all tables are the same to the last digit."""
    report = tmp_path / "report.html"
    first = run("fittransects", {**ground, **RUNS[case], "REPORT": str(report)}, sinks=SINKS)
    again = {key: ast.literal_eval(value) for key, value in inputs_of(report).items()}
    assert set(again) == {
        each.name()
        for each in QgsApplication.processingRegistry().algorithmById("downwarp:fittransects").parameterDefinitions()
    }
    second = run("fittransects", {**again, "REPORT": None}, sinks=SINKS)
    assert numbers(second) == numbers(first)


@pytest.mark.parametrize("case", RUNS)
def test_repeated_from_parameters(ground, case):
    """The keys that PARAMETERS names, with the values in use, and the layers, swath and step of the run.

    What was measured or fitted (a reference level, say) is stated now. Numbers agree to what the stations' spacing and a
    level that settles leave open.
    """
    stated = RUNS[case]
    first = run("fittransects", {**ground, **stated}, sinks=SINKS)
    known = {
        each.name()
        for each in QgsApplication.processingRegistry().algorithmById("downwarp:fittransects").parameterDefinitions()
    }
    again = {row["parameter"]: row["value"] for row in first["PARAMETERS"] if row["parameter"] in known}
    unrecorded = set(stated) - set(again)
    assert unrecorded <= {"SWATH_KM", "SWATH_LINES"}, "these are how stations were sampled, told by the report"
    again.update({key: stated[key] for key in unrecorded})
    again = {key: bool(value) if key in ("ROBUST", "FILL_SINKING_ONLY") else value for key, value in again.items()}
    second = run("fittransects", {**ground, **again}, sinks=SINKS)
    for name in ("te_km", "te_low_km", "te_high_km", "break_km", "rms_m", "end_shear_n_per_m", "deepest_m", "bulge_km"):
        one, other = first["PROFILES"][0][name], second["PROFILES"][0][name]
        assert (one is None) == (other is None), name
        if one is not None:
            assert other == pytest.approx(one, rel=1e-6), name
    assert len(second["STATIONS"]) == len(first["STATIONS"])
