"""Numbers that a run of the fit returns beside its layers."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np
from qgis.core import QgsProcessingOutputNumber

from ..core.result import FitResult
from ..core.wording import say
from ..translation import tr

LABELS = {
    "TE_KM": say("Elastic thickness, km"),
    "TE_LOW_KM": say("Elastic thickness, lower bound, km"),
    "TE_HIGH_KM": say("Elastic thickness, upper bound, km"),
    "RMS_M": say("Root mean square residual, m"),
    "TRANSECTS_FITTED": say("Transects fitted"),
}


def add_numbers(algorithm) -> None:
    """Declare the numbers on an algorithm."""
    for name, label in LABELS.items():
        algorithm.addOutput(QgsProcessingOutputNumber(name, tr(label)))


def fit_numbers(results: Iterable[FitResult]) -> dict[str, Any]:
    """The single transect's values, or the median over several; None where not one has a value."""

    def median(values: list[float | None], scale: float) -> float | None:
        known = [value / scale for value in values if value is not None]
        return float(np.median(known)) if known else None

    fits = [(result.best.thickness, result.best.rms) for result in results]
    return {
        "TE_KM": median([te.value for te, _ in fits], 1e3),
        "TE_LOW_KM": median([te.low for te, _ in fits], 1e3),
        "TE_HIGH_KM": median([te.high for te, _ in fits], 1e3),
        "RMS_M": median([rms for _, rms in fits], 1.0),
        "TRANSECTS_FITTED": len(fits),
    }
