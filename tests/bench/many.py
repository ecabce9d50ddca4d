"""Many transects through qgis_process: time and memory for 10, 100 and 1,000, and sampling beside QGIS's own.

    python tests/bench/many.py [COUNT ...]

prints a Markdown table. The first run, of one transect, is what starting takes and is taken off the others.
"""

from __future__ import annotations

import subprocess
import sys
import tempfile
import threading
import time
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "tools"))

from headless import Headless

LOOK_EVERY = 0.2
GUIDE_KM = 155.0
"""Length of the demo's front line."""


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


def main(counts: list[int]) -> None:
    """Measure and print."""
    with tempfile.TemporaryDirectory(prefix="downwarp-bench") as name:
        folder = Path(name)
        qgis = Headless(folder / "qgis")
        qgis.enable()
        qgis.run("demolayers", {"OUTPUT_FOLDER": folder})
        sys.stdout.write(
            "\n| transects of 201 stations | seconds | ms each, less starting | MB | MB of workers |\n"
            "| ---: | ---: | ---: | ---: | ---: |\n"
        )
        starting = None
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
            for sink in ("PROFILES", "STATIONS", "MARKERS", "PARAMETERS", "MISFIT"):
                keys[sink] = folder / f"{sink.lower()}.gpkg"
            taken, own, workers = measured(qgis, keys, name)
            starting = taken if starting is None else starting
            each = "" if count == 1 else f"{(taken - starting) / (count - 1) * 1e3:.0f}"
            sys.stdout.write(f"| {count} | {taken:.1f} | {each} | {own:.0f} | {workers:.0f} |\n")
            sys.stdout.flush()


if __name__ == "__main__":
    main([int(word) for word in sys.argv[1:]] or [10, 100, 1000])
