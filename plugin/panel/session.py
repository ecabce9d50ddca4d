"""One transect under adjustment: what the profile panel computes, without any widget.

The fit is core's own, so that panel and algorithm agree to the last digit. Between fits a plate is tried by hand: its
thickness and break are stated, and what is left free (end forces, regional) is solved by weighted least squares,

    min over b of | (y - offset - X b) / sigma |,

which is the fit's own answer but for the correlation of residuals that the fit allows for.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from ..core.bend import bend_problem
from ..core.errors import DownwarpError
from ..core.fit import REGIONAL_NAMES, complete_sigma, fit_profile, trial_columns
from ..core.forward import TransectModel
from ..core.load_shape import forward_model
from ..core.problem import Observations, Problem, prepare
from ..core.profile import Profile
from ..core.result import Bent, FitResult
from ..core.settings import BOTH, BREAK_GIVEN, BREAK_SEARCHED, BROKEN, CONTINUOUS, FitOptions

GUESSES = 25
"""Thicknesses tried for the first look at a transect."""


@dataclass(frozen=True)
class Trial:
    """A plate stated by hand."""

    thickness: float
    """Elastic thickness, m."""
    break_position: float | None = None
    """m from the line's start, where the break is searched; None for where the options have it."""
    forces: tuple[float, float] | None = None
    """End shear (N/m, positive down) and end moment (N); None where they are solved."""


@dataclass(frozen=True)
class View:
    """A bent plate and how it meets what was observed."""

    bent: Bent
    rms: float
    """Root mean square residual of what is fitted, m."""
    count: int
    """Number of observations that are fitted."""
    result: FitResult | None = None
    """The fit that this is the answer of; None for a trial."""


class Session:
    """The profile of one transect, the options in force, the stations left out and the last fit."""

    def __init__(self, profile: Profile, options: FitOptions) -> None:
        self._sampled = profile
        self._options = options
        self._left_out = np.zeros(profile.distance.shape, dtype=bool)
        self._result: FitResult | None = None
        self._fitted_from: tuple[FitOptions, bytes] | None = None
        self._problems: dict[float | None, Problem] = {}
        self._mapped: tuple[Problem, TransectModel] | None = None

    @property
    def profile(self) -> Profile:
        """The profile with the stations left out by hand among those excluded."""
        if not self._left_out.any():
            return self._sampled
        excluded = self._sampled.excluded
        return replace(self._sampled, excluded=self._left_out if excluded is None else excluded | self._left_out)

    @property
    def options(self) -> FitOptions:
        """What a fit is asked for."""
        return self._options

    @options.setter
    def options(self, options: FitOptions) -> None:
        self._options = options
        self._problems.clear()

    @property
    def left_out(self) -> np.ndarray:
        """Stations left out of the fit by hand, (n,) bool."""
        return self._left_out.copy()

    @left_out.setter
    def left_out(self, left_out: np.ndarray) -> None:
        self._left_out = np.array(left_out, dtype=bool)
        self._problems.clear()

    def leave_out(self, start: float, end: float, leave: bool = True) -> int:
        """Leave the stations from ``start`` to ``end`` (m) out of the fit, or take them back; how many that changed."""
        low, high = sorted((start, end))
        distance = self._sampled.distance
        changed = (distance >= low) & (distance <= high) & (self._left_out != leave)
        self.left_out = self._left_out ^ changed
        return int(changed.sum())

    @property
    def result(self) -> FitResult | None:
        """The last fit."""
        return self._result

    @property
    def is_current(self) -> bool:
        """Whether the last fit was made with the options and stations in force."""
        return self._result is not None and self._fitted_from == self._state()

    def _state(self) -> tuple[FitOptions, bytes]:
        return self._options, self._left_out.tobytes()

    def job(self, with_choices: bool = False) -> Callable[[Callable[[float], None]], Callable[[], None]]:
        """The fit of what is in force, to be called with a progress callable off the main thread.

        It returns a callable that makes its result the session's last fit, to be called on the main thread.
        """
        profile, options, state = self.profile, self._options, self._state()

        def run(progress: Callable[[float], None]) -> Callable[[], None]:
            result = fit_profile(profile, options, progress, with_choices)

            def adopt() -> None:
                self._result, self._fitted_from = result, state
                self._problems.clear()

            return adopt

        return run

    @property
    def kind(self) -> int:
        """The kind of plate that trials bend: the better one of the last fit where both are compared."""
        kind = self._options.chosen("plate")[0]
        if kind != BOTH:
            return kind
        return CONTINUOUS if self._result is None else self._result.best.kind

    @property
    def has_break(self) -> bool:
        """Whether a break, or the line load of a continuous plate, has a place."""
        return self.kind == BROKEN or bool(self._options.chosen("end_forces")[0])

    def problem(self, break_position: float | None = None) -> Problem:
        """What trials solve; raises DownwarpError where it cannot be made."""
        if break_position not in self._problems:
            options = replace(self._options, plate=self.kind)
            if options.chosen("break_at")[0] == BREAK_SEARCHED:
                middle = 0.5 * ((options.break_from or 0.0) + (options.break_to or 0.0))
                place = middle if break_position is None else break_position
                options = replace(options, break_at=BREAK_GIVEN, break_position=place)
            settled = self._settled_level()
            if settled is None:
                problem = prepare(self.profile, options)
            else:
                level, origin = settled
                problem = prepare(self.profile, replace(options, reference_level=level))
                problem = replace(problem, options=options, reference_origin=origin)
            self._problems[break_position] = problem
        return self._problems[break_position]

    def _settled_level(self) -> tuple[float | None, str] | None:
        """Reference level of the last fit and its origin, while the load is of the same kind and the user gave none."""
        if self._result is None or self._options.reference_level is not None:
            return None
        fitted = self._result.best.bent.problem
        alike = fitted.options.setting == self._options.setting
        alike &= fitted.options.reference_level is None
        alike &= fitted.options.chosen("load") == self._options.chosen("load")
        return (fitted.reference_level, fitted.reference_origin) if alike else None

    def fitted_trial(self) -> Trial | None:
        """The trial that stands where the current fit has its answer."""
        if self._result is None or not self.is_current:
            return None
        best = self._result.best
        searched = self._options.chosen("break_at")[0] == BREAK_SEARCHED
        return Trial(best.bent.thickness, best.bent.break_position if searched else None)

    def first_trial(self) -> Trial:
        """The trial of least residual among a few: a first look, not a fit."""
        thicknesses = np.geomspace(self._options.te_from, self._options.te_to, GUESSES)
        residuals = [self._solved(Trial(float(each)))[3] for each in thicknesses]
        return Trial(float(thicknesses[int(np.argmin(residuals))]))

    def view(self, trial: Trial) -> View:
        """The bent plate of a trial; where it is the current fit's answer, that answer itself."""
        if self._result is not None and trial == self.fitted_trial():
            best = self._result.best
            return View(best.bent, best.rms, best.count, self._result)
        problem, model, coefficients, rms, seen = self._solved(trial)
        names = model.end_forces + REGIONAL_NAMES[: model.regional]
        values = dict(zip(names, coefficients.tolist()))
        in_fit = np.zeros(problem.profile.distance.shape, dtype=bool)
        in_fit[seen.station[seen.station >= 0]] = True
        regional = tuple(values[name] for name in REGIONAL_NAMES[: model.regional])
        bent = bend_problem(
            problem, model, trial.thickness, float(problem.breaks[0]), values, regional, in_fit=in_fit
        )
        return View(bent, rms, seen.distance.size)

    def _model(self, problem: Problem) -> TransectModel:
        """The forward model of a problem; the one of a mapped load is kept, for its spectrum takes time."""
        if self._mapped is None or self._mapped[0] is not problem:
            self._mapped = problem, forward_model(problem, self.kind)[0]
        return self._mapped[1]

    def _solved(self, trial: Trial) -> tuple[Problem, TransectModel, np.ndarray, float, Observations]:
        """Problem, model, coefficients in the model's order, rms (m) and what was observed."""
        problem = self.problem(trial.break_position)
        kind, at = self.kind, float(problem.breaks[0])
        model = self._model(problem)
        seen = problem.observations()
        least = model.regional + (len(model.end_forces) if trial.forces is None else 0) + 1
        if seen.distance.size < least:
            raise DownwarpError(
                "{name}: {count} observed stations are left to fit; it takes at least {least}.",
                name=problem.profile.name, count=seen.distance.size, least=least,
            )  # fmt: skip
        if trial.forces is None:
            offsets, columns = trial_columns(model, np.array([trial.thickness]), at, seen.distance, seen)
            offset, free, fixed = offsets[0], columns[0], np.zeros(0)
        else:
            shear, moment = trial.forces
            model = replace(model, shear=kind == BROKEN or bool(shear), moment=kind == BROKEN)
            fixed = np.array([{"end_shear": shear, "end_moment": moment}[name] for name in model.end_forces])
            filled, _ = model.filled(trial.thickness, at, fixed)
            offsets, columns = filled.columns(np.array([trial.thickness]), at, seen.distance)
            offset, free = offsets[0] + columns[0, :, : fixed.size] @ fixed, columns[0, :, fixed.size :]
        solved = _least_squares(seen, offset, free)
        residual = seen.elevation - offset - free @ solved
        return problem, model, np.append(fixed, solved), float(np.sqrt(np.mean(residual**2))), seen


def _least_squares(seen: Observations, offset: np.ndarray, columns: np.ndarray) -> np.ndarray:
    """Coefficients of ``columns`` (m, p) that bring them nearest to what is observed beyond ``offset`` (m,)."""
    known = complete_sigma(seen.sigma)
    sigma = np.ones(seen.distance.shape) if known is None else known
    scale = np.maximum(np.abs(columns).max(axis=0, initial=0.0), 1e-300)
    weighted = columns / scale / sigma[:, None]
    return np.linalg.lstsq(weighted, (seen.elevation - offset) / sigma, rcond=None)[0] / scale
