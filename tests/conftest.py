"""Loads the checkout as the package ``downwarp_checkout``, whatever its folder is called; one QGIS for all tests."""

import importlib.util
import os
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]

if "downwarp_checkout" not in sys.modules:
    spec = importlib.util.spec_from_file_location(
        "downwarp_checkout", ROOT / "__init__.py", submodule_search_locations=[str(ROOT)]
    )
    package = importlib.util.module_from_spec(spec)
    sys.modules["downwarp_checkout"] = package
    spec.loader.exec_module(package)

os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")

# Kept to the end of the process and never shut down: exitQgis() crashes while layers are still about.
_application = []


@pytest.fixture(scope="session")
def qgis_application():
    """The running QGIS without a window; without the data providers that it registers, no layer is valid."""
    from qgis.core import QgsApplication

    if QgsApplication.instance() is None:
        _application.append(QgsApplication([], False))
        QgsApplication.initQgis()
    return QgsApplication.instance()
