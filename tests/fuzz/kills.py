"""Kills runs of qgis_process at random moments and looks at the files of the run before.

    python kills.py [--kills N] [--seed S]

Each run writes into the files that an earlier one left: a GeoPackage, a FlatGeobuf and a table of a GeoPackage that
holds another table, too. After each kill every file must hold what it held before, or all of what the run was to
write. The runs bend plates of two thicknesses in turn, so old and new differ, and write some 12,000 rows, so that a
good part of the kills falls into the writing.
"""

from __future__ import annotations

import argparse
import hashlib
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import hostile
import numpy as np
from osgeo import gdal, ogr, osr

sys.path[:0] = [str(Path(__file__).resolve().parents[1] / "tools")]
from headless import Headless, arguments_of  # noqa: E402

THICKNESSES = (20, 35)


class Target:
    """The files that runs write into, and how to read them."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        folder.mkdir()
        self.sources = {
            "PROFILES": (folder / "profiles.gpkg", "profiles"),
            "STATIONS": (folder / "stations.fgb", "stations"),
            "MARKERS": (folder / "all.gpkg", "markers"),
        }
        created = gdal.GetDriverByName("GPKG").Create(str(folder / "all.gpkg"), 0, 0, 0)
        layer = created.CreateLayer("mine")
        layer.CreateField(ogr.FieldDefn("number", ogr.OFTInteger))
        for number in range(100):
            feature = ogr.Feature(layer.GetLayerDefn())
            feature["number"] = number
            layer.CreateFeature(feature)
        layer = created = None

    def keys(self) -> dict[str, str]:
        """The outputs as keys of a run."""
        return {
            "PROFILES": str(self.folder / "profiles.gpkg"),
            "STATIONS": str(self.folder / "stations.fgb"),
            "MARKERS": f"ogr:dbname='{self.folder / 'all.gpkg'}' table=\"markers\" (geom)",
        }

    def contents(self) -> dict[str, str]:
        """A digest of every row of each file, by output; raises RuntimeError where one cannot be read."""
        found = {name: _digest(path, table) for name, (path, table) in self.sources.items()}
        found["mine"] = _digest(self.folder / "all.gpkg", "mine")
        return found

    def leftovers(self) -> list[Path]:
        """What a killed run left beside the files."""
        return list(self.folder.glob(".downwarp-*"))


def _digest(path: Path, table: str) -> str:
    opened = gdal.OpenEx(str(path), gdal.OF_VECTOR)
    layer = opened.GetLayerByName(table)
    if layer is None:
        raise RuntimeError(f"{path.name} has lost table {table}")
    digest = hashlib.sha256()
    rows = 0
    for feature in layer:
        digest.update(feature.ExportToJson(as_object=False).encode())
        rows += 1
    if path.suffix == ".gpkg":
        (verdict,) = (str(each.GetField(0)) for each in opened.ExecuteSQL("PRAGMA integrity_check"))
        if verdict != "ok":
            raise RuntimeError(f"{path.name}: {verdict}")
    return f"{rows} rows, {digest.hexdigest()[:16]}"


def kills(count: int, seed: int = 1) -> tuple[int, int, list[str]]:
    """Kill ``count`` runs; how many died, how many of them as they wrote, and what was found wrong."""
    rng = np.random.default_rng(seed)
    faults: list[str] = []
    died = writing = 0
    with tempfile.TemporaryDirectory(prefix="downwarp-kills-") as scratch:
        folder = Path(scratch)
        qgis = Headless(folder / "qgis")
        qgis.enable()
        # Six lines of 12,000 stations in all.
        lines = [f"LineString (11 {y:.2f}, 18.5 {y:.2f})" for y in np.linspace(-1, 1, 6)]
        _write_lines(folder / "lines.gpkg", lines)
        target = Target(folder / "out")
        keys = {
            "TRANSECTS": str(folder / "lines.gpkg"),
            "DEM": hostile.RASTERS["good"](folder / "dem.tif"),
            "SETTING": 1, "PLATE": 1, "STEP_KM": 0.41, **target.keys(),
        }  # fmt: skip
        whole = {}
        durations = []
        for thickness in THICKNESSES:
            start = time.monotonic()
            qgis.run("bendtransects", {**keys, "TE_KM": thickness})
            durations.append(time.monotonic() - start)
            whole[thickness] = target.contents()
        if whole[THICKNESSES[0]]["STATIONS"] == whole[THICKNESSES[1]]["STATIONS"]:
            faults.append("both thicknesses give the same stations: nothing can be told")
        before = whole[THICKNESSES[1]]
        for number in range(count):
            thickness = THICKNESSES[number % 2]
            given = arguments_of({**keys, "TE_KM": thickness})
            process = subprocess.Popen(
                [qgis.program, "--json", "run", "downwarp:bendtransects", *given],
                env=qgis.environment,
                stdin=subprocess.DEVNULL,
                stdout=subprocess.DEVNULL,
                stderr=subprocess.DEVNULL,
            )
            time.sleep(float(rng.uniform(0.2, 1.0)) * min(durations))
            # Every other one as soon as it writes, and a moment on.
            if number % 2:
                while process.poll() is None and not target.leftovers():
                    time.sleep(0.002)
                time.sleep(float(rng.exponential(0.1)))
            process.send_signal(signal.SIGKILL)
            died += process.wait() == -signal.SIGKILL
            left = target.leftovers()
            writing += bool(left)
            for each in left:
                shutil.rmtree(each)
            try:
                after = target.contents()
            except RuntimeError as error:
                faults.append(f"kill {number}: {error}")
                break
            for name, rows in after.items():
                if rows not in (before[name], whole[thickness][name]):
                    faults.append(f"kill {number}: {name} held {before[name]} and now holds {rows}")
            before = after
    return died, writing, faults


def _write_lines(path: Path, lines: list[str]) -> None:
    reference = osr.SpatialReference()
    reference.ImportFromEPSG(4326)
    created = gdal.GetDriverByName("GPKG").Create(str(path), 0, 0, 0)
    layer = created.CreateLayer("lines", reference, ogr.wkbLineString)
    for line in lines:
        feature = ogr.Feature(layer.GetLayerDefn())
        feature.SetGeometry(ogr.CreateGeometryFromWkt(line))
        layer.CreateFeature(feature)
    layer = created = None


def main() -> int:
    """Read the command line, kill and tell."""
    parser = argparse.ArgumentParser(description="Kill runs at random moments.")
    parser.add_argument("--kills", type=int, default=100)
    parser.add_argument("--seed", type=int, default=1)
    given = parser.parse_args()
    died, writing, faults = kills(given.kills, given.seed)
    print(f"{given.kills} runs: {died} killed before their end, {writing} as they wrote, {len(faults)} files damaged")
    print("\n".join(faults))
    return int(bool(faults))


if __name__ == "__main__":
    sys.exit(main())
