"""Start-up: hands Downwarp's algorithms to QGIS Processing, with or without a window."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qgis.core import Qgis, QgsApplication, QgsMessageLog
from qgis.PyQt.QtCore import QCoreApplication

from .translation import install, tr

if TYPE_CHECKING:
    from .panel.window import Window
    from .provider import DownwarpProvider

TITLE = "Downwarp"

# Some packagings of QGIS come without these.
_REQUIRED = ("numpy", "scipy", "shapely", "pyproj")


class DownwarpPlugin:
    """The plugin as QGIS loads it; ``iface`` is None without a window."""

    def __init__(self, iface) -> None:
        self.iface = iface
        self.provider: DownwarpProvider | None = None
        self.window: Window | None = None
        # Before anything with words is made; Qt keeps it by reference only.
        self._translator = install()

    def initProcessing(self) -> None:
        """Register the provider: all that qgis_process asks of a plugin."""
        if self.provider is not None:
            return
        try:
            from .provider import DownwarpProvider
        except ModuleNotFoundError as error:
            missing = (error.name or "").partition(".")[0]
            if missing not in _REQUIRED:
                raise
            self._say_missing(missing)
            return
        self.provider = DownwarpProvider()
        QgsApplication.processingRegistry().addProvider(self.provider)

    def initGui(self) -> None:
        """Start in a window, or without one where ``iface`` is None."""
        self.initProcessing()
        # Without the provider there is nothing that the window could do; the reason has been said.
        if self.iface is not None and self.provider is not None and self.window is None:
            from .panel.window import Window

            self.window = Window(self.iface)

    def unload(self) -> None:
        """Take back what was registered."""
        if self.window is not None:
            self.window.shut()
            self.window = None
        if self.provider is not None:
            QgsApplication.processingRegistry().removeProvider(self.provider)
            self.provider = None
        if self._translator is not None:
            QCoreApplication.removeTranslator(self._translator)
            self._translator = None

    def _say_missing(self, package: str) -> None:
        text = tr(
            "Downwarp needs the Python package {package}, which this QGIS does not have. On Debian and Ubuntu: sudo apt "
            "install python3-{package}. Elsewhere, in the shell of this QGIS: python3 -m pip install {package}. Then "
            "start QGIS again.",
            package=package,
        )
        QgsMessageLog.logMessage(text, TITLE, Qgis.MessageLevel.Critical)
        if self.iface is not None:
            self.iface.messageBar().pushCritical(TITLE, text)
