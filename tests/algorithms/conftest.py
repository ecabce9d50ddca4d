"""Processing with Downwarp's provider, in process; the tests of this folder need QGIS."""

import importlib.util
import sys

import pytest

if importlib.util.find_spec("qgis") is None:
    collect_ignore_glob = ["test_*.py"]

# QGIS and Processing keep providers by reference only.
_providers = []


@pytest.fixture(scope="session", autouse=True)
def provider(qgis_application):
    """Downwarp's provider in a running Processing."""
    from qgis.core import QgsApplication

    plugins = QgsApplication.pkgDataPath() + "/python/plugins"
    if plugins not in sys.path:
        sys.path.append(plugins)
    from downwarp_checkout.plugin.provider import DownwarpProvider
    from processing.core.Processing import Processing

    Processing.initialize()
    if not _providers:
        _providers.append(DownwarpProvider())
        QgsApplication.processingRegistry().addProvider(_providers[0])
    return _providers[0]


@pytest.fixture(scope="session")
def headless(tmp_path_factory):
    """A qgis_process of its own with the plugin enabled."""
    from headless import Headless

    qgis = Headless(tmp_path_factory.mktemp("headless"))
    qgis.enable()
    return qgis
