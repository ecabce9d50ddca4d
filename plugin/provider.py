"""The Processing provider: Downwarp's algorithms under one heading."""

from __future__ import annotations

from pathlib import Path

from qgis.core import QgsProcessingAlgorithm, QgsProcessingProvider
from qgis.PyQt.QtGui import QIcon

from ..algorithms.age_thickness import AgeThickness
from ..algorithms.bend_transects import BendTransects
from ..algorithms.check_strip import CheckStrip
from ..algorithms.demo_layers import DemoLayers
from ..algorithms.fit_stations import FitStations
from ..algorithms.fit_transects import FitTransects
from ..algorithms.gravity_transects import GravityTransects
from ..algorithms.lay_transects import LayTransects
from ..algorithms.plate_strength import PlateStrength
from ..algorithms.sample_transects import SampleTransects
from .bridge.destinations import FORMATS

ICON = Path(__file__).resolve().parents[1] / "icons" / "downwarp.svg"

# In the order of design: what most people come for first.
ALGORITHMS: tuple[type[QgsProcessingAlgorithm], ...] = (
    FitTransects,
    BendTransects,
    SampleTransects,
    FitStations,
    LayTransects,
    CheckStrip,
    GravityTransects,
    PlateStrength,
    AgeThickness,
    DemoLayers,
)


class DownwarpProvider(QgsProcessingProvider):
    """Offers every class of ``ALGORITHMS``."""

    def id(self) -> str:
        """The prefix of algorithm identifiers, as in ``downwarp:fittransects``."""
        return "downwarp"

    def name(self) -> str:
        """The heading in the toolbox."""
        return "Downwarp"

    def icon(self) -> QIcon:
        """Downwarp's own icon."""
        return QIcon(str(ICON))

    def svgIconPath(self) -> str:
        """The same icon for QGIS to scale."""
        return str(ICON)

    def supportedOutputVectorLayerExtensions(self) -> list[str]:
        """The formats that the window offers for outputs; the first is the usual one."""
        return list(FORMATS)

    def loadAlgorithms(self) -> None:
        """Called by QGIS whenever the list is (re)built."""
        for algorithm in ALGORITHMS:
            self.addAlgorithm(algorithm())
