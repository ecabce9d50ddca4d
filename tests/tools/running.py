"""Runs Downwarp's algorithms through Processing in process, and reads what they write. Needs QGIS."""

from __future__ import annotations

import numpy as np
from qgis.core import (
    NULL,
    QgsProcessingContext,
    QgsProcessingException,
    QgsProcessingFeedback,
    QgsVectorLayer,
)

IN_MEMORY = "memory:"


def run(algorithm: str, parameters: dict, feedback=None, sinks=("PROFILES", "STATIONS")) -> dict:
    """Run ``downwarp:<algorithm>`` with the named sinks in memory; layers come back as lists of rows."""
    import processing

    context = QgsProcessingContext()
    results = processing.run(
        f"downwarp:{algorithm}",
        {**parameters, **{sink: IN_MEMORY for sink in sinks if sink not in parameters}},
        context=context,
        feedback=feedback or Quiet(),
    )
    return {key: rows(value) if isinstance(value, QgsVectorLayer) else value for key, value in results.items()}


def refusal(algorithm: str, parameters: dict, sinks=("PROFILES", "STATIONS")) -> str:
    """What ``downwarp:<algorithm>`` says as it refuses to run; fails where it runs.

    What stops it while it prepares reaches the caller through the feedback only.
    """
    feedback = Quiet()
    try:
        run(algorithm, parameters, feedback, sinks)
    except QgsProcessingException as error:
        return "\n".join([str(error), *feedback.errors])
    raise AssertionError(f"downwarp:{algorithm} ran where it should have refused")


class Quiet(QgsProcessingFeedback):
    """Feedback that says nothing and keeps what it was told."""

    def __init__(self) -> None:
        super().__init__(False)
        self.errors: list[str] = []
        self.warnings: list[str] = []
        self.fractions: list[float] = []
        self.progressChanged.connect(self.fractions.append)

    def pushWarning(self, warning: str) -> None:
        self.warnings.append(warning)

    def reportError(self, error: str, fatal: bool = False) -> None:
        self.errors.append(error)


def rows(layer: QgsVectorLayer | str) -> list[dict]:
    """Features as dictionaries, NULL as None, with the geometry under ``geometry`` (None where there is none)."""
    layer = QgsVectorLayer(layer, "read", "ogr") if isinstance(layer, str) else layer
    names = [field.name() for field in layer.fields()]
    result = []
    for feature in layer.getFeatures():
        row = {name: None if feature[name] in (None, NULL) else feature[name] for name in names}
        row["geometry"] = feature.geometry() if feature.hasGeometry() else None
        result.append(row)
    return result


def column(table: list[dict], name: str) -> np.ndarray:
    """One field of all rows as numbers, NULL as NaN."""
    return np.array([np.nan if row[name] is None else row[name] for row in table], dtype=float)
