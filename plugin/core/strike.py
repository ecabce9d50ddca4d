"""Order and distances of transects along strike.

Each transect stands for a place on a margin: its break, say. The step from one to the next is measured at right angles
to the mean of their directions, for a break may be found nearer to the line's start here than there, which takes nobody
along strike:

    step = s |sin(((a - t) + (b - u)) / 2)|

s: length of the geodesic between the two places, a and b: its azimuths at them, t and u: those of the transects. Steps
between parallel lines are their spacing.
"""

from __future__ import annotations

from collections import deque

import numpy as np
from pyproj import Geod

from . import check
from .by_pyproj import in_shape

LEAST_COMMON = 0.5
"""Length of the mean of all transects' directions, as unit vectors, below which they have no strike in common: 0 round a
centre, 0.64 on a margin that turns by 180 degrees."""


def along_strike(
    longitude: np.ndarray, latitude: np.ndarray, azimuth: np.ndarray, ellipsoid: Geod
) -> tuple[np.ndarray, np.ndarray | None]:
    """Order (n,) of transects along strike and, in their own order, the distance of each from the first, m, (n,).

    ``longitude``, ``latitude``: their places, degrees; ``azimuth``: their directions there, degrees clockwise from
    north, in which lines may be drawn either way; all (n,). Neighbours are those between which the step is short; that
    end is 0 whose transect comes earlier in the input. Where the transects have no strike in common, as round a centre,
    they stay in order and the distance is None.

    >>> order, distance = along_strike([3.0, 1.0, 2.0], [0.0, 0.0, 0.4], [0.0, 0.0, 0.0], Geod(ellps="WGS84"))
    >>> order.tolist(), np.round(distance / 1e3).tolist()
    ([0, 2, 1], [0.0, 223.0, 111.0])
    """
    longitude, latitude, azimuth = (
        check.finite_array(name, values, ndim=1)
        for name, values in (("longitude", longitude), ("latitude", latitude), ("azimuth", azimuth))
    )
    azimuth = _drawn_one_way(azimuth)
    if azimuth.size > 1 and _likeness(azimuth) < LEAST_COMMON:
        return np.arange(azimuth.size), None
    order = _chain(longitude, latitude, azimuth)
    distance = np.zeros(order.size)
    if order.size > 1:
        here, there = order[:-1], order[1:]
        places = longitude[here], latitude[here], longitude[there], latitude[there]
        start, back, length = in_shape(ellipsoid.inv, *places)
        first, last = start - azimuth[here], back + 180.0 - azimuth[there]
        middle = first + 0.5 * ((last - first + 180.0) % 360.0 - 180.0)
        distance[there] = np.cumsum(length * np.abs(np.sin(np.radians(middle))))
    return order, distance


def _likeness(azimuth: np.ndarray, times: int = 1) -> float:
    """Length of the mean unit vector in directions of ``times`` the azimuths."""
    return float(np.abs(np.exp(1j * times * np.radians(azimuth)).mean()))


def _drawn_one_way(azimuth: np.ndarray) -> np.ndarray:
    """Directions of lines, some of them turned round, where lines that run either way explain them better than a bend."""
    if azimuth.size < 2 or _likeness(azimuth, 2) <= max(_likeness(azimuth), LEAST_COMMON):
        return azimuth
    axis = 0.5 * np.angle(np.exp(2j * np.radians(azimuth)).mean())
    return np.where(np.cos(np.radians(azimuth) - axis) < 0.0, azimuth + 180.0, azimuth)


def _chain(longitude: np.ndarray, latitude: np.ndarray, azimuth: np.ndarray) -> np.ndarray:
    """Order of the transects, (n,): grown from one of them, at whichever end the next is nearer."""
    east, north, turn = np.radians(longitude), np.radians(latitude), np.radians(azimuth)
    level, up = np.cos(north), np.sin(north)
    place = np.column_stack([level * np.cos(east), level * np.sin(east), up])
    to_east = np.column_stack([-np.sin(east), np.cos(east), np.zeros(east.size)])
    to_north = np.column_stack([-up * np.cos(east), -up * np.sin(east), level])
    aside = to_east * np.cos(turn)[:, None] - to_north * np.sin(turn)[:, None]
    own = (place * aside).sum(axis=1)
    left = np.ones(turn.size, dtype=bool)

    def nearest(index: int) -> tuple[float, int]:
        """The shortest step, in radii of the Earth, from a transect to one that is left, and that one."""
        both = np.sqrt(np.maximum(2.0 + 2.0 * (aside @ aside[index]), 0.0))
        steps = np.abs((place @ aside[index] - own[index]) + (own - aside @ place[index]))
        # Lines that run against each other have no direction in the middle: the chord between them counts.
        chord = np.sqrt(np.maximum(2.0 - 2.0 * (place @ place[index]), 0.0))
        steps = np.where(both > 0.1, steps / np.maximum(both, 0.1), chord)
        steps[~left] = np.inf
        at = int(np.argmin(steps))
        return float(steps[at]), at

    chain = deque([0] if turn.size else [])
    left[:1] = False
    before = after = nearest(0) if turn.size > 1 else (0.0, 0)
    for _ in range(turn.size - 1):
        if after[0] <= before[0]:
            chain.append(after[1])
        else:
            chain.appendleft(before[1])
        added = after[1] if after[0] <= before[0] else before[1]
        left[added] = False
        if not left.any():
            break
        # Only the end that grew has a new neighbourhood, and the other where its nearest was taken.
        before = nearest(chain[0]) if added in (chain[0], before[1]) else before
        after = nearest(chain[-1]) if added in (chain[-1], after[1]) else after
    if chain and chain[0] > chain[-1]:
        chain.reverse()
    return np.array(chain, dtype=np.int64)
