"""The example models run through qgis_process and give the layers that the algorithms called one by one give."""

import json
from pathlib import Path

import pytest

pytest.importorskip("qgis")

from running import rows

MODELS = Path(__file__).resolve().parents[2] / "plugin" / "models"


@pytest.fixture(scope="module")
def demo(headless, tmp_path_factory):
    """The demo's folder."""
    folder = tmp_path_factory.mktemp("demo")
    headless.run("demolayers", {"OUTPUT_FOLDER": str(folder)})
    return folder


def run_model(headless, name, parameters):
    """Run a model by its file."""
    words = [f"--{key}={value}" for key, value in parameters.items()]
    done = headless.call("--json", "run", str(MODELS / f"{name}.model3"), *words)
    assert done.returncode == 0, done.stdout[-2000:] + done.stderr[-2000:]
    return json.loads(done.stdout)["results"]


def same(one, other):
    """Whether two layers hold the same values and places."""
    first, second = rows(str(one)), rows(str(other))
    assert len(first) == len(second) > 0
    for left, right in zip(first, second):
        assert left.pop("geometry").asWkt(3) == right.pop("geometry").asWkt(3)
        left.pop("fid", None), right.pop("fid", None)
        assert left == right


def test_front_line_to_fitted_margin(headless, demo, tmp_path):
    """laytransects, then fittransects on its result."""
    run_model(
        headless,
        "front_line_to_fitted_margin",
        {
            "front_line": demo / "harrow_front_line.gpkg",
            "relief": demo / "relief.tif",
            "bent_surface": demo / "basement.tif",
            "setting": 2,
            "spacing": 60,
            "length": 500,
            "laytransects:Transects": tmp_path / "model_transects.gpkg",
            "fittransects:Profiles": tmp_path / "model_profiles.gpkg",
            "fittransects:Stations": tmp_path / "model_stations.gpkg",
        },
    )
    laid = tmp_path / "transects.gpkg"
    headless.run(
        "laytransects",
        {"GUIDE": demo / "harrow_front_line.gpkg", "SPACING_KM": 60, "AFTER_KM": 500, "TRANSECTS": laid},
    )
    headless.run(
        "fittransects",
        {
            "TRANSECTS": laid,
            "NAME_FIELD": "name",
            "DEM": demo / "relief.tif",
            "OBSERVED": demo / "basement.tif",
            "SETTING": 2,
            "PROFILES": tmp_path / "profiles.gpkg",
            "STATIONS": tmp_path / "stations.gpkg",
        },
    )
    for layer in ("transects", "profiles", "stations"):
        same(tmp_path / f"model_{layer}.gpkg", tmp_path / f"{layer}.gpkg")


def test_raster_and_picks_to_report(headless, demo, tmp_path):
    """fittransects with raster and picks together, and its report."""
    given = {
        "transects": demo / "harrow_front.gpkg",
        "relief": demo / "relief.tif",
        "bent_surface": demo / "basement.tif",
        "picks": demo / "picks.gpkg",
        "pick_elevation": "elevation_m",
        "setting": 2,
    }
    run_model(
        headless,
        "raster_and_picks_to_report",
        {
            **given,
            "fittransects:Profiles": tmp_path / "model_profiles.gpkg",
            "fittransects:Stations": tmp_path / "model_stations.gpkg",
            "fittransects:Report": tmp_path / "model.html",
        },
    )
    headless.run(
        "fittransects",
        {
            "TRANSECTS": given["transects"],
            "DEM": given["relief"],
            "OBSERVED": given["bent_surface"],
            "PICKS": given["picks"],
            "PICK_ELEVATION": "elevation_m",
            "SETTING": 2,
            "PROFILES": tmp_path / "profiles.gpkg",
            "STATIONS": tmp_path / "stations.gpkg",
            "REPORT": tmp_path / "report.html",
        },
    )
    for layer in ("profiles", "stations"):
        same(tmp_path / f"model_{layer}.gpkg", tmp_path / f"{layer}.gpkg")
    page = (tmp_path / "model.html").read_text(encoding="utf-8")
    assert "<svg" in page and "http://" not in page.replace("http://www.w3.org", "")
