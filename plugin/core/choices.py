"""How the answer moves with each reasonable choice: the fit repeated under alternatives, one at a time."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import replace

import numpy as np

from .elastic import Elastic
from .errors import DownwarpError
from .problem import Problem, prepare
from .result import ChoiceRow, Estimate, Fit
from .settings import (
    BREAK_GIVEN,
    BROKEN,
    CONTINUOUS,
    MAPPED,
    PLATE_NAMES,
    REGIONAL_BOW,
    REGIONAL_LEVEL,
    FitOptions,
)
from .wording import listed, say

Progress = Callable[[float], None]

WINDOW_CHANGE = 0.2
"""Share of the fitted stretch by which the window is shortened, and lengthened where the user had set its end."""
DENSITY_CHANGE = 100.0
"""Change of infill and load density, kg/m3."""
OTHER_YOUNG = {100e9: 70e9}
"""Young's modulus, Pa, that is common practice beside the one in use; 100 GPa beside any other."""
REGIONAL_WORDS = (say("none"), say("level"), say("level and tilt"), say("level, tilt and bow"))


def try_choices(
    problem: Problem, best: Fit, fit_kind: Callable[[Problem, int, Progress], Fit], progress: Progress
) -> tuple[ChoiceRow, ...]:
    """One row per alternative; break and change of thickness are held where the answer has them, so that choices differ
    in one thing only.

    ``fit_kind`` fits one kind of plate to a problem and tells its progress. An alternative that cannot be fitted has a row
    without values.
    """
    rows = [ChoiceRow(say("as fitted"), "", best.thickness, best.rms)]
    alternatives = list(_alternatives(problem, best))
    for done, (choice, option, changes) in enumerate(alternatives):
        kind = changes.pop("plate", best.kind)

        def part(fraction: float, done: int = done) -> None:
            progress((done + fraction) / len(alternatives))

        part(0.0)
        try:
            changed = prepare(problem.profile, replace(_held(problem, best), plate=kind, **changes))
            fit = fit_kind(changed, kind, part)
            rows.append(ChoiceRow(choice, option, fit.thickness, fit.rms))
        except DownwarpError:
            rows.append(ChoiceRow(choice, option, Estimate(None), None))
    rows.append(_other_modulus(problem.options.elastic, best))
    return tuple(rows)


def moving_choices(rows: tuple[ChoiceRow, ...], best: Fit) -> tuple[str, ...]:
    """A remark that names the choices, but for Young's modulus, that move the thickness outside its interval."""
    low, high = best.thickness.low, best.thickness.high
    # The first row is the answer itself, the last one the modulus.
    moving = [
        say(
            "{choice}, {option}: {thickness:.1f} km",
            choice=row.choice,
            option=row.option,
            thickness=row.thickness.value / 1e3,
        )
        for row in rows[1:-1]
        if row.thickness.value is not None
        and ((low is not None and row.thickness.value < low) or (high is not None and row.thickness.value > high))
    ]
    if not moving:
        return ()
    return (say("choices that move the thickness outside its interval: {choices}", choices=listed(moving)),)


def _held(problem: Problem, best: Fit) -> FitOptions:
    """The options with what was measured or searched fixed at what it came to."""
    options = replace(problem.options, reference_level=problem.reference_level)
    if best.break_position.value is not None:
        options = replace(options, break_at=BREAK_GIVEN, break_position=best.break_position.value)
    if best.zones is not None and best.zones.change.value is not None:
        options = replace(options, zone_from=best.zones.change.value, zone_to=best.zones.change.value)
    return options


def _alternatives(problem: Problem, best: Fit) -> Iterator[tuple[str, str, dict]]:
    """Choice, option in words, and the options that change."""
    options, rho = problem.options, problem.densities
    seen = problem.observations().distance
    first, last = float(seen.min()), float(seen.max())
    change = WINDOW_CHANGE * (last - first)
    yield say("window ends sooner"), f"FIT_TO {(last - change) / 1e3:.0f} km", {"fit_to": last - change}
    yield (
        say("window begins later"),
        f"FIT_FROM {(first + 0.5 * change) / 1e3:.0f} km",
        {"fit_from": first + 0.5 * change},
    )
    end = float(problem.profile.distance[-1])
    if options.fit_to is not None and options.fit_to < end:
        further = min(last + change, end)
        yield say("window ends later"), f"FIT_TO {further / 1e3:.0f} km", {"fit_to": further}
    regional = options.chosen("regional")[0]
    if regional < REGIONAL_BOW:
        yield say("more regional"), REGIONAL_WORDS[regional + 1], {"regional": regional + 1}
    if regional > REGIONAL_LEVEL:
        yield say("less regional"), REGIONAL_WORDS[regional - 1], {"regional": regional - 1}
    for sign, infill, load in (
        (1, say("denser infill"), say("denser load")),
        (-1, say("lighter infill"), say("lighter load")),
    ):
        if not problem.bare:
            density = rho.infill + sign * DENSITY_CHANGE
            if 0 <= density < rho.mantle:
                yield infill, f"{density:.0f} kg/m3", {"rho_infill": density}
        if np.any(problem.load):
            density = rho.load + sign * DENSITY_CHANGE
            if density > 0:
                yield load, f"{density:.0f} kg/m3", {"rho_load": density}
    if options.load_shape == MAPPED or options.zones > 1:
        return  # there is only one kind of plate that has them
    other = CONTINUOUS if best.kind == BROKEN else BROKEN
    yield say("other plate"), PLATE_NAMES[other], {"plate": other}


def _other_modulus(elastic: Elastic, best: Fit) -> ChoiceRow:
    """The answer at another Young's modulus: the rigidity stays, so the thickness goes by the modulus' cube root."""
    young = OTHER_YOUNG.get(elastic.young, 100e9)
    factor = (elastic.young / young) ** (1 / 3)
    scaled = Estimate(
        *(
            None if value is None else value * factor
            for value in (best.thickness.value, best.thickness.low, best.thickness.high)
        )
    )
    return ChoiceRow(say("Young's modulus"), f"{young / 1e9:.0f} GPa", scaled, best.rms)
