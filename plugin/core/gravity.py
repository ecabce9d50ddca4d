"""Attraction of what lies between two surfaces: exact polygons where it runs on along strike, a series where it is
round.

Positions are in m, heights z in m **up**, attraction is positive **down**, in m/s2; densities are in kg/m3.
"""

from __future__ import annotations

import numpy as np

from . import check
from .constants import GRAVITATIONAL
from .errors import DownwarpError

_AT_ONCE = 2_000_000
"""Pairs of stations and edges held in memory together."""
SERIES_TERMS = 8
"""Terms of the series; the next one is below a thousandth where surfaces are well below the level of the stations."""


def _edges(px, pz, qx, qz) -> np.ndarray:
    """int z dtheta along edges from p to q as seen from the stations (z down, any broadcastable shapes), m.

    With d = q - p, c = p x q and theta the angle at the station,

        int z dtheta = c / |d|^2 [d_z ln(|q| / |p|) - d_x theta],

    0 where the station lies on the edge's line.
    """
    dx, dz = qx - px, qz - pz
    cross = px * qz - qx * pz
    p2, q2 = px * px + pz * pz, qx * qx + qz * qz
    length = dx * dx + dz * dz
    with np.errstate(divide="ignore", invalid="ignore"):
        value = cross / length * (0.5 * dz * np.log(q2 / p2) - dx * np.arctan2(cross, px * qx + pz * qz))
    return np.where(cross == 0.0, 0.0, value)


def polygon_attraction(x, z, corners, density: float) -> np.ndarray:
    """Attraction of a polygon that runs on for ever along strike, at stations x, z (n,), shape (n,).

        g = 2 G rho |closed int z dtheta|

    ``corners``: (m, 2), x and z up, in either sense, not crossing itself. Exact also on and inside the body.
    Source: Hubbert 1948, Geophysics 13, for the line integral; its edges are integrated here in closed form.

    >>> square = [(-1e3, -2e3), (1e3, -2e3), (1e3, -1e3), (-1e3, -1e3)]
    >>> float(polygon_attraction([0.0], [0.0], square, 300.0)[0]).__round__(8)
    4.806e-05
    """
    corners = check.finite_array("corners", corners, ndim=2)
    if corners.shape[0] < 3 or corners.shape[1] != 2:
        raise DownwarpError("corners has shape {shape}; it takes (m, 2) with m from 3.", shape=corners.shape)
    x, z = check.finite_array("x", x, ndim=1), check.finite_array("z", z, ndim=1)
    px, pz = corners[:, 0] - x[:, None], z[:, None] - corners[:, 1]
    integral = _edges(px, pz, np.roll(px, -1, axis=1), np.roll(pz, -1, axis=1)).sum(axis=1)
    signed = 0.5 * np.sum(corners[:, 0] * np.roll(corners[:, 1], -1) - np.roll(corners[:, 0], -1) * corners[:, 1])
    return -np.sign(signed) * 2.0 * GRAVITATIONAL.value * density * integral


def layer_attraction(x, z, at, top, bottom, density) -> np.ndarray:
    """Attraction of a layer at stations x, z (n,), shape (n,), by the polygons of its intervals.

    ``at``: m, increasing (m,); ``top``, ``bottom``: z up there (m,), straight between; ``density``: one number or one
    per interval (m - 1,). Where the top lies below the bottom the attraction counts negative: a surface that sinks and
    rises about another gives the right sign throughout.
    """
    at = check.increasing("at", at)
    top, bottom = check.finite_array("top", top, ndim=1), check.finite_array("bottom", bottom, ndim=1)
    if top.shape != at.shape or bottom.shape != at.shape:
        raise DownwarpError("top and bottom must have one value for each position.")
    x, z = check.finite_array("x", x, ndim=1), check.finite_array("z", z, ndim=1)
    density = np.broadcast_to(np.asarray(density, dtype=float), at.size - 1)
    # Upright sides cancel between neighbours of one density.
    jump = -np.diff(density, prepend=0.0, append=0.0)
    sides = np.flatnonzero(jump)
    result = np.empty(x.size)
    rows = max(1, _AT_ONCE // at.size)
    for first in range(0, x.size, rows):
        part = slice(first, first + rows)
        px = at - x[part, None]
        above, below = z[part, None] - top, z[part, None] - bottom
        along = _edges(px[:, :-1], above[:, :-1], px[:, 1:], above[:, 1:])
        back = _edges(px[:, :-1], below[:, :-1], px[:, 1:], below[:, 1:])
        result[part] = (along - back) @ density
        result[part] += _edges(px[:, sides], above[:, sides], px[:, sides], below[:, sides]) @ jump[sides]
    return 2.0 * GRAVITATIONAL.value * result


def sheet_matrix(x, z, at, height) -> np.ndarray:
    """Attraction at stations (n,) per kg/m2 of strips about the positions ``at`` (m,) at ``height`` (z up), (n, m).

    The derivative of `layer_attraction` by the height of a surface, for a contrast of 1 kg/m3: each strip reaches
    half-way to its neighbours and is seen under its angle, 2 G theta.
    """
    edges = np.concatenate([at[:1], 0.5 * (at[1:] + at[:-1]), at[-1:]])
    depth = np.maximum(z[:, None] - height, 1e-9)
    left, right = edges[:-1] - x[:, None], edges[1:] - x[:, None]
    return 2.0 * GRAVITATIONAL.value * (np.arctan2(right, depth) - np.arctan2(left, depth))


def slab_attraction(thickness, density):
    """Attraction of a layer without end, 2 pi G rho t."""
    return 2.0 * np.pi * GRAVITATIONAL.value * np.asarray(density, dtype=float) * np.asarray(thickness, dtype=float)


def series_attraction(top, bottom, spacing: float, density, level: float = 0.0, terms: int = SERIES_TERMS):
    """Attraction at height ``level`` of a layer on a map, by a series in the spectrum, shape of ``top`` (ny, nx).

        F[g] = 2 pi G e^(-|k| d) sum_n |k|^(n-1) / n! F[rho (top - m)^n - rho (bottom - m)^n],

    with m the middle of both surfaces' range and d the level's height above m. The map repeats itself at its edges, so
    the layer should thin out or be level towards them. ``spacing``: m; ``density``: a number or a map of them. Raises
    DownwarpError where a surface reaches the level: the series would not converge. Source: Parker 1973, Geophys. J. R.
    astr. Soc. 31 (from memory).
    """
    top, bottom = check.finite_array("top", top, ndim=2), check.finite_array("bottom", bottom, ndim=2)
    high, low = max(top.max(), bottom.max()), min(top.min(), bottom.min())
    if not high < level:
        raise DownwarpError(
            "The surfaces reach {high:g} m, up to the level of {level:g} m at which gravity is wanted: the series for "
            "round loads takes surfaces below it; choose the strip model.",
            high=high,
            level=level,
        )
    middle = 0.5 * (high + low)
    frequency = (
        2.0 * np.pi * np.hypot(np.fft.fftfreq(top.shape[0], spacing)[:, None], np.fft.rfftfreq(top.shape[1], spacing))
    )
    spectrum = np.zeros(frequency.shape, dtype=complex)
    factor = np.ones(frequency.shape)
    for term in range(1, terms + 1):
        spectrum += factor * np.fft.rfft2(density * ((top - middle) ** term - (bottom - middle) ** term))
        factor = factor * frequency / (term + 1)
    spectrum *= 2.0 * np.pi * GRAVITATIONAL.value * np.exp(-frequency * (level - middle))
    return np.fft.irfft2(spectrum, s=top.shape)


def round_attraction(x, z: float, at, top, bottom, density, spacing: float | None = None) -> np.ndarray:
    """Attraction at distances x (n,) and height ``z`` of a layer that is round about ``at`` = 0, by
    `series_attraction`.

    ``at``: m from the centre, increasing (m,); ``top``, ``bottom``: z up there (m,), straight between, level before the
    first and beyond the last; ``density``: one number or one per interval (m - 1,). ``spacing`` of the map, m; by
    default the closest distance between positions, as far as a map of 1024 cells a side reaches.
    """
    at = check.increasing("at", at)
    reach = 2.0 * float(at[-1])
    if spacing is None:
        spacing = max(float(np.diff(at).min()), 2.0 * reach / 1024)
    half = int(np.ceil(reach / spacing))
    axis = np.arange(-half, half) * spacing
    radius = np.hypot(axis[:, None], axis)
    upper, lower = np.interp(radius, at, top), np.interp(radius, at, bottom)
    if np.ndim(density):
        density = np.asarray(density)[np.clip(np.searchsorted(at, radius, side="right") - 1, 0, at.size - 2)]
    found = series_attraction(upper, lower, spacing, density, z)[half]
    return np.interp(np.asarray(x, dtype=float), axis[half:], found[half:])
