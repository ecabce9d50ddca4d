"""The Processing provider: Downwarp's algorithms under one heading."""

from __future__ import annotations

from pathlib import Path

from qgis.core import QgsProcessingAlgorithm, QgsProcessingProvider
from qgis.PyQt.QtGui import QIcon

from ..algorithms.bend_transects import BendTransects
from ..algorithms.demo_layers import DemoLayers
from ..algorithms.fit_stations import FitStations
from ..algorithms.fit_transects import FitTransects
from ..algorithms.lay_transects import LayTransects
from ..algorithms.sample_transects import SampleTransects

ICON = Path(__file__).resolve().parents[1] / "icons" / "downwarp.svg"

# In the order of design: what most people come for first.
ALGORITHMS: tuple[type[QgsProcessingAlgorithm], ...] = (
    FitTransects,
    BendTransects,
    SampleTransects,
    FitStations,
    LayTransects,
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

    def loadAlgorithms(self) -> None:
        """Called by QGIS whenever the list is (re)built."""
        for algorithm in ALGORITHMS:
            self.addAlgorithm(algorithm())
