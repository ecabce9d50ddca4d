"""Benchmarks: `python tests/bench/run.py` prints a Markdown table. Times depend on the machine, so nothing is asserted.

Each function in BENCHMARKS yields rows (what, seconds, ratio or None, note); add a benchmark by adding a function.
"""

from __future__ import annotations

import math
import os
import sys
import timeit
from collections.abc import Callable, Iterator
from pathlib import Path

# Small matrices: threads cost more than they bring, and they blur the times. Read when numpy is loaded.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

import conftest  # noqa: F401 - makes the checkout importable
import numpy as np
import scipy.fft
from downwarp_checkout.plugin.core import elastic
from downwarp_checkout.plugin.core.fit import fit_profile
from downwarp_checkout.plugin.core.forward import TransectModel
from downwarp_checkout.plugin.core.plate import BROKEN, CLAMPED, Plate
from downwarp_checkout.plugin.core.profile import Profile
from downwarp_checkout.plugin.core.settings import BREAK_SEARCHED, FORELAND, FitOptions
from downwarp_checkout.plugin.core.sheet import Sheet, SheetLine
from scipy.integrate import solve_bvp
from scipy.linalg.lapack import dpbsv

Row = tuple[str, float, "float | None", str]

STATIONS = 1000
SPAN = 600e3
RIGIDITY = float(elastic.Elastic().rigidity(30e3))
STIFFNESS = float(elastic.restoring_stiffness(3300.0, 1030.0, 9.81))
SHEAR = 1e12


def seconds(call: Callable[[], object], repeats: int = 60, least: float = 0.004) -> float:
    """Shortest of several timings of ``call``, each long enough for the clock."""
    timer = timeit.Timer(call)
    number = 1
    while timer.timeit(number) < least:
        number *= 2
    return min(timer.repeat(repeats, number)) / number


def load_at(x: np.ndarray) -> np.ndarray:
    """A smooth load, Pa, of the size of a seamount."""
    return 5e7 * np.exp(-(((x - 0.3 * SPAN) / 40e3) ** 2))


def forward_solve() -> Iterator[Row]:
    """One transect: the plate, its load and its deflection, beside LAPACK's band solve of the same matrix."""
    nodes = np.linspace(0.0, SPAN, STATIONS)
    load = load_at(nodes)
    points = (STATIONS - 1, 4)
    rigidity, stiffness = np.full(points, RIGIDITY), np.full(points, STIFFNESS)
    plate = Plate(nodes, RIGIDITY, STIFFNESS, 0.0, BROKEN)
    band, vector = plate.band, plate.load_vector(load)

    def forward() -> np.ndarray:
        fresh = Plate(nodes, RIGIDITY, STIFFNESS, 0.0, BROKEN)
        return fresh.solve(fresh.load_vector(load)).deflection

    def forward_varying() -> np.ndarray:
        fresh = Plate(nodes, rigidity, stiffness, 0.0, BROKEN)
        return fresh.solve(fresh.load_vector(load)).deflection

    lapack = seconds(lambda: dpbsv(band, vector, lower=1))
    yield f"LAPACK dpbsv, the matrix of {STATIONS} stations", lapack, 1.0, "the measure of the rows below"
    for what, call in (
        ("Plate, load_vector, solve", forward),
        ("the same, D and k at every Gauss point", forward_varying),
        ("Plate, bend (refined)", lambda: Plate(nodes, RIGIDITY, STIFFNESS, 0.0, BROKEN).bend(load)),
        ("solve again with the factor", lambda: plate.solve(vector)),
    ):
        taken = seconds(call)
        yield what, taken, taken / lapack, "of dpbsv"


def against_collocation() -> Iterator[Row]:
    """The same deflection by `scipy.integrate.solve_bvp`, at the loosest tolerance that is as accurate.

    A plate broken at its start under V0 and a load that is known at the stations and linear between them, as any sampled
    relief is; clamped at its finish. Both are measured at the stations against the plate on twice as many elements, its
    answer refined. solve_bvp is given both Jacobians, and of several first meshes the fastest; begun on the stations
    themselves it need not look for the places where the load bends. A smooth load, which solve_bvp is given as a function
    of x and needs far fewer nodes for than there are stations, is another problem: the last rows.
    """
    nodes = np.linspace(0.0, SPAN, STATIONS)
    height = np.random.default_rng(0).uniform(0.0, 5e7, STATIONS)
    rough = np.where(nodes < 200e3, height, 0.0)
    between = np.linspace(0.0, SPAN, 2 * STATIONS - 1)
    finer = Plate(between, RIGIDITY, STIFFNESS, 0.0, BROKEN, CLAMPED)
    forces = finer.end_vector(SHEAR)
    yield from _beside(nodes, rough, finer.bend(np.interp(between, nodes, rough), forces).at(nodes)[:, 0], "rough load")
    fine = np.linspace(0.0, SPAN, 50 * STATIONS)
    smooth = finer.bend(load_at(fine), forces, fine).at(nodes)[:, 0]
    yield from _beside(nodes, load_at(nodes), smooth, "smooth load", load_at)


def _beside(nodes, load, converged, what: str, load_of=None) -> Iterator[Row]:
    """Ours and solve_bvp's time for a load at the nodes, or as solve_bvp alone is told it, ``load_of`` x."""
    told = load_of or (lambda x: np.interp(x, nodes, load))

    def error(deflection: np.ndarray) -> float:
        return float(abs(deflection - converged).max() / abs(converged).max())

    def forward() -> np.ndarray:
        plate = Plate(nodes, RIGIDITY, STIFFNESS, 0.0, BROKEN, CLAMPED)
        return plate.solve(plate.load_vector(load) + plate.end_vector(SHEAR)).deflection[:, 0]

    # In units of alpha, 1000 m and D: y = (w, w', M, V), M = -w'', V = M', V' = 4 w - q.
    alpha = float(elastic.flexural_parameter(RIGIDITY, STIFFNESS))
    to_load, to_shear = alpha**4 / (1000.0 * RIGIDITY), alpha**3 / (1000.0 * RIGIDITY)
    system = np.array([[0.0, 1.0, 0.0, 0.0], [0.0, 0.0, -1.0, 0.0], [0.0, 0.0, 0.0, 1.0], [4.0, 0.0, 0.0, 0.0]])
    left, right = np.zeros((4, 4)), np.zeros((4, 4))
    left[0, 2] = left[1, 3] = right[2, 0] = right[3, 1] = 1.0

    def derivatives(s: np.ndarray, y: np.ndarray) -> np.ndarray:
        return np.stack([y[1], -y[2], y[3], 4.0 * y[0] - told(alpha * s) * to_load])

    def jacobian(s: np.ndarray, y: np.ndarray) -> np.ndarray:
        return np.repeat(system[:, :, None], s.size, axis=2)

    def ends(start: np.ndarray, finish: np.ndarray) -> np.ndarray:
        return np.array([start[2], start[3] + SHEAR * to_shear, finish[0], finish[1]])

    def collocate(tolerance: float, first: int) -> tuple[np.ndarray, int]:
        mesh = np.linspace(0.0, SPAN / alpha, first)
        found = solve_bvp(
            derivatives,
            ends,
            mesh,
            np.zeros((4, first)),
            fun_jac=jacobian,
            bc_jac=lambda start, finish: (left, right),
            tol=tolerance,
            max_nodes=100000,
        )
        return 1000.0 * found.sol(nodes / alpha)[0], found.x.size

    ours = error(forward())
    taken = seconds(forward)
    yield f"forward solve, {STATIONS} stations, end shear, {what}", taken, 1.0, f"error {ours:.1e}"

    for firsts, how in (((11, 21, 41, 81, 161, 321), "on a mesh of its own"), ((STATIONS,), "begun on the stations")):
        choices = []
        for first in firsts:
            for tolerance in 10.0 ** -np.arange(1.0, 12.0, 0.5):
                deflection, count = collocate(tolerance, first)
                theirs = error(deflection)
                if theirs <= ours:
                    spent = seconds(lambda n=first, t=tolerance: collocate(t, n), repeats=3)
                    choices.append((spent, first, tolerance, theirs, count))
                    break
        spent, first, tolerance, theirs, count = min(choices)
        spent = seconds(lambda n=first, t=tolerance: collocate(t, n), repeats=10)
        note = f"error {theirs:.1e} with tol {tolerance:.0e}, {first} nodes at first, {count} in the end; of ours"
        yield f"solve_bvp {how}", spent, spent / taken, note


def plan_view() -> Iterator[Row]:
    """A trial thickness under a load as mapped, on a padded grid of 512 x 512 cells, beside one real transform."""
    alpha = float(elastic.flexural_parameter(RIGIDITY, STIFFNESS))
    spacing = alpha / 12.0
    cells = 512 - math.ceil(5.0 * alpha / spacing)
    away = (np.arange(cells) - cells // 2) * spacing
    load = 5e7 * np.exp(-(away[:, None] ** 2 + away**2) / 40e3**2)
    sheet = Sheet(load, spacing, 5.0 * alpha)
    grid = np.zeros(sheet.shape)
    straight = SheetLine(sheet, np.full(STATIONS, 0.5 * cells), np.linspace(60.0, cells - 60.0, STATIONS))
    oblique = SheetLine(sheet, *np.tile(np.linspace(60.0, cells - 60.0, STATIONS), (2, 1)))
    for line in (straight, oblique):  # what is made once
        line.deflection(RIGIDITY, STIFFNESS)
    transform = seconds(lambda: scipy.fft.rfft2(grid))
    yield (
        "scipy rfft2, {} x {}".format(*sheet.shape),
        transform,
        1.0,
        "the measure of the rows below; at most 3 is wanted",
    )
    for what, call in (
        ("trial thickness, whole sheet", lambda: sheet.deflection(RIGIDITY, STIFFNESS)),
        (f"trial thickness, {STATIONS} stations along the grid", lambda: straight.deflection(RIGIDITY, STIFFNESS)),
        (f"trial thickness, {STATIONS} stations across all rows", lambda: oblique.deflection(RIGIDITY, STIFFNESS)),
    ):
        taken = seconds(call)
        yield what, taken, taken / transform, "of rfft2"


def full_fit() -> Iterator[Row]:
    """Fits of a made foreland, in units of LAPACK's band solve of 300 stations: thickness alone, with the break searched
    at 21 places, and with choices as well; then thickness alone at four station steps, in units of the longest."""
    unit = None
    for stations, options, choices, what in (
        (301, {}, False, "fit, 301 stations"),
        (301, {"break_at": BREAK_SEARCHED, "break_from": 0.0, "break_to": 40e3}, False, "and break search, misfit"),
        (301, {"break_at": BREAK_SEARCHED, "break_from": 0.0, "break_to": 40e3}, True, "and choices"),
    ):
        profile = made_foreland(stations)
        asked = FitOptions(setting=FORELAND, reference_level=0.0, **options)
        plate = Plate(profile.distance, RIGIDITY, STIFFNESS, 0.0, BROKEN)
        band, vector = plate.band, plate.load_vector(np.ones(stations))
        unit = unit or seconds(lambda band=band, vector=vector: dpbsv(band, vector, lower=1))
        taken = seconds(lambda p=profile, o=asked, c=choices: fit_profile(p, o, None, c), repeats=3)
        yield what, taken, taken / unit, "ratio: band solves of its 301 stations"
    first = None
    for step in (5.0, 2.0, 1.0, 0.5):
        profile = made_foreland(round(600 / step) + 1)
        asked = FitOptions(setting=FORELAND, reference_level=0.0)
        taken = seconds(lambda p=profile, o=asked: fit_profile(p, o, None, False), repeats=3)
        first = first or taken
        yield f"fit, step {step:g} km", taken, taken / first, f"{profile.distance.size} stations; ratio: step 5 km"


def made_foreland(stations: int) -> Profile:
    """A broken plate of 25 km under mountains, 600 km long, with noise."""
    distance = np.linspace(0.0, SPAN, stations)
    relief = np.where(distance < 60e3, 2000.0, 0.0)
    load = relief * 2670 * 9.81
    stiffness = np.full(stations - 1, (3300 - 2400) * 9.81)
    model = TransectModel(distance, load, stiffness, elastic.Elastic(), shear=True)
    deflection = model.bend(25e3, 20e3, np.array([SHEAR])).at(np.maximum(distance, 20e3))[:, 0]
    noise = 20.0 * np.random.default_rng(0).standard_normal(stations)
    return Profile("made", distance, relief, -1500.0 - deflection + noise, resolution=2e3)


BENCHMARKS = (forward_solve, against_collocation, plan_view, full_fit)


def main() -> None:
    sys.stdout.write("| what | time | ratio | note |\n| --- | ---: | ---: | --- |\n")
    for benchmark in BENCHMARKS:
        for what, taken, ratio, note in benchmark():
            times = "" if ratio is None else f"{ratio:.2f}"
            sys.stdout.write(f"| {what} | {taken * 1e6:.0f} us | {times} | {note} |\n")


if __name__ == "__main__":
    main()
