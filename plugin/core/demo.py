"""An invented sea for trying things out: a volcanic ridge, a trench and a mountain front over known plates.

Everything is made here from three plates of known elastic thickness; nothing is measured anywhere. Strike runs north,
transects run east. Each scenario fills a band of the map; between bands the surfaces blend, and so does gravity: that of
a band is of its section running on along strike for ever, by the polygons of `crust`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import gaussian_filter

from . import check
from .constants import MILLIGAL
from .crust import HELD, MIRRORED, Crust, Section, anomaly
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
    crust: Crust
    """Densities and thickness of the crust that its gravity is of."""


SCENARIOS = (
    Scenario("Ostrun ridge", VOLCANO, 24e3, (10e3, 690e3), {"RHO_UNDER_LOAD": 2800}, Crust(2800.0, 3300.0)),
    Scenario(
        "Velmar trench", TRENCH, 34e3, (60e3, 690e3), {"SWATH_KM": 60, "SWATH_LINES": 9}, Crust(2800.0, 3300.0)
    ),
    Scenario(
        "Harrow front", FORELAND, 18e3, (90e3, 690e3), {"REFERENCE_LEVEL": 200, "LOAD_TO": 90},
        Crust(2670.0, 3300.0, thickness=32e3),
    ),
)  # fmt: skip
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


def _ridge(east: np.ndarray, elastic: Elastic) -> Section:
    """A continuous plate under a ridge; its relief is the ridge itself, elsewhere the bent sea floor."""
    scenario = SCENARIOS[0]
    rho = Densities(2800, 1030, 2800, 3300, 1030)
    across = np.clip(np.abs(east - RIDGE_CENTRE) / RIDGE_HALF_WIDTH, 0, 1)
    height = RIDGE_HEIGHT * np.cos(0.5 * np.pi * across) ** 2
    under = np.abs(east - RIDGE_CENTRE) <= RIDGE_HALF_WIDTH
    infill = np.where(under[1:] & under[:-1], rho.under_load, rho.infill)
    load = relief_load(SEAFLOOR + height, SEAFLOOR, rho, elastic.gravity)
    stiffness = (rho.mantle - infill) * elastic.gravity
    model = TransectModel(east, load, stiffness, elastic, kind=CONTINUOUS, regional=0)
    deflection = model.bend(scenario.thickness, 0.0, np.zeros(0)).at(east)[:, 0]
    relief = np.where(under, SEAFLOOR + height, SEAFLOOR - deflection)
    level = np.full(east.shape, SEAFLOOR)
    return Section(east, relief, level, deflection, np.append(infill, infill[-1]), under, SEAFLOOR)


def _trench(east: np.ndarray, elastic: Elastic) -> Section:
    """A plate broken at a trench, from its axis on."""
    scenario = SCENARIOS[1]
    stiffness = np.full(east.size - 1, (3300 - 1030) * elastic.gravity)
    model = TransectModel(
        east, np.zeros(east.size), stiffness, elastic, kind=BROKEN, shear=True, moment=True, regional=0
    )
    deflection = model.bend(scenario.thickness, TRENCH_AXIS, np.array([TRENCH_SHEAR, TRENCH_MOMENT])).at(east)[:, 0]
    level = -5600.0 + TRENCH_TILT * (east - TRENCH_AXIS)
    infill = np.full(east.shape, 1030.0)
    return Section(east, level - deflection, level, deflection, infill, np.zeros(east.shape, dtype=bool))


def _front(east: np.ndarray, elastic: Elastic) -> Section:
    """A plate broken at the back of a mountain front: the mountains, and the basement bent beneath them."""
    scenario = SCENARIOS[2]
    rho = Densities(2670, 2400, 2400, 3300, 1030)
    across = (east - FRONT_BREAK) / FRONT_WIDTH
    height = FRONT_HEIGHT * np.where(across < 1, np.cos(0.5 * np.pi * np.clip(across, 0, 1)), 0.0)
    load = relief_load(PLAIN + height, PLAIN, rho, elastic.gravity)
    stiffness = np.full(east.size - 1, (rho.mantle - rho.infill) * elastic.gravity)
    model = TransectModel(east, load, stiffness, elastic, kind=BROKEN, shear=True, regional=0)
    deflection = model.bend(scenario.thickness, FRONT_BREAK, np.array([FRONT_SHEAR])).at(east)[:, 0]
    level, infill = np.full(east.shape, PLAIN - COVER), np.full(east.shape, float(rho.infill))
    return Section(east, PLAIN + height, level, deflection, infill, height > 0, PLAIN)


def sections(elastic: Elastic | None = None) -> tuple[Section, Section, Section]:
    """The bent plates of ridge, trench and front, from where each begins; distances in m east of the map's edge."""
    elastic = Elastic() if elastic is None else elastic
    east = np.arange(0.0, WIDTH + 500.0, 1000.0)
    return (
        _ridge(east, elastic), _trench(east[east >= TRENCH_AXIS], elastic), _front(east[east >= FRONT_BREAK], elastic),
    )  # fmt: skip


def _columns(cell: float) -> np.ndarray:
    """Middles of the map's columns, m east of its edge."""
    return (np.arange(int(WIDTH / cell)) + 0.5) * cell


def _south(cell: float) -> np.ndarray:
    """Middles of the map's rows from north to south, m north of its southern edge."""
    rows = int(3 * BAND / cell)
    return 3 * BAND - (np.arange(rows) + 0.5) * cell


def _blended(bands, cell: float) -> np.ndarray:
    """The map of three bands, each one value per column: ridge in the north, trench in the middle, front in the south."""
    south = _south(cell)
    weights = [np.clip(0.5 + (south - edge) / BLEND, 0, 1) for edge in (2 * BAND, BAND)]
    ridge, middle = weights[0], weights[1] * (1 - weights[0])
    return sum(w[:, None] * band for w, band in zip((ridge, middle, 1 - weights[1]), bands))


def demo_grids(noise: float, rng: np.random.Generator, cell: float = CELL) -> DemoGrids:
    """The invented map at ``cell`` m, with correlated relief noise of standard deviation ``noise`` m.

    The noise is that of the bent surfaces: ridge and mountains have none, for what stands there is load, and noise would
    be load too that bends nothing and attracts nothing.
    """
    noise = check.number("NOISE_M", noise, at_least=0, at_most=1000)
    columns = _columns(cell)
    ridge, trench, front = sections()
    bands = [np.interp(columns, section.distance, section.relief) for section in (ridge, trench, front)]
    # Beyond the trench its other slope rises; beyond the mountains' back they go on.
    bands[1] = bands[1] + 0.055 * np.maximum(TRENCH_AXIS - columns, 0)
    relief = _blended(bands, cell)
    seen = columns > FRONT_BREAK + 0.35 * FRONT_WIDTH
    basement = np.where(seen, np.interp(columns, front.distance, front.undeflected - front.deflection), np.nan)
    below = np.where((_south(cell) < BAND)[:, None], basement, np.nan)
    on_load = _blended(
        (np.abs(columns - RIDGE_CENTRE) <= RIDGE_HALF_WIDTH, np.zeros(columns.shape), columns < FRONT_BREAK + FRONT_WIDTH),
        cell,
    )
    rough = _rough(relief.shape, noise, cell, rng)
    return DemoGrids(relief + (1.0 - on_load) * rough, below + _rough(relief.shape, 0.5 * noise, cell, rng))


def demo_gravity(noise: float, rng: np.random.Generator, cell: float = CELL) -> np.ndarray:
    """Free-air anomaly of the invented map, m/s2, rows from north to south, at sea level and on land at the ground.

    Each band's is the attraction of the true plate and of the load on it, noise of the relief left out, by polygons
    that run on along strike; what lies beyond a broken plate is its mirror image. ``noise``: standard deviation of
    correlated noise, m/s2.
    """
    noise = check.number("NOISE_MGAL", noise / MILLIGAL.value, at_least=0, at_most=1000) * MILLIGAL.value
    columns = _columns(cell)
    bands = [
        anomaly(section, scenario.crust, columns, HELD if scenario.setting == VOLCANO else MIRRORED).free_air
        for section, scenario in zip(sections(), SCENARIOS)
    ]
    clean = _blended(bands, cell)
    return clean + _rough(clean.shape, noise, cell, rng)


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
