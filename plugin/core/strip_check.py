"""Is a strip enough? The deflection of a load as mapped, on a transect, beside that of the strip that repeats the
transect's load along strike for ever.

Both plates are continuous, of one thickness and one restoring stiffness, without in-plane force, so that they differ in
the shape of the load alone.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.interpolate import CubicSpline
from scipy.optimize import minimize_scalar

from . import check
from .bend import bend_profile
from .elastic import flexural_parameter
from .errors import DownwarpError
from .markers import Markers, Place
from .plan import PlanRelief, mapped_load
from .problem import Problem, prepare
from .profile import Profile
from .result import Bent
from .settings import CONTINUOUS, FORCES_NONE, STRIP, FitOptions
from .wording import Said, say

ENOUGH, ROUGH = 0.05, 0.15
"""Errors of deepest deflection and thickness up to which a strip is called enough, and rough: our own choice, beside
the tenth or two by which a thickness is rarely known better."""
THICKNESS_FACTOR = 5.0
"""Factor up and down within which the strip's thickness is sought."""
SAME_LOAD = 0.1
"""Share of the load on the line by which strip and map may differ before it is told: cells blur it a little."""
LEAST_STATIONS = 10
"""Stations outside the load below which no strip's thickness is sought."""


@dataclass(frozen=True)
class StripCheck:
    """A strip and the load as mapped on one transect."""

    strip: Bent
    """The strip's plate."""
    load: np.ndarray
    """Load as mapped at the stations, Pa, positive down, shape (n,)."""
    deflection: np.ndarray
    """Deflection under the load as mapped, m, positive down, shape (n,)."""
    markers: Markers
    """Deepest point, node and bulge of it on the line, the latter two on the side of the strip's."""
    deepest_error: float | None
    """Strip's largest deflection over that of the load as mapped, less 1."""
    bulge_error: float | None
    """The same of the bulge."""
    node_shift: float | None
    """Distance of the strip's node less that of the load as mapped, m."""
    bulge_shift: float | None
    """The same of the bulge, m."""
    strip_thickness: float | None
    """Elastic thickness, m, that a strip needs to follow the deflection of the load as mapped outside the load; None
    where none does."""
    distortion: float
    """Largest error of scale in the plan view, 1."""
    verdict: str
    """In words."""
    remarks: tuple[str, ...]

    @property
    def thickness_error(self) -> float | None:
        """`strip_thickness` over the plate's own, less 1."""
        return None if self.strip_thickness is None else self.strip_thickness / self.strip.thickness - 1.0


def strip_options(options: FitOptions) -> FitOptions:
    """The options with what a plan view cannot have taken out: a continuous plate without end or in-plane forces."""
    if options.in_plane:
        raise DownwarpError("IN_PLANE is {in_plane:g}; a plan view takes no in-plane force.", in_plane=options.in_plane)
    if options.fill_sinking_only or options.rho_under_load is not None:
        raise DownwarpError("A plan view takes one infill density: leave RHO_UNDER_LOAD and FILL_SINKING_ONLY out.")
    return replace(options, plate=CONTINUOUS, end_forces=FORCES_NONE, load_shape=STRIP)


def check_strip(profile: Profile, plan: PlanRelief, options: FitOptions, thickness: float) -> StripCheck:
    """Compare a strip with the load as mapped for a plate of stated thickness, m.

    ``plan`` holds the relief about the line that ``profile`` was sampled on. Raises DownwarpError where the line
    carries no load, or the plate cannot be made.
    """
    thickness = check.number("TE_KM", thickness / 1e3, at_least=0.1, at_most=1000) * 1e3
    options = strip_options(options)
    problem = prepare(profile, options)
    strip = bend_profile(profile, options, thickness)
    line, remarks = mapped_load(problem, plan)
    rho = problem.densities
    rigidity = float(options.elastic.rigidity(thickness))
    stiffness = (rho.mantle - rho.infill) * options.elastic.gravity
    deflection = line.deflection(rigidity, stiffness)
    load = line.load()
    surplus = float(load.sum() / problem.load.sum() - 1.0)
    if abs(surplus) > SAME_LOAD:
        remarks += (
            say(
                "the load as mapped is {percent} along the line than the strip's: give LOAD_AREA or REFERENCE_LEVEL so "
                "that both count the same relief",
                percent=_percent(surplus, say("{percent:.0f} % larger"), say("{percent:.0f} % smaller")),
            ),
        )
    markers = markers_between(profile.distance, deflection, _side(strip.markers))
    found = strip_thickness(problem, deflection, thickness)
    if found is None:
        remarks += (
            say(
                "no strip within a factor of {factor:g} of the thickness follows the load as mapped outside the load",
                factor=THICKNESS_FACTOR,
            ),
        )
    deepest = _ratio(strip.markers.deepest, markers.deepest)
    return StripCheck(
        strip,
        load,
        deflection,
        markers,
        deepest,
        _ratio(strip.markers.bulge, markers.bulge),
        _shift(strip.markers.node, markers.node),
        _shift(strip.markers.bulge, markers.bulge),
        found,
        plan.window.distortion,
        verdict(deepest, None if found is None else found / thickness - 1.0),
        problem.remarks + strip.remarks + remarks,
    )


def strip_remarks(checked: StripCheck, low: float | None, high: float | None) -> tuple[str, ...]:
    """What a fit with a strip must say where the error of the strip exceeds the interval of its thickness, m (a side
    that is open is None); ``checked``: the check of the plate that was fitted."""
    fitted, found = checked.strip.thickness, checked.strip_thickness
    if found is None:
        return (say("the load is no strip: none follows its deflection as mapped; fit it as mapped"),)
    if (low is None or found >= low) and (high is None or found <= high):
        return ()
    return (
        say(
            "the load is no strip: fitted with one, a plate of {fitted:.3g} km comes out as {found:.3g} km, outside the "
            "interval; fit it as mapped",
            fitted=fitted / 1e3,
            found=found / 1e3,
        ),
    )


def strip_thickness(problem: Problem, deflection: np.ndarray, thickness: float) -> float | None:
    """Elastic thickness, m, of the strip whose surface follows best, outside the load and with the problem's regional
    free, the ``deflection`` (n,), m, of a plate of ``thickness``, m, under the load as mapped.

    None where too few stations lie outside the load, or the best lies at an end of `THICKNESS_FACTOR`'s range.
    """
    model = problem.model(CONTINUOUS)
    outside = np.flatnonzero(~problem.load_surface)
    if outside.size < max(LEAST_STATIONS, model.regional + 2):
        return None
    at = problem.profile.distance[outside]
    surface = -deflection[outside]
    regional, _ = np.linalg.qr(model.regional_columns(at))

    def misfit(log_thickness) -> np.ndarray:
        left = surface - model.columns(np.exp(np.atleast_1d(log_thickness)), 0.0, at)[0]
        left -= left @ regional @ regional.T
        return (left**2).sum(axis=1)

    grid = np.log(thickness) + np.linspace(-1.0, 1.0, 25) * np.log(THICKNESS_FACTOR)
    best = int(np.argmin(misfit(grid)))
    if best in (0, grid.size - 1):
        return None
    found = minimize_scalar(
        lambda each: float(misfit(each)[0]), bounds=(grid[best - 1], grid[best + 1]), method="bounded"
    )
    return float(np.exp(found.x))


def verdict(deepest_error: float | None, thickness_error: float | None) -> str:
    """What the errors of a strip come to, in words."""
    if deepest_error is None:
        return say("nothing to tell: the plate does not bend on this line")
    depth = _percent(deepest_error, say("{percent:.0f} % too deep"), say("{percent:.0f} % too shallow"))
    if thickness_error is None:
        return say(
            "a strip is wrong here: it makes the deepest deflection {depth}, and no strip follows the deflection outside "
            "the load",
            depth=depth,
        )
    worst = max(abs(deepest_error), abs(thickness_error))
    kind = say("enough") if worst <= ENOUGH else say("rough") if worst <= ROUGH else say("wrong")
    return say(
        "a strip is {kind} here: it makes the deepest deflection {depth}, and a thickness fitted with it comes out "
        "{thickness}",
        kind=kind,
        depth=depth,
        thickness=_percent(thickness_error, say("{percent:.0f} % too large"), say("{percent:.0f} % too small")),
    )


def _percent(error: float, above: Said, below: Said) -> Said:
    """A relative error in words; ``above`` and ``below`` are said of its size in percent."""
    return say("right to 1 %") if abs(error) < 0.005 else say(above if error > 0 else below, percent=100 * abs(error))


def _ratio(strip: Place | None, mapped: Place | None) -> float | None:
    if strip is None or mapped is None or mapped.deflection == 0:
        return None
    return strip.deflection / mapped.deflection - 1.0


def _shift(strip: Place | None, mapped: Place | None) -> float | None:
    return None if strip is None or mapped is None else strip.distance - mapped.distance


def _side(markers: Markers) -> tuple[float, ...]:
    """The side of the deepest point on which the node lies, +1 or -1; both where there is none."""
    if markers.node is None or markers.deepest is None:
        return (1.0, -1.0)
    return (1.0,) if markers.node.distance > markers.deepest.distance else (-1.0,)


def markers_between(distance: np.ndarray, deflection: np.ndarray, sides: tuple[float, ...] = (1.0, -1.0)) -> Markers:
    """Deepest point, node and bulge of a deflection, m, known at stations, m, as `markers.find_markers` defines them:
    of the cubic spline through the stations. ``sides``: where the node is looked for, one after another."""
    if not np.abs(deflection).max() > 0:
        return Markers(None, None, None)
    spline = CubicSpline(distance, deflection)
    flat = spline.derivative().roots(extrapolate=False)
    flat = flat[np.isfinite(flat)]
    candidates = np.concatenate([distance[[0, -1]], flat])
    top = float(candidates[np.argmax(np.abs(spline(candidates)))])
    sign = np.sign(spline(top))
    roots = spline.roots(extrapolate=False)
    for direction in sides:
        beyond = direction * (roots - top) > 0
        if beyond.any():
            node = float(top + direction * (direction * (roots[beyond] - top)).min())
            further = flat[(direction * (flat - node) > 0) & (sign * spline(flat) < 0)]
            bulge = None
            if further.size:
                at = float(node + direction * (direction * (further - node)).min())
                bulge = Place(at, float(spline(at)))
            return Markers(Place(top, float(spline(top))), Place(node, 0.0), bulge)
    return Markers(Place(top, float(spline(top))), None, None)


def flexural_reach(options: FitOptions, thickness: float, bare: bool = True) -> float:
    """Flexural parameter, m, of a plate of ``thickness``, m; ``bare``: whether the DEM itself shows its bent surface."""
    densities, _ = options.densities(bare)
    stiffness = (densities.mantle - densities.infill) * options.elastic.gravity
    return float(flexural_parameter(options.elastic.rigidity(thickness), stiffness))
