"""Many transects through qgis_process: time and memory for 10, 100 and 1,000, and how long a cancelled run takes to end.

    python tests/bench/many.py [COUNT ...]

prints Markdown tables. The first run, of one transect, is what starting takes and is taken off the others.
"""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Iterator
from pathlib import Path

os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")
sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "tools"))

import conftest  # noqa: F401 - makes the checkout importable
from downwarp_checkout.plugin.provider import DownwarpProvider
from headless import Headless
from qgis.core import QgsApplication, QgsProcessingException

LOOK_EVERY = 0.2
SINKS = ("PROFILES", "STATIONS", "MARKERS", "PARAMETERS", "MISFIT", "ALONG_STRIKE")
GUIDE_KM = 155.0
"""Length of the demo's front line."""
_application: list = []
FEW, REPEATS = 10, 5
"""Runs of so few transects are made several times, and the shortest counts: they are soon over."""
CANCELLED_AFTER = (0.3, 0.6, 1.0, 1.5, 2.1, 2.8)
"""Seconds after which runs are cancelled: while workers start, and at any moment of a fit."""


def memory(mark: str) -> tuple[float, float]:
    """Resident memory, MB, of qgis_process and of all workers together, as `ps` has it."""
    listed = subprocess.run(["ps", "-eo", "rss,args"], capture_output=True, text=True, check=True).stdout.splitlines()
    sizes = [(int(line.split()[0]) / 1024, line) for line in listed[1:]]
    own = [size for size, line in sizes if "qgis_process" in line and mark in line]
    return max(own, default=0.0), sum(size for size, line in sizes if "worker.py" in line)


def measured(qgis: Headless, keys: dict, mark: str) -> tuple[float, float, float]:
    """Seconds, and the largest memory of the run and of its workers, MB."""
    most, done = [(0.0, 0.0)], threading.Event()

    def watch() -> None:
        while not done.wait(LOOK_EVERY):
            most.append(memory(mark))

    watcher = threading.Thread(target=watch)
    watcher.start()
    start = time.perf_counter()
    qgis.run("fittransects", keys)
    taken = time.perf_counter() - start
    done.set()
    watcher.join()
    return taken, max(own for own, _ in most), max(workers for _, workers in most)


def cancelled(keys: dict) -> Iterator[str]:
    """Rows on how long runs go on after they were cancelled from another thread, as a user does it."""
    # Kept to the end of the process, which closing QGIS would crash.
    _application.append(QgsApplication([], False))
    QgsApplication.initQgis()
    sys.path.append(f"{QgsApplication.pkgDataPath()}/python/plugins")
    from processing.core.Processing import Processing
    from running import Quiet, run

    Processing.initialize()
    _application.append(DownwarpProvider())
    QgsApplication.processingRegistry().addProvider(_application[-1])
    for what, workers, more in (
        ("1 process", 1, {}),
        ("2 processes", 2, {}),
        ("1 process, two zones, with choices", 1, {"TE_ZONES": 2, "BREAK_AT": 0, "CHOICES": "memory:"}),
        ("2 processes, two zones, with choices", 2, {"TE_ZONES": 2, "BREAK_AT": 0, "CHOICES": "memory:"}),
    ):
        times = []
        for after in CANCELLED_AFTER:
            feedback, pressed = Quiet(), []

            def press(feedback: Quiet = feedback, pressed: list[float] = pressed) -> None:
                pressed.append(time.perf_counter())
                feedback.cancel()

            timer = threading.Timer(after, press)
            timer.start()
            try:
                run("fittransects", {**keys, **more, "WORKERS": workers}, feedback)
            except QgsProcessingException:
                times.append(time.perf_counter() - pressed[0])
            timer.cancel()
        yield f"| {what} | {len(times)} | {max(times):.2f} | {sum(times) / len(times):.2f} |"


def main(counts: list[int]) -> None:
    """Measure and print."""
    with tempfile.TemporaryDirectory(prefix="downwarp-bench") as name:
        folder = Path(name)
        qgis = Headless(folder / "qgis")
        qgis.enable()
        qgis.run("demolayers", {"OUTPUT_FOLDER": folder})
        sys.stdout.write(
            "\n| transects of 201 stations | seconds | ms each, less starting | ms for one more | MB | MB of workers |\n"
            "| ---: | ---: | ---: | ---: | ---: | ---: |\n"
        )
        starting = before = None
        for count in [1, *counts]:
            laid = folder / f"laid{count}.gpkg"
            spacing = 2 * GUIDE_KM if count == 1 else GUIDE_KM / (count - 1)
            qgis.run(
                "laytransects",
                {"GUIDE": folder / "harrow_front_line.gpkg", "SPACING_KM": spacing, "AFTER_KM": 500, "SMOOTH_KM": 0,
                 "TRANSECTS": laid},
            )  # fmt: skip
            keys = {"TRANSECTS": laid, "NAME_FIELD": "name", "DEM": folder / "relief.tif", "SETTING": 2,
                    "OBSERVED": folder / "basement.tif", "REFERENCE_LEVEL": 200}  # fmt: skip
            for sink in SINKS:
                keys[sink] = folder / f"{sink.lower()}.gpkg"
            runs = [measured(qgis, keys, name) for _ in range(REPEATS if count <= FEW else 1)]
            taken, own, workers = (min(each[0] for each in runs), *(max(each[part] for each in runs) for part in (1, 2)))
            starting = taken if starting is None else starting
            each = further = ""
            if before is not None:
                each = f"{(taken - starting) / (count - 1) * 1e3:.0f}"
                further = f"{(taken - before[1]) / (count - before[0]) * 1e3:.0f}"
            before = count, taken
            sys.stdout.write(f"| {count} | {taken:.2f} | {each} | {further} | {own:.0f} | {workers:.0f} |\n")
            sys.stdout.flush()
        sys.stdout.write("\n| cancel, run of many | times | longest, s | mean, s |\n| --- | ---: | ---: | ---: |\n")
        asked = {key: value for key, value in keys.items() if key not in SINKS}
        for row in cancelled({key: str(value) if isinstance(value, Path) else value for key, value in asked.items()}):
            sys.stdout.write(row + "\n")
            sys.stdout.flush()


if __name__ == "__main__":
    main([int(word) for word in sys.argv[1:]] or [10, 100, 1000])
    sys.stdout.flush()
    os._exit(0)
