"""What the two algorithms that fit have in common: sinks, numbers, report and the processes that do the work."""

from __future__ import annotations

import os
from collections.abc import Iterable
from contextlib import closing
from functools import partial
from typing import Any

from qgis.core import QgsCoordinateReferenceSystem, QgsProcessingParameterFileDestination

from ..core.errors import DownwarpError
from ..core.fit import fit_profile
from ..core.profile import Profile
from ..core.result import FitResult
from ..core.settings import FitOptions
from .keys import Values, tr
from .numbers import add_numbers, fit_numbers
from .options import fit_options
from .outputs import LABELS, Outputs, add_sinks
from .run_report import inputs_of, write_run_report
from .runs import Item, Progress, run_each
from .workers import LEAST_TRANSECTS, FitPool


def add_fit_outputs(algorithm) -> None:
    """Sinks, report and numbers of a fit."""
    add_sinks(algorithm, tuple(LABELS), required=("PROFILES", "STATIONS"))
    algorithm.addParameter(
        QgsProcessingParameterFileDestination("REPORT", tr("Report"), tr("HTML files (*.html)"), None, True, False)
    )
    add_numbers(algorithm)


def check_fit(values: Values) -> None:
    """Checks on values that need no layer."""
    fit_options(values)
    if not 0 <= values.whole("WORKERS") <= 256:
        raise DownwarpError(f"WORKERS is {values.whole('WORKERS')}; it takes a whole number from 0 to 256.")


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
    arguments = (outputs, tuple(LABELS), items, count, feedback)
    if count >= LEAST_TRANSECTS:
        workers = min(values.whole("WORKERS") or (os.cpu_count() or 1), count)
        with FitPool(workers, options, with_choices) as pool:
            finished = run_each(*arguments, pool, Outputs.fitted)
    else:
        work = partial(_fit, options, with_choices)
        finished = run_each(*arguments, work, Outputs.fitted)
    with closing(finished):
        results = {**outputs.results, **fit_numbers(finished.results())}
        if report:
            write_run_report(report, finished, crs if located else None, inputs_of(algorithm, parameters, context))
            results["REPORT"] = report
    return results


def _fit(options: FitOptions, with_choices: bool, profile: Profile, progress: Progress) -> FitResult:
    return fit_profile(profile, options, progress, with_choices)
