"""Transects: from the vertices of a line to evenly spaced stations, on the ellipsoid.

Between two vertices the path is the geodesic, whatever the CRS the line was drawn in, and distances are geodesic, so
that a line gives the same stations in every CRS. Longitudes are *unwrapped*: they run on past 180 degrees rather than
jump by 360. Azimuths are in degrees clockwise from north. Geodesics: Karney (2013), Algorithms for geodesics, Journal
of Geodesy 87, as pyproj.Geod carries them out.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from pyproj import Geod
from scipy.spatial import cKDTree

from . import check
from .by_pyproj import in_shape
from .errors import DownwarpError
from .wording import say

MOST_STATIONS = 200_000
"""Stations that one transect may have."""

_SAME_PLACE = 1e-3
"""Two positions closer than this, m, count as one: less than a millimetre, the direction between them is rounding."""

_SEARCH_INTERVALS = 20_000
"""Intervals into which a transect is cut to look up the leg that lies nearest to a point."""

_MOST_ITERATIONS = 50
_SETTLED = 1e-4
"""Step, m, below which the search for the foot of a point on a geodesic ends."""


@dataclass(frozen=True)
class Stations:
    """Evenly spaced positions along a transect, each array of shape (n,)."""

    distance: np.ndarray
    """Distance along the path from the first vertex, m, from 0 to the transect's length."""
    longitude: np.ndarray
    """Longitude, degrees, unwrapped."""
    latitude: np.ndarray
    """Latitude, degrees."""
    azimuth: np.ndarray
    """Direction of the path, degrees clockwise from north; at a vertex, halfway between those before and after it."""

    @property
    def step(self) -> float:
        """Distance between neighbouring stations, m."""
        return float(self.distance[-1] / (self.distance.size - 1))


@dataclass(frozen=True)
class Transect:
    """A line on the ellipsoid, from its first vertex to its last along geodesics.

    >>> transect = Transect("A", [[0.0, 0.0], [1.0, 0.0]], Geod(ellps="WGS84"))
    >>> round(transect.length, 1)
    111319.5
    >>> transect.stations(50e3).distance.size
    3
    """

    name: str
    """What errors and outputs call the transect."""
    vertices: np.ndarray
    """Longitude and latitude of the vertices, degrees, shape (vertices, 2); repeated vertices are dropped."""
    ellipsoid: Geod
    """The ellipsoid on which the vertices lie."""

    def __post_init__(self) -> None:
        vertices = check.finite_array(say("Transect {transect}", transect=self.name), self.vertices)
        if vertices.ndim != 2 or vertices.shape[1] != 2:
            raise DownwarpError(
                "Transect {transect} has vertices of shape {shape}; it takes (n, 2).",
                transect=self.name,
                shape=vertices.shape,
            )
        if vertices.size and np.abs(vertices[:, 1]).max() > 90.0:
            raise DownwarpError(
                "Transect {transect} has a latitude of {latitude:g} degrees; latitudes run from -90 to 90.",
                transect=self.name,
                latitude=vertices[np.abs(vertices[:, 1]).argmax(), 1],
            )
        if len(vertices) > 1:
            longitude, latitude = vertices.T
            _, _, lengths = self._inverse(longitude[:-1], latitude[:-1], longitude[1:], latitude[1:])
            vertices = vertices[np.concatenate([[True], lengths > _SAME_PLACE])]
        if len(vertices) < 2:
            raise DownwarpError(
                "Transect {transect} has fewer than two different vertices, hence no length.", transect=self.name
            )
        object.__setattr__(
            self, "vertices", np.column_stack([np.unwrap(vertices[:, 0], period=360.0), vertices[:, 1]])
        )

    @cached_property
    def _legs(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Of the geodesic from each vertex to the next: azimuth at its start and at its end (degrees), length (m)."""
        longitude, latitude = self.vertices.T
        start, back, lengths = self._inverse(longitude[:-1], latitude[:-1], longitude[1:], latitude[1:])
        return start, back + 180.0, lengths

    @cached_property
    def vertex_distances(self) -> np.ndarray:
        """Distance of each vertex along the path, m, shape (vertices,)."""
        return np.concatenate([[0.0], np.cumsum(self._legs[2])])

    @property
    def length(self) -> float:
        """Length of the path, m."""
        return float(self.vertex_distances[-1])

    @cached_property
    def greatest_turn(self) -> float:
        """Greatest difference of direction between any two parts of the path, degrees; 0 for a single geodesic.

        Turns at the vertices are added up with their signs, so that a curve drawn with many small turns counts as the
        bend that it is. (Azimuths also change along a geodesic, which is straight: this is no turn.)
        """
        start, end, _ = self._legs
        direction = np.concatenate([[0.0], np.cumsum(_between_half_turns(start[1:] - end[:-1]))])
        return float(np.ptp(direction))

    def stations(self, step: float) -> Stations:
        """Stations every ``step`` m or nearly so: the length is cut into round(length / step) equal parts, at least 1.

        Raises DownwarpError where the step is not above 0 or makes more than `MOST_STATIONS` stations.
        """
        step = check.number("STEP_KM", step / 1e3, above=0) * 1e3
        # Rounded first: the length of the reversed line may differ in its last digit, its stations may not.
        intervals = max(1.0, np.round(np.round(self.length / step, 6)))
        if intervals + 1 > MOST_STATIONS:
            raise DownwarpError(
                "STEP_KM is {step:g}: transect {transect} of {length:.1f} km would have {count:.0f} stations; it may "
                "have {most}.",
                step=step / 1e3,
                transect=self.name,
                length=self.length / 1e3,
                count=intervals + 1,
                most=MOST_STATIONS,
            )
        distance = np.linspace(0.0, self.length, int(intervals) + 1)
        before = self._leg_at(distance - _SAME_PLACE)
        after = self._leg_at(distance + _SAME_PLACE)
        longitude, latitude, azimuth = self._on_leg(after, distance)
        corner = np.flatnonzero(before != after)
        if corner.size:
            _, _, arriving = self._on_leg(before[corner], distance[corner])
            azimuth[corner] = arriving + 0.5 * _between_half_turns(azimuth[corner] - arriving)
        longitude = np.unwrap(longitude, period=360.0)
        longitude += 360.0 * np.round((self.vertices[0, 0] - longitude[0]) / 360.0)
        return Stations(distance, longitude, latitude, azimuth % 360.0)

    def offset(self, stations: Stations, across: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Longitude and latitude, degrees, of points beside the stations, each of shape (m, n).

        ``across``: (m,) distances, m, along the geodesic perpendicular to the path; positive to the right of it as
        seen along the transect, negative to the left.
        """
        across = check.finite_array("across", across, ndim=1)
        shape = (across.size, stations.distance.size)
        longitude, latitude, azimuth, distance = (
            np.broadcast_to(values, shape).ravel()
            for values in (stations.longitude, stations.latitude, stations.azimuth + 90.0, across[:, None])
        )
        beside, latitude, _ = self._direct(longitude, latitude, azimuth, distance)
        return _near(beside, longitude).reshape(shape), latitude.reshape(shape)

    def project(self, longitude: np.ndarray, latitude: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Distance along the path and across it, m, of points given in degrees, each of the shape of the input.

        Across is the geodesic distance to the nearest point of the path, positive to the right, negative to the left.
        Beyond its ends the path is thought to run on along its first and last geodesic: there the distance along is
        negative or exceeds the length. Where the nearest place of a bent path is a vertex, that vertex is the foot.
        Points that are not finite yield NaN.
        """
        longitude, latitude = np.broadcast_arrays(np.asarray(longitude, dtype=float), np.asarray(latitude, dtype=float))
        shape = longitude.shape
        along = np.full(longitude.size, np.nan)
        across = np.full(longitude.size, np.nan)
        use = np.flatnonzero(np.isfinite(longitude.ravel()) & (np.abs(latitude.ravel()) <= 90.0))
        if use.size:
            along[use], across[use] = self._project(longitude.ravel()[use], latitude.ravel()[use])
        return along.reshape(shape), across.reshape(shape)

    def _project(self, longitude: np.ndarray, latitude: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        positions, tree = self._search
        _, nearest = tree.query(self._in_space(longitude, latitude))
        leg = self._leg_at(positions[nearest])
        starts, last = self.vertex_distances, len(self.vertices) - 2
        # The sample found may sit on a vertex or just beyond it: its neighbours are candidates, too.
        candidates = np.clip(leg + np.array([[0], [-1], [1]]), 0, last)
        feet = [
            self._foot(longitude, latitude, candidate, positions[nearest], starts[candidate], starts[candidate + 1])
            for candidate in candidates
        ]
        best = np.argmin([np.abs(across) for _, across in feet], axis=0)
        points = np.arange(best.size)
        leg = candidates[best, points]
        along = np.array([foot for foot, _ in feet])[best, points]
        across = np.array([across for _, across in feet])[best, points]
        beyond = np.flatnonzero((along <= 0.0) | (along >= self.length))
        if beyond.size:
            low = np.where(along[beyond] <= 0.0, -np.inf, starts[leg[beyond]])
            high = np.where(along[beyond] <= 0.0, starts[leg[beyond] + 1], np.inf)
            along[beyond], across[beyond] = self._foot(
                longitude[beyond], latitude[beyond], leg[beyond], along[beyond], low, high
            )
        return along, across

    def _foot(self, longitude, latitude, leg, along, low, high) -> tuple[np.ndarray, np.ndarray]:
        """Foot of points on the geodesics of their legs within the bounds, and signed distance from it, m.

        The along-track distance of the sphere, taken from foot to point, is repeated from the foot so found until the
        direction to the point is at right angles to the path on the ellipsoid.
        """
        radius = self.ellipsoid.a
        along = np.clip(along, low, high)
        for _ in range(_MOST_ITERATIONS):
            there, across, angle = self._seen_from(longitude, latitude, leg, along)
            angle = np.radians(angle)
            step = radius * np.arctan2(np.sin(there / radius) * np.cos(angle), np.cos(there / radius))
            moved = np.clip(along + step, low, high)
            settled = np.abs(moved - along).max() < _SETTLED
            along = moved
            if settled:
                break
        _, across, _ = self._seen_from(longitude, latitude, leg, along)
        return along, across

    def _seen_from(self, longitude, latitude, leg, along) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Of points seen from places on the path: distance, the same signed by side (m), and angle to the right of
        the path (degrees)."""
        foot_longitude, foot_latitude, azimuth = self._on_leg(leg, along)
        towards, _, distance = self._inverse(foot_longitude, foot_latitude, longitude, latitude)
        angle = _between_half_turns(towards - azimuth)
        return distance, np.where(angle < 0.0, -distance, distance), angle

    @cached_property
    def _search(self) -> tuple[np.ndarray, cKDTree]:
        """Distances of positions close together along the path, vertices among them, and a search tree of them."""
        positions = np.union1d(np.linspace(0.0, self.length, _SEARCH_INTERVALS + 1), self.vertex_distances)
        longitude, latitude, _ = self._on_leg(self._leg_at(positions), positions)
        return positions, cKDTree(self._in_space(longitude, latitude))

    def _in_space(self, longitude: np.ndarray, latitude: np.ndarray) -> np.ndarray:
        """Cartesian positions of points on the ellipsoid, m, shape (n, 3)."""
        longitude, latitude = np.radians(longitude), np.radians(latitude)
        normal = self.ellipsoid.a / np.sqrt(1.0 - self.ellipsoid.es * np.sin(latitude) ** 2)
        return np.column_stack([
            normal * np.cos(latitude) * np.cos(longitude),
            normal * np.cos(latitude) * np.sin(longitude),
            normal * (1.0 - self.ellipsoid.es) * np.sin(latitude),
        ])

    def _leg_at(self, distance: np.ndarray) -> np.ndarray:
        """Index of the leg on which each distance lies."""
        return np.clip(np.searchsorted(self.vertex_distances, distance, side="right") - 1, 0, len(self.vertices) - 2)

    def _on_leg(self, leg: np.ndarray, distance: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Longitude, latitude and path azimuth, degrees, at distances along the path on given legs or beyond."""
        longitude, latitude = self.vertices[leg].T
        longitude, latitude, back = self._direct(
            longitude, latitude, self._legs[0][leg], distance - self.vertex_distances[leg]
        )
        return longitude, latitude, back + 180.0

    def _inverse(self, *places: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Azimuth at the start, back azimuth at the end, and length of geodesics between places (`Geod.inv`)."""
        azimuth, back, length = in_shape(self.ellipsoid.inv, *places)
        return azimuth, back, length

    def _direct(self, *places: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Longitude, latitude and back azimuth at the ends of geodesics of given azimuth and length (`Geod.fwd`)."""
        longitude, latitude, back = in_shape(self.ellipsoid.fwd, *places)
        return longitude, latitude, back


def _between_half_turns(angle: np.ndarray) -> np.ndarray:
    """Angles, degrees, brought to -180 up to 180."""
    return (np.asarray(angle) + 180.0) % 360.0 - 180.0


def _near(longitude: np.ndarray, reference: np.ndarray) -> np.ndarray:
    """Longitudes moved by whole turns so that each lies within half a turn of its reference."""
    return longitude + 360.0 * np.round((reference - longitude) / 360.0)
