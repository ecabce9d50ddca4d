"""Builds the example models of `plugin/models` anew.

    python3 tests/tools/models.py

Run it with the Python that imports QGIS, after a change of keys; the models are kept as files, since people open them.
"""

from __future__ import annotations

import importlib
import os
import sys
from pathlib import Path

from qgis.core import (
    QgsApplication,
    QgsProcessing,
    QgsProcessingModelAlgorithm,
    QgsProcessingModelChildAlgorithm,
    QgsProcessingModelChildParameterSource,
    QgsProcessingModelOutput,
    QgsProcessingModelParameter,
    QgsProcessingParameterBoolean,
    QgsProcessingParameterEnum,
    QgsProcessingParameterFeatureSource,
    QgsProcessingParameterField,
    QgsProcessingParameterNumber,
    QgsProcessingParameterRasterLayer,
)
from qgis.PyQt.QtCore import QPointF

ROOT = Path(__file__).resolve().parents[2]
MODELS = ROOT / "plugin" / "models"
LINE = [QgsProcessing.SourceType.TypeVectorLine]
POINT = [QgsProcessing.SourceType.TypeVectorPoint]
SETTINGS = (
    "Volcanic load on the seafloor",
    "Trench and outer rise",
    "Foreland basin",
    "Load removed (ice, lake, erosion)",
    "None of these",
)
# An input's default does not reach a child where qgis_process leaves the input out, hence none for what must be chosen.
LEFT, MIDDLE, RIGHT, ROW = 150, 500, 850, 110


def _inputs(model: QgsProcessingModelAlgorithm, definitions: list) -> None:
    order = []
    for row, definition in enumerate(definitions):
        component = QgsProcessingModelParameter(definition.name())
        component.setPosition(QPointF(LEFT, 60 + ROW * row))
        model.addModelParameter(definition, component)
        order.append(definition.name())
    model.setParameterOrder(order)


def _child(
    model: QgsProcessingModelAlgorithm, algorithm: str, title: str, x: float, sources: dict, outputs: dict[str, str]
) -> str:
    """Add a child; a source is ("input", name), ("child", id, output) or ("value", value)."""
    child = QgsProcessingModelChildAlgorithm(f"downwarp:{algorithm}")
    child.setChildId(algorithm)
    child.setDescription(title)
    child.setPosition(QPointF(x, 200))
    for key, (kind, *what) in sources.items():
        make = {
            "input": QgsProcessingModelChildParameterSource.fromModelParameter,
            "child": QgsProcessingModelChildParameterSource.fromChildOutput,
            "value": QgsProcessingModelChildParameterSource.fromStaticValue,
        }[kind]
        child.addParameterSources(key, [make(*what)])
    finals = {}
    for row, (label, name) in enumerate(outputs.items()):
        output = QgsProcessingModelOutput(label, label)
        output.setChildId(algorithm)
        output.setChildOutputName(name)
        output.setPosition(QPointF(x + 250, 60 + ROW * row))
        finals[label] = output
    child.setModelOutputs(finals)
    model.addChildAlgorithm(child)
    return algorithm


def front_line_to_fitted_margin() -> QgsProcessingModelAlgorithm:
    """Lay transects across a front line and fit a plate to each."""
    model = QgsProcessingModelAlgorithm("Front line to fitted margin", "Downwarp")
    number = QgsProcessingParameterNumber.Type.Double
    _inputs(
        model,
        [
            QgsProcessingParameterFeatureSource("front_line", "Front line", LINE),
            QgsProcessingParameterRasterLayer("relief", "Relief, m up"),
            QgsProcessingParameterRasterLayer("bent_surface", "Bent surface, m up", None, True),
            QgsProcessingParameterEnum("setting", "Setting", SETTINGS),
            QgsProcessingParameterNumber("spacing", "Spacing, km", number, 25.0),
            QgsProcessingParameterNumber("length", "Length of the transects, km", number, 400.0),
            QgsProcessingParameterBoolean("right_to_left", "Run from the front line's right to its left", False),
        ],
    )
    _child(
        model,
        "laytransects",
        "Lay transects across the front",
        MIDDLE,
        {
            "GUIDE": ("input", "front_line"),
            "SPACING_KM": ("input", "spacing"),
            "AFTER_KM": ("input", "length"),
            "SIDE": ("input", "right_to_left"),
        },
        {"Transects": "TRANSECTS"},
    )
    _child(
        model,
        "fittransects",
        "Fit a plate to each",
        RIGHT,
        {
            "TRANSECTS": ("child", "laytransects", "TRANSECTS"),
            "NAME_FIELD": ("value", "name"),
            "DEM": ("input", "relief"),
            "OBSERVED": ("input", "bent_surface"),
            "SETTING": ("input", "setting"),
        },
        {"Profiles": "PROFILES", "Stations": "STATIONS", "Markers": "MARKERS", "Parameters": "PARAMETERS"},
    )
    return model


def raster_and_picks_to_report() -> QgsProcessingModelAlgorithm:
    """Fit a plate to a raster and picks together and write the report."""
    model = QgsProcessingModelAlgorithm("Raster and picks to report", "Downwarp")
    _inputs(
        model,
        [
            QgsProcessingParameterFeatureSource("transects", "Transects", LINE),
            QgsProcessingParameterRasterLayer("relief", "Relief, m up"),
            QgsProcessingParameterRasterLayer("bent_surface", "Bent surface, m up", None, True),
            QgsProcessingParameterFeatureSource("picks", "Picks of the bent surface", POINT),
            QgsProcessingParameterField("pick_elevation", "Field with their elevation, m up", None, "picks"),
            QgsProcessingParameterEnum("setting", "Setting", SETTINGS),
        ],
    )
    _child(
        model,
        "fittransects",
        "Fit a plate and report",
        MIDDLE,
        {
            "TRANSECTS": ("input", "transects"),
            "DEM": ("input", "relief"),
            "OBSERVED": ("input", "bent_surface"),
            "PICKS": ("input", "picks"),
            "PICK_ELEVATION": ("input", "pick_elevation"),
            "SETTING": ("input", "setting"),
        },
        {"Profiles": "PROFILES", "Stations": "STATIONS", "Choices": "CHOICES", "Report": "REPORT"},
    )
    return model


def main() -> None:
    """Write both models."""
    os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")
    application = QgsApplication([], False)
    application.initQgis()
    sys.path[:0] = [str(Path(QgsApplication.pkgDataPath()) / "python" / "plugins"), "/usr/share/qgis/python/plugins"]
    from processing.core.Processing import Processing

    Processing.initialize()
    sys.path.insert(0, str(ROOT / "plugin" / "core"))
    from worker import load_package

    load_package("downwarp_checkout", str(ROOT))
    provider = importlib.import_module("downwarp_checkout.plugin.provider").DownwarpProvider()
    QgsApplication.processingRegistry().addProvider(provider)
    MODELS.mkdir(exist_ok=True)
    for name, build in (
        ("front_line_to_fitted_margin", front_line_to_fitted_margin),
        ("raster_and_picks_to_report", raster_and_picks_to_report),
    ):
        model = build()
        model.updateDestinationParameters()
        if not model.toFile(str(MODELS / f"{name}.model3")):
            raise OSError(f"{name}.model3 cannot be written")
    os._exit(0)  # QGIS crashes on its way out while layers are about


if __name__ == "__main__":
    main()
