"""Makes the demo layers, fits a plate to each scenario through qgis_process and compares it with the known one.

    python3 tests/tools/demo.py FOLDER

`downwarp:demolayers` writes FOLDER/demo.json beside its layers:

    {"scenarios": [{"name": "...", "true_te_km": 30.0, "parameters": {"TRANSECTS": "lines.gpkg", ...}}, ...]}

with the keys of `downwarp:fittransects`; paths are relative to FOLDER. Standard library only.
"""

from __future__ import annotations

import json
import shutil
import sys
from pathlib import Path

from headless import Headless

SINKS = ("PROFILES", "STATIONS", "MARKERS", "PARAMETERS", "MISFIT")
TITLES = ("scenario", "true Te km", "fitted Te km", "interval km", "difference %")


def inside(folder: Path, value: object) -> object:
    """A parameter's value, as a full path where it names a file of the demo (with or without ``|layername=``)."""
    if isinstance(value, list):
        return [inside(folder, item) for item in value]
    if isinstance(value, str) and value and (folder / value.partition("|")[0]).is_file():
        return str(folder / value)
    return value


def interval(results: dict) -> str:
    """The interval as text; a bound that the data leave open is left out."""
    low, high = (results.get(key) for key in ("TE_LOW_KM", "TE_HIGH_KM"))
    if low is not None and high is not None:
        return f"{low:.1f} to {high:.1f}"
    if low is not None:
        return f"from {low:.1f}"
    return "-" if high is None else f"up to {high:.1f}"


def fit(qgis: Headless, folder: Path, scenario: dict) -> tuple[str, ...]:
    """Fit one scenario into FOLDER/results and return its row of the table."""
    target = folder / "results" / scenario["name"]
    target.mkdir(parents=True)
    parameters = {key: inside(folder, value) for key, value in scenario["parameters"].items()}
    parameters.update({sink: str(target / f"{sink.lower()}.gpkg") for sink in SINKS})
    results = qgis.run("fittransects", parameters)
    truth, fitted = scenario["true_te_km"], results["TE_KM"]
    difference = f"{100 * (fitted / truth - 1):+.1f}"
    return scenario["name"], f"{truth:.1f}", f"{fitted:.1f}", interval(results), difference


def show(rows: list[tuple[str, ...]]) -> None:
    """Print rows in columns, the first to the left, numbers to the right."""
    widths = [max(len(row[column]) for row in rows) for column in range(len(rows[0]))]
    for name, *numbers in rows:
        cells = [name.ljust(widths[0]), *(text.rjust(width) for text, width in zip(numbers, widths[1:]))]
        print("  ".join(cells).rstrip())


def main(folder: Path) -> None:
    """Make, fit, compare."""
    folder = folder.resolve()
    shutil.rmtree(folder, ignore_errors=True)
    layers = folder / "layers"
    layers.mkdir(parents=True)
    qgis = Headless(folder / "qgis")
    qgis.enable()
    qgis.run("demolayers", {"OUTPUT_FOLDER": str(layers)})
    scenarios = json.loads((layers / "demo.json").read_text(encoding="utf-8"))["scenarios"]
    show([TITLES, *(fit(qgis, layers, scenario) for scenario in scenarios)])
    print(f"\nDemo layers: {layers}\nFitted layers: {layers / 'results'}")


if __name__ == "__main__":
    if len(sys.argv) != 2:
        sys.exit("usage: demo.py FOLDER (made anew)")
    try:
        main(Path(sys.argv[1]))
    except RuntimeError as error:
        sys.exit(str(error))
