"""Demo layers -> fitted plate -> its gravity and the joint fit, all through the algorithms, against the plates of the demo.

The demo's gravity is that of its true plates and loads by polygons (tests/core/test_demo.py) with 3 mGal of correlated
noise; its relief has 40 m of such noise where the bent surface shows. Both are drawn anew by each seed.
"""

import json

import demo as demo_tool
import numpy as np
import pytest

pytest.importorskip("qgis")

from qgis.core import QgsVectorLayer
from running import run
from scipy.stats import binom

SEEDS = (1, 2, 3)
WITH_LOAD = ("Ostrun ridge", "Harrow front")
"""Scenarios whose load has a density to find; the trench has none."""
ALONE, TOGETHER = ("surface", "gravity"), "surface and gravity"


def joint_fits(folder, name, only=None, **noise):
    """Truth, and what each source of evidence says, by transect of the scenario ``name``; ``only``: one transect."""
    run("demolayers", {"OUTPUT_FOLDER": str(folder), **noise}, sinks=())
    scenarios = json.loads((folder / "demo.json").read_text(encoding="utf-8"))["scenarios"]
    scenario = next(each for each in scenarios if each["name"] == name)
    inputs, gravity = (
        {key: demo_tool.inside(folder, value) for key, value in scenario[part].items()}
        for part in ("parameters", "gravity")
    )
    stations = str(folder / "stations.gpkg")
    run("fittransects", {**inputs, "STATIONS": stations, "PROFILES": str(folder / "profiles.gpkg")}, sinks=())
    layer = QgsVectorLayer(stations, "stations", "ogr")
    if only is not None:
        layer.setSubsetString(f"\"transect\" = '{only}'")
    found = run("gravitytransects", {**gravity, "INPUT": layer}, sinks=("ANOMALIES", "EVIDENCE"))
    by_line: dict[str, dict] = {}
    for row in found["EVIDENCE"]:
        by_line.setdefault(row["transect"], {})[row["source"]] = row
    return {"te": scenario["true_te_km"], "rho": gravity["RHO_LOAD"]}, by_line


def side(row, what):
    """Bounds of the thickness or of the density, an open one infinitely far."""
    fields = ("te_low_km", "te_high_km") if what == "te" else ("rho_load_low", "rho_load_high")
    low, high = (row[field] for field in fields)
    return -np.inf if low is None else low, np.inf if high is None else high


def width(row, what):
    low, high = side(row, what)
    return high - low


@pytest.fixture(scope="module")
def answers(tmp_path_factory):
    """Truth and rows of each transect of ridge and front under three seeds, of the trench under two."""
    folder = tmp_path_factory.mktemp("demo")
    found = []
    for name, seeds in (("Ostrun ridge", SEEDS), ("Harrow front", SEEDS), ("Velmar trench", SEEDS[:2])):
        for seed in seeds:
            truth, by_line = joint_fits(folder / f"{name} {seed}", name, SEED=seed)
            assert len(by_line) == 3
            found += [(name, truth, rows) for rows in by_line.values()]
    return found


def test_joint_intervals_hold_the_truth_as_often_as_they_say(answers, record_property):
    """Elastic thickness on 24 transects and load density on 18: of intervals of 90 %, so many hold the truth that fewer
    would come by chance in a hundredth of all draws only."""
    for what, names in (("te", {name for name, *_ in answers}), ("rho", WITH_LOAD)):
        held = [
            side(rows[TOGETHER], what)[0] <= truth[what] <= side(rows[TOGETHER], what)[1]
            for name, truth, rows in answers
            if name in names
        ]
        record_property(what, f"{sum(held)} of {len(held)}")
        assert len(held) == (24 if what == "te" else 18)
        assert sum(held) >= binom.ppf(0.01, len(held), 0.9), what


def test_joint_interval_is_narrower_than_either_alone(answers):
    """On every transect, in thickness and, where there is a load, in its density."""
    for name, _, rows in answers:
        for what in ("te", "rho") if name in WITH_LOAD else ("te",):
            for source in ALONE:
                assert width(rows[TOGETHER], what) < width(rows[source], what), (rows[TOGETHER]["transect"], what, source)


@pytest.mark.parametrize("name", WITH_LOAD)
def test_hardly_any_noise_leaves_the_truth(name, tmp_path):
    """1 m and 0.1 mGal of noise: surface, gravity and both give thickness and density back to 0.5 %, as nothing does that
    takes the load's ground for wider or narrower than it is."""
    truth, by_line = joint_fits(tmp_path, name, f"{name} 2", NOISE_M=1, NOISE_MGAL=0.1)
    (rows,) = by_line.values()
    for source in (*ALONE, TOGETHER):
        assert rows[source]["te_km"] == pytest.approx(truth["te"], rel=5e-3), source
        assert rows[source]["rho_load"] == pytest.approx(truth["rho"], rel=5e-3), source
