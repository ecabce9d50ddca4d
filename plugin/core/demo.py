"""An invented sea for trying things out: a volcanic ridge, a trench and a mountain front over known plates.

Everything is made here from three plates of known elastic thickness; nothing is measured anywhere. Strike runs north,
transects run east. Each scenario fills a band of the map; between bands the surfaces blend.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import gaussian_filter

from . import check
from .elastic import Elastic
from .forward import TransectModel
from .load import relief_load
from .settings import BROKEN, CONTINUOUS, FORELAND, TRENCH, VOLCANO, Densities

CRS = "EPSG:32727"
"""A UTM zone over open ocean; the map's west-south corner lies at the next two values."""
WEST, SOUTH = 150e3, 5_500e3
WIDTH, BAND = 700e3, 260e3
"""Extent of the map eastward and of each scenario northward, m."""
BLEND = 70e3
"""Breadth, m, over which neighbouring bands blend."""
CELL = 2.5e3
"""Cell size, m."""
COVER = 1500.0
"""Thickness of the strata between the front's plain and its basement where the plate is level, m."""


@dataclass(frozen=True)
class Scenario:
    """One band of the map and the plate beneath it."""

    name: str
    setting: int
    thickness: float
    """True elastic thickness, m."""
    line: tuple[float, float]
    """Start and end of the transects, m east of the map's western edge."""
    parameters: dict[str, object]
    """Further keys of the fit, for what the setting does not say."""


SCENARIOS = (
    Scenario("Ostrun ridge", VOLCANO, 24e3, (10e3, 690e3), {"RHO_UNDER_LOAD": 2800}),
    Scenario("Velmar trench", TRENCH, 34e3, (60e3, 690e3), {"SWATH_KM": 60, "SWATH_LINES": 9}),
    Scenario("Harrow front", FORELAND, 18e3, (90e3, 690e3), {"REFERENCE_LEVEL": 200}),
)
RIDGE_CENTRE, RIDGE_HALF_WIDTH, RIDGE_HEIGHT, SEAFLOOR = 330e3, 75e3, 3600.0, -5200.0
TRENCH_AXIS, TRENCH_SHEAR, TRENCH_MOMENT, TRENCH_TILT = 110e3, 1.3e12, 0.9e17, 2e-4
FRONT_BREAK, FRONT_WIDTH, FRONT_HEIGHT, PLAIN, FRONT_SHEAR = 90e3, 90e3, 2800.0, 200.0, 1.5e12


PICK_SIGMA = 40.0
"""Standard deviation, m, of the front's picks."""


@dataclass(frozen=True)
class DemoGrids:
    """Grids of the invented map, rows from north to south, shape (rows, columns)."""

    relief: np.ndarray
    """m up."""
    basement: np.ndarray
    """Top of the basement below the mountain front, m up; NaN in the other bands and beneath the mountains' core."""


def _ridge(east: np.ndarray, elastic: Elastic) -> np.ndarray:
    """Surface of a continuous plate under a ridge, m up: the ridge itself, elsewhere the bent sea floor."""
    scenario = SCENARIOS[0]
    rho = Densities(2800, 1030, 2800, 3300, 1030)
    across = np.clip(np.abs(east - RIDGE_CENTRE) / RIDGE_HALF_WIDTH, 0, 1)
    height = RIDGE_HEIGHT * np.cos(0.5 * np.pi * across) ** 2
    under = across < 1
    both = under[1:] & under[:-1]
    stiffness = (rho.mantle - np.where(both, rho.under_load, rho.infill)) * elastic.gravity
    load = relief_load(SEAFLOOR + height, SEAFLOOR, rho, elastic.gravity)
    model = TransectModel(east, load, stiffness, elastic, kind=CONTINUOUS, regional=0)
    deflection = model.bend(scenario.thickness, 0.0, np.zeros(0)).at(east)[:, 0]
    return np.where(under, SEAFLOOR + height, SEAFLOOR - deflection)


def _trench(east: np.ndarray, elastic: Elastic) -> np.ndarray:
    """Surface of a plate broken at a trench, m up, and of the slope on the other side."""
    scenario = SCENARIOS[1]
    stiffness = np.full(east.size - 1, (3300 - 1030) * elastic.gravity)
    model = TransectModel(
        east, np.zeros(east.size), stiffness, elastic, kind=BROKEN, shear=True, moment=True, regional=0
    )
    bending = model.bend(scenario.thickness, TRENCH_AXIS, np.array([TRENCH_SHEAR, TRENCH_MOMENT]))
    seaward = np.maximum(east, TRENCH_AXIS)
    surface = -5600.0 + TRENCH_TILT * (seaward - TRENCH_AXIS) - bending.at(seaward)[:, 0]
    return surface + 0.055 * np.maximum(TRENCH_AXIS - east, 0)


def _front(east: np.ndarray, elastic: Elastic) -> tuple[np.ndarray, np.ndarray]:
    """Relief of a mountain front and the basement bent beneath it, m up."""
    scenario = SCENARIOS[2]
    rho = Densities(2670, 2400, 2400, 3300, 1030)
    across = (east - FRONT_BREAK) / FRONT_WIDTH
    height = FRONT_HEIGHT * np.where(across < 1, np.cos(0.5 * np.pi * np.clip(across, 0, 1)), 0.0)
    load = relief_load(PLAIN + height, PLAIN, rho, elastic.gravity)
    stiffness = np.full(east.size - 1, (rho.mantle - rho.infill) * elastic.gravity)
    model = TransectModel(east, load, stiffness, elastic, kind=BROKEN, shear=True, regional=0)
    bending = model.bend(scenario.thickness, FRONT_BREAK, np.array([FRONT_SHEAR]))
    basement = PLAIN - COVER - bending.at(np.maximum(east, FRONT_BREAK))[:, 0]
    return PLAIN + height, np.where(across > 0.35, basement, np.nan)


def demo_grids(noise: float, rng: np.random.Generator, cell: float = CELL) -> DemoGrids:
    """The invented map at ``cell`` m, with correlated relief noise of standard deviation ``noise`` m."""
    noise = check.number("NOISE_M", noise, at_least=0, at_most=1000)
    elastic = Elastic()
    fine = np.arange(0.0, WIDTH + 500.0, 1000.0)
    columns = (np.arange(int(WIDTH / cell)) + 0.5) * cell
    front, basement = _front(fine, elastic)
    # Ridge in the north, trench in the middle, front in the south.
    bands = [np.interp(columns, fine, values) for values in (_ridge(fine, elastic), _trench(fine, elastic), front)]
    rows = int(3 * BAND / cell)
    south = 3 * BAND - (np.arange(rows) + 0.5) * cell
    weights = [np.clip(0.5 + (south - edge) / BLEND, 0, 1) for edge in (2 * BAND, BAND)]
    ridge, middle = weights[0], weights[1] * (1 - weights[0])
    relief = sum(w[:, None] * band for w, band in zip((ridge, middle, 1 - weights[1]), bands))
    below = np.where((south < BAND)[:, None], np.interp(columns, fine, basement), np.nan)
    return DemoGrids(
        relief + _rough(relief.shape, noise, cell, rng), below + _rough(relief.shape, 0.5 * noise, cell, rng)
    )


def _rough(shape: tuple[int, int], size: float, cell: float, rng: np.random.Generator) -> np.ndarray:
    """Noise of two wavelengths, standard deviation ``size``."""
    field = np.zeros(shape)
    for radius, share in ((3e3, 0.5), (12e3, 0.5)):
        smooth = gaussian_filter(rng.standard_normal(shape), radius / cell, mode="reflect")
        field += np.sqrt(share) * smooth / smooth.std()
    return size * field


def demo_lines(scenario: Scenario, count: int = 3) -> list[np.ndarray]:
    """Transects of a scenario, each (2, 2) easting and northing in `CRS`."""
    band = 2 - SCENARIOS.index(scenario)
    middle = SOUTH + (band + 0.5) * BAND
    east = WEST + np.array(scenario.line)
    return [
        np.column_stack([east, np.full(2, middle + offset)])
        for offset in np.linspace(-0.25, 0.25, count) * (BAND - BLEND)
    ]


def demo_guide() -> np.ndarray:
    """The front line of the mountains, south to north, (2, 2) easting and northing in `CRS`."""
    east = WEST + FRONT_BREAK
    return np.array([[east, SOUTH + 0.5 * BLEND], [east, SOUTH + BAND - BLEND]])


def demo_picks(
    grids: DemoGrids, rng: np.random.Generator, count: int = 150
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Picks of the front's basement: easting, elevation (m up) and northing in `CRS`, each (count,) or fewer."""
    rows = grids.basement.shape[0]
    row = rng.integers(int(rows * 0.75), int(rows * 0.92), count)
    column = rng.integers(0, grids.basement.shape[1], count)
    elevation = grids.basement[row, column] + PICK_SIGMA * rng.standard_normal(count)
    known = np.isfinite(elevation)
    east = WEST + (column + 0.5) * CELL
    north = SOUTH + 3 * BAND - (row + 0.5) * CELL
    return east[known], elevation[known], north[known]
