"""Swaths: parallel strips sampled beside a transect, brought together in one profile with its uncertainty.

Arrays have shape (strips, stations), NaN where nothing was sampled; stations are evenly spaced. Elevations are up.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from . import check
from .errors import DownwarpError

SPREAD_STATIONS = 9
"""Neighbouring stations whose strips together give the spread at the middle one."""
LEAST_INDEPENDENT = 1.5
"""Independent strips that two or more strips count as at the least."""


@dataclass(frozen=True)
class Swath:
    """Strips combined station by station, each array of shape (stations,)."""

    mean: np.ndarray
    """Mean of the strips, in the unit of the values; NaN where no strip has a value."""
    sigma: np.ndarray
    """Standard error of that mean (see `combine`); NaN where fewer than two strips have a value."""
    spread: np.ndarray
    """Standard deviation between strips about their own levels; NaN where fewer than two strips have a value."""
    count: np.ndarray
    """Strips that have a value."""
    likeness: float
    """Correlation of neighbouring strips' departures from the mean, 0 to below 1."""


@dataclass(frozen=True)
class Alignment:
    """Where the lowest point of each strip lies, and the shift that brings it to the common position."""

    position: np.ndarray
    """Distance of each strip's lowest station, m, shape (strips,); NaN for strips that are left out."""
    common: float
    """Mean of the positions, m: where all lowest points come to lie."""
    shift: np.ndarray
    """Stations by which a strip is read further on, position less common over the step, shape (strips,); or NaN."""

    @property
    def used(self) -> np.ndarray:
        """Which strips have a lowest point of their own and take part, shape (strips,)."""
        return np.isfinite(self.shift)


def offsets(width: float, strips: int) -> np.ndarray:
    """Distances across the path, m, of the centre lines of ``strips`` equal strips of a swath ``width`` m wide.

    >>> offsets(300.0, 3)
    array([-100.,    0.,  100.])
    """
    width = check.number("SWATH_KM", width / 1e3, at_least=0) * 1e3
    strips_given = check.number("SWATH_LINES", strips, at_least=1)
    if strips_given != int(strips_given):
        raise DownwarpError("SWATH_LINES is {strips_given:g}; it takes a whole number.", strips_given=strips_given)
    return width * ((np.arange(int(strips_given)) + 0.5) / strips_given - 0.5)


def combine(values: np.ndarray) -> Swath:
    """Mean and uncertainty of strips (strips, stations), leaving NaN out.

    The standard error serves as sigma, for it is the mean that a plate is fitted to. Neighbouring strips repeat each
    other where they are closer together than the relief is wide; with r the correlation of their departures from the
    mean, ``count`` strips are worth n = count (1 - r) / (1 + r) independent ones, at least `LEAST_INDEPENDENT` (a
    first-order autoregression across the swath; von Storch & Zwiers, Statistical Analysis in Climate Research, section
    6.6, from memory), and sigma is spread sqrt((1 - 1 / count) / (n - 1)). The spread is that of `SPREAD_STATIONS`
    neighbouring stations together, about each strip's own level.
    """
    values = _strips(values)
    known = np.isfinite(values)
    count = known.sum(axis=0)
    mean = np.where(count > 0, np.where(known, values, 0.0).sum(axis=0) / np.maximum(count, 1), np.nan)
    departures = np.where(known, values - mean, 0.0)
    # A strip that lies deeper as a whole tells of the depth along strike, which the regional level takes up.
    held = known.sum(axis=1, keepdims=True)
    level = np.where(held >= SPREAD_STATIONS, departures.sum(axis=1, keepdims=True) / np.maximum(held, 1), 0.0)
    departures = np.where(known, departures - level, 0.0)
    variance = _smoothed((departures**2).sum(axis=0), np.maximum(count - 1, 0))
    spread = np.where(count > 1, np.sqrt(variance), np.nan)
    likeness = _likeness(departures, known)
    independent = np.maximum(count * (1.0 - likeness) / (1.0 + likeness), LEAST_INDEPENDENT)
    # The spread about their own mean misses what the strips have in common; this is spread / sqrt(count) at r = 0.
    sigma = spread * np.sqrt(np.maximum(count - 1, 0) / np.maximum(count, 1) / (independent - 1.0))
    return Swath(mean, sigma, spread, count, likeness)


def _smoothed(squares: np.ndarray, freedom: np.ndarray) -> np.ndarray:
    """Variance from sums of squares and their degrees of freedom over the `SPREAD_STATIONS` around each station: a few
    strips alone give it to no better than half its size."""
    window = np.ones(SPREAD_STATIONS)
    total, free = (np.convolve(values, window, mode="full") for values in (squares, freedom.astype(float)))
    margin = SPREAD_STATIONS // 2
    inside = slice(margin, margin + squares.size)
    return total[inside] / np.maximum(free[inside], 1.0)


def _likeness(departures: np.ndarray, known: np.ndarray) -> float:
    """Correlation of neighbouring strips, freed from the mean having been taken out of them; 0 to below 1."""
    both = known[1:] & known[:-1]
    strips = known.shape[0]
    scale = 0.5 * ((departures[1:] ** 2)[both].sum() + (departures[:-1] ** 2)[both].sum())
    if strips < 3 or not scale > 0.0:
        return 0.0
    found = float((departures[1:] * departures[:-1])[both].sum() / scale)
    # Independent strips less their mean correlate by -1 / (strips - 1).
    return float(np.clip(found + 1.0 / (strips - 1), 0.0, 0.99))


def align(
    values: np.ndarray, distance: np.ndarray, search_from: float | None = None, search_to: float | None = None
) -> Alignment:
    """Find the lowest station of each strip and the shifts that bring all of them to their mean position.

    ``values``: elevations (strips, stations), m up; ``distance``: of the stations, m, evenly spaced; ``search_from``
    and ``search_to``: the part of the transect, m, in which the lowest point is looked for (all of it where None), so
    that a low beside a seamount is not taken for the axis. Of equally low stations the one nearest to the middle of
    that part counts.

    A strip whose lowest station is the first or last sampled one of that part is still falling there: its low lies
    out of sight, and the strip is left out. Raises DownwarpError where this leaves no strip.
    """
    values = _strips(values)
    distance = check.increasing("distance", distance)
    if values.shape[1] != distance.size:
        raise DownwarpError(
            "values hold {columns} stations and distance {count}; it takes as many.",
            columns=values.shape[1],
            count=distance.size,
        )
    low = distance[0] if search_from is None else check.number("search_from", search_from)
    high = distance[-1] if search_to is None else check.number("search_to", search_to)
    if low >= high:
        raise DownwarpError(
            "The search for the lowest point runs from {low:g} to {high:g} m; it takes an increase.", low=low, high=high
        )
    searched = np.isfinite(values) & (distance >= low) & (distance <= high)
    depth = np.where(searched, values, np.inf)
    lowest = searched & (depth == depth.min(axis=1, keepdims=True))
    at = np.where(lowest, np.abs(distance - 0.5 * (low + high)), np.inf).argmin(axis=1)
    first = searched.argmax(axis=1)
    last = distance.size - 1 - searched[:, ::-1].argmax(axis=1)
    used = searched.any(axis=1) & (at > first) & (at < last)
    if not used.any():
        raise DownwarpError(
            "SWATH_ALIGN finds no lowest point between {low:g} and {high:g} km: every strip is lowest at an end; let "
            "the line begin before the axis.",
            low=low / 1e3,
            high=high / 1e3,
        )
    position = np.where(used, distance[at], np.nan)
    common = float(np.mean(distance[at][used]))
    step = (distance[-1] - distance[0]) / (distance.size - 1)
    return Alignment(position, common, (position - common) / step)


def shifted(values: np.ndarray, alignment: Alignment) -> np.ndarray:
    """Strips (strips, stations) read at their shifted stations, by linear interpolation.

    NaN where the shift reaches past a strip's end or touches a missing value, and in strips that are left out.
    """
    values = _strips(values)
    if values.shape[0] != alignment.shift.size:
        raise DownwarpError(
            "values hold {rows} strips; the alignment is of {strips}.",
            rows=values.shape[0],
            strips=alignment.shift.size,
        )
    stations = values.shape[1]
    # Rounded to a billionth of a step, so that a whole number of steps is one.
    shift = np.round(np.where(alignment.used, alignment.shift, 0.0), 9)[:, None]
    whole = np.floor(shift).astype(np.int64)
    fraction = shift - whole
    here = np.arange(stations) + whole
    near = _take(values, here)
    far = _take(values, here + 1)
    blended = np.where(fraction > 0.0, near + fraction * (far - near), near)
    return np.where(alignment.used[:, None], blended, np.nan)


def _take(values: np.ndarray, index: np.ndarray) -> np.ndarray:
    """Values of each strip at station indices (strips, stations), NaN where an index lies outside."""
    inside = (index >= 0) & (index < values.shape[1])
    return np.where(inside, np.take_along_axis(values, np.where(inside, index, 0), axis=1), np.nan)


def _strips(values: np.ndarray) -> np.ndarray:
    values = np.asarray(values, dtype=float)
    if values.ndim != 2 or values.shape[0] < 1:
        raise DownwarpError("values have shape {shape}; it takes (strips, stations).", shape=values.shape)
    return values
