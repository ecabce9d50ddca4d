"""Loads as mapped and plates of uneven thickness through Processing: known plates given back, words, real trenches.

Round loads: a disk of radius A under q on a plate of l = (D / k)^(1/4) sinks by (Brotchie & Silvester 1969, Kelvin
functions; form recomputed in tests/core/test_sheet.py), with a = A / l and s = r / l

    k w / q = 1 + a (ker' a ber s - kei' a bei s) inside,   a (ber' a ker s - bei' a kei s) outside.

Two zones: relief over `zones.ZonedModel`, which tests/core/test_zones.py holds against scipy's solve_bvp and published
matching values.
"""

import pickle
from pathlib import Path

import numpy as np
import pytest

pytest.importorskip("qgis")

import invented
from downwarp_checkout.plugin.core.elastic import Elastic
from downwarp_checkout.plugin.core.forward import TransectModel
from downwarp_checkout.plugin.core.zones import zoned
from invented import AXIS_KM, KM_PER_DEGREE, LENGTH_KM, STEP_KM, equator_grid, equator_line, lines_layer, write_grid
from pyproj import Geod
from qgis.core import QgsFeature, QgsVectorLayer
from running import column, refusal, run
from scipy.special import bei, beip, ber, berp, kei, keip, ker, kerp

WGS84 = Geod(ellps="WGS84")
RELIEF = Path("/usr/share/ferret-vis/data/etopo5.cdf")
SINKS = ("PROFILES", "STATIONS", "PARAMETERS", "MISFIT", "CHOICES")
ZONE_FIELDS = tuple(f"{name}_{end}km" for name in ("te_near", "zone_change") for end in ("", "low_", "high_"))
NEAR, BEYOND, CHANGE = 14.0, 40.0, 75.0
"""Two zones, km; the change lies on a station or near it."""
TE, CENTRE, STIFFNESS = 25e3, (179.0, -20.0), (3300 - 1030) * 9.81
RIGIDITY = 100e9 * TE**3 / (12 * (1 - 0.25**2))
LENGTH = (RIGIDITY / STIFFNESS) ** 0.25
RADIUS, HEIGHT = 1.2 * LENGTH, 1000.0
CELL, HALF = 0.03, 7.5
"""Cells and half the side of the round grids, degrees: they reach across 180 degrees."""


def weak_trench(distance_km, near=NEAR):
    """Relief, m up, of a trench at `AXIS_KM` whose plate has ``near`` km up to `CHANGE` and `BEYOND` km from there on."""
    distance = np.asarray(distance_km, dtype=float)
    at = np.linspace(0.0, 900e3, 901)
    plate = TransectModel(
        at, np.zeros(901), np.full(900, STIFFNESS), Elastic(), kind=1, shear=True, moment=True, regional=2
    )
    bending = zoned(plate, near / BEYOND, CHANGE * 1e3).bend(BEYOND * 1e3, 0.0, np.array([0.6e12, 1.2e17]))
    beyond = np.clip((distance - AXIS_KM) * 1e3, 0.0, 900e3)
    surface = -5000.0 + 1e-4 * beyond - bending.at(beyond)[:, 0]
    return surface + 0.08 * np.maximum(AXIS_KM - distance, 0.0) * 1e3


def rough(surface, seed, size=25.0, length=12.0):
    """``surface`` with correlated noise, m, of exponential correlation over ``length`` km."""

    def relief(distance):
        away = np.abs(distance[:, None] - distance)
        factor = np.linalg.cholesky(size**2 * np.exp(-away / length) + 1e-6 * np.eye(distance.size))
        noise = factor @ np.random.default_rng(seed).standard_normal(distance.size)
        return surface(distance) + noise * np.clip((distance - AXIS_KM - 10.0) / 10.0, 0.0, 1.0)

    return relief


@pytest.fixture(scope="module")
def ground(tmp_path_factory):
    folder = tmp_path_factory.mktemp("weak")
    line = lines_layer([equator_line(20.0)], names=["A"])
    keys = {"TRANSECTS": line, "NAME_FIELD": "name", "STEP_KM": STEP_KM, "SETTING": 1, "TE_FROM": 4}
    return {
        "weak": {**keys, "DEM": equator_grid(folder / "weak.tif", 20.0, rough(weak_trench, 3))},
        "even": {
            **keys,
            "DEM": equator_grid(folder / "even.tif", 20.0, rough(lambda x: weak_trench(x, BEYOND), 4)),
        },
    }


def fit(keys, sinks=("PROFILES", "STATIONS", "PARAMETERS"), **more):
    return run("fittransects", {**keys, **more}, sinks=sinks)


@pytest.fixture(scope="module")
def two(ground):
    return fit(ground["weak"], SINKS, TE_ZONES=2, CONFIDENCE=99)


def test_two_zones_are_given_back(two):
    """Both thicknesses and the change lie in their intervals of 99 %; the profile, PARAMETERS and stations say the same; two
    zones are preferred."""
    (profile,) = two["PROFILES"]
    for name, truth in (("te", BEYOND), ("te_near", NEAR), ("zone_change", CHANGE)):
        low, high = profile[f"{name}_low_km"], profile[f"{name}_high_km"]
        assert (low is None or low < truth) and (high is None or high > truth), (name, low, high)
    assert profile["te_near_low_km"] is not None and profile["te_near_high_km"] is not None
    assert profile["zone_change_low_km"] < profile["zone_change_km"] < profile["zone_change_high_km"]
    assert "two zones of elastic thickness are preferred to one (odds" in profile["remarks"]
    used = {row["parameter"]: row for row in two["PARAMETERS"]}
    assert used["te_near"]["value"] == pytest.approx(profile["te_near_km"])
    assert used["te_near"]["low"] == pytest.approx(profile["te_near_low_km"])
    assert used["zone_change"]["value"] == pytest.approx(profile["zone_change_km"])
    assert used["log_odds_of_two_zones"]["value"] > np.log(10)
    assert (used["TE_ZONES"]["value"], used["TE_ZONES"]["origin"]) == (2, "given")
    assert (used["ZONE_CHANGE_FROM"]["value"], used["ZONE_CHANGE_FROM"]["origin"]) == (10, "measured")
    thickness, distance = column(two["STATIONS"], "te_km"), column(two["STATIONS"], "distance_km")
    change = profile["break_km"] + profile["zone_change_km"]
    on_plate = np.isfinite(thickness)
    expected = np.where(distance < change, profile["te_near_km"], profile["te_km"])
    np.testing.assert_allclose(thickness[on_plate], expected[on_plate])
    assert (distance[on_plate] < change).any()


def test_misfit_and_choices_are_of_the_thickness_beyond(two):
    """MISFIT has one row for each thickness, at the one break; CHOICES hold the change where the answer has it."""
    (profile,) = two["PROFILES"]
    rows = two["MISFIT"]
    assert len({row["te_km"] for row in rows}) == len(rows) > 10
    assert {row["break_km"] for row in rows} == {profile["break_km"]}
    best = max(rows, key=lambda row: row["relative_likelihood"])
    assert best["relative_likelihood"] == 1
    assert best["te_km"] == pytest.approx(profile["te_km"], rel=0.35)
    choices = {row["choice"]: row for row in two["CHOICES"]}
    assert choices["as fitted"]["te_km"] == pytest.approx(profile["te_km"])
    assert choices["window begins later"]["te_km"] is not None
    assert "other plate" not in choices


def test_a_plate_of_one_thickness_is_not_taken_for_two(ground):
    """The same noise on an even plate: two zones are not preferred. Without TE_ZONES the new fields are NULL."""
    assert (
        "two zones of elastic thickness are preferred" not in fit(ground["even"], TE_ZONES=2)["PROFILES"][0]["remarks"]
    )
    one = fit(ground["even"])
    assert {one["PROFILES"][0][name] for name in ZONE_FIELDS} == {None}
    assert {row["parameter"]: row["value"] for row in one["PARAMETERS"]}["TE_ZONES"] == 1
    assert len(set(column(one["STATIONS"], "te_km")[20:])) == 1


def test_a_change_that_is_held(ground):
    """Both limits the same: the change is there, without bounds, and the near thickness is given back."""
    (profile,) = (held := fit(ground["weak"], TE_ZONES=2, ZONE_CHANGE_FROM=CHANGE, ZONE_CHANGE_TO=CHANGE))["PROFILES"]
    assert profile["zone_change_km"] == CHANGE
    assert profile["zone_change_low_km"] is profile["zone_change_high_km"] is None
    assert profile["te_near_low_km"] < NEAR < profile["te_near_high_km"]
    used = {row["parameter"]: row for row in held["PARAMETERS"]}
    assert used["zone_change"]["origin"] == used["ZONE_CHANGE_TO"]["origin"] == "given"


def test_stations_are_fitted_with_the_same_zones(ground, two):
    """sampletransects, then fitstations: the same two zones."""
    import processing

    keys = {name: ground["weak"][name] for name in ("TRANSECTS", "NAME_FIELD", "STEP_KM", "DEM")}
    stations = processing.run("downwarp:sampletransects", {**keys, "STATIONS": "memory:"})["STATIONS"]
    size = (invented.CELL * KM_PER_DEGREE * invented.CELL * 110.574) ** 0.5  # km in a degree of latitude, from memory
    asked = {"SETTING": 1, "TE_FROM": 4, "TE_ZONES": 2, "CONFIDENCE": 99, "RESOLUTION_KM": size}
    again = run("fitstations", {"INPUT": stations, **asked})
    for name in ("te_km", *ZONE_FIELDS):
        assert again["PROFILES"][0][name] == pytest.approx(two["PROFILES"][0][name], rel=1e-6), name


@pytest.mark.parametrize(
    ("keys", "words"),
    [
        ({"TE_ZONES": 3}, "TE_ZONES is 3; it takes 1 or 2"),
        ({"TE_ZONES": 1.5}, "TE_ZONES is 1.5; it takes a whole number"),
        ({"TE_ZONES": 2, "PLATE": 0}, "TE_ZONES is 2, which takes a broken plate"),
        ({"TE_ZONES": 2, "PLATE": 2}, "TE_ZONES is 2, which takes a broken plate"),
        (
            {"TE_ZONES": 2, "BREAK_AT": 3, "BREAK_FROM": 90, "BREAK_TO": 120},
            "TE_ZONES is 2, which takes a break that is held",
        ),
        (
            {"TE_ZONES": 2, "ZONE_CHANGE_FROM": 90, "ZONE_CHANGE_TO": 50},
            "ZONE_CHANGE_FROM (90 km) must not be above ZONE_CHANGE_TO (50 km)",
        ),
        ({"TE_ZONES": 2, "ZONE_CHANGE_FROM": -5}, "ZONE_CHANGE_FROM"),
        ({"TE_ZONES": 2, "ZONE_CHANGE_TO": 5000}, "ZONE_CHANGE_TO is 5000 km, but what is fitted reaches"),
        ({"TE_ZONES": 2, "STEP_KM": 0.9}, "TE_ZONES is 2, which takes at most 750 stations, but the line has 780"),
        ({"TE_ZONES": 2, "ZONE_CHANGE_FROM": 300}, "ZONE_CHANGE_FROM is 300 km, but the change is sought up to"),
        ({"LOAD_SHAPE": 1}, "LOAD_SHAPE is 1 (as mapped), which takes a continuous plate (PLATE 0)"),
        ({"LOAD_SHAPE": 2}, "LOAD_SHAPE"),
        ({"LOAD_SHAPE": 1, "PLATE": 0}, "LOAD_SHAPE is 1 (as mapped), which takes no end forces"),
        ({"LOAD_SHAPE": 1, "SETTING": 0, "IN_PLANE": 1e12}, "no in-plane force, but IN_PLANE is 1e+12"),
        ({"LOAD_SHAPE": 1, "SETTING": 0, "FILL_SINKING_ONLY": True}, "leave FILL_SINKING_ONLY out"),
        ({"LOAD_SHAPE": 1, "SETTING": 0, "RHO_UNDER_LOAD": 2000, "TE_TO": 40}, "leave RHO_UNDER_LOAD out"),
        ({"CHECK_STRIP": "perhaps"}, "CHECK_STRIP is 'perhaps'; it takes true or false"),
    ],
)
def test_what_fits_refuse(ground, keys, words):
    """One sentence that names the key."""
    said = refusal("fittransects", {**ground["weak"], **keys})
    assert words in said
    assert "Traceback" not in said


def round_grid(path, values, parts=5):
    """A grid about `CENTRE` of ``values`` of the geodesic distance from it, m, as means of each cell."""
    count = round(2 * HALF / CELL)
    at = (np.arange(count * parts) + 0.5) / parts * CELL
    longitude, latitude = np.meshgrid(CENTRE[0] - HALF + at, CENTRE[1] + HALF - at)
    start = np.full(longitude.shape, CENTRE[0]), np.full(longitude.shape, CENTRE[1])
    away = np.reshape(WGS84.inv(longitude, latitude, *start)[2], longitude.shape)
    means = values(away).reshape(count, parts, count, parts).mean(axis=(1, 3))
    return write_grid(path, means, CENTRE[0] - HALF, CENTRE[1] + HALF, CELL)


def sunk(away, pressure):
    """Deflection, m, under a disk of `RADIUS` of ``pressure``, Pa."""
    a, s = RADIUS / LENGTH, np.maximum(np.abs(away), 1.0) / LENGTH
    inside = 1.0 + a * (kerp(a) * ber(s) - keip(a) * bei(s))
    outside = a * (berp(a) * ker(s) - beip(a) * kei(s))
    return pressure / STIFFNESS * np.where(s <= a, inside, outside)


def through(azimuth=65.0, before=350e3, after=350e3):
    return [WGS84.fwd(*CENTRE, azimuth + 180.0, before)[:2], WGS84.fwd(*CENTRE, azimuth, after)[:2]]


@pytest.fixture(scope="module")
def disk(tmp_path_factory):
    """Keys for a disk of rock 1000 m thick, the surface that it bends, and a sea floor that shows both."""
    folder = tmp_path_factory.mktemp("disk")
    keys = {"TRANSECTS": lines_layer([through()]), "SETTING": 4, "RHO_LOAD": 2700, "STEP_KM": 6}
    thickness = round_grid(folder / "disk.tif", lambda away: np.where(away <= RADIUS, HEIGHT, 0.0))
    bent = round_grid(folder / "bent.tif", lambda away: -sunk(away, 2700 * 9.81 * HEIGHT), parts=1)

    def floor(away):
        return -5000.0 + np.where(away <= RADIUS, HEIGHT, -sunk(away, (2700 - 1030) * 9.81 * HEIGHT))

    return {
        "load": {**keys, "DEM": thickness, "LOAD": 1},
        "both": {**keys, "DEM": thickness, "LOAD": 1, "OBSERVED": bent, "TE_FROM": 8, "TE_TO": 60},
        "floor": {
            **keys,
            "DEM": round_grid(folder / "floor.tif", floor),
            "TRANSECTS": lines_layer([through(before=300e3, after=300e3)]),
            "TE_FROM": 8,
            "TE_TO": 60,
        },
    }


def test_a_round_load_as_mapped_gives_its_plate_back(disk):
    """The surface under a disk, from the Kelvin functions: 25 km as mapped to 2 %, something else as a strip; PARAMETERS
    name the shape."""
    mapped, strip = (fit(disk["both"], SINKS, LOAD_SHAPE=shape) for shape in (1, 0))
    assert mapped["TE_KM"] == pytest.approx(25, rel=0.02)
    assert not 24 < (strip["TE_KM"] or 0) < 26
    assert mapped["RMS_M"] < 0.01 * strip["RMS_M"]
    for shape, result in ((1, mapped), (0, strip)):
        used = {row["parameter"]: (row["value"], row["origin"]) for row in result["PARAMETERS"]}
        assert used["LOAD_SHAPE"] == (shape, "given")
    away = column(mapped["STATIONS"], "distance_km") * 1e3 - 350e3
    expected = sunk(away, 2700 * 9.81 * HEIGHT)
    assert np.abs(column(mapped["STATIONS"], "deflection_m") - expected).max() < 0.01 * expected.max()
    assert "other plate" not in {row["choice"] for row in mapped["CHOICES"]}
    assert {row["te_km"] is None for row in mapped["CHOICES"]} == {False}


def test_the_level_is_fitted_with_the_load_as_mapped(disk):
    """The sea floor itself shows edifice and moat: in rounds of level and load the level comes to the sea floor's, and
    25 km are given back to 5 %."""
    result = fit(disk["floor"], LOAD_SHAPE=1)
    used = {row["parameter"]: (row["value"], row["origin"]) for row in result["PARAMETERS"]}
    assert used["REFERENCE_LEVEL"][1] == "fitted"
    assert used["REFERENCE_LEVEL"][0] == pytest.approx(-5000, abs=5)
    assert result["TE_KM"] == pytest.approx(25, rel=0.05)


def test_workers_fit_loads_as_mapped(disk):
    """Six lines in two processes or in one: the same answers; results carry no relief about the lines."""
    layer = lines_layer([through(azimuth) for azimuth in range(0, 180, 30)])
    keys = {**disk["both"], "TRANSECTS": layer, "LOAD_SHAPE": 1, "STEP_KM": 20}
    one, both = (column(run("fittransects", {**keys, "WORKERS": count})["PROFILES"], "te_km") for count in (1, 2))
    np.testing.assert_allclose(one, both, rtol=1e-9)
    np.testing.assert_allclose(one, 25, rtol=0.03)


def test_answers_do_not_keep_the_relief_about_the_line(disk):
    """A result is pickled for each transect: it is small beside the relief about the line."""
    from downwarp_checkout.plugin.core.fit import fit_profile
    from downwarp_checkout.plugin.core.plan import PlanRelief, lay_search_window
    from downwarp_checkout.plugin.core.profile import Profile
    from downwarp_checkout.plugin.core.settings import FitOptions
    from downwarp_checkout.plugin.core.transect import Transect

    stations = Transect("A", through(), WGS84).stations(20e3)
    window, _ = lay_search_window(stations.distance, stations.longitude, stations.latitude, WGS84, 40e3, 100e3)
    u, v = window.plane.from_degrees(*window.places(1))
    relief = np.where(np.hypot(u, v) <= RADIUS, HEIGHT, 0.0)
    away = stations.distance - 350e3
    profile = Profile(
        "A",
        stations.distance,
        np.where(np.abs(away) <= RADIUS, HEIGHT, 0.0),
        -sunk(away, 2700 * 9.81 * HEIGHT),
        plan=PlanRelief(window, 1, relief),
    )
    options = FitOptions(setting=4, load=1, rho_load=2700, te_from=10e3, te_to=30e3, load_shape=1)
    result = fit_profile(pickle.loads(pickle.dumps(profile)), options, with_choices=False)
    assert result.best.bent.problem.profile.plan is None
    assert len(pickle.dumps(result)) < 0.2 * relief.nbytes


def test_a_strip_that_does_not_do_is_told(disk):
    """A disk is no strip: the strip's thickness, resolved with the stations under the load alone, lies outside its own
    interval, which is told unasked. Nothing is said of a plate as mapped, of a broken one, of one that is not resolved,
    and where the check was asked to be left out; what cannot be checked is told."""
    under = fit(disk["both"], FIT_FROM=1)["PROFILES"][0]["remarks"]
    assert "the load is no strip: fitted with one, a plate of" in under
    for keys in (
        {},
        {"FIT_FROM": 1, "LOAD_SHAPE": 1},
        {"FIT_FROM": 1, "CHECK_STRIP": False},
        {"FIT_FROM": 1, "PLATE": 1, "END_FORCES": 1},
    ):
        assert "strip" not in (fit(disk["both"], **keys)["PROFILES"][0]["remarks"] or "")
    two_infills = fit(disk["both"], FIT_FROM=1, RHO_UNDER_LOAD=1040)["PROFILES"][0]["remarks"]
    assert "the load is no strip: fitted with one, a plate of" in two_infills
    pushed = fit(disk["both"], FIT_FROM=1, IN_PLANE=1e11)["PROFILES"][0]["remarks"]
    assert "the strip was not checked: IN_PLANE is 1e+11; a plan view takes no in-plane force" in pushed


@pytest.fixture(scope="module")
def mapped(disk):
    return run(
        "bendtransects", {**disk["load"], "LOAD_SHAPE": 1, "TE_KM": 25}, sinks=("PROFILES", "STATIONS", "MARKERS")
    )


def test_a_round_load_bends_as_the_kelvin_functions_say(disk, mapped):
    """bendtransects as mapped: the closed form to 0.5 % of its largest value, as checkstrip has it; the plan view makes
    no end of the load at the line's ends."""
    deflection, away = (column(mapped["STATIONS"], name) for name in ("deflection_m", "distance_km"))
    expected = sunk(away * 1e3 - 350e3, 2700 * 9.81 * HEIGHT)
    assert np.abs(deflection - expected).max() < 5e-3 * expected.max()
    checked = run("checkstrip", {**disk["load"], "TE_KM": 25}, sinks=("CHECKS", "CHECK_STATIONS"))
    other = column(checked["CHECK_STATIONS"], "mapped_deflection_m")
    assert np.abs(deflection - other).max() < 5e-3 * expected.max()
    assert mapped["PROFILES"][0]["deepest_m"] == pytest.approx(expected.max(), rel=5e-3)


@pytest.mark.parametrize(
    ("keys", "words"),
    [
        ({"PLATE": 1}, "LOAD_SHAPE is 1 (as mapped), which takes a continuous plate"),
        ({"END_SHEAR": 1e12}, "END_SHEAR is 1e+12, but LOAD_SHAPE is 1"),
        ({"START_SUPPORT": 2}, "START_SUPPORT is 2, but LOAD_SHAPE is 1"),
        ({"FINISH_SUPPORT": 3}, "FINISH_SUPPORT is 3, but LOAD_SHAPE is 1"),
        ({"LOAD": 2}, "no station of the line carries a relief load"),
        ({"TE_KM": 300}, "distorts distances"),
        ({"TE_RASTER": "disk"}, "LOAD_SHAPE is 1 (as mapped), which takes one elastic thickness: leave TE_RASTER out"),
    ],
)
def test_what_bending_as_mapped_refuses(disk, keys, words):
    """One sentence that names the key."""
    assert words in refusal("bendtransects", {**disk["load"], "LOAD_SHAPE": 1, **keys})


def plates(thicknesses, line):
    """Lines with a thickness each, None for NULL."""
    layer = QgsVectorLayer("LineString?crs=EPSG:4326&field=name:string(9)&field=thick:double", "plates", "memory")
    features = []
    for number, thickness in enumerate(thicknesses):
        feature = QgsFeature(layer.fields())
        feature.setAttributes([f"line {number}", thickness])
        feature.setGeometry(lines_layer([line]).getFeature(1).geometry())
        features.append(feature)
    layer.dataProvider().addFeatures(features)
    return layer


def test_each_line_may_bring_its_own_thickness(disk, mapped):
    """TE_FIELD: as TE_KM would, strip or as mapped; NULL and a thickness out of range are rows with the reason."""
    layer = plates([25.0, 12.0, None, 5000.0], through())
    for shape in (0, 1):
        keys = {**disk["load"], "TRANSECTS": layer, "TE_FIELD": "thick", "NAME_FIELD": "name", "LOAD_SHAPE": shape}
        found = run("bendtransects", keys)["PROFILES"]
        for row, thickness in zip(found, (25, 12)):
            (alone,) = run("bendtransects", {**disk["load"], "TE_KM": thickness, "LOAD_SHAPE": shape})["PROFILES"]
            for name in ("te_km", "rigidity_nm", "deepest_m", "node_km", "bulge_m"):
                assert row[name] == pytest.approx(alone[name]), (shape, name)
        assert found[2]["remarks"] == "Transect line 2: TE_FIELD thick is NULL: there is no plate."
        assert found[3]["remarks"] == "Transect line 3: TE_FIELD thick is 5000; it takes a number from 0.1 to 1000."


@pytest.fixture(scope="module")
def broken(ground):
    """Keys that bend the two zones' plate by its end forces."""
    keys = {name: ground["weak"][name] for name in ("TRANSECTS", "DEM", "STEP_KM", "SETTING")}
    forces = {"BREAK_AT": 2, "BREAK_KM": AXIS_KM, "END_SHEAR": 0.6e12, "END_MOMENT": 1.2e17}
    return {**keys, **forces, "PLATE": 1, "TE_KM": 99}


def test_an_even_raster_is_one_thickness(broken, tmp_path):
    """20 km everywhere, in km whatever RELIEF_UNIT says: as TE_KM 20, without a remark."""
    raster = equator_grid(tmp_path / "even.tif", 20.0, lambda x: np.full(x.shape, 20.0))
    found = run("bendtransects", {**broken, "TE_RASTER": raster})
    alone = run("bendtransects", {**broken, "TE_KM": 20})
    for name in ("te_km", "rigidity_nm", "deepest_m", "node_km", "bulge_m"):
        assert found["PROFILES"][0][name] == pytest.approx(alone["PROFILES"][0][name], rel=1e-5), name
    assert found["PROFILES"][0]["remarks"] == alone["PROFILES"][0]["remarks"]


def test_a_raster_of_two_zones_bends_as_they_do(broken, tmp_path):
    """A raster with a step at the change (over one cell): the surface over two zones to 1 % of the largest deflection;
    te_km is the raster's at the stations and its mean along the plate for the profile."""

    def step(x):
        return np.where(x < AXIS_KM + CHANGE, NEAR, BEYOND)

    raster = equator_grid(tmp_path / "step.tif", 20.0, step)
    found = run("bendtransects", {**broken, "TE_RASTER": raster, "STEP_KM": LENGTH_KM / 315})
    distance, deflection = (column(found["STATIONS"], name) for name in ("distance_km", "deflection_m"))
    on_plate = np.isfinite(deflection)
    expected = -5000.0 + 0.1 * (distance[on_plate] - AXIS_KM) - weak_trench(distance[on_plate])
    assert np.abs(deflection[on_plate] - expected).max() < 0.01 * expected.max()
    thickness = column(found["STATIONS"], "te_km")[on_plate]
    away = np.abs(distance[on_plate] - AXIS_KM - CHANGE) > 3
    np.testing.assert_allclose(thickness[away], step(distance[on_plate])[away], rtol=1e-6)
    assert found["PROFILES"][0]["te_km"] == pytest.approx(thickness.mean())
    assert "runs from 14 to 40 km along the plate" in found["PROFILES"][0]["remarks"]


def test_what_a_map_of_thickness_refuses(broken, tmp_path):
    """A raster that ends on the plate, one out of range, a field that is not there, and two sources at once."""
    short = equator_grid(tmp_path / "short.tif", 20.0, lambda x: np.full(x.shape, 20.0), columns=200)
    assert "the elastic thickness is not known at" in refusal("bendtransects", {**broken, "TE_RASTER": short})
    metres = equator_grid(tmp_path / "metres.tif", 20.0, lambda x: np.full(x.shape, 20e3))
    said = refusal("bendtransects", {**broken, "TE_RASTER": metres})
    assert "TE_RASTER holds 20000 km; it takes numbers from 0.1 to 1000" in said
    said = refusal("bendtransects", {**broken, "TE_FIELD": "thick"})
    assert "TE_FIELD: TRANSECTS has no field 'thick'" in said
    said = refusal("bendtransects", {**broken, "TE_FIELD": "name", "TE_RASTER": short})
    assert "TE_FIELD and TE_RASTER are both given" in said
    assert "TE_RASTER" in refusal("bendtransects", {**broken, "TE_RASTER": "/nowhere.tif"})


# Axis, direction, window from the axis (km) and regional of two trenches.
TRENCHES = {
    "Kuril": ((153.5, 45.2), 135, (10, 500), 2),
    "Aleutian": ((-175.5, 50.6), 180, (20, 450), 1),
}


@pytest.mark.skipif(not RELIEF.is_file(), reason=f"{RELIEF} is not there; Debian's ferret-datasets holds it")
@pytest.mark.parametrize("name", TRENCHES)
def test_real_trenches_in_two_zones(name, record_property):
    """5-minute global relief (ETOPO5, as Debian's ferret-datasets carries it) across two trenches, 200 km wide: thinner
    near the axis; what is found is beside the published ranges of one western Pacific trench system, near 11 to 33,
    seaward 20 to 65, change 20 to 95 km from the axis (Zhang, Lin & Zhou, abstract alone): intervals meet them.
    """
    place, bearing, (first, last), regional = TRENCHES[name]
    line = [
        WGS84.fwd(*place, bearing + 180, 150e3)[:2],
        WGS84.fwd(*place, bearing, (last + 70) * 1e3)[:2],
    ]
    keys = {"TRANSECTS": lines_layer([line]), "DEM": str(RELIEF), "DEM_CRS": "EPSG:4326"}
    keys.update(SWATH_KM=200, SWATH_LINES=21, SWATH_ALIGN=1)
    stations = run("sampletransects", keys, sinks=("STATIONS",))["STATIONS"]
    axis = column(stations, "distance_km")[np.nanargmin(column(stations, "dem_m"))]
    window = {"FIT_FROM": axis + first, "FIT_TO": axis + last}
    (row,) = run("fittransects", {**keys, **window, "SETTING": 1, "REGIONAL": regional, "TE_ZONES": 2})["PROFILES"]
    words = ", ".join(f"{key} {row[key]}" for key in ("te_km", "te_low_km", "te_high_km", *ZONE_FIELDS))
    record_property("zones", f"{words}; {row['remarks']}")
    assert row["te_near_km"] < row["te_km"]
    for field, (low, high) in {"te_near": (11, 33), "te": (20, 65), "zone_change": (20, 95)}.items():
        found_low, found_high = row[f"{field}_low_km"], row[f"{field}_high_km"]
        assert (found_low is None or found_low < high) and (found_high is None or found_high > low), (field, words)
    assert "zone" in row["remarks"] and "odds" in row["remarks"]
