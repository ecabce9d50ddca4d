"""One QGIS application, without a window, for all tests of this folder."""

import os

import pytest

os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")

try:
    from qgis.core import QgsApplication
except ImportError:
    collect_ignore_glob = ["test_*.py"]

# Kept to the end of the process and never shut down: exitQgis() crashes while layers are still about.
_application = []


@pytest.fixture(scope="session", autouse=True)
def qgis_application():
    """The running application; without the data providers that it registers, no layer is valid."""
    if QgsApplication.instance() is None:
        _application.append(QgsApplication([], False))
        QgsApplication.initQgis()
    return QgsApplication.instance()
