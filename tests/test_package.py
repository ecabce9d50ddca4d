"""The plugin as users get it: what is in the zip, what its metadata says, that QGIS loads it and takes it back."""

import configparser
import json
import os
import re
import subprocess
import sys
import zipfile
from pathlib import Path

import demo
import package
import pytest
from headless import CHECKOUT, Headless

ALGORITHMS = {
    "fittransects", "bendtransects", "sampletransects", "fitstations", "laytransects", "checkstrip", "gravitytransects",
    "platestrength", "agethickness", "demolayers",
}  # fmt: skip
DEPENDENCIES = ("numpy", "scipy", "shapely", "pyproj", "matplotlib")


@pytest.fixture(scope="module")
def archive(tmp_path_factory) -> Path:
    return package.build(tmp_path_factory.mktemp("zip"))


@pytest.fixture(scope="module")
def names(archive) -> set[str]:
    return set(zipfile.ZipFile(archive).namelist())


@pytest.fixture(scope="module")
def installed(archive, tmp_path_factory) -> Path:
    """The plugin folder unpacked from the zip."""
    folder = tmp_path_factory.mktemp("installed")
    with zipfile.ZipFile(archive) as opened:
        opened.extractall(folder)
    return folder / "downwarp"


def test_zip_holds_one_folder_with_all_that_runs(names):
    """Every module, help file and icon of the checkout is in one folder, beside the licence and the metadata."""
    assert {name.partition("/")[0] for name in names} == {"downwarp"}
    for name in ("__init__.py", "metadata.txt", "LICENSE", "README.md", "CHANGELOG.md"):
        assert f"downwarp/{name}" in names
    for folder in ("plugin", "algorithms", "icons"):
        for path in (CHECKOUT / folder).rglob("*"):
            if path.is_file() and "__pycache__" not in path.parts:
                assert f"downwarp/{path.relative_to(CHECKOUT).as_posix()}" in names


def test_zip_holds_nothing_else(archive, names):
    """No caches, hidden files, tests or build files; no binaries but pictures; below the plugin repository's 25 MB."""
    tops = {name.split("/")[1] for name in names}
    assert tops <= {*package.FILES, *package.FOLDERS}
    assert not [name for name in names if "__pycache__" in name or "/." in name]
    with zipfile.ZipFile(archive) as opened:
        for name in names:
            content = opened.read(name)
            if name.endswith(".png"):
                assert content.startswith(b"\x89PNG")
            else:
                content.decode("utf-8")
    assert archive.stat().st_size < 25e6


def test_zip_refuses_a_file_of_an_unexpected_kind(tmp_path):
    """A scratch file left in a shipped folder stops the build by name, rather than to ship or to vanish."""
    (tmp_path / "plugin").mkdir()
    (tmp_path / "plugin" / "scratch.npy").touch()
    with pytest.raises(ValueError, match=r"scratch\.npy is no file that Downwarp ships"):
        list(package.members(tmp_path))


def test_equal_sources_give_equal_zips(archive, tmp_path):
    """Built twice, the zip has the same bytes."""
    assert package.build(tmp_path).read_bytes() == archive.read_bytes()


def test_metadata_is_complete(names):
    """What QGIS and its plugin repository ask for is there, and reads with interpolation (a bare % would raise)."""
    general = package.metadata()
    expected = {
        "name": "Downwarp",
        "qgisMinimumVersion": "3.22",
        "qgisMaximumVersion": "4.99",
        "author": "Downwarp contributors",
        "hasProcessingProvider": "yes",
    }
    assert {key: general[key] for key in expected} == expected
    for key in ("description", "about", "version", "tags", "email"):
        assert general[key].strip()
    for key in ("homepage", "tracker", "repository"):
        assert general[key].startswith("https://")
    assert f"downwarp/{general['icon']}" in names
    for dependency in DEPENDENCIES:
        assert dependency in general["about"]


def test_bare_percent_in_metadata_is_an_error(tmp_path):
    """The reader of `test_metadata_is_complete` does object to a % that is not escaped."""
    (tmp_path / "metadata.txt").write_text("[general]\nabout=90 % of it\n", encoding="utf-8")
    with pytest.raises(configparser.InterpolationSyntaxError):
        package.metadata(tmp_path)["about"]


def test_version_heads_the_changelog():
    """The newest heading of the changelog is the version in the metadata."""
    changelog = (CHECKOUT / "CHANGELOG.md").read_text(encoding="utf-8")
    assert re.findall(r"^## (\d+\.\d+\.\d+)", changelog, re.MULTILINE)[0] == package.metadata()["version"]


@pytest.mark.parametrize("name", ["downwarp", "a-name.with dots"])
def test_zip_loads_into_a_fresh_profile(installed, tmp_path, name):
    """qgis_process enables the unpacked plugin and lists its algorithms; the harness takes a folder of any name."""
    folder = tmp_path / name
    folder.symlink_to(installed, target_is_directory=True)
    qgis = Headless(tmp_path / "qgis", folder)
    enabled = qgis.enable()
    assert enabled.returncode == 0, enabled.stderr
    assert "Traceback" not in enabled.stdout + enabled.stderr
    assert qgis.algorithms() == ALGORITHMS


def test_demo_runs_from_the_zip_in_a_fresh_profile(archive, tmp_path):
    """Unpacked where QGIS installs plugins, with no other trace of it: the demo is made, and a scenario fitted."""
    qgis = Headless(tmp_path / "qgis", tmp_path / "nowhere")
    del qgis.environment["QGIS_PLUGINPATH"]
    plugins = tmp_path / "qgis" / "profile" / "profiles" / "default" / "python" / "plugins"
    with zipfile.ZipFile(archive) as opened:
        opened.extractall(plugins)
    enabled = qgis.enable()
    assert enabled.returncode == 0, enabled.stderr
    layers = tmp_path / "layers"
    qgis.run("demolayers", {"OUTPUT_FOLDER": str(layers)})
    scenario = json.loads((layers / "demo.json").read_text(encoding="utf-8"))["scenarios"][0]
    _, truth, fitted, _, _ = demo.fit(qgis, layers, scenario)
    assert float(fitted) == pytest.approx(float(truth), rel=0.15)


@pytest.mark.parametrize("absent", ["scipy", "shapely"])
def test_missing_dependency_is_said_in_plain_words(installed, tmp_path, absent):
    """Where a packaging lacks a dependency, QGIS starts without Downwarp's algorithms and the log says what to get."""
    (tmp_path / f"{absent}.py").write_text(f"raise ModuleNotFoundError('absent', name='{absent}')\n", encoding="utf-8")
    qgis = Headless(tmp_path / "qgis", installed)
    qgis.environment["PYTHONPATH"] = str(tmp_path)
    enabled = qgis.enable()
    said = enabled.stdout + enabled.stderr
    assert f"Downwarp needs the Python package {absent}, which this QGIS does not have" in said
    assert "Traceback" not in said


LIFECYCLE = """
import conftest
from qgis.core import QgsApplication
from downwarp_checkout import classFactory
application = QgsApplication([], False)
application.initQgis()
registry = QgsApplication.processingRegistry()
plugin = classFactory(None)
for _ in range(2):
    plugin.initProcessing()
    plugin.initGui()
    assert [provider.id() for provider in registry.providers()].count("downwarp") == 1
    assert not registry.providerById("downwarp").icon().isNull()
    plugin.unload()
    assert registry.providerById("downwarp") is None
    plugin.unload()
"""


def test_plugin_registers_once_and_leaves_nothing_behind():
    """Started twice over without a window, there is one provider with an icon; unloaded, there is none."""
    environment = {**os.environ, "QT_QPA_PLATFORM": "offscreen", "PYTHONPATH": str(CHECKOUT / "tests")}
    done = subprocess.run(
        [sys.executable, "-c", LIFECYCLE], env=environment, capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
