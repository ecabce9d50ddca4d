"""A plate of stated thickness on a transect: bends it and evaluates everything along the stations."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from . import check
from .errors import DownwarpError
from .forward import TransectModel
from .load_shape import forward_model
from .markers import find_markers
from .plate import CONTINUES
from .problem import Problem, prepare
from .profile import Profile
from .result import Bent, StationValues
from .settings import BROKEN, CONTINUOUS, MAPPED, FitOptions
from .wording import say
from .zones import varying


def bend_profile(
    profile: Profile,
    options: FitOptions,
    thickness: float,
    *,
    end_shear: float = 0.0,
    end_moment: float = 0.0,
    start: int | None = None,
    finish: int = CONTINUES,
) -> Bent:
    """Bend a plate of stated thickness, m, under the load of a sampled profile.

    ``end_shear`` (N/m, positive down) and ``end_moment`` (N, positive where it turns the broken end down) act at the
    break; ``start`` and ``finish`` are supports of `plate`. The undeflected surface is the reference level. Where the
    profile holds a thickness along the line, the plate has that one, and the answer its mean along the plate. Raises
    DownwarpError where the plate or its load cannot be made.
    """
    for key, value in (("END_SHEAR", end_shear), ("END_MOMENT", end_moment)):
        check.number(key, value)
    problem = prepare(profile, options)
    kind = options.chosen("plate")[0]
    if kind == BROKEN and start == CONTINUES:
        raise DownwarpError("START_SUPPORT is 0 (continues), but PLATE is 1: a broken plate begins at its break.")
    if kind == CONTINUOUS and end_moment:
        raise DownwarpError("END_MOMENT acts on a broken plate only, but PLATE is 0 (continuous).")
    model, remarks = forward_model(problem, kind)
    break_position = float(problem.breaks[0])
    regional = (problem.reference_level or 0.0,)
    if options.load_shape == MAPPED:
        for key, given in (("END_SHEAR", end_shear), ("START_SUPPORT", start), ("FINISH_SUPPORT", finish)):
            if given:
                raise DownwarpError(
                    "{key} is {given:g}, but LOAD_SHAPE is 1 (as mapped), which takes a plate that continues at both "
                    "ends, without end forces.",
                    key=key,
                    given=given,
                )
        thickness = _uniform(profile, thickness)
        return _told(bend_problem(problem, model, thickness, break_position, {}, regional), remarks)
    model = replace(
        model,
        shear=kind == BROKEN or bool(end_shear),
        moment=kind == BROKEN,
        start=start,
        finish=finish,
    )
    forces = {"end_shear": end_shear, "end_moment": end_moment}
    if profile.thickness is None:
        return bend_problem(problem, model, thickness, break_position, forces, regional)
    first = break_position if kind == BROKEN else -np.inf
    along, on_plate = profile.thickness, profile.distance >= first - 1e-6
    missing = int((~np.isfinite(along[on_plate])).sum())
    if missing:
        raise DownwarpError(
            "{transect}: the elastic thickness is not known at {missing} of the {count} stations on the plate.",
            transect=profile.name,
            missing=missing,
            count=int(on_plate.sum()),
        )
    # What lies before the break carries no plate.
    along = np.interp(profile.distance, profile.distance[on_plate], along[on_plate])
    bent = bend_problem(problem, varying(model, along), 1.0, break_position, forces, regional)
    least, most, mean = (float(of(along[on_plate])) for of in (np.min, np.max, np.mean))
    if most > least:
        remarks += (
            say(
                "the elastic thickness runs from {least:.3g} to {most:.3g} km along the plate; the profile's "
                "thickness, rigidity and flexural parameter are those of its mean",
                least=least / 1e3,
                most=most / 1e3,
            ),
        )
    return replace(_told(bent, remarks), thickness=mean)


def _told(bent: Bent, remarks: tuple[str, ...]) -> Bent:
    return replace(bent, remarks=remarks + bent.remarks)


def _uniform(profile: Profile, thickness: float) -> float:
    """The one thickness, m, of a plate in plan view."""
    if profile.thickness is None:
        return thickness
    if not np.ptp(profile.thickness) == 0:
        raise DownwarpError(
            "{transect}: LOAD_SHAPE is 1 (as mapped), which takes one elastic thickness all along the line.",
            transect=profile.name,
        )
    return float(profile.thickness[0])


def bend_problem(
    problem: Problem,
    model: TransectModel,
    thickness: float,
    break_position: float,
    forces: dict[str, float],
    regional: tuple[float, ...] = (),
    band: tuple[np.ndarray, np.ndarray] | None = None,
    in_fit: np.ndarray | None = None,
) -> Bent:
    """Bend ``model`` of ``problem`` at elastic thickness (m) and break (m).

    ``forces``: end_shear (N/m, positive down) and end_moment (N); ``regional``: level (m), tilt (m/m) and bow (m/m2);
    ``band``: lower and upper predicted surface at the stations; ``in_fit``: which stations were fitted, (n,) bool.
    """
    profile, elastic = problem.profile, problem.options.elastic
    values = np.array([forces.get(name, 0.0) for name in model.end_forces])
    model, converged = model.filled(thickness, break_position, values)
    remarks = () if converged else (say("the infill did not converge: it neither fills nor leaves a part of the line"),)
    bending = model.bend(thickness, break_position, values)
    distance = profile.distance
    on_plate = distance >= bending.plate.nodes[0] - 1e-6

    def spread(values_on_plate: np.ndarray) -> np.ndarray:
        result = np.full(distance.shape, np.nan)
        result[on_plate] = values_on_plate
        return result

    at = distance[on_plate]
    deflection = bending.at(at)[:, 0]
    along = model.thickness_at(thickness, break_position, at)
    moment, shear = (values[:, 0] for values in bending.moment_and_shear_at(at))
    curvature = -moment / elastic.rigidity(along)
    level, tilt, bow = (*regional, 0.0, 0.0, 0.0)[:3]
    surface = level + tilt * at + bow * at**2 - deflection
    observed = profile.relief if problem.bare else profile.observed
    nowhere = np.full(distance.shape, np.nan)
    stations = StationValues(
        load=problem.load,
        deflection=spread(deflection),
        predicted=spread(surface),
        predicted_low=nowhere if band is None else np.where(on_plate, band[0], np.nan),
        predicted_high=nowhere if band is None else np.where(on_plate, band[1], np.nan),
        slope=spread(bending.at(at, derivative=1)[:, 0]),
        moment=spread(moment),
        shear=spread(shear),
        curvature=spread(curvature),
        fibre_stress=spread(elastic.young * along * curvature / (2 * (1 - elastic.poisson**2))),
        thickness=spread(along),
        infill=spread(problem.infill_density(model)[on_plate]),
        observed=nowhere if observed is None else observed,
        sigma=nowhere if profile.sigma is None else profile.sigma,
        in_fit=np.zeros(distance.shape, dtype=bool) if in_fit is None else in_fit,
    )
    has_break = model.kind == BROKEN or bool(model.end_forces)
    return Bent(
        # The relief about the line is large, and whoever keeps the answer has no use for it.
        problem if profile.plan is None else replace(problem, profile=replace(profile, plan=None)),
        model.kind,
        thickness,
        break_position if has_break else None,
        forces.get("end_shear", 0.0),
        forces.get("end_moment", 0.0),
        (level, tilt, bow),
        stations,
        find_markers(bending),
        remarks,
    )
