"""The forward model of a transect with the load as a strip or as mapped, whichever was asked for."""

from __future__ import annotations

from .errors import DownwarpError
from .forward import TransectModel
from .problem import Problem
from .settings import MAPPED


def forward_model(problem: Problem, kind: int) -> tuple[TransectModel, tuple[str, ...]]:
    """The forward model of a continuous or a broken plate with the load in the shape that was asked for, and remarks.

    Raises DownwarpError as `mapped.mapped_model` does, and where the profile holds no relief about the line.
    """
    if problem.options.load_shape != MAPPED:
        return problem.model(kind), ()
    if problem.profile.plan is None:
        raise DownwarpError(
            "{transect}: LOAD_SHAPE is 1 (as mapped), but no relief about the line is known.",
            transect=problem.profile.name,
        )
    # Here, for it needs much that fits of a strip, and the processes that make many, do without.
    from .mapped import mapped_model

    return mapped_model(problem, problem.profile.plan)
