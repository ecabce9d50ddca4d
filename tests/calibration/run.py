"""Coverage of the intervals: known plates, known noise and real relief, drawn with a seed.

    python tests/calibration/run.py [--out DIR] [--lines N] [--relief FILE]

writes coverage.md and coverage.png. FILE is a global relief grid of 5 minutes in netCDF (Debian's
ferret-datasets carries one, etopo5.cdf); without it, the study of real relief is left out. Real relief
is sampled on strips of fifteen ocean regions: the method's tuned numbers (in `posterior`: WINDOW, HEAVY_FROM,
TEMPERING) were set on other strips of the first five; the others verify them.
"""

from __future__ import annotations

import argparse
import os
import sys
import time
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

for _name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")  # before numpy reads them: two processes share two cores

import numpy as np  # noqa: E402

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

import conftest  # noqa: E402, F401 - makes the checkout importable
from downwarp_checkout.plugin.core import elastic, noise, plate, posterior  # noqa: E402

RELIEF = "/usr/share/ferret-vis/data/etopo5.cdf"
TE_SEARCH = 1e3, 100e3
TE_TRUE = 12e3, 50e3
NOISES = [(0, 0.0)] + [(family, length) for family in (1, 2) for length in (3e3, 15e3, 40e3)]
TUNED = {
    "north-west Atlantic": (20, 35, 290, 320),
    "north-east Pacific": (15, 40, 210, 235),
    "central Indian": (-35, -10, 75, 100),
    "south-east Pacific": (-45, -25, 220, 260),
    "south-east Atlantic": (-38, -15, 345, 365),
}
VERIFIED = {
    "north-east Atlantic": (20, 40, 325, 340),
    "north-west Pacific": (20, 40, 160, 180),
    "south-west Pacific": (-50, -30, 190, 215),
    "south-east Indian": (-50, -35, 90, 115),
    "south-west Atlantic": (-45, -28, 310, 330),
}
VERIFIED_AGAIN = {
    "equatorial Pacific": (-5, 12, 195, 220),
    "Arabian Sea": (5, 18, 57, 68),
    "east Indian": (-32, -12, 98, 110),
    "equatorial Atlantic": (-24, -6, 328, 342),
    "far south Pacific": (-64, -50, 235, 265),
}
"""Boxes of south, north latitude and west, east longitude, degrees. VERIFIED was looked at once before the tempering
was set anew, by the tuned regions' resolved lines alone; VERIFIED_AGAIN was not."""


class Setting:
    """A plate, its load and its stations; trials are kept, for the search asks for the same thicknesses again."""

    def __init__(self, kind: str, start: int | None = None) -> None:
        self.kind = kind
        self.start = {"volcano": plate.CONTINUES, "trench": plate.BROKEN, "foreland": plate.BROKEN}[kind]
        if start is not None:
            self.start = start
        self.common = 1 if kind == "foreland" else 2
        first = {"volcano": 90e3, "trench": 0.0, "foreland": 0.0}[kind]
        self.stations = first + 5e3 * np.arange(101)
        self.regional = np.stack([np.ones(101), (self.stations - first) / 100e3], axis=1)[:, : self.common]
        self.true_forces = {"volcano": [], "trench": [1.0, 1.0], "foreland": [1.0]}[kind]
        self._trials: dict[tuple[int, float], tuple[np.ndarray, np.ndarray]] = {}

    def trial(self, thickness: float, break_at: float = 0.0) -> tuple[np.ndarray, np.ndarray]:
        """Offset (n,) and the plate's columns (n, p1)."""
        key = round(1e6 * np.log(thickness)), round(break_at, 3)
        if key in self._trials:
            return self._trials[key]
        infill = 2400.0 if self.kind == "foreland" else 1030.0
        constants = elastic.Elastic()
        begin = break_at if self.start == plate.BROKEN else -400e3
        nodes = np.linspace(begin, self.stations[-1], int((self.stations[-1] - begin) / 2500) + 1)
        bent = plate.Plate(
            nodes,
            float(constants.rigidity(thickness)),
            float(elastic.restoring_stiffness(3300.0, infill, constants.gravity)),
            start=self.start,
        )
        forces = []
        if self.kind == "volcano":  # a ridge 5 km high, 60 km wide on top and 160 km at its foot
            height = 5000.0 * np.clip((80e3 - np.abs(nodes)) / 50e3, 0.0, 1.0)
            load = height * (2800.0 - 1030.0) * constants.gravity
        elif self.kind == "foreland":  # mountains 3 km high that taper out over 80 km
            load = 3000.0 * np.clip(1.0 - np.maximum(nodes, 0.0) / 80e3, 0.0, 1.0) * 2700.0 * constants.gravity
            forces = [bent.end_vector(shear=1e12)]
        else:
            load = np.zeros(nodes.size)
            forces = [bent.end_vector(shear=1e12), bent.end_vector(moment=1e17)]
        surface = -bent.solve(np.concatenate([bent.load_vector(load), *forces], axis=1)).at(self.stations)
        self._trials[key] = surface[:, 0], surface[:, 1:]
        return self._trials[key]

    def model(self, thickness: np.ndarray, break_at: float | None) -> tuple[np.ndarray, np.ndarray]:
        trials = [self.trial(float(each), break_at or 0.0) for each in thickness]
        offset = np.stack([trial[0] for trial in trials])
        return offset, np.stack([np.concatenate([trial[1], self.regional], axis=1) for trial in trials])

    def surface(self, thickness: float, break_at: float = 0.0) -> np.ndarray:
        offset, columns = self.trial(thickness, break_at)
        return offset + (columns @ np.array(self.true_forces) if self.true_forces else 0.0)

    def fit(self, observed: np.ndarray, **options) -> posterior.Posterior:
        return posterior.thickness_posterior(observed, self.stations, self.model, self.common, *TE_SEARCH, **options)


def draw_noise(stations: np.ndarray, family: int, length: float, size: float, rng) -> np.ndarray:
    if family == 0:
        return rng.normal(0.0, size, stations.size)
    matrix = noise.correlation(family, np.abs(stations[:, None] - stations) / length)
    matrix[np.diag_indices_from(matrix)] += 1e-9
    return size * np.linalg.cholesky(matrix) @ rng.normal(size=stations.size)


def draw_thickness(rng) -> float:
    return float(np.exp(rng.uniform(*np.log(TE_TRUE))))


def covered(interval: posterior.Interval, truth: float) -> bool:
    """An open side covers all on its side."""
    return (interval.low is None or interval.low <= truth) and (interval.high is None or truth <= interval.high)


def log_width(interval: posterior.Interval) -> float:
    """ln(high / low), an open side counting as the end of the search range."""
    return float(np.log((interval.high or TE_SEARCH[1]) / (interval.low or TE_SEARCH[0])))


def is_open(fit: posterior.Posterior) -> bool:
    return fit.te_interval.low is None or fit.te_interval.high is None


def synthetic(task) -> list[float]:
    """One setting under one noise: coverage, median widths of all families and of the right one, share open."""
    kind, family, length, lines = task
    setting = Setting(kind)
    rng = np.random.default_rng([1, len(kind), family, int(length)])
    rows = []
    for _ in range(lines):
        truth = draw_thickness(rng)
        observed = setting.surface(truth) - 4000.0 + draw_noise(setting.stations, family, length, 100.0, rng)
        fit, right = setting.fit(observed), setting.fit(observed, families=(family,))
        rows.append(
            [covered(fit.te_interval, truth), log_width(fit.te_interval), log_width(right.te_interval), is_open(fit)]
        )
    rows = np.array(rows, dtype=float)
    return [rows[:, 0].mean(), np.median(rows[:, 1]), np.median(rows[:, 2]), rows[:, 3].mean()]


def read_relief(path: str):
    """Relief (rows from south to north, columns east from the first longitude), first latitude and longitude, cell."""
    from scipy.io import netcdf_file

    with netcdf_file(path, "r", mmap=False) as data:
        grid = next(name for name, variable in data.variables.items() if len(variable.shape) == 2)
        relief = np.array(data.variables[grid][:], dtype=float)
        latitude, longitude = (np.array(data.variables[name][:], float) for name in data.variables[grid].dimensions)
    if latitude[0] > latitude[-1]:
        relief, latitude = relief[::-1], latitude[::-1]
    return relief, float(latitude[0]), float(longitude[0]), float(longitude[1] - longitude[0])


def draw_strips(grid, box, number: int, distance: np.ndarray, rng) -> list[np.ndarray]:
    """Great-circle strips of sea floor, bilinear; islands, shelves (above -2000 m) and trenches (below -6800 m) out."""
    from pyproj import Geod

    relief, south, west, cell = grid
    geod = Geod(ellps="WGS84")
    strips: list[np.ndarray] = []
    while len(strips) < number:
        latitude, longitude = rng.uniform(*box[:2]), rng.uniform(*box[2:])
        ones = np.ones(distance.size)
        lon, lat, _ = geod.fwd(longitude * ones, latitude * ones, rng.uniform(0, 360) * ones, distance)
        row, column = (np.array(lat) - south) / cell, ((np.array(lon) - west) % 360.0) / cell
        i, j = np.floor(row).astype(int), np.floor(column).astype(int)
        a, b = row - i, column - j
        j, k = j % relief.shape[1], (j + 1) % relief.shape[1]
        low, high = (1 - b) * relief[i, j] + b * relief[i, k], (1 - b) * relief[i + 1, j] + b * relief[i + 1, k]
        strip = (1 - a) * low + a * high
        if strip.max() < -2000.0 and strip.min() > -6800.0:
            strips.append(strip)
    return strips


def real(task) -> list[list[float]]:
    """One setting on one region: covered, log width, open, resolved of every line."""
    kind, region, box, lines, path, robust = task
    setting = Setting(kind)
    rng = np.random.default_rng([2, *region.encode()])
    distance = setting.stations - setting.stations[0]
    rows = []
    for strip in draw_strips(read_relief(path), box, lines, distance, rng):
        truth = draw_thickness(rng)
        fit = setting.fit(setting.surface(truth) + strip, resolution=9e3, robust=robust)
        rows.append([covered(fit.te_interval, truth), log_width(fit.te_interval), is_open(fit), fit.resolved])
    return np.array(rows, dtype=float).tolist()


def break_search(task) -> list[float]:
    """Foreland with its break searched: coverage of break and thickness, share of breaks open, mean seconds."""
    family, length, lines = task
    setting = Setting("foreland")
    rng = np.random.default_rng([3, family, int(length)])
    breaks = np.linspace(-40e3, 60e3, 21)
    setting.stations = setting.stations + 80e3
    rows = []
    for _ in range(lines):
        truth, at = draw_thickness(rng), float(rng.uniform(-20e3, 40e3))
        observed = setting.surface(truth, at) + draw_noise(setting.stations, family, length, 30.0, rng)
        fit = setting.fit(observed, breaks=breaks)
        at_interval = fit.break_interval
        rows.append(
            [
                covered(at_interval, at),
                covered(fit.te_interval, truth),
                at_interval.low is None or at_interval.high is None,
            ]
        )
    return np.array(rows, dtype=float).mean(axis=0).tolist()


def plate_kind(task) -> list[float]:
    """Continuous against broken under a ridge, the true bulge a multiple of the noise drawn between the two ``ratios``
    (evenly in its logarithm): shares of lines whose odds favour the right kind, that are decided rightly, undecided,
    decided wrongly."""
    family, length, ratios, lines = task
    kinds = Setting("volcano"), Setting("volcano", start=plate.BROKEN)
    rng = np.random.default_rng([4, family, int(length), int(10 * ratios[0])])
    rows = []
    for _ in range(lines):
        truth, which = draw_thickness(rng), int(rng.integers(2))
        surface = kinds[which].surface(truth)
        size = surface.max() / np.exp(rng.uniform(*np.log(ratios)))
        observed = surface + draw_noise(kinds[which].stations, family, length, size, rng)
        comparison = posterior.compare(kinds[0].fit(observed), kinds[1].fit(observed))
        verdict, favours_right = comparison.preferred, comparison.log_odds * (1 - 2 * which) > 0.0
        rows.append([favours_right, verdict == which, verdict is None, verdict == 1 - which])
    return np.array(rows, dtype=float).mean(axis=0).tolist()


def noise_name(family: int, length: float) -> str:
    return noise.FAMILIES[family] + (f", {length / 1e3:g} km" if family else "")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--out", default=".", help="directory for coverage.md and coverage.png")
    parser.add_argument("--lines", type=int, default=200, help="lines per cell of the tables")
    parser.add_argument("--relief", default=RELIEF, help="global relief grid of 5 minutes, netCDF")
    options = parser.parse_args()
    out = Path(options.out)
    out.mkdir(parents=True, exist_ok=True)
    begun = time.time()
    text = ["# Coverage of 90 % intervals of elastic thickness", ""]
    figure_rows: list[tuple[str, float, float]] = []
    with ProcessPoolExecutor(2) as pool:
        tasks = [(kind, *each, options.lines) for kind in ("volcano", "trench", "foreland") for each in NOISES]
        text += [
            f"Synthetic noise of 100 m, {options.lines} lines each; width is the median of ln(high / low).",
            "",
            "| setting | noise | coverage | width | width, right family alone | ratio | one or both sides open |",
            "| --- | --- | --- | --- | --- | --- | --- |",
        ]
        for (kind, family, length, _), (cover, wide, right, opened) in zip(tasks, pool.map(synthetic, tasks)):
            name = noise_name(family, length)
            text.append(
                f"| {kind} | {name} | {cover:.3f} | {wide:.2f} | {right:.2f} | {wide / right:.2f} | {opened:.2f} |"
            )
            figure_rows.append((f"{kind}: {name}", cover, wide))
        if Path(options.relief).exists():
            text += ["", *_real_tables(pool, options, figure_rows)]
        else:
            text += ["", f"Real relief: left out, there is no {options.relief}."]
        text += ["", *_break_table(pool, options.lines // 2), "", *_kind_table(pool, options.lines // 2)]
    (out / "coverage.md").write_text("\n".join(text) + "\n", encoding="utf-8")
    _figure(figure_rows, out / "coverage.png")
    sys.stdout.write("\n".join(text) + f"\n\n{time.time() - begun:.0f} s\n")


def _real_tables(pool, options, figure_rows) -> list[str]:
    text = [
        f"Real sea-floor relief, {options.lines // 5} strips from each region, known plates added.",
        "",
        "| regions | setting | outliers | coverage | of those resolved | width | resolved | one or both sides open |",
        "| --- | --- | --- | --- | --- | --- | --- | --- |",
    ]
    lines = options.lines // 5
    single = ["", "| region | coverage trench | coverage volcano |", "| --- | --- | --- |"]
    by_region: dict[str, list[str]] = {}
    for title, regions in (("tuned on", TUNED), ("verified on", VERIFIED), ("verified again on", VERIFIED_AGAIN)):
        for kind in ("trench", "volcano"):
            for robust in (False, True):
                tasks = [(kind, name, box, lines, options.relief, robust) for name, box in regions.items()]
                results = [np.array(rows) for rows in pool.map(real, tasks)]
                rows = np.concatenate(results)
                solved = rows[rows[:, 3] > 0]
                text.append(
                    f"| {title} | {kind} | {'down-weighted' if robust else 'kept'} | {rows[:, 0].mean():.3f} | "
                    f"{solved[:, 0].mean():.3f} | {np.median(rows[:, 1]):.2f} | {rows[:, 3].mean():.2f} | "
                    f"{rows[:, 2].mean():.2f} |"
                )
                if not robust:
                    figure_rows.append((f"relief {title}: {kind}", rows[:, 0].mean(), float(np.median(rows[:, 1]))))
                    for name, each in zip(regions, results):
                        by_region.setdefault(f"{name} ({title})", []).append(f"{each[:, 0].mean():.2f}")
    return text + single + [f"| {name} | {' | '.join(values)} |" for name, values in by_region.items()]


def _break_table(pool, lines: int) -> list[str]:
    tasks = [(family, length, lines) for family, length in ((0, 0.0), (1, 15e3), (2, 15e3))]
    return [
        f"Foreland with its break searched over 100 km, noise of 30 m, {lines} lines each.",
        "",
        "| noise | break covered | thickness covered | break open |",
        "| --- | --- | --- | --- |",
        *(
            f"| {noise_name(*task[:2])} | {row[0]:.2f} | {row[1]:.2f} | {row[2]:.2f} |"
            for task, row in zip(tasks, pool.map(break_search, tasks))
        ),
    ]


def _span(ratios: tuple[float, float]) -> str:
    return " to ".join(dict.fromkeys(f"{ratio:g}" for ratio in ratios))


def _kind_table(pool, lines: int) -> list[str]:
    noises = ((0, 0.0), (1, 15e3), (2, 15e3))
    tasks = [(*each, ratios, lines) for ratios in ((3.0, 30.0), (3.0, 3.0), (0.5, 0.5)) for each in noises]
    return [
        f"Continuous or broken under a ridge, compared by evidence, {lines} lines each.",
        "",
        "| bulge / noise | noise | odds favour the right kind | decided rightly | undecided | decided wrongly |",
        "| --- | --- | --- | --- | --- | --- |",
        *(
            f"| {_span(task[2])} | {noise_name(*task[:2])} | {row[0]:.2f} | {row[1]:.2f} | {row[2]:.2f} | {row[3]:.2f} |"
            for task, row in zip(tasks, pool.map(plate_kind, tasks))
        ),
    ]


def _figure(rows: list[tuple[str, float, float]], path: Path) -> None:
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(9, 0.26 * len(rows) + 1.2), layout="constrained")
    FigureCanvasAgg(figure)
    cover, width = figure.subplots(1, 2, sharey=True)
    at = np.arange(len(rows))[::-1]
    cover.axvspan(0.85, 0.97, color="#dfe8df")
    cover.axvline(0.9, color="0.4", linewidth=0.8)
    cover.plot([row[1] for row in rows], at, "o", color="#1f4e5f")
    cover.set(xlabel="share of 90 % intervals that cover", xlim=(0.5, 1.0))
    cover.set_yticks(at, [row[0] for row in rows], fontsize=8)
    width.plot([row[2] for row in rows], at, "o", color="#a5541e")
    width.set(xlabel="median ln(high / low)", xlim=(0, None))
    figure.savefig(path, dpi=130)


if __name__ == "__main__":
    main()
