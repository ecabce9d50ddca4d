"""A plate of stated thickness on a transect: bends it and evaluates everything along the stations."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from . import check
from .errors import DownwarpError
from .forward import TransectModel
from .markers import find_markers
from .plate import CONTINUES
from .problem import Problem, prepare
from .profile import Profile
from .result import Bent, StationValues
from .settings import BROKEN, CONTINUOUS, FitOptions


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
    break; ``start`` and ``finish`` are supports of `plate`. The undeflected surface is the reference level. Raises
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
    model = replace(
        problem.model(kind),
        shear=kind == BROKEN or bool(end_shear),
        moment=kind == BROKEN,
        start=start,
        finish=finish,
    )
    forces = {"end_shear": end_shear, "end_moment": end_moment}
    return bend_problem(problem, model, thickness, float(problem.breaks[0]), forces, (problem.reference_level or 0.0,))


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
    remarks = () if converged else ("the infill did not converge: it neither fills nor leaves a part of the line",)
    bending = model.bend(thickness, break_position, values)
    distance = profile.distance
    on_plate = distance >= bending.plate.nodes[0] - 1e-6

    def spread(values_on_plate: np.ndarray) -> np.ndarray:
        result = np.full(distance.shape, np.nan)
        result[on_plate] = values_on_plate
        return result

    at = distance[on_plate]
    deflection = bending.at(at)[:, 0]
    rigidity = float(elastic.rigidity(thickness))
    moment, shear = (values[:, 0] for values in bending.moment_and_shear_at(at))
    curvature = -moment / rigidity
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
        fibre_stress=spread(elastic.young * thickness * curvature / (2 * (1 - elastic.poisson**2))),
        thickness=spread(np.full(at.shape, thickness)),
        infill=spread(problem.infill_density(model)[on_plate]),
        observed=nowhere if observed is None else observed,
        sigma=nowhere if profile.sigma is None else profile.sigma,
        in_fit=np.zeros(distance.shape, dtype=bool) if in_fit is None else in_fit,
    )
    has_break = model.kind == BROKEN or bool(model.end_forces)
    return Bent(
        problem,
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
