"""The demo as `make demo` runs it: made and fitted through qgis_process, against the plates that it was made from."""

import json

import demo as demo_tool
import pytest

pytest.importorskip("qgis")


def fitted(headless, folder, noise):
    """True and fitted thickness, km, and the interval, of each scenario."""
    headless.run("demolayers", {"OUTPUT_FOLDER": str(folder), "NOISE_M": noise})
    scenarios = json.loads((folder / "demo.json").read_text(encoding="utf-8"))["scenarios"]
    rows = {}
    for scenario in scenarios:
        target = folder / "results" / scenario["name"]
        target.mkdir(parents=True)
        parameters = {key: demo_tool.inside(folder, value) for key, value in scenario["parameters"].items()}
        results = headless.run(
            "fittransects",
            {**parameters, "PROFILES": str(target / "profiles.gpkg"), "STATIONS": str(target / "stations.gpkg")},
        )
        assert results["TRANSECTS_FITTED"] == 3
        rows[scenario["name"]] = (
            scenario["true_te_km"], results["TE_KM"], results.get("TE_LOW_KM"), results.get("TE_HIGH_KM"),
        )  # fmt: skip
    return rows


def test_without_noise_every_thickness_is_within_5_percent(headless, tmp_path):
    """Ridge, trench and mountain front: known plate -> relief on a 2.5 km grid -> line -> fitted plate."""
    rows = fitted(headless, tmp_path / "demo", 0)
    assert len(rows) == 3
    for name, (truth, found, *_) in rows.items():
        assert found == pytest.approx(truth, rel=0.05), name


def test_with_noise_the_demo_is_fitted_nearby(headless, tmp_path, record_property):
    """40 m of correlated relief noise: within a factor of 1.5. Whether the interval holds the truth is recorded, not
    asked: one draw of noise may put it outside."""
    rows = fitted(headless, tmp_path / "demo", 40)
    for name, (truth, found, low, high) in rows.items():
        inside = (low is None or low <= truth) and (high is None or truth <= high)
        record_property(name, f"true {truth:.1f} km, fitted {found:.1f} km, {low} to {high} km, inside: {inside}")
        assert truth / 1.5 < found < truth * 1.5, name
