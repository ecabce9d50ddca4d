"""Make demo layers: the invented scenario, for trying things out."""

from __future__ import annotations

from pathlib import Path

from qgis.core import QgsProcessingContext, QgsProcessingParameterFolderDestination

from ..plugin.bridge.algorithm import DownwarpAlgorithm
from ..plugin.bridge.demo_files import write_demo
from ..plugin.bridge.keys import Key
from ..plugin.core.constants import MILLIGAL
from ..plugin.core.errors import DownwarpError
from ..plugin.translation import tr


class DemoLayers(DownwarpAlgorithm):
    """Writes the invented sea's layers into a folder."""

    keys = (
        Key("NOISE_M", "number", "Standard deviation of the relief noise, m", 40.0),
        Key("NOISE_MGAL", "number", "Standard deviation of the gravity noise, mGal", 3.0),
        Key("SEED", "whole", "Seed of the noise", 1, advanced=True),
    )

    def add_outputs(self) -> None:
        self.addParameter(QgsProcessingParameterFolderDestination("OUTPUT_FOLDER", tr("Folder of the demo layers")))

    def check(self, values) -> None:
        for key in ("NOISE_M", "NOISE_MGAL"):
            if not 0 <= values.required_number(key) <= 1000:
                raise DownwarpError(
                    "{key} is {value:g}; it takes a number from 0 to 1000.", key=key, value=values.number(key)
                )
        if values.whole("SEED") < 0:
            raise DownwarpError("SEED is {seed}; it takes a whole number from 0.", seed=values.whole("SEED"))

    def carry_out(self, parameters, context, feedback):
        values = self.values(parameters, context)
        folder = self.parameterAsString(parameters, "OUTPUT_FOLDER", context)
        gravity_noise = values.required_number("NOISE_MGAL") * MILLIGAL.value
        layers = write_demo(Path(folder), values.required_number("NOISE_M"), gravity_noise, values.whole("SEED"))
        for path in layers:
            details = QgsProcessingContext.LayerDetails(path.stem, context.project())
            context.addLayerToLoadOnCompletion(str(path), details)
        return {"OUTPUT_FOLDER": folder}
