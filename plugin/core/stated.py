"""A bent plate as the STATIONS of an earlier run state it, and what can be read back from it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from . import check
from .crust import Crust, Section
from .elastic import Elastic
from .errors import DownwarpError
from .fit import complete_sigma
from .settings import BROKEN, CONTINUOUS
from .wording import say

LEAST_STATIONS = 5
"""Stations that a plate has at least."""
NEGLIGIBLE = 1e-3
"""Share of the largest value that counts as 0 when end forces and supports are read back."""
AGREES = 0.02
"""Relative difference up to which two rigidities count as one."""
LEVEL_SPREAD = 20.0
"""Spread, m, of the reference level over the load from which densities are said to differ from those of the run."""


@dataclass(frozen=True)
class PlateStations:
    """Values at the stations of one transect, SI units, each of shape (n,); NaN where there is none."""

    name: str
    distance: np.ndarray
    """m, increasing."""
    deflection: np.ndarray
    """m, positive down; NaN off the plate."""
    thickness: np.ndarray
    """Elastic thickness, m."""
    curvature: np.ndarray
    """w'', 1/m."""
    relief: np.ndarray
    """m up."""
    predicted: np.ndarray
    """m up."""
    observed: np.ndarray
    """m up."""
    sigma: np.ndarray
    """m."""
    in_fit: np.ndarray
    """1 where the station was fitted."""
    load: np.ndarray
    """Pa, positive down."""
    infill: np.ndarray
    """kg/m3."""
    slope: np.ndarray
    """1."""
    moment: np.ndarray
    """N."""
    shear: np.ndarray
    """N/m."""

    def __post_init__(self) -> None:
        object.__setattr__(
            self,
            "distance",
            check.increasing(say("the distance of the stations of {transect}", transect=self.name), self.distance),
        )
        if int(self.on_plate.sum()) < LEAST_STATIONS:
            raise DownwarpError(
                "{transect}: {count} stations carry a plate (deflection_m); it takes at least {least}.",
                transect=self.name,
                count=int(self.on_plate.sum()),
                least=LEAST_STATIONS,
            )

    @property
    def on_plate(self) -> np.ndarray:
        """Stations that carry the plate, bool."""
        return np.isfinite(self.deflection)

    def _on_plate(self, values: np.ndarray, what: str) -> np.ndarray:
        """Values on the plate, gaps bridged; raises DownwarpError where there are none."""
        at, values = self.distance[self.on_plate], values[self.on_plate]
        known = np.isfinite(values)
        if not known.any():
            raise DownwarpError(
                "{transect}: {what} holds no number where there is a plate.", transect=self.name, what=what
            )
        return np.interp(at, at[known], values[known])

    def largest_curvature(self) -> tuple[int, float, float]:
        """Index of the station of largest curvature, the curvature, 1/m, and the elastic thickness there, m."""
        size = np.where(self.on_plate & np.isfinite(self.curvature), np.abs(self.curvature), -1.0)
        index = int(np.argmax(size))
        if size[index] < 0:
            raise DownwarpError(
                "{transect}: curvature_per_m holds no number where there is a plate.", transect=self.name
            )
        thickness = float(self.thickness[index])
        if not np.isfinite(thickness):
            raise DownwarpError(
                "{transect}: te_km is empty; the plate's thickness was not resolved.", transect=self.name
            )
        return index, float(self.curvature[index]), thickness

    def section(self, crust: Crust, gravity: float, level: float | None = None) -> tuple[Section, tuple[str, ...]]:
        """The plate as bodies take it, and remarks. ``level``: reference level, m up; None where the load tells it."""
        at = self.distance[self.on_plate]
        predicted = self._on_plate(self.predicted, "predicted_m")
        deflection = self.deflection[self.on_plate]
        infill = self._on_plate(self.infill, "infill_kg_m3")
        remarks: tuple[str, ...] = ()
        relief = self.relief[self.on_plate]
        if not np.isfinite(relief).all():
            relief = np.where(np.isfinite(relief), relief, predicted)
            remarks += (say("where dem_m is empty the predicted surface is taken for the relief"),)
        load = np.nan_to_num(self.load[self.on_plate])
        under_load = load > 0
        if (load < 0).any():
            remarks += (say("the load was taken away: it does not attract, only the plate that rose does"),)
        if under_load.any() and level is None:
            found = reference_levels(relief[under_load], load[under_load], crust, gravity)
            level = float(np.median(found))
            spread = float(np.ptp(np.quantile(found, [0.05, 0.95])))
            if spread > LEVEL_SPREAD:
                remarks += (
                    say(
                        "load_mpa does not follow from dem_m with RHO_LOAD {load:g}, RHO_WATER {water:g} kg/m3 and "
                        "GRAVITY {gravity:g} m/s2: give those that INPUT was made with",
                        load=crust.load,
                        water=crust.water,
                        gravity=gravity,
                    ),
                )
        section = Section(at, relief, predicted + deflection, deflection, infill, under_load, level or 0.0)
        return section, remarks

    def surface(self) -> tuple[np.ndarray, np.ndarray, np.ndarray | None]:
        """Distance (m), elevation (m up) and standard deviation (m, None where unknown) of what was fitted."""
        used = self.on_plate & (self.in_fit == 1) & np.isfinite(self.observed)
        return self.distance[used], self.observed[used], complete_sigma(self.sigma[used])

    def regional_coefficients(self) -> int:
        """Number of coefficients, 0 to 3, of the polynomial that the undeflected surface is.

        Raises DownwarpError where it is none.
        """
        at = self.distance[self.on_plate]
        surface = self._on_plate(self.predicted, "predicted_m") + self.deflection[self.on_plate]
        scaled = (at - at[0]) / (at[-1] - at[0])
        limit = 1e-6 * max(1.0, float(np.abs(surface).max()))
        for count in range(4):
            columns = scaled[:, None] ** np.arange(count)
            left = surface - columns @ np.linalg.lstsq(columns, surface, rcond=None)[0] if count else surface
            if np.abs(left).max() <= limit:
                return count
        raise DownwarpError(
            "{transect}: predicted_m plus deflection_m is no level, tilt or bow; INPUT takes stations of a fitted "
            "plate.",
            transect=self.name,
        )

    def support(self, elastic: Elastic, mantle: float) -> tuple[int, bool, bool]:
        """Kind of plate, and whether an end shear and an end moment act where it begins.

        A plate that runs on before its first station obeys w'' = s w' - p (w - q / k) there, with p and s of
        `plate.half_plate_stiffness`; a broken one does not, and has minus its end forces as shear and moment.
        """
        first = int(np.flatnonzero(self.on_plate)[0])
        if not np.isfinite([self.slope[first], self.curvature[first], self.moment[first], self.shear[first]]).all():
            raise DownwarpError(
                "{transect}: slope, curvature, moment or shear is empty where the plate begins.", transect=self.name
            )
        stiffness = (mantle - self.infill[first]) * elastic.gravity
        p = np.sqrt(stiffness / elastic.rigidity(self.thickness[first]))
        s = np.sqrt(2.0 * p)
        rest = np.nan_to_num(self.load[first]) / stiffness
        expected = s * self.slope[first] - p * (self.deflection[first] - rest)
        largest = np.nanmax(np.abs(self.curvature))
        if first == 0 and abs(self.curvature[first] - expected) <= 0.02 * largest:
            return CONTINUOUS, False, False
        shear = abs(self.shear[first]) > NEGLIGIBLE * np.nanmax(np.abs(self.shear))
        moment = abs(self.moment[first]) > NEGLIGIBLE * np.nanmax(np.abs(self.moment))
        return BROKEN, bool(shear), bool(moment)

    def other_constants(self, elastic: Elastic) -> str:
        """A remark where moment over curvature is not the rigidity of these constants; else empty."""
        bent = self.on_plate & (np.abs(self.curvature) > 0.2 * np.nanmax(np.abs(self.curvature)))
        if not bent.any():
            return ""
        with np.errstate(invalid="ignore", divide="ignore"):
            ratio = np.nanmedian(-self.moment[bent] / self.curvature[bent] / elastic.rigidity(self.thickness[bent]))
        if not np.isfinite(ratio) or abs(ratio - 1.0) <= AGREES:
            return ""
        return say(
            "moments in INPUT are {ratio:.3g} times those of YOUNG_GPA {young:g} and POISSON {poisson:g}: give "
            "the constants that INPUT was made with",
            ratio=ratio,
            young=elastic.young / 1e9,
            poisson=elastic.poisson,
        )


def reference_levels(relief, load, crust: Crust, gravity: float) -> np.ndarray:
    """Level, m up, on which relief (m up, above it) must stand to weigh ``load`` (Pa): `load.relief_load` turned
    round."""
    relief = np.asarray(relief, dtype=float)
    mass = crust.load * relief - crust.water * np.minimum(relief, 0.0) - np.asarray(load, dtype=float) / gravity
    submerged = mass / (crust.load - crust.water)
    return np.where(submerged <= 0.0, submerged, mass / crust.load)
