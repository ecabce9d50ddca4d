"""Laying transects: across a guide line (a front, a trench axis) at a spacing, or round a centre.

All lengths and directions are geodesic on the ellipsoid. Directions along the guide are compared by carrying them along
it: a geodesic is straight, and only vertices turn. The strike at a place is the mean direction of the guide around it,
weighted by a triangle that falls from the place to nothing at half the smoothing length on either side.

Where transects would cross, for the guide bends more sharply than they are long, their strike is smoothed over longer
and longer stretches until they do not, as long as this turns none of them by more than `MOST_TURN` from the front's
trend; where that is not enough they keep the strike that was asked for, and the crossings are reported.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from pyproj import Geod
from scipy.spatial import cKDTree

from . import check
from .by_pyproj import in_shape
from .errors import DownwarpError
from .transect import Transect
from .wording import listed, say

LEFT_TO_RIGHT, RIGHT_TO_LEFT = range(2)
"""Sides, in the order of the key SIDE: which way a transect crosses the guide as seen along it."""

MOST_TRANSECTS = 20_000
"""Transects that one guide or centre may get."""
MOST_TURN = 45.0
"""Angle, degrees, between a transect and the normal to the front's trend, up to which it may be turned so that it
crosses no other. The trend is the strike smoothed over the length of a transect."""

_OBLIQUE = 15.0
"""Turn, degrees, from which a remark warns: widths grow by 1 / cos, here 4 %, and thickness with their 4/3 power."""
_LONGEST = 5_000e3
"""Longest reach of a transect to one side, m."""
_VERTEX_EVERY = 50e3
"""Vertices are no farther apart than this, m: a line drawn straight between them keeps within some 100 m of the
geodesic up to a latitude of 60 degrees."""
_GROWTH = 1.25
"""Factor by which the smoothing length of crossing transects grows in each round."""
_ROUNDS = 60
_PAIRS_AT_ONCE = 500_000
"""Pairs of transects that are tested for crossing in one go, to bound memory."""


@dataclass(frozen=True)
class LaidTransect:
    """One transect as laid."""

    vertices: np.ndarray
    """Longitude (unwrapped) and latitude, degrees, shape (n, 2), along one geodesic."""
    along: float | None
    """Distance along the guide at which the transect crosses it, m; None round a centre."""
    azimuth: float
    """Direction at the guide or centre, degrees clockwise from north, 0 to below 360."""
    turned: float = 0.0
    """Angle, degrees clockwise, by which it was turned so that it crosses no other."""
    crosses: tuple[int, ...] = ()
    """Indices of the transects that it crosses."""

    @property
    def remark(self) -> str:
        """What should be known about this transect, in words; empty where there is nothing. Numbers count from 1."""
        parts = []
        if abs(self.turned) >= 0.5:
            told = {"degrees": abs(self.turned), "side": say("clockwise") if self.turned > 0 else say("anticlockwise")}
            if abs(self.turned) < _OBLIQUE:
                words = say("turned {degrees:.0f} degrees {side} so that it crosses no other transect", **told)
            else:
                words = say(
                    "turned {degrees:.0f} degrees {side} so that it crosses no other transect, hence oblique to the "
                    "front: widths along it are stretched, and a plate seems thicker",
                    **told,
                )
            parts.append(words)
        if self.crosses:
            shown = ", ".join(str(index + 1) for index in self.crosses[:5])
            more = say(" and {count} more", count=len(self.crosses) - 5) if len(self.crosses) > 5 else ""
            parts.append(
                say(
                    "crosses transect {shown}{more}: the front bends more sharply than the transects are long",
                    shown=shown,
                    more=more,
                )
            )
        return listed(parts, "; ")


def lay_across(
    guide: Transect,
    spacing: float,
    before: float,
    after: float,
    side: int = LEFT_TO_RIGHT,
    smoothing: float = 0.0,
) -> tuple[LaidTransect, ...]:
    """Transects at right angles to the smoothed strike of ``guide``, from its start on every ``spacing`` m.

    Each starts ``before`` m ahead of the guide and ends ``after`` m beyond it, both along one geodesic. ``side``:
    whether it runs from the guide's left to its right or back. ``smoothing``: length, m, over which the strike is
    averaged; 0 takes the local direction (at a vertex, halfway between those before and after it).

    Raises DownwarpError where a length is out of range or where there would be more than `MOST_TRANSECTS`.

    >>> guide = Transect("front", [[0.0, 0.0], [0.0, 1.0]], Geod(ellps="WGS84"))
    >>> laid = lay_across(guide, 50e3, before=0.0, after=100e3)
    >>> len(laid), [transect.azimuth for transect in laid]
    (3, [90.0, 90.0, 90.0])
    """
    spacing = check.number("SPACING_KM", spacing / 1e3, above=0) * 1e3
    before = check.number("BEFORE_KM", before / 1e3, at_least=0, at_most=_LONGEST / 1e3) * 1e3
    after = check.number("AFTER_KM", after / 1e3, at_least=0, at_most=_LONGEST / 1e3) * 1e3
    smoothing = check.number("SMOOTH_KM", smoothing / 1e3, at_least=0) * 1e3
    if before + after <= 0:
        raise DownwarpError("BEFORE_KM and AFTER_KM are both 0: the transects would have no length.")
    if side not in (LEFT_TO_RIGHT, RIGHT_TO_LEFT):
        raise DownwarpError("SIDE is {side!r}; it takes 0 (left to right) or 1 (right to left).", side=side)
    count = np.floor(guide.length / spacing + 1e-9) + 1
    if count > MOST_TRANSECTS:
        raise DownwarpError(
            "SPACING_KM is {spacing:g}: the guide {guide} of {length:.1f} km would get {count:.0f} transects; it may "
            "get {most}.",
            spacing=spacing / 1e3,
            guide=guide.name,
            length=guide.length / 1e3,
            count=count,
            most=MOST_TRANSECTS,
        )
    strike = _Strike(guide, np.arange(int(count)) * spacing)
    across = 90.0 if side == LEFT_TO_RIGHT else -90.0
    lengths = np.full(strike.along.size, smoothing)
    asked = strike.azimuth(lengths) + across
    azimuth, pairs = _untangle(strike, lengths, asked, across, before, after, spacing)
    crosses: list[list[int]] = [[] for _ in strike.along]
    for first, second in pairs.tolist():
        crosses[first].append(second)
        crosses[second].append(first)
    reach = np.union1d(_cut(-before), _cut(after))
    vertices = _along_geodesics(guide.ellipsoid, strike.longitude, strike.latitude, azimuth, reach)
    turned = _half_turns(azimuth - asked)
    return tuple(
        LaidTransect(line, float(at), float(direction), float(turn), tuple(sorted(others)))
        for line, at, direction, turn, others in zip(vertices, strike.along, azimuth % 360.0, turned, crosses)
    )


def lay_round(
    longitude: float, latitude: float, ellipsoid: Geod, directions: int, radius: float, first: float = 0.0
) -> tuple[LaidTransect, ...]:
    """Transects from a centre (degrees) outwards, ``radius`` m long, in equally spaced directions.

    ``first``: azimuth of the first one, degrees clockwise from north. Raises DownwarpError on input out of range.

    >>> [transect.azimuth for transect in lay_round(10.0, 50.0, Geod(ellps="WGS84"), 4, 200e3)]
    [0.0, 90.0, 180.0, 270.0]
    """
    longitude = check.number(say("longitude of the centre"), longitude)
    latitude = check.number(say("latitude of the centre"), latitude, above=-90, below=90)
    if check.number("DIRECTIONS", directions, at_least=1, at_most=MOST_TRANSECTS) != int(directions):
        raise DownwarpError("DIRECTIONS is {directions:g}; it takes a whole number.", directions=directions)
    radius = check.number("RADIUS_KM", radius / 1e3, above=0, at_most=_LONGEST / 1e3) * 1e3
    azimuth = (
        check.number(say("first direction"), first) + np.arange(int(directions)) * 360.0 / int(directions)
    ) % 360.0
    reach = _cut(radius)
    place = np.full(azimuth.size, longitude), np.full(azimuth.size, latitude)
    lines = _along_geodesics(ellipsoid, *place, azimuth, reach)
    return tuple(LaidTransect(line, None, float(direction)) for line, direction in zip(lines, azimuth))


class _Strike:
    """Places along a guide, and its direction there smoothed over any length.

    With u(t) the direction at distance t along the guide as a complex number of size 1 (0 outside the guide), F its
    integral and G that of F, the triangle-weighted mean over s - h to s + h is [G(s + h) - 2 G(s) + G(s - h)] / h^2.
    """

    def __init__(self, guide: Transect, along: np.ndarray) -> None:
        longitude, latitude = guide.vertices.T
        start, back, length = in_shape(guide.ellipsoid.inv, longitude[:-1], latitude[:-1], longitude[1:], latitude[1:])
        self.along = along
        self.ellipsoid = guide.ellipsoid
        self._knots = guide.vertex_distances
        turn = np.exp(1j * np.radians(start[1:] - (back[:-1] + 180.0)))
        self._unit = np.cumprod(np.concatenate([[1.0 + 0.0j], turn]))
        self._once = np.concatenate([[0.0], np.cumsum(self._unit * length)])
        steps = self._once[:-1] * length + 0.5 * self._unit * length**2
        self._twice = np.concatenate([[0.0], np.cumsum(steps)])
        leg = self._leg(along)
        into = along - self._knots[leg]
        at, self.latitude, behind = in_shape(guide.ellipsoid.fwd, longitude[leg], latitude[leg], start[leg], into)
        self.longitude = at + 360.0 * np.round((longitude[leg] - at) / 360.0)
        self._azimuth = behind + 180.0
        self._own = self._unit[leg]
        near = 1e-3  # m, to either side of a vertex
        self._local = self._unit[self._leg(along - near)] + self._unit[self._leg(along + near)]

    def _leg(self, distance: np.ndarray) -> np.ndarray:
        return np.clip(np.searchsorted(self._knots, distance, side="right") - 1, 0, self._knots.size - 2)

    def _second_integral(self, distance: np.ndarray) -> np.ndarray:
        leg = self._leg(distance)
        into = distance - self._knots[leg]
        inside = self._twice[leg] + self._once[leg] * into + 0.5 * self._unit[leg] * into**2
        beyond = self._twice[-1] + self._once[-1] * (distance - self._knots[-1])
        return np.where(distance < 0.0, 0.0, np.where(distance > self._knots[-1], beyond, inside))

    def azimuth(self, smoothing: np.ndarray) -> np.ndarray:
        """Direction of the guide, degrees clockwise from north, smoothed over a length (m) at each place.

        A millionth of the guide or less counts as no smoothing: rounding would show.
        """
        half = 0.5 * smoothing
        mean = (
            self._second_integral(self.along + half)
            - 2.0 * self._second_integral(self.along)
            + self._second_integral(self.along - half)
        )
        plain = (smoothing <= 1e-6 * self._knots[-1]) | (np.abs(mean) <= 1e-9 * half**2)
        direction = np.where(plain, self._local, mean)
        return self._azimuth + np.degrees(np.angle(direction * self._own.conj()))


def _untangle(
    strike: _Strike,
    smoothing: np.ndarray,
    asked: np.ndarray,
    across: float,
    before: float,
    after: float,
    spacing: float,
) -> tuple[np.ndarray, np.ndarray]:
    """Azimuths (n,) that let as few transects cross as `MOST_TURN` allows, and the pairs that still do, (pairs, 2)."""

    def crossings(azimuth: np.ndarray) -> np.ndarray:
        return _crossings(strike, azimuth, before, after)

    azimuth, lengths = asked, np.maximum(smoothing, spacing)
    trend = strike.azimuth(np.maximum(lengths, before + after)) + across
    pairs = crossings(azimuth)
    stuck = np.zeros(asked.size, dtype=bool)
    for _ in range(_ROUNDS):
        grow = _between(pairs, asked.size) & ~stuck
        if not grow.any():
            break
        longer = np.where(grow, lengths * _GROWTH, lengths)
        trial = np.where(grow, strike.azimuth(longer) + across, azimuth)
        off, off_now = np.abs(_half_turns(trial - trend)), np.abs(_half_turns(azimuth - trend))
        stuck |= ((off > MOST_TURN) & (off >= off_now) & grow) | (longer > 2.0 * strike.along[-1] + spacing)
        lengths = np.where(stuck, lengths, longer)
        azimuth = np.where(stuck, azimuth, trial)
        pairs = crossings(azimuth)
    # What turning did not free goes back to the strike asked for, and so does, in turn, what that crosses.
    while pairs.size:
        back = np.zeros(asked.size, dtype=bool)
        back[pairs.ravel()] = True
        back &= azimuth != asked
        if not back.any():
            break
        azimuth = np.where(back, asked, azimuth)
        pairs = crossings(azimuth)
    return azimuth, pairs


def _between(pairs: np.ndarray, count: int) -> np.ndarray:
    """Transects from the first to the second of each pair and one more to either side, (count,) bool."""
    steps = np.zeros(count + 1)
    np.add.at(steps, np.maximum(pairs[:, 0] - 1, 0), 1)
    np.add.at(steps, np.minimum(pairs[:, 1] + 2, count), -1)
    return np.cumsum(steps)[:-1] > 0


def _crossings(strike: _Strike, azimuth: np.ndarray, before: float, after: float) -> np.ndarray:
    """Pairs (i, j), i < j, of transects that cross, shape (pairs, 2).

    Tested as arcs of great circles between their ends, which on the sphere of geodetic latitudes stay within tens of
    metres of the geodesics: two arcs cross where each one's ends lie on both sides of the other's plane.
    """
    ends = []
    for distance in (-before, after):
        along = np.full(azimuth.size, distance)
        longitude, latitude, _ = in_shape(strike.ellipsoid.fwd, strike.longitude, strike.latitude, azimuth, along)
        ends.append(_on_unit_sphere(longitude, latitude))
    start, finish = ends
    middle = start + finish
    middle /= np.linalg.norm(middle, axis=1)[:, None]
    normal = np.cross(start, finish)
    half = 0.5 * np.arccos(np.clip((start * finish).sum(axis=1), -1.0, 1.0)).max()
    near = 2.0 * np.sin(min(half, 0.5 * np.pi)) * 1.001  # chord between the middles of arcs that can just meet
    pairs = cKDTree(middle).query_pairs(near, output_type="ndarray")
    found = [np.zeros((0, 2), dtype=int)]
    for chunk in np.array_split(pairs, max(1, -(-len(pairs) // _PAIRS_AT_ONCE))):
        first, second = chunk.T
        apart = [
            (normal[one] * start[other]).sum(axis=1) * (normal[one] * finish[other]).sum(axis=1) < 0.0
            for one, other in ((first, second), (second, first))
        ]
        found.append(chunk[apart[0] & apart[1]])
    return np.concatenate(found)


def _on_unit_sphere(longitude: np.ndarray, latitude: np.ndarray) -> np.ndarray:
    longitude, latitude = np.radians(longitude), np.radians(latitude)
    level = np.cos(latitude)
    return np.column_stack([level * np.cos(longitude), level * np.sin(longitude), np.sin(latitude)])


def _cut(length: float) -> np.ndarray:
    """Distances, m, from 0 to ``length`` (either sign) in equal parts of at most `_VERTEX_EVERY`."""
    return length * np.linspace(0.0, 1.0, max(1, int(np.ceil(abs(length) / _VERTEX_EVERY))) + 1)


def _along_geodesics(ellipsoid: Geod, longitude, latitude, azimuth, reach: np.ndarray) -> np.ndarray:
    """Vertices at distances ``reach`` (m, negative backwards) along geodesics through places (n,), (n, reach, 2)."""
    shape = (azimuth.size, reach.size)
    origin, *rest = (
        np.broadcast_to(values, shape).ravel()
        for values in (longitude[:, None], latitude[:, None], azimuth[:, None], reach)
    )
    there, up, _ = in_shape(ellipsoid.fwd, origin, *rest)
    there = np.unwrap(np.reshape(there, shape), period=360.0, axis=1)
    base = int(np.argmin(np.abs(reach)))
    there += 360.0 * np.round((longitude - there[:, base]) / 360.0)[:, None]
    return np.stack([there, np.reshape(up, shape)], axis=2)


def _half_turns(angle: np.ndarray) -> np.ndarray:
    """Angles, degrees, brought to -180 up to 180."""
    return (angle + 180.0) % 360.0 - 180.0
