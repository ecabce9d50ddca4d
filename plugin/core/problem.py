"""From a sampled profile and the user's options to a problem to be bent or fitted, with the origin of each value."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .errors import DownwarpError
from .forward import SinkingFill, TransectModel, fluid_density, infill_stiffness
from .load import fill_gaps, level_outside_load, load_mask, relief_load
from .profile import Profile
from .settings import (
    BREAK_GIVEN,
    BREAK_LOWEST,
    BREAK_START,
    BROKEN,
    CONTINUOUS,
    FITTED,
    FORCES_BOTH,
    FORCES_MOMENT,
    FORCES_SHEAR,
    FROM_SETTING,
    GIVEN,
    LOAD_NONE,
    LOAD_RELIEF,
    MAPPED,
    MEASURED,
    TRENCH,
    VOLCANO,
    Densities,
    FitOptions,
)
from .wording import say


@dataclass(frozen=True)
class Observations:
    """What a plate is fitted to: stations first, then picks."""

    distance: np.ndarray
    """m, shape (m,)."""
    elevation: np.ndarray
    """m up, shape (m,)."""
    sigma: np.ndarray
    """m, shape (m,); NaN where unknown."""
    station: np.ndarray
    """Index of the station, -1 for a pick, shape (m,)."""


@dataclass(frozen=True)
class Problem:
    """A transect with everything resolved but the plate."""

    profile: Profile
    options: FitOptions
    densities: Densities
    density_origins: dict[str, str]
    bare: bool
    """Whether the DEM itself shows the bent surface."""
    reference_level: float | None
    """m up; None where no relief load needs one."""
    reference_origin: str
    under_load: np.ndarray
    """Stations that carry load, (n,) bool."""
    ground_share: np.ndarray
    """Share of each interval between stations on the load's ground, where `Densities.under_load` fills the plate, (n - 1,).
    """
    load_surface: np.ndarray
    """Stations whose surface is the load's own, left out of the fit, (n,) bool."""
    load: np.ndarray
    """Load at the stations, Pa, positive down, (n,)."""
    breaks: np.ndarray
    """Trial places of the break, m: one, or those to be searched."""
    break_origin: str
    remarks: tuple[str, ...]

    @property
    def last_break(self) -> float:
        """The trial break farthest along, m: only what lies beyond it is common to all trials."""
        return float(self.breaks[-1])

    def model(self, kind: int) -> TransectModel:
        """The forward model of a continuous or a broken plate."""
        profile, options, rho = self.profile, self.options, self.densities
        forces, _ = options.chosen("end_forces")
        gravity = options.elastic.gravity
        stiffness = infill_stiffness(self.ground_share, rho.mantle, rho.infill, rho.under_load, gravity)
        fill = None
        if options.fill_sinking_only:
            fluid = fluid_density(self.reference_level, rho.water)
            depth = 0.0
            if options.fill_level is not None and self.reference_level is not None:
                depth = max(0.0, self.reference_level - options.fill_level)
            fill = SinkingFill(np.full(stiffness.size, (rho.mantle - fluid) * gravity), np.full(stiffness.size, depth))
        return TransectModel(
            profile.distance,
            self.load,
            stiffness,
            options.elastic,
            options.in_plane,
            kind,
            shear=forces in (FORCES_SHEAR, FORCES_BOTH),
            moment=forces in (FORCES_MOMENT, FORCES_BOTH),
            regional=options.chosen("regional")[0],
            fill=fill,
        )

    def infill_density(self, model: TransectModel) -> np.ndarray:
        """Density of what lies on the plate at each station, kg/m3, shape (n,)."""
        density = self.densities.mantle - model.stiffness / self.options.elastic.gravity
        return np.append(density, density[-1])

    def observations(self) -> Observations:
        """What is fitted: observed stations outside the load and beyond the break, within the window, and picks.

        In a DEM that shows both sides of the break, a station within a cell of it mixes them, and is left out.
        Where the bent surface is a separate layer and the user gives a window, stations under the load count too.
        Raises DownwarpError where nothing is left.
        """
        profile, options = self.profile, self.options
        observed = profile.relief if self.bare else profile.observed
        inside = np.zeros(profile.distance.shape, dtype=bool)
        if observed is not None:
            inside = np.isfinite(observed)
            window_given = options.fit_from is not None or options.fit_to is not None
            if self.bare or not window_given:
                inside &= ~self.load_surface
        if self.bare and self._begins_at_break:
            # The other side of the break is in cells that reach across it.
            inside &= profile.distance >= self.last_break + 0.999 * profile.resolution
        inside &= self._in_window(profile.distance)
        if profile.excluded is not None:
            inside &= ~profile.excluded
        stations = np.nonzero(inside)[0]
        picks = profile.picks
        chosen = self._in_window(picks.distance) & np.isfinite(picks.elevation)
        sigma = profile.sigma if profile.sigma is not None else np.full(profile.distance.shape, np.nan)
        if options.sigma is not None:
            sigma = np.full(profile.distance.shape, options.sigma)
        pick_sigma = picks.sigma
        if options.sigma is not None:
            pick_sigma = np.where(np.isfinite(pick_sigma), pick_sigma, options.sigma)
        surface = np.zeros(0) if observed is None else observed[stations]
        return Observations(
            np.append(profile.distance[stations], picks.distance[chosen]),
            np.append(surface, picks.elevation[chosen]),
            np.append(sigma[stations], pick_sigma[chosen]),
            np.append(stations, np.full(int(chosen.sum()), -1)),
        )

    @property
    def _begins_at_break(self) -> bool:
        """Whether the plate, or the part of it that an end force bends, begins at the break."""
        return self.options.chosen("plate")[0] != CONTINUOUS or bool(self.options.chosen("end_forces")[0])

    def _in_window(self, distance: np.ndarray) -> np.ndarray:
        options = self.options
        inside = (distance >= 0) & (distance <= self.profile.distance[-1])
        if self._begins_at_break:
            inside &= distance >= self.last_break
        if options.fit_from is not None:
            inside &= distance >= options.fit_from
        if options.fit_to is not None:
            inside &= distance <= options.fit_to
        return inside


def prepare(profile: Profile, options: FitOptions, search_steps: int = 21) -> Problem:
    """Resolve what is blank as the setting says and from the profile itself; raise DownwarpError where it cannot be.

    ``search_steps``: number of trial breaks where the break is searched.
    """
    remarks = list(profile.remarks)
    bare = profile.observed is None and profile.picks.distance.size == 0
    known = np.isfinite(profile.relief)
    if not known.any():
        raise DownwarpError("{transect}: the DEM has no value anywhere along the line.", transect=profile.name)
    densities, density_origins = options.densities(bare)
    load_kind, _ = options.chosen("load")
    level, level_origin = _reference_level(profile, options, bare, load_kind)
    under_load, load_ground = _load_stations(profile, options, bare, load_kind, level)
    # In a DEM that shows both, a station within a cell of the load mixes the two, and is left out as well.
    load_surface = _widened(load_ground, profile) if bare else load_ground
    load = np.zeros(profile.distance.shape)
    if load_kind != LOAD_NONE and level is not None:
        gravity = options.elastic.gravity
        base = level if load_kind == LOAD_RELIEF else 0.0
        relief = fill_gaps(profile.distance, profile.relief, base)
        if load_kind != LOAD_RELIEF:
            if (relief < 0).any():
                raise DownwarpError(
                    "{transect}: the DEM holds a load thickness below 0 (LOAD is 1).", transect=profile.name
                )
            relief = level + relief
        load = np.where(under_load, relief_load(relief, level, densities, gravity), 0.0)
        if options.defaults.load_removed:
            load = -load
        if not known.all():
            remarks.append(
                say("{count} stations have no DEM value; the load is bridged over them", count=int((~known).sum()))
            )
        for index, words in (
            (0, say("the load reaches the line's start and is held constant beyond it")),
            (-1, say("the load reaches the line's end and is held constant beyond it")),
        ):
            begins_there = index == 0 and options.chosen("plate")[0] == BROKEN
            if load[index] != 0 and not begins_there and options.load_shape != MAPPED:
                remarks.append(words)
    breaks, break_origin = _breaks(profile, options, search_steps)
    return Problem(
        profile, options, densities, density_origins, bare, level, level_origin, under_load,
        _ground_share(profile, options, load_ground), load_surface, load, breaks, break_origin, tuple(remarks),
    )  # fmt: skip


def _reference_level(profile: Profile, options: FitOptions, bare: bool, load_kind: int) -> tuple[float | None, str]:
    if options.reference_level is not None:
        return options.reference_level, GIVEN
    if load_kind == LOAD_RELIEF:
        return level_outside_load(profile.relief, _given_area(profile, options)), MEASURED
    observed = profile.relief if bare and load_kind == LOAD_NONE else profile.observed
    if options.setting in (VOLCANO, TRENCH) and observed is not None and np.isfinite(observed).any():
        return float(np.nanmedian(observed)), MEASURED
    return 0.0, FROM_SETTING


def _given_area(profile: Profile, options: FitOptions) -> np.ndarray | None:
    """Stations inside the load area and load window that the user gave, None where none was given."""
    if profile.in_load_area is None and options.load_from is None and options.load_to is None:
        return None
    inside = np.ones(profile.distance.shape, dtype=bool)
    if profile.in_load_area is not None:
        inside &= profile.in_load_area
    if options.load_from is not None:
        inside &= profile.distance >= options.load_from
    if options.load_to is not None:
        inside &= profile.distance <= options.load_to
    return inside


def _load_stations(
    profile: Profile, options: FitOptions, bare: bool, load_kind: int, level: float | None
) -> tuple[np.ndarray, np.ndarray]:
    """Stations that carry load, and those of its ground, whose surface is left out of the fit, each (n,).

    The ground is the area given, where one was, also where noise or a gap takes relief on it below the level; what
    rises there is load. Otherwise it is the main rises (`load_mask`), which are all of the load where the same DEM
    shows the bent surface; else all that rises above the level is load.
    """
    if load_kind == LOAD_NONE or level is None:
        nowhere = np.zeros(profile.distance.shape, dtype=bool)
        return nowhere, nowhere
    base = level if load_kind == LOAD_RELIEF else 0.0
    above = np.nan_to_num(profile.relief - base, nan=0.0) > 0
    given = _given_area(profile, options)
    if given is not None:
        return given & above, given
    main = load_mask(profile.relief, base)
    return main if bare else above, main


def _ground_share(profile: Profile, options: FitOptions, on_ground: np.ndarray) -> np.ndarray:
    """Share of each interval between stations on the load's ground, (n - 1,): as the area and window given cut it; of a
    ground that only the stations (n,) tell, half the interval in which it ends."""
    told = 0.5 * (on_ground[1:].astype(float) + on_ground[:-1])
    if _given_area(profile, options) is None or not on_ground.any():
        return told
    at = profile.distance
    first = at[0] if options.load_from is None else options.load_from
    last = at[-1] if options.load_to is None else options.load_to
    window = np.maximum(np.minimum(at[1:], last) - np.maximum(at[:-1], first), 0.0) / np.diff(at)
    if profile.load_area_share is not None:
        return window * profile.load_area_share
    inside = np.ones(at.shape) if profile.in_load_area is None else profile.in_load_area.astype(float)
    return window * 0.5 * (inside[1:] + inside[:-1])


def _widened(inside: np.ndarray, profile: Profile) -> np.ndarray:
    """The stations of a mask and those within the data's resolution of them, (n,)."""
    places = profile.distance[inside]
    if places.size == 0:
        return inside
    after = np.clip(np.searchsorted(places, profile.distance), 1, places.size) - 1
    nearest = np.minimum(
        np.abs(profile.distance - places[after]),
        np.abs(profile.distance - places[np.minimum(after + 1, places.size - 1)]),
    )
    return nearest <= 1.001 * profile.resolution


def _breaks(profile: Profile, options: FitOptions, steps: int) -> tuple[np.ndarray, str]:
    """Trial places of the break, m, and where they came from."""
    where, origin = options.chosen("break_at")
    length = float(profile.distance[-1])
    if where == BREAK_START:
        return np.zeros(1), origin
    if where == BREAK_LOWEST:
        return profile.distance[[int(np.nanargmin(profile.relief))]], MEASURED
    names = ("break_position",) if where == BREAK_GIVEN else ("break_from", "break_to")
    keys = ("BREAK_KM",) if where == BREAK_GIVEN else ("BREAK_FROM", "BREAK_TO")
    places = []
    for name, key in zip(names, keys):
        value = getattr(options, name)
        if value is None or not 0 <= value < length:
            raise DownwarpError(
                "{transect}: {key} must lie on the line, from 0 to below {length:.1f} km{found}.",
                transect=profile.name,
                key=key,
                length=length / 1e3,
                found="" if value is None else say("; it is {value:g} km", value=value / 1e3),
            )
        places.append(float(value))
    if where == BREAK_GIVEN:
        return np.array(places), GIVEN
    return np.linspace(*places, steps), FITTED
