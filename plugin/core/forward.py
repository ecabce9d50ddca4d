"""The forward model of a transect: a plate of one elastic thickness under its load, and the regional surface.

    predicted surface (m up) = level + tilt x + bow x^2 - w(x)

The plate carries the relief load and, at its break, an end shear V0 and an end moment M0. On a continuous plate the
end shear acts as a line load at the place of the break, and there is no end moment.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from .elastic import Elastic, flexural_parameter
from .errors import DownwarpError
from .plate import BROKEN as FREE_END
from .plate import CONTINUES, Bending, Plate
from .settings import BROKEN, RHO_AIR

ELEMENTS_PER_ALPHA = 10
"""Elements in a flexural parameter: deflection is then right to some 1e-6 of its largest value."""
ONE_MESH = 1.6
"""Ratio of elastic thicknesses, largest over least, of plates that share their nodes: it changes alpha by 1.4."""
MOST_ELEMENTS = 200_000
"""Elements of a plate: round the Earth at a flexural parameter of a few kilometres."""
FILL_ROUNDS = 30
"""Rounds after which infill that follows the deflection is given up as not converging."""


@dataclass(frozen=True)
class SinkingFill:
    """Infill that lies only where the plate sinks, up to a level; a fluid (water or air) lies elsewhere."""

    fluid_stiffness: np.ndarray
    """k, Pa/m, of each interval between stations where the fluid lies on the plate, shape (n - 1,)."""
    depth: np.ndarray
    """Deflection, m, from which the infill's level is above the plate, shape (n - 1,): 0 where the level is not below
    the undeflected surface."""


@dataclass(frozen=True)
class TransectModel:
    """Everything that does not change between trial thicknesses."""

    distance: np.ndarray
    """Stations, m, shape (n,)."""
    load: np.ndarray
    """Load at the stations, Pa, positive down, linear between them, shape (n,)."""
    stiffness: np.ndarray
    """k of each interval between stations, Pa/m, shape (n - 1,)."""
    elastic: Elastic
    in_plane: float = 0.0
    """N/m, compression positive."""
    kind: int = BROKEN
    """CONTINUOUS or BROKEN."""
    shear: bool = False
    """Whether an end shear acts at the break."""
    moment: bool = False
    """Whether an end moment acts at the break of a broken plate."""
    regional: int = 1
    """Number of regional coefficients: 0 none, 1 level, 2 and tilt, 3 and bow."""
    fill: SinkingFill | None = None
    start: int | None = None
    """What holds the plate where it begins: a support of `plate`, or None for as its kind says."""
    finish: int = CONTINUES
    """What holds the plate at the line's end."""

    @property
    def end_forces(self) -> tuple[str, ...]:
        """Names of the end forces in the order of their columns."""
        moment = self.moment and self.kind == BROKEN
        return ("end_shear",) * self.shear + ("end_moment",) * moment

    @cached_property
    def _jumps(self) -> np.ndarray:
        """Stations at which the stiffness jumps, m."""
        return self.distance[1:-1][np.diff(self.stiffness) != 0]

    def thickness_at(self, thickness: float, break_position: float, positions: np.ndarray) -> np.ndarray:
        """Elastic thickness, m, at positions, m: a plate of one thickness has it everywhere."""
        return np.full(np.shape(positions), thickness)

    def rigidity(self, thickness: float, break_position: float, nodes: np.ndarray) -> np.ndarray:
        """Flexural rigidity, N m, of a plate on ``nodes``, shaped as `Plate` takes it."""
        return self.elastic.rigidity(thickness)

    def thinnest(self, thickness: float, break_position: float, places: np.ndarray) -> np.ndarray:
        """Least elastic thickness, m, between each of ``places`` (jumps among them) and the next, for elements follow
        it."""
        return self.thickness_at(thickness, break_position, 0.5 * (places[1:] + places[:-1]))

    def thickness_jumps(self, break_position: float) -> np.ndarray:
        """Places, m, at which the thickness jumps: none."""
        return np.zeros(0)

    def nodes(self, thickness: float, break_position: float) -> np.ndarray:
        """Nodes of the plate, m: from its break on a broken plate, else all along the line.

        Their distance follows the flexural parameter, whatever the stations: shorter elements gain nothing and cost
        digits. Among them are the break, where forces act there, and the places where stiffness or thickness jump.
        """
        begin = break_position if self.kind == BROKEN else float(self.distance[0])
        end = float(self.distance[-1])
        if not begin < end:
            raise DownwarpError(
                "The break at {break_position:g} km leaves no plate before the line's end at {end:g} km.",
                break_position=break_position / 1e3,
                end=end / 1e3,
            )
        fixed = np.union1d(self._jumps, self.thickness_jumps(break_position))
        fixed = fixed[(fixed > begin) & (fixed < end)]
        if self.kind != BROKEN and self.shear and begin < break_position < end:
            fixed = np.union1d(fixed, break_position)
        fixed = np.concatenate([[begin], fixed, [end]])
        gaps = np.diff(fixed)
        thinnest = self.thinnest(thickness, break_position, fixed)
        alpha = flexural_parameter(self.elastic.rigidity(thinnest), self.stiffness.max())
        wanted = np.ceil(gaps * (ELEMENTS_PER_ALPHA / alpha))
        if not wanted.sum() <= MOST_ELEMENTS:
            raise DownwarpError(
                "A line of {length:g} km is too long for a plate as thin as {thinnest:g} km: that takes "
                "{elements:.3g} elements, and at most {most} are taken.",
                length=(end - begin) / 1e3,
                thinnest=thinnest.min() / 1e3,
                elements=wanted.sum(),
                most=MOST_ELEMENTS,
            )
        parts = wanted.astype(int)
        first = np.repeat(fixed[:-1], parts)
        place = np.arange(parts.sum()) - np.repeat(np.cumsum(parts) - parts, parts)
        return np.append(first + place * np.repeat(gaps / parts, parts), end)

    def plate(self, thickness: float, break_position: float) -> Plate:
        """The plate of one elastic thickness (m) with its break (m)."""
        return self._plates(np.array([thickness]), break_position)[0]

    def _plates(self, thicknesses: np.ndarray, break_position: float) -> list[Plate]:
        """The plates of several thicknesses (m), all on the nodes that the thinnest takes."""
        nodes = self.nodes(float(thicknesses.min()), break_position)
        if np.ptp(self.stiffness) == 0:
            k = np.asarray(self.stiffness[0])
        else:
            k = self.stiffness[self._interval(0.5 * (nodes[1:] + nodes[:-1]))]
        by_kind = FREE_END if self.kind == BROKEN else CONTINUES
        start = by_kind if self.start is None else self.start
        rigidities = (self.rigidity(each, break_position, nodes) for each in thicknesses.tolist())
        return [Plate(nodes, rigidity, k, self.in_plane, start, self.finish) for rigidity in rigidities]

    def _interval(self, positions: np.ndarray) -> np.ndarray:
        return np.clip(np.searchsorted(self.distance, positions, side="right") - 1, 0, self.distance.size - 2)

    def force_vectors(self, plate: Plate, break_position: float) -> np.ndarray:
        """Nodal forces of a unit end shear (N/m) and a unit end moment (N), as far as they act, (2 n, forces)."""
        vectors = np.zeros((2 * plate.nodes.size, 0))
        at = 0 if self.kind == BROKEN else int(np.argmin(np.abs(plate.nodes - break_position)))
        for name in self.end_forces:
            if name == "end_moment":
                vector = plate.end_vector(moment=1.0)
            else:
                vector = plate.point_vector(at, force=1.0)
            vectors = np.hstack([vectors, vector])
        return vectors

    def regional_columns(self, positions: np.ndarray) -> np.ndarray:
        """Powers 0, 1, 2 of distance in m, as many as the regional has coefficients, shape (positions, regional)."""
        return np.asarray(positions, dtype=float)[:, None] ** np.arange(self.regional)

    def columns(
        self, thicknesses: np.ndarray, break_position: float, positions: np.ndarray
    ) -> tuple[np.ndarray, np.ndarray]:
        """Offsets (T, positions) and columns (T, positions, p) of the predicted surface, linear in its p coefficients,
        for elastic thicknesses (T,), m.

        Coefficients: end shear (N/m), end moment (N), as far as they act; level (m), tilt (m/m), bow (m/m2). Plates of
        about one thickness share their nodes, and with them all that does not depend on the thickness.
        """
        thicknesses = np.asarray(thicknesses, dtype=float)
        offsets, columns = self._blank(thicknesses.size, positions)
        place = np.floor(np.log(thicknesses / thicknesses.min()) / np.log(ONE_MESH) + 1e-9)
        for group in (np.flatnonzero(place == each) for each in np.unique(place)):
            plates = self._plates(thicknesses[group], break_position)
            load = self._load_vectors(plates)
            forces = self.force_vectors(plates[0], break_position)
            bent = [plate.solve(np.hstack([one, forces])).unknowns for plate, one in zip(plates, load)]
            surface = -Bending(plates[0], np.hstack(bent)).at(positions)
            surface = np.moveaxis(surface.reshape(surface.shape[0], group.size, 1 + forces.shape[1]), 0, 1)
            offsets[group] = surface[:, :, 0]
            columns[group, :, : forces.shape[1]] = surface[:, :, 1:]
        return offsets, columns

    def _blank(self, trials: int, positions: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Offsets of 0, and columns that hold the regional alone, for so many trials."""
        regional = self.regional_columns(positions)
        columns = np.zeros((trials, regional.shape[0], len(self.end_forces) + self.regional))
        columns[:, :, len(self.end_forces) :] = regional
        return np.zeros(columns.shape[:2]), columns

    def _load_vectors(self, plates: list[Plate]) -> list[np.ndarray]:
        """Nodal forces of the load on plates that have the same nodes, each (2 n, 1)."""
        if not self.load.any():
            return [np.zeros((2 * plates[0].nodes.size, 1))] * len(plates)
        at, load = self._load_knots
        within = plates[0].load_vector(load, beyond=False, at=at)
        return [within + plate.beyond_vector(load[:1], load[-1:]) for plate in plates]

    @cached_property
    def _load_knots(self) -> tuple[np.ndarray, np.ndarray]:
        """Stations between which the load is linear, m, and the load there, Pa: of a stretch without load, its ends."""
        loaded = self.load != 0
        kept = loaded.copy()
        kept[1:] |= loaded[:-1]
        kept[:-1] |= loaded[1:]
        kept[[0, -1]] = True
        return self.distance[kept], self.load[kept]

    def bend(self, thickness: float, break_position: float, forces: np.ndarray) -> Bending:
        """The bent plate under its load and end forces (in the order of `end_forces`)."""
        plate = self.plate(thickness, break_position)
        end_forces = self.force_vectors(plate, break_position) @ np.reshape(forces, (-1, 1))
        return plate.bend(self.load, end_forces, at=self.distance)

    def filled(self, thickness: float, break_position: float, forces: np.ndarray) -> tuple[TransectModel, bool]:
        """This model with infill only where the plate sinks under its load and ``forces``; False if not converged.

        Infill of stiffness k_i in place of a fluid of stiffness k_f, once w exceeds the depth d, presses with
        k_f w - (k_f - k_i)(w - d): the plate floats on k_i and carries (k_f - k_i) d less.
        """

        def sunk(model: TransectModel, at: np.ndarray) -> np.ndarray:
            return model.bend(thickness, break_position, forces).at(at)[:, 0]

        return self.filled_where(sunk, break_position)

    def filled_where(
        self, sunk: Callable[[TransectModel, np.ndarray], np.ndarray], break_position: float
    ) -> tuple[TransectModel, bool]:
        """The same with the deflection that ``sunk`` gives for a model at positions on the plate, m; the set of filled
        intervals is found by rounds of solving and marking."""
        if self.fill is None:
            return self, True
        middle = 0.5 * (self.distance[1:] + self.distance[:-1])
        on_plate = middle >= (break_position if self.kind == BROKEN else -np.inf)
        sinking = np.zeros(middle.size, dtype=bool)
        seen: list[bytes] = []
        model = self._with_fill(sinking)
        for _ in range(FILL_ROUNDS):
            deflection = np.zeros(middle.size)
            deflection[on_plate] = sunk(model, middle[on_plate])
            now = deflection > self.fill.depth
            if (now == sinking).all():
                return model, True
            if now.tobytes() in seen:
                return model, False
            seen.append(now.tobytes())
            sinking = now
            model = self._with_fill(sinking)
        return model, False

    def _with_fill(self, sinking: np.ndarray) -> TransectModel:
        fill = self.fill
        if fill is None:
            return self
        stiffness = np.where(sinking, self.stiffness, fill.fluid_stiffness)
        relief = np.where(sinking, (fill.fluid_stiffness - self.stiffness) * fill.depth, 0.0)
        at_stations = 0.5 * (np.append(relief, relief[-1]) + np.insert(relief, 0, relief[0]))
        return replace(self, stiffness=stiffness, load=self.load - at_stations, fill=None)


def infill_stiffness(ground_share: np.ndarray, rho_mantle: float, rho_infill: float, rho_under: float, gravity):
    """k of intervals, Pa/m, of which ``ground_share`` (n,) lies on the load's ground: rho_under there, else rho_infill."""
    return (rho_mantle - rho_infill - ground_share * (rho_under - rho_infill)) * gravity


def fluid_density(reference_level: float | None, rho_water: float) -> float:
    """Density of what lies on an unfilled plate, kg/m3: water below sea level, air above."""
    return rho_water if reference_level is not None and reference_level < 0 else RHO_AIR
