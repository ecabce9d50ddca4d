"""The tests of this folder need QGIS."""

import importlib.util

import pytest

if importlib.util.find_spec("qgis") is None:
    collect_ignore_glob = ["test_*.py"]


@pytest.fixture(scope="session", autouse=True)
def running_qgis(qgis_application):
    """QGIS runs through all of them."""
    return qgis_application
