"""Gravity along one transect: the anomaly of the bent plate, beside what was observed, and the joint fit."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np

from .crust import HELD, MIRRORED, STRIP, Anomaly, Crust, Section, anomaly
from .elastic import Elastic
from .errors import DownwarpError
from .joint import JointFit, JointOptions, Readings, joint_fit
from .stated import PlateStations
from .wording import say

FREE_AIR, BOUGUER = range(2)
"""Kinds of observed anomaly, in the order of the key ANOMALY_KIND."""
LEAST_READINGS = 5
"""Readings that are compared at least."""


@dataclass(frozen=True)
class GravityOptions:
    """What is asked of the comparison, SI units."""

    crust: Crust
    elastic: Elastic = field(default_factory=Elastic)
    level: float | None = None
    """Reference level of the load, m up; None where the load tells it."""
    shape: int = STRIP
    before: int | None = None
    """What lies before the plate; None: its mirror image where it begins bent or loaded, else its first values held."""
    kind: int = FREE_AIR
    """Kind of the observed anomaly."""
    regional: int = 1
    """Coefficients of gravity's regional: 0 none, 1 level, 2 and tilt."""
    fit_from: float | None = None
    """m; readings before are shown but not fitted."""
    fit_to: float | None = None
    """m."""
    joint: bool = True
    """Whether thickness and load density are fitted to surface and gravity."""
    search: JointOptions = field(default_factory=JointOptions)
    """Ranges and confidence of the joint fit; the rest of it follows from the plate."""


@dataclass(frozen=True)
class GravityCheck:
    """The answer for one transect."""

    name: str
    plate: PlateStations
    section: Section
    crust: Crust
    before: int
    kind: int
    distance: np.ndarray
    """Stations and readings, m, (n,)."""
    model: Anomaly
    """The plate's gravity there."""
    observed: np.ndarray
    """m/s2, of the kind observed, (n,); NaN where there is none."""
    sigma: np.ndarray
    """m/s2, (n,); NaN where unknown."""
    used: np.ndarray
    """Readings that were compared, (n,) bool."""
    predicted: np.ndarray
    """The plate's gravity of the kind observed, with the regional, m/s2, (n,)."""
    rms: float | None
    """Root mean square of observed less predicted, m/s2; None where nothing was observed."""
    joint: JointFit | None
    remarks: tuple[str, ...]


def check_gravity(
    plate: PlateStations,
    readings: Readings | None,
    options: GravityOptions,
    progress: Callable[[float], None] | None = None,
) -> GravityCheck:
    """Compare the gravity of a plate with what was observed (m/s2), and fit both where asked.

    Raises DownwarpError where the plate or the readings do not suffice.
    """
    tell = progress if progress is not None else (lambda fraction: None)
    section, remarks = plate.section(options.crust, options.elastic.gravity, options.level)
    other = plate.other_constants(options.elastic)
    remarks += (other,) if other else ()
    before = options.before
    if before is None:
        before = MIRRORED if section.begins_bent else HELD
    first, last = float(section.distance[0]), float(section.distance[-1])
    distance, observed, sigma = section.distance, np.full(section.distance.shape, np.nan), np.zeros(0)
    if readings is not None:
        inside = (readings.distance >= first) & (readings.distance <= last) & np.isfinite(readings.value)
        if inside.sum() < LEAST_READINGS:
            raise DownwarpError(
                "{transect}: {count} readings of gravity lie along the plate; it takes at least {least}.",
                transect=plate.name,
                count=int(inside.sum()),
                least=LEAST_READINGS,
            )
        spread = np.full(readings.distance.shape, np.nan) if readings.sigma is None else readings.sigma
        distance, observed, sigma = _merged(distance, readings.distance[inside], readings.value[inside], spread[inside])
    sigma = np.full(distance.shape, np.nan) if readings is None else sigma
    try:
        model = anomaly(section, options.crust, distance, before, options.shape)
    except DownwarpError as error:
        raise DownwarpError("{transect}: {why}", transect=plate.name, why=error.message) from None
    tell(0.1)
    of_kind = model.bouguer if options.kind == BOUGUER else model.free_air
    used = np.isfinite(observed)
    if options.fit_from is not None:
        used &= distance >= options.fit_from
    if options.fit_to is not None:
        used &= distance <= options.fit_to
    predicted, rms = of_kind, None
    if readings is not None:
        if used.sum() < LEAST_READINGS:
            raise DownwarpError(
                "{transect}: FIT_FROM and FIT_TO leave {count} readings of gravity.",
                transect=plate.name,
                count=int(used.sum()),
            )
        predicted, rms = _with_regional(distance, of_kind, observed, sigma, used, options.regional)
    joint = None
    if readings is not None and options.joint:
        if options.shape != STRIP:
            remarks += (say("no joint fit: the plate bends as a strip, the gravity is of a round load"),)
        else:
            correction = model.bouguer_correction if options.kind == BOUGUER else 0.0
            own = sigma[used]
            gravity = Readings(
                distance[used],
                (observed - correction)[used],
                own if (own > 0).all() else None,
                readings.resolution,
            )
            joint = _joint(plate, section, gravity, before, options, tell)
            remarks += _joint_remarks(joint)
    tell(1.0)
    return GravityCheck(
        plate.name, plate, section, options.crust, before, options.kind, distance, model, observed, sigma, used,
        predicted, rms, joint, remarks,
    )  # fmt: skip


def _merged(stations: np.ndarray, at: np.ndarray, value: np.ndarray, sigma: np.ndarray):
    """Stations and readings in one order, with the readings' values where there are any."""
    distance = np.union1d(stations, at)
    place = np.searchsorted(distance, at)
    found, spread = np.full(distance.shape, np.nan), np.full(distance.shape, np.nan)
    found[place], spread[place] = value, sigma
    return distance, found, spread


def _with_regional(distance, model, observed, sigma, used, regional: int) -> tuple[np.ndarray, float]:
    """The model with the regional that suits the readings best, weighted by their sigmas, and the rms residual."""
    scaled = (distance - distance[0]) / (distance[-1] - distance[0])
    columns = scaled[:, None] ** np.arange(regional)
    known = sigma[used] > 0
    weight = 1.0 / sigma[used] if known.all() else np.ones(int(used.sum()))
    left = (observed - model)[used]
    found = np.linalg.lstsq(columns[used] * weight[:, None], left * weight, rcond=None)[0] if regional else np.zeros(0)
    predicted = model + columns @ found
    return predicted, float(np.sqrt(np.mean((observed - predicted)[used] ** 2)))


def _joint(plate, section, gravity: Readings, before: int, options: GravityOptions, tell) -> JointFit:
    at, value, sigma = plate.surface()
    step = float(np.median(np.diff(plate.distance)))
    kind, shear, moment = plate.support(options.elastic, options.crust.mantle)
    search = replace(
        options.search, kind=kind, shear=shear, moment=moment, regional=plate.regional_coefficients(),
        level_free=options.level is None, gravity_regional=options.regional, elastic=options.elastic, before=before,
    )  # fmt: skip
    try:
        return joint_fit(
            section,
            options.crust,
            Readings(at, value, sigma, step),
            gravity,
            search,
            lambda part: tell(0.1 + 0.9 * part),
        )
    except DownwarpError as error:
        raise DownwarpError("{transect}: {why}", transect=plate.name, why=error.message) from None


def _joint_remarks(joint: JointFit) -> tuple[str, ...]:
    """Whether surface and gravity agree."""
    found = []
    for what, one, other in (
        (say("elastic thickness"), joint.surface.thickness, joint.gravity.thickness),
        (say("density of the load"), joint.surface.density, joint.gravity.density),
    ):
        if one.value is None or other.value is None:
            continue
        apart = (one.high is not None and other.low is not None and one.high < other.low) or (
            other.high is not None and one.low is not None and other.high < one.low
        )
        if apart:
            found.append(
                say(
                    "surface and gravity disagree on the {what}: their intervals do not overlap, and the joint one "
                    "must not be trusted",
                    what=what,
                )
            )
    return tuple(found)
