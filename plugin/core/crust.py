"""A bent plate's crust as bodies of density contrast, and the gravity anomaly that they make.

Anomalies hold at sea level, and on land at the ground, as observed ones do.

The plate's stations tell what lies where: the undeflected surface s (m up), the deflection w (positive down), the load
on the reference level, the infill. Against the plate unbent and unloaded, three bodies differ:

    load      from the reference level up to the relief:  load for water, or for air above sea level
    surface   from s down to s - w:                       infill for crust
    moho      from s - t down to s - t - w:               crust for mantle, with t the thickness of the crust

Where the plate rises, layers have their top below their bottom and contrasts change sign, as they should. The mass of
the three balances by and large: what remains is the anomaly of a plate that carries part of the load elsewhere.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from . import check
from .constants import (
    BOUGUER_DENSITY,
    CRUST_DENSITY,
    CRUST_THICKNESS,
    SEA_WATER,
)
from .errors import DownwarpError
from .gravity import layer_attraction, round_attraction, slab_attraction
from .settings import RHO_AIR

MIRRORED, HELD, UNDEFLECTED = range(3)
"""What lies before the line's start: the line mirrored, its first values held, or a plate neither bent nor loaded."""
STRIP, ROUND = range(2)
"""Shape of the load: it runs on along strike, or it is round about the line's start."""
LOAD, SURFACE, MOHO = "load", "surface", "moho"
"""Names of the bodies."""
FAR = 1e7
"""Distance, m, to which the last values are held beyond the line."""
BEGINS_BENT = 0.1
"""Share of the largest deflection from which a plate counts as bent, or loaded, where it begins."""


@dataclass(frozen=True)
class Crust:
    """Densities in kg/m3 and thickness in m of the crustal model."""

    load: float
    mantle: float
    crust: float = CRUST_DENSITY.value
    water: float = SEA_WATER.value
    thickness: float = CRUST_THICKNESS.value
    """Thickness of the crust below the bent surface, m."""
    bouguer: float = BOUGUER_DENSITY.value
    """Density of rock in the Bouguer correction."""

    def __post_init__(self) -> None:
        for key, value in (
            ("RHO_LOAD", self.load), ("RHO_MANTLE", self.mantle), ("RHO_CRUST", self.crust),
            ("RHO_BOUGUER", self.bouguer),
        ):  # fmt: skip
            check.number(key, value, above=0, at_most=20000)
        check.number("RHO_WATER", self.water, at_least=0, at_most=20000)
        check.number("CRUST_KM", self.thickness / 1e3, at_least=0, at_most=200)


@dataclass(frozen=True)
class Section:
    """What the stations of a plate say, from its first to its last, each of shape (n,)."""

    distance: np.ndarray
    """m, increasing."""
    relief: np.ndarray
    """m up."""
    undeflected: np.ndarray
    """The surface before bending, m up."""
    deflection: np.ndarray
    """m, positive down."""
    infill: np.ndarray
    """Density of what lies on the plate from each station to the next, kg/m3; the last one repeats the one before."""
    under_load: np.ndarray
    """Stations at which rock stands on the plate, bool."""
    level: float = 0.0
    """Reference level on which it stands, m up."""

    def __post_init__(self) -> None:
        object.__setattr__(self, "distance", check.increasing("distance", self.distance))
        for name in ("relief", "undeflected", "deflection", "infill"):
            values = check.finite_array(name, getattr(self, name), ndim=1)
            if values.shape != self.distance.shape:
                raise DownwarpError(
                    "{name} holds {count} values; it takes {stations}.",
                    name=name,
                    count=values.size,
                    stations=self.distance.size,
                )

    @property
    def load_top(self) -> np.ndarray:
        """Top of the load, m up; the reference level where there is none."""
        return np.where(self.under_load, np.maximum(self.relief, self.level), self.level)

    @property
    def begins_bent(self) -> bool:
        """Whether the plate is bent, or loaded, where it begins: what lies before it is then best taken as its mirror
        image."""
        largest = np.abs(self.deflection).max()
        return bool(self.under_load[0] or np.abs(self.deflection[0]) > BEGINS_BENT * largest)

    def ground(self, stations) -> np.ndarray:
        """Heights, m up, at which gravity is observed at ``stations``, m: sea level, or the ground above it."""
        return np.maximum(np.interp(stations, self.distance, self.relief), 0.0)

    def bent(self, deflection) -> Section:
        """This section with another deflection."""
        return replace(self, deflection=np.asarray(deflection, dtype=float))


@dataclass(frozen=True)
class Body:
    """A layer of density contrast."""

    name: str
    at: np.ndarray
    """m, (n,)."""
    top: np.ndarray
    """m up, (n,)."""
    bottom: np.ndarray
    """m up, (n,)."""
    contrast: np.ndarray
    """kg/m3, per interval (n - 1,)."""


def bodies(section: Section, crust: Crust) -> tuple[Body, ...]:
    """The bodies of the bent plate; the load as two, below and above sea level."""
    at, level, top = section.distance, section.level, section.load_top
    ones = np.ones(at.size - 1)
    sunk = section.undeflected - section.deflection
    found = []
    if section.under_load.any():
        in_water = np.minimum(top, 0.0), np.full(at.shape, min(level, 0.0))
        in_air = np.maximum(top, 0.0), np.full(at.shape, max(level, 0.0))
        found = [
            Body(LOAD, at, *in_water, (crust.load - crust.water) * ones),
            Body(LOAD, at, *in_air, (crust.load - RHO_AIR) * ones),
        ]
    return (
        *found,
        Body(SURFACE, at, section.undeflected, sunk, section.infill[:-1] - crust.crust),
        Body(MOHO, at, section.undeflected - crust.thickness, sunk - crust.thickness,
             (crust.crust - crust.mantle) * ones),
    )  # fmt: skip


def attraction(body: Body, stations, heights, before: int = HELD, shape: int = STRIP) -> np.ndarray:
    """Attraction of a body at ``stations`` (m, (n,)) and ``heights`` (m up, (n,)), m/s2 down.

    ``before``: what lies before its first position, one of `MIRRORED`, `HELD` and `UNDEFLECTED`. A round body is round
    about distance 0 and seen from sea level. Raises DownwarpError where it reaches that.
    """
    stations = np.asarray(stations, dtype=float)
    if not (body.top != body.bottom).any():
        return np.zeros(stations.shape)
    if shape == ROUND:
        return round_attraction(stations, 0.0, body.at, body.top, body.bottom, body.contrast)
    at, top, bottom, contrast = body.at, body.top, body.bottom, body.contrast
    if before == MIRRORED:
        at = np.concatenate([2.0 * at[0] - at[:0:-1], at])
        top, bottom = (np.concatenate([values[:0:-1], values]) for values in (top, bottom))
        contrast = np.concatenate([contrast[::-1], contrast])
    if before == UNDEFLECTED:
        at = np.append(at, at[-1] + FAR)
        top, bottom, contrast = (np.append(values, values[-1]) for values in (top, bottom, contrast))
    else:
        at = np.concatenate([at[:1] - FAR, at, at[-1:] + FAR])
        top, bottom, contrast = (np.concatenate([v[:1], v, v[-1:]]) for v in (top, bottom, contrast))
    return layer_attraction(stations, heights, at, top, bottom, contrast)


@dataclass(frozen=True)
class Anomaly:
    """Gravity of a bent plate at stations, m/s2, positive down, each of shape (n,)."""

    load: np.ndarray
    """Of the load."""
    surface: np.ndarray
    """Of the bent surface."""
    moho: np.ndarray
    """Of the base of the crust."""
    bouguer_correction: np.ndarray
    """What turns a free-air anomaly into a Bouguer anomaly: water filled up with rock, rock above sea level taken
    away."""

    @property
    def free_air(self) -> np.ndarray:
        """Free-air anomaly."""
        return self.load + self.surface + self.moho

    @property
    def bouguer(self) -> np.ndarray:
        """Bouguer anomaly, with the terrain along the line."""
        return self.free_air + self.bouguer_correction


def anomaly(section: Section, crust: Crust, stations, before: int = HELD, shape: int = STRIP) -> Anomaly:
    """Gravity of the bent plate at ``stations`` (m, (n,)); ``before`` and ``shape`` as in `attraction`."""
    if before not in (MIRRORED, HELD, UNDEFLECTED):
        raise DownwarpError("BEFORE is {before!r}; it takes 0 to 2.", before=before)
    stations = check.finite_array("stations", stations, ndim=1)
    heights = section.ground(stations)
    parts = {name: np.zeros(stations.shape) for name in (LOAD, SURFACE, MOHO)}
    for body in bodies(section, crust):
        parts[body.name] = parts[body.name] + attraction(body, stations, heights, before, shape)
    return Anomaly(**parts, bouguer_correction=bouguer_correction(section, crust, stations, before, shape))


def bouguer_correction(section: Section, crust: Crust, stations, before: int = HELD, shape: int = STRIP) -> np.ndarray:
    """What turns a free-air anomaly into a Bouguer anomaly, m/s2, (n,).

    Water down to the relief becomes rock of the Bouguer density, rock above sea level is taken away. Beyond the line
    (and, where the plate before it is taken as undeflected, before it) the relief is held.
    """
    at, relief = section.distance, section.relief
    heights = section.ground(stations)
    ones = np.ones(at.size - 1)
    before = HELD if before == UNDEFLECTED else before
    sea_floor, land = np.minimum(relief, 0.0), np.maximum(relief, 0.0)
    filling = (crust.bouguer - crust.water) * ones
    if shape == ROUND:
        deepest = float(relief.min())
        body = Body("water", at, relief, np.full(at.shape, deepest), filling)
        return slab_attraction(-deepest, filling[0]) - attraction(body, stations, heights, HELD, ROUND)
    water = Body("water", at, np.zeros(at.shape), sea_floor, filling)
    rock = Body("rock", at, land, np.zeros(at.shape), -crust.bouguer * ones)
    return attraction(water, stations, heights, before) + attraction(rock, stations, heights, before)
