"""A plane about a transect, and relief on a grid in it: what a plate in plan view is loaded with.

u runs along the chord of the line, v to its left, both in m from the middle of the window. The plane is an oblique
Mercator projection along the line or an azimuthal equidistant one about its middle (Snyder 1987, Map projections, a
working manual, chapters 9 and 25, from memory; both as PROJ carries them out), whichever distorts less, divided by the
middle of its scales. Distances in it are wrong by less than `DISTORTION_LIMIT` everywhere in the window.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from pyproj import Geod, Proj
from pyproj.exceptions import ProjError
from scipy.ndimage import maximum_filter
from scipy.spatial import cKDTree

from . import check
from .by_pyproj import in_shape
from .errors import DownwarpError
from .load import CREST_SHARE, relief_load
from .problem import Problem
from .settings import LOAD_NONE, LOAD_RELIEF
from .sheet import LEAST_PAD, Sheet, SheetLine, tapered
from .wording import say

DISTORTION_LIMIT = 0.005
"""Largest error of scale in the window, 1."""
REACH = 5.0
"""Flexural parameters beside the line within which relief is mapped. What an endless ridge has beyond them changes the
deflection under it by less than 0.1 % (the integral of the Kelvin function kei from 5 sqrt(2) on)."""
CELLS_PER_ALPHA = 12
"""Cells in a flexural parameter."""
TAPER = 0.25
"""Flexural parameters over which the load is brought down to 0 at the window's edge."""
PEAKS_APART = 20e3
"""Distance, m, in rows and columns, within which a lower peak belongs to the higher one's rise: about the width of a
seamount's flank."""
LEAST_REACH = 3.0
"""Flexural parameters beside the line within which relief is mapped at least, where a plane takes no more."""
SEARCH_CELLS = 250_000
"""Cells of a window in which many plates are tried."""
MOST_CELLS = 2_000_000
"""Cells that a window may have."""
MOST_REFINEMENT = 4
"""Places, along each side of a cell, at which relief is read at most."""
CHECK_CELLS, CHECK_REFINEMENT = 40_000, 2
"""The same where no more than the strip of every fit is checked, which must not take longer than the fit."""
_LOOKS = 24
"""Places along each side of the window at which the scale is looked at."""
_BEYOND = 1e7
"""Projected distance from the centre, m, that no window reaches."""
_ASIDE = 2e-5
"""Step, degrees of longitude, by which a place evades the meridian, a metre wide, on which PROJ's oblique Mercator is
half a turn of the Earth off."""


@dataclass(frozen=True)
class Plane:
    """Plane coordinates about a line."""

    projection: Proj
    origin: tuple[float, float]
    """Projected x and y of u = v = 0."""
    turn: float
    """Angle from the projection's x axis to the u axis, radians, anticlockwise."""
    scale: float
    """Projected distance over distance in the plane, 1."""

    def from_degrees(self, longitude, latitude) -> tuple[np.ndarray, np.ndarray]:
        """u and v, m, of places in degrees, shaped like them."""
        longitude, latitude = np.asarray(longitude, dtype=float), np.asarray(latitude, dtype=float)
        x, y = in_shape(self.projection, longitude.ravel(), latitude.ravel())
        lost = np.hypot(x, y) > _BEYOND
        if lost.any():
            x[lost], y[lost] = in_shape(self.projection, longitude.ravel()[lost] + _ASIDE, latitude.ravel()[lost])
        x = (np.reshape(x, longitude.shape) - self.origin[0]) / self.scale
        y = (np.reshape(y, longitude.shape) - self.origin[1]) / self.scale
        cosine, sine = math.cos(self.turn), math.sin(self.turn)
        return cosine * x + sine * y, cosine * y - sine * x

    def to_degrees(self, u, v) -> tuple[np.ndarray, np.ndarray]:
        """Longitude and latitude, degrees, of places in the plane, m, shaped like them."""
        u, v = np.asarray(u, dtype=float), np.asarray(v, dtype=float)
        cosine, sine = math.cos(self.turn), math.sin(self.turn)
        x = self.origin[0] + self.scale * (cosine * u - sine * v)
        y = self.origin[1] + self.scale * (sine * u + cosine * v)
        longitude, latitude = in_shape(self.projection, x, y, inverse=True)
        return longitude, latitude


@dataclass(frozen=True)
class Window:
    """A grid of square cells in a plane, and where a transect runs in it."""

    plane: Plane
    distortion: float
    """Largest error of scale in it, 1."""
    alpha: float
    """Flexural parameter of the stiffest plate that it is made for, m."""
    reach: float
    """Distance, m, from the line to each edge."""
    spacing: float
    """Side of the cells, m."""
    shape: tuple[int, int]
    """Rows (by v) and columns (by u)."""
    distance: np.ndarray
    """Distance of the stations along the transect, m, shape (n,)."""
    row: np.ndarray
    """Fractional row of the stations, counted in cell centres, shape (n,)."""
    column: np.ndarray
    """Fractional column of the stations, shape (n,)."""

    def places(self, refinement: int = 1) -> tuple[np.ndarray, np.ndarray]:
        """Longitude and latitude of ``refinement`` x ``refinement`` places in each cell, each (rows r, columns r)."""
        rows, columns = self.shape
        across = ((np.arange(rows * refinement) + 0.5) / refinement - 0.5 * rows) * self.spacing
        along = ((np.arange(columns * refinement) + 0.5) / refinement - 0.5 * columns) * self.spacing
        return self.plane.to_degrees(*np.meshgrid(along, across))

    def along(self, refinement: int) -> np.ndarray:
        """Distance along the transect, m, of the station nearest to each of the `places`."""
        rows, columns = (
            (np.arange(count * refinement) + 0.5) / refinement - 0.5 for count in self.shape
        )  # in cell centres
        tree = cKDTree(np.column_stack([self.row, self.column]))
        grid = np.stack(np.meshgrid(rows, columns, indexing="ij"), axis=-1)
        return self.distance[tree.query(grid)[1]]


def lay_window(
    distance,
    longitude,
    latitude,
    ellipsoid: Geod,
    alpha: float,
    *,
    spacing: float | None = None,
    reach: float | None = None,
) -> Window:
    """The window about stations in degrees for plates of flexural parameters up to ``alpha``, m.

    ``spacing``: side of the cells, m, `CELLS_PER_ALPHA` of them in alpha where blank; ``reach``: distance from the line
    to the edges, m, `REACH` times alpha where blank. Raises DownwarpError where its distortion would reach
    `DISTORTION_LIMIT`, or its cells become too many.
    """
    distance = check.increasing("distance", distance)
    longitude = check.finite_array("longitude", longitude, ndim=1)
    latitude = check.finite_array("latitude", latitude, ndim=1)
    alpha = check.number(say("the flexural parameter"), alpha, above=0)
    spacing = alpha / CELLS_PER_ALPHA if spacing is None else check.number("spacing", spacing, above=0)
    reach = REACH * alpha if reach is None else check.number("reach", reach, above=0)
    laid = [
        _laid(projection, longitude, latitude, reach) for projection in _projections(longitude, latitude, ellipsoid)
    ]
    plane, half_size, distortion = min(laid, key=lambda each: each[2])
    width, height = 2.0 * half_size
    if not distortion < DISTORTION_LIMIT:
        how_much = (
            say("to {percent:.3g} %", percent=100 * distortion) if math.isfinite(distortion) else say("beyond measure")
        )
        raise DownwarpError(
            "The plan view would take a window of {width:.0f} by {height:.0f} km, in which a plane distorts distances "
            "{how_much} (at most {limit:g} %): the line is too long, or the plate too stiff, for a flat map.",
            width=width / 1e3,
            height=height / 1e3,
            how_much=how_much,
            limit=100 * DISTORTION_LIMIT,
        )
    columns, rows = math.ceil(width / spacing), math.ceil(height / spacing)
    if rows * columns > MOST_CELLS:
        raise DownwarpError(
            "The plan view would take {rows} by {columns} cells of {spacing:.3g} km, more than {most}: the line is "
            "too long for so thin a plate.",
            rows=rows,
            columns=columns,
            spacing=spacing / 1e3,
            most=MOST_CELLS,
        )
    u, v = plane.from_degrees(longitude, latitude)
    row, column = v / spacing + 0.5 * (rows - 1), u / spacing + 0.5 * (columns - 1)
    return Window(plane, distortion, alpha, reach, spacing, (rows, columns), distance, row, column)


def lay_search_window(
    distance, longitude, latitude, ellipsoid: Geod, alpha_from: float, alpha_to: float, cells: int = SEARCH_CELLS
) -> tuple[Window, tuple[str, ...]]:
    """The window of a search over plates of flexural parameters from ``alpha_from`` to ``alpha_to``, m; and remarks.

    Other than `lay_window`'s, it gives way: for the stiffest plates it reaches only as far as a plane can do, and for
    the thinnest its ``cells`` are no smaller than their number allows.
    """
    reach = REACH * check.number(say("the flexural parameter"), alpha_to, at_least=alpha_from)
    remarks: tuple[str, ...] = ()
    given = (distance, longitude, latitude, ellipsoid, alpha_to)
    while True:
        try:
            spacing = alpha_from / CELLS_PER_ALPHA
            # The shape of the window follows from its reach; a few cells are enough to learn it.
            outline = lay_window(*given, spacing=reach / 10, reach=reach)
            area = outline.shape[0] * outline.shape[1] * outline.spacing**2
            window = lay_window(*given, spacing=max(spacing, math.sqrt(area / cells)), reach=reach)
            break
        except DownwarpError:
            reach *= 0.95
            if reach < LEAST_REACH * alpha_to:
                raise
    if reach < 0.999 * REACH * alpha_to:
        remarks += (
            say(
                "load farther than {reach:.0f} km from the line is left out: more does not lie in a plane, and for "
                "flexural parameters above {alpha:.0f} km it begins to matter",
                reach=reach / 1e3,
                alpha=reach / REACH / 1e3,
            ),
        )
    return window, remarks


def _projections(longitude: np.ndarray, latitude: np.ndarray, ellipsoid: Geod) -> Iterator[Proj]:
    """Candidates about the middle of the line's chord."""
    azimuth, _, chord = ellipsoid.inv(longitude[0], latitude[0], longitude[-1], latitude[-1])
    longitude_0, latitude_0, back = ellipsoid.fwd(longitude[0], latitude[0], azimuth, 0.5 * chord)
    shape = f"+a={ellipsoid.a!r} +b={ellipsoid.b!r} +lat_0={latitude_0!r} +units=m"
    yield Proj(f"+proj=aeqd +lon_0={longitude_0!r} {shape}")
    direction = (back + 90.0) % 180.0 - 90.0  # the line's, from either end
    try:
        yield Proj(f"+proj=omerc +lonc={longitude_0!r} +alpha={direction!r} {shape}")
    except ProjError:  # no oblique Mercator stands at a pole
        return


def _laid(projection: Proj, longitude, latitude, reach: float) -> tuple[Plane, np.ndarray, float]:
    """The plane of a projection, half the width and height of its window, m, and its distortion (infinite where the
    projection does not reach)."""
    plane = Plane(projection, (0.0, 0.0), 0.0, 1.0)
    x, y = plane.from_degrees(longitude, latitude)
    far = int(np.argmax(np.hypot(x - x[0], y - y[0])))
    plane = replace(plane, turn=math.atan2(y[far] - y[0], x[far] - x[0]))
    u, v = plane.from_degrees(longitude, latitude)
    middle = 0.5 * (u.min() + u.max()), 0.5 * (v.min() + v.max())
    half_size = 0.5 * np.array([np.ptp(u), np.ptp(v)]) + reach
    if not np.isfinite(half_size).all():
        return plane, half_size, math.inf
    cosine, sine = math.cos(plane.turn), math.sin(plane.turn)
    origin = cosine * middle[0] - sine * middle[1], sine * middle[0] + cosine * middle[1]
    plane = replace(plane, origin=origin)
    look = np.linspace(-1.0, 1.0, _LOOKS)
    places = plane.to_degrees(*np.meshgrid(half_size[0] * look, half_size[1] * look))
    if not np.isfinite(places).all():
        return plane, half_size, math.inf
    factors = projection.get_factors(*(values.ravel() for values in places))
    least, most = float(np.min(factors.tissot_semiminor)), float(np.max(factors.tissot_semimajor))
    if not 0.0 < least <= most < math.inf:
        return plane, half_size, math.inf
    middle_scale = 0.5 * (least + most)
    return replace(plane, scale=middle_scale), half_size / middle_scale, most / middle_scale - 1.0


@dataclass(frozen=True)
class PlanRelief:
    """Relief read at the places of a window."""

    window: Window
    refinement: int
    """Places along each side of a cell."""
    relief: np.ndarray
    """m up, or a thickness of load in m; NaN where there is none; shape (rows r, columns r)."""
    in_load_area: np.ndarray | None = None
    """Places inside the given load area, bool, shaped like `relief`; None where no area was given."""


def refinement(window: Window, cell_size: float, most: int = MOST_REFINEMENT) -> int:
    """Places along each side of a cell at which to read a grid of cells of ``cell_size``, m: ``most`` of them."""
    return int(np.clip(math.ceil(window.spacing / cell_size), 1, most))


def mapped_load(problem: Problem, plan: PlanRelief) -> tuple[SheetLine, tuple[str, ...]]:
    """The load that a prepared problem has, as mapped, on a sheet with the places of the stations; and remarks.

    Level, densities and what counts as load are the problem's. Where no load area or range was given and the DEM also
    shows the bent surface, `rises` whose crest reaches `load.CREST_SHARE` of the highest crest on the line are load, as
    `load.load_mask` has it on the line itself.
    """
    options, rho, window = problem.options, problem.densities, plan.window
    kind, level = options.chosen("load")[0], problem.reference_level
    if kind == LOAD_NONE or level is None or not problem.load.any():
        raise DownwarpError(
            "{transect}: no station of the line carries a relief load: nothing is mapped.",
            transect=problem.profile.name,
        )
    known = np.isfinite(plan.relief)
    base = level if kind == LOAD_RELIEF else 0.0
    relief = np.where(known, plan.relief, base)
    if kind != LOAD_RELIEF:
        if (relief < 0).any():
            raise DownwarpError(
                "{transect}: the DEM holds a load thickness below 0 (LOAD is 1).", transect=problem.profile.name
            )
        relief = level + relief
    inside = _load_places(problem, plan, relief - level)
    load = np.where(inside, relief_load(relief, level, rho, options.elastic.gravity), 0.0)
    if options.defaults.load_removed:
        load = -load
    rows, columns = window.shape
    load = load.reshape(rows, plan.refinement, columns, plan.refinement).mean(axis=(1, 3))
    taper = round(TAPER * window.alpha / window.spacing)
    sheet = Sheet(tapered(load, taper), window.spacing, (LEAST_PAD + 1e-6) * window.alpha)
    remarks: tuple[str, ...] = ()
    if not known.all():
        missing = 100.0 * (1.0 - float(known.mean()))
        remarks = (
            say("{missing:.2g} % of the plan view lies outside the DEM and counts as without load", missing=missing),
        )
    return SheetLine(sheet, window.row, window.column), remarks


def rises(height: np.ndarray, least_crest: float, apart: int) -> np.ndarray:
    """Places that belong to a rise whose crest reaches ``least_crest``, bool; ``height``: m above the level, 2-D.

    Every place leads to the highest one within ``apart`` rows and columns, that one to the next, and so on up to a
    crest. On a line, rises are told apart by the lows between them; on a map, low hills join nearly all rises
    somewhere, and what is connected says nothing.
    """
    order = np.argsort(height, axis=None, kind="stable")
    rank = np.empty(height.size, dtype=np.int64)
    rank[order] = np.arange(height.size)
    crest = order[maximum_filter(rank.reshape(height.shape), 2 * apart + 1).ravel()]
    while True:
        further = crest[crest]
        if (further == crest).all():
            break
        crest = further
    return (height > 0) & (height.ravel()[crest] >= least_crest).reshape(height.shape)


def _load_places(problem: Problem, plan: PlanRelief, height: np.ndarray) -> np.ndarray:
    """Places that carry load, bool; ``height``: m above the level."""
    options = problem.options
    above = height > 0
    given = plan.in_load_area is not None or options.load_from is not None or options.load_to is not None
    if not given:
        if not problem.bare:
            return above
        crest = float(np.nanmax(np.where(problem.under_load, problem.profile.relief, np.nan)))
        base = problem.reference_level if options.chosen("load")[0] == LOAD_RELIEF else 0.0
        window = plan.window
        apart = PEAKS_APART / window.spacing * plan.refinement
        return rises(height, CREST_SHARE * (crest - (base or 0.0)), max(1, round(apart)))
    if plan.in_load_area is not None:
        above &= plan.in_load_area
    if options.load_from is not None or options.load_to is not None:
        along = plan.window.along(plan.refinement)
        above &= along >= (-np.inf if options.load_from is None else options.load_from)
        above &= along <= (np.inf if options.load_to is None else options.load_to)
    return above
