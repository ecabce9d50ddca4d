"""What the two algorithms that fit have in common: sinks, numbers, report and the processes that do the work."""

from __future__ import annotations

import os
from collections.abc import Iterable
from contextlib import closing
from functools import partial
from pathlib import Path
from typing import Any

from qgis.core import QgsCoordinateReferenceSystem, QgsProcessingParameterFileDestination

from ..core.errors import DownwarpError
from ..core.fit import fit_profile
from ..core.profile import Profile
from ..core.result import FitResult
from ..core.settings import FitOptions
from ..translation import tr
from .along_strike import ALONG_STRIKE, AlongStrike
from .keys import Values
from .numbers import add_numbers, fit_numbers
from .options import fit_options
from .outputs import LABELS, Outputs, Track, add_sinks
from .run_report import inputs_of, staged_report, write_run_report
from .runs import Finished, Item, Progress, run_each
from .workers import LEAST_TRANSECTS, FitPool

SINKS = (*LABELS, ALONG_STRIKE)
"""What a run of the fit writes: what there is of each transect, and all of them along strike."""


def add_fit_outputs(algorithm) -> None:
    """Sinks, report and numbers of a fit."""
    add_sinks(algorithm, SINKS, required=("PROFILES", "STATIONS"))
    algorithm.addParameter(
        QgsProcessingParameterFileDestination("REPORT", tr("Report"), tr("HTML files (*.html)"), None, True, False)
    )
    add_numbers(algorithm)


def check_fit(values: Values) -> None:
    """Checks on values that need no layer."""
    fit_options(values)
    if not 0 <= values.whole("WORKERS") <= 256:
        raise DownwarpError("WORKERS is {count}; it takes a whole number from 0 to 256.", count=values.whole("WORKERS"))


def run_fit(
    algorithm,
    values: Values,
    parameters: dict[str, Any],
    context,
    feedback,
    items: Iterable[Item],
    count: int,
    crs: QgsCoordinateReferenceSystem,
    located: bool,
) -> dict[str, Any]:
    """Fit every item and write what is wanted; the results of the run."""
    options = fit_options(values)
    report = algorithm.parameterAsFileOutput(parameters, "REPORT", context) if parameters.get("REPORT") else ""
    with_choices = bool(parameters.get("CHOICES") or report)
    outputs = Outputs(algorithm, parameters, context, crs, located)
    strike = AlongStrike(crs if located else None)

    def write(into: Outputs, result: FitResult, track: Track | None) -> None:
        into.fitted(result, track)
        strike.add(result, track)

    def finish(finished: Finished, progress: Progress, page: Path | None) -> None:
        if ALONG_STRIKE in outputs.results:
            for row, place in strike.rows():
                outputs.add(ALONG_STRIKE, row, place)
        if page is not None:
            write_run_report(page, finished, strike, inputs_of(algorithm, parameters, context), progress)

    with staged_report(report) as page:
        work, last = partial(_fit, options, with_choices), partial(finish, page=page)
        arguments = (outputs, SINKS, items, count, feedback, work, write, last)
        at_once = min(values.whole("WORKERS") or (os.cpu_count() or 1), count)
        if count >= LEAST_TRANSECTS and at_once > 1:
            # This process is one of them.
            with FitPool(at_once - 1, options, with_choices) as pool:
                finished = run_each(*arguments, pool)
        else:
            finished = run_each(*arguments)
    with closing(finished):
        results = {**outputs.results, **fit_numbers(finished.results())}
    if report:
        results["REPORT"] = report
    return results


def _fit(options: FitOptions, with_choices: bool, profile: Profile, progress: Progress) -> FitResult:
    return fit_profile(profile, options, progress, with_choices)
