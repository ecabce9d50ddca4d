"""The four algorithms agree with each other: stations made and fitted, a plate found and bent again, tables."""

import numpy as np
import pytest

pytest.importorskip("qgis")

import invented
from invented import AXIS_KM, KM_PER_DEGREE, LENGTH_KM, MOMENT, SHEAR, STEP_KM, equator_grid, equator_line, lines_layer
from qgis.core import QgsProject, QgsVectorFileWriter, QgsVectorLayer
from running import IN_MEMORY, column, refusal, rows, run

COMPARED = ("te_km", "te_low_km", "te_high_km", "break_km", "end_shear_n_per_m", "end_moment_n", "rms_m",
               "regional_level_m", "regional_tilt_m_per_km", "deepest_m", "node_km", "bulge_m", "bulge_km")  # fmt: skip


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    return tmp_path_factory.mktemp("ground")


@pytest.fixture(scope="module")
def trench(folder):
    """Keys of a run along the trench."""
    dem = equator_grid(folder / "trench.tif", 20.0, invented.trench)
    layer = lines_layer([equator_line(20.0)], names=["axis"])
    return {"TRANSECTS": layer, "NAME_FIELD": "name", "DEM": dem, "STEP_KM": STEP_KM}


@pytest.fixture(scope="module")
def mount(folder):
    """Keys of a run across the ridge."""
    dem = equator_grid(folder / "ridge.tif", 20.0, invented.ridge)
    layer = lines_layer([equator_line(20.0)], names=["1"])
    return {"TRANSECTS": layer, "NAME_FIELD": "name", "DEM": dem, "STEP_KM": STEP_KM}


def sampled(keys, **more):
    """The STATIONS layer of sampletransects."""
    import processing

    return processing.run("downwarp:sampletransects", {**keys, "STATIONS": IN_MEMORY, **more})["STATIONS"]


@pytest.mark.parametrize("setting", [0, 1])
def test_sampled_stations_fitted_are_the_transect_fitted(trench, mount, setting):
    """sampletransects, then fitstations with its defaults: the same answer as fittransects on the same line.

    RESOLUTION_KM takes the place of the cell size, which stations do not carry.
    """
    keys = (mount, trench)[setting]
    direct = run("fittransects", {**keys, "SETTING": setting}, sinks=("PROFILES", "STATIONS", "PARAMETERS"))
    cell = invented.CELL * KM_PER_DEGREE
    height = invented.CELL * 110.574  # km in a degree of latitude at the equator, from memory
    stations = sampled(keys)
    assert [row["transect"] for row in rows(stations)][:1] == [direct["PROFILES"][0]["transect"]]
    again = run(
        "fitstations", {"INPUT": stations, "SETTING": setting, "RESOLUTION_KM": (cell * height) ** 0.5},
        sinks=("PROFILES", "STATIONS", "PARAMETERS"),
    )  # fmt: skip
    for name in COMPARED:
        one, other = again["PROFILES"][0][name], direct["PROFILES"][0][name]
        assert (one is None) == (other is None), name
        if other is not None:
            assert one == pytest.approx(other, rel=1e-6, abs=1e-5), name
    for name in ("deflection_m", "predicted_m", "load_mpa", "in_fit"):
        one, other = column(again["STATIONS"], name), column(direct["STATIONS"], name)
        np.testing.assert_allclose(one, other, rtol=1e-6, atol=1e-4, err_msg=name)
    for one, other in zip(again["STATIONS"], direct["STATIONS"]):
        assert one["geometry"].distance(other["geometry"]) < 1e-9


def test_stations_of_several_transects_in_any_order(trench):
    """Rows of two transects shuffled: each is fitted as if it stood alone and in order."""
    from qgis.core import QgsFeature

    layer = sampled({**trench, "TRANSECTS": lines_layer([equator_line(20.0), equator_line(20.0)], names=["a", "b"])})
    features = [QgsFeature(feature) for feature in layer.getFeatures()]
    shuffled = QgsVectorLayer("PointZ?crs=EPSG:4326", "shuffled", "memory")
    shuffled.dataProvider().addAttributes(layer.fields().toList())
    shuffled.updateFields()
    order = np.random.default_rng(5).permutation(len(features))
    shuffled.dataProvider().addFeatures([features[index] for index in order.tolist()])
    result = run("fitstations", {"INPUT": shuffled, "SETTING": 1})
    assert result["TRANSECTS_FITTED"] == 2
    one, other = result["PROFILES"]
    assert {one["transect"], other["transect"]} == {"a", "b"}
    assert one["te_km"] == pytest.approx(other["te_km"], rel=1e-9)
    assert one["te_km"] == pytest.approx(invented.TE_KM, rel=5e-3)


def written_csv(layer, path):
    options = QgsVectorFileWriter.SaveVectorOptions()
    options.driverName = "CSV"
    error, *rest = QgsVectorFileWriter.writeAsVectorFormatV3(
        layer, str(path), QgsProject.instance().transformContext(), options
    )
    assert error == QgsVectorFileWriter.WriterError.NoError, rest
    return str(path)


def test_a_csv_without_geometry_gives_outputs_without(trench, tmp_path):
    """A table of text (as a CSV is): the same thickness, and layers without geometry."""
    import processing

    path = written_csv(sampled(trench), tmp_path / "stations.csv")
    results = processing.run(
        "downwarp:fitstations",
        {"INPUT": path, "SETTING": 1, **dict.fromkeys(("PROFILES", "STATIONS", "MARKERS"), IN_MEMORY)},
    )
    for name in ("PROFILES", "STATIONS", "MARKERS"):
        assert not results[name].isSpatial(), name
        assert results[name].featureCount() > 0
    assert results["TE_KM"] == pytest.approx(invented.TE_KM, rel=5e-3)


def test_a_csv_through_qgis_process(headless, tmp_path):
    """A table with fields of other names, written by hand from the closed form; results as a CSV again."""
    distance = np.arange(0.0, 600.1, 5.0)
    lines = ["x,depth", *(f"{x:.3f},{z:.6f}" for x, z in zip(distance, invented.trench(distance + AXIS_KM)))]
    table = tmp_path / "table.csv"
    table.write_text("\n".join(lines) + "\n", encoding="utf-8")
    out = tmp_path / "out.csv"
    results = headless.run(
        "fitstations",
        {"INPUT": str(table), "DISTANCE": "x", "OBSERVED_FIELD": "depth", "SETTING": 1, "BREAK_AT": 0,
         "PROFILES": str(out), "STATIONS": str(tmp_path / "stations.csv")},
    )  # fmt: skip
    assert results["TE_KM"] == pytest.approx(invented.TE_KM, rel=5e-3)
    (profile,) = rows(str(out))
    assert profile["geometry"] is None
    assert float(profile["te_km"]) == pytest.approx(results["TE_KM"])


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"DISTANCE": "metres"}, "DISTANCE"),
        ({"SIGMA_FIELD": "error"}, "SIGMA_FIELD"),
        ({"DISTANCE": "transect"}, "DISTANCE field transect holds 'axis'; it takes numbers"),
        ({"RESOLUTION_KM": 0}, "RESOLUTION_KM is 0; it takes a number above 0"),
        ({"INPUT": "/nowhere.csv"}, "INPUT"),
    ],
)
def test_fitstations_refuses(trench, changes, words):
    """Fields that are not there, text for distances."""
    said = refusal("fitstations", {"INPUT": sampled(trench), "SETTING": 1, **changes})
    assert words in said
    assert "Traceback" not in said


def test_two_stations_at_one_distance_are_refused(trench):
    """Two transects taken as one: the sentence names the distance and the key that tells them apart."""
    both = sampled({**trench, "TRANSECTS": lines_layer([equator_line(20.0), equator_line(20.0)], names=["a", "b"])})
    both.dataProvider().deleteAttributes([both.fields().lookupField("transect")])
    both.updateFields()
    assert "Transect 1 has two stations at distance 0 km (DISTANCE)" in refusal(
        "fitstations", {"INPUT": both, "SETTING": 1}
    )


def test_a_trench_found_is_the_trench_bent(trench):
    """The thickness and forces that the fit found, given to bendtransects: the same deflection, to the last digits."""
    found = run("fittransects", {**trench, "SETTING": 1})
    (profile,) = found["PROFILES"]
    bent = run(
        "bendtransects",
        {
            **trench, "SETTING": 1, "PLATE": 1, "TE_KM": profile["te_km"], "BREAK_AT": 2,
            "BREAK_KM": profile["break_km"], "END_SHEAR": profile["end_shear_n_per_m"],
            "END_MOMENT": profile["end_moment_n"],
        },
        sinks=("PROFILES", "STATIONS", "MARKERS"),
    )  # fmt: skip
    for name in ("deflection_m", "slope", "moment_n", "shear_n_per_m", "curvature_per_m", "fibre_stress_mpa"):
        one, other = column(bent["STATIONS"], name), column(found["STATIONS"], name)
        np.testing.assert_allclose(one, other, rtol=1e-6, atol=1e-6 * np.nanmax(np.abs(other)), err_msg=name)
    for name in ("deepest_m", "deepest_km", "node_km", "bulge_m", "bulge_km", "rigidity_nm", "flexural_parameter_km"):
        assert bent["PROFILES"][0][name] == pytest.approx(profile[name], rel=1e-6), name
    kinds = [row["kind"] for row in bent["MARKERS"]]
    assert kinds == ["break", "deepest", "node", "bulge"]


def test_a_ridge_found_is_the_ridge_bent(mount):
    """The same for a continuous plate under relief: the load is sampled anew and gives the same deflection."""
    found = run("fittransects", {**mount, "SETTING": 0}, sinks=("PROFILES", "STATIONS", "PARAMETERS"))
    (profile,) = found["PROFILES"]
    used = {row["parameter"]: row["value"] for row in found["PARAMETERS"]}
    bent = run(
        "bendtransects",
        {
            **mount, "SETTING": 0, "TE_KM": profile["te_km"], "REFERENCE_LEVEL": used["REFERENCE_LEVEL"],
            "RHO_INFILL": profile["rho_infill"],
        },
    )  # fmt: skip
    for name in ("load_mpa", "deflection_m", "moment_n"):
        one, other = column(bent["STATIONS"], name), column(found["STATIONS"], name)
        np.testing.assert_allclose(one, other, rtol=1e-6, atol=1e-6 * np.nanmax(np.abs(other)), err_msg=name)


def flat_load(path, thickness):
    """A grid of load thickness, the same everywhere, m."""
    return equator_grid(path, 20.0, lambda distance: np.full(np.shape(distance), float(thickness)))


def test_an_even_load_sinks_a_plate_as_deep_as_it_floats(tmp_path, trench):
    """A load without end bends nothing: w = q / k = h rho_load / (rho_mantle - rho_infill), at every station."""
    keys = {**trench, "DEM": flat_load(tmp_path / "load.tif", 500.0), "SETTING": 4, "LOAD": 1, "TE_KM": 20}
    result = run("bendtransects", {**keys, "RHO_LOAD": 2700, "RHO_INFILL": 1000, "RHO_MANTLE": 3300})
    np.testing.assert_allclose(column(result["STATIONS"], "deflection_m"), 500.0 * 2700 / 2300, rtol=1e-9)
    np.testing.assert_allclose(column(result["STATIONS"], "load_mpa"), 500.0 * 2700 * 9.81 / 1e6, rtol=1e-9)


def test_a_load_that_is_removed_lifts_the_plate(tmp_path, trench):
    """Setting 3: an ice sheet of 1 km melted: w = -q / k = -1000 x 1000 / 3300 m, and the surface rises."""
    keys = {**trench, "DEM": flat_load(tmp_path / "ice.tif", 1000.0), "SETTING": 3, "TE_KM": 40}
    stations = run("bendtransects", keys)["STATIONS"]
    np.testing.assert_allclose(column(stations, "deflection_m"), -1000.0 * 1000 / 3300, rtol=1e-9)
    np.testing.assert_allclose(column(stations, "predicted_m"), 1000.0 * 1000 / 3300, rtol=1e-9)
    assert (column(stations, "load_mpa") < 0).all()


@pytest.mark.parametrize("place", ["START", "FINISH"])
@pytest.mark.parametrize("support", [1, 2, 3])
def test_ends_of_a_loaded_plate(tmp_path, trench, place, support):
    """An even load on a plate that ends at the line's end, w0 = q / k, s = x / alpha (Hetenyi, Beams on Elastic
    Foundation, semi-infinite beams; from memory): free w = w0; pinned w = w0 (1 - e^-s cos s); clamped
    w = w0 (1 - e^-s (cos s + sin s)).
    """
    keys = {**trench, "DEM": flat_load(tmp_path / "load.tif", 500.0), "SETTING": 4, "LOAD": 1, "TE_KM": 15}
    keys.update(RHO_LOAD=2700, RHO_INFILL=1000, RHO_MANTLE=3300, STEP_KM=LENGTH_KM / 700)
    result = run("bendtransects", {**keys, f"{place}_SUPPORT": support})
    distance = column(result["STATIONS"], "distance_km")
    from_end = distance if place == "START" else distance[-1] - distance
    s = from_end / result["PROFILES"][0]["flexural_parameter_km"]
    shape = {1: 0 * s, 2: np.exp(-s) * np.cos(s), 3: np.exp(-s) * (np.cos(s) + np.sin(s))}[support]
    np.testing.assert_allclose(column(result["STATIONS"], "deflection_m"), 500.0 * 2700 / 2300 * (1 - shape), atol=0.01)


def test_a_broken_plate_bends_as_the_closed_form(trench):
    """End shear and moment at a break within the line, against tests/tools/invented.py's closed form."""
    keys = {**trench, "SETTING": 1, "PLATE": 1, "TE_KM": 30, "BREAK_AT": 2, "BREAK_KM": AXIS_KM}
    result = run("bendtransects", {**keys, "END_SHEAR": SHEAR, "END_MOMENT": MOMENT, "STEP_KM": LENGTH_KM / 315})
    distance = column(result["STATIONS"], "distance_km")
    deflection = column(result["STATIONS"], "deflection_m")
    beyond = distance > AXIS_KM - 1e-6
    assert np.isnan(deflection[~beyond]).all()
    np.testing.assert_allclose(deflection[beyond], invented.bent((distance[beyond] - AXIS_KM) * 1e3), atol=0.01)
    at_break = int(np.argmax(beyond))
    assert result["STATIONS"][at_break]["moment_n"] == pytest.approx(-MOMENT, rel=1e-6)
    assert result["STATIONS"][at_break]["shear_n_per_m"] == pytest.approx(-SHEAR, rel=1e-6)


def test_a_line_load_on_a_continuous_plate(trench):
    """PLATE 0 with an end shear V0 at the break: w0 = V0 alpha^3 / 8 D, zero at 3 pi alpha / 4, bulge at pi alpha
    (Turcotte & Schubert, Geodynamics, section 3.16, from memory)."""
    keys = {**trench, "SETTING": 1, "PLATE": 0, "TE_KM": 20, "BREAK_AT": 2, "BREAK_KM": 200, "END_SHEAR": 1e12}
    (profile,) = run("bendtransects", {**keys, "STEP_KM": LENGTH_KM / 700})["PROFILES"]
    alpha = profile["flexural_parameter_km"]
    assert profile["deepest_km"] == pytest.approx(200.0, abs=1e-3)
    assert profile["deepest_m"] == pytest.approx(1e12 * (alpha * 1e3) ** 3 / (8 * profile["rigidity_nm"]), rel=1e-6)
    assert profile["node_km"] - 200 == pytest.approx(3 * np.pi * alpha / 4, abs=0.01)
    assert profile["bulge_km"] - 200 == pytest.approx(np.pi * alpha, abs=0.02)


def test_sampled_stations_hold_the_relief_and_nothing_of_a_plate(trench):
    """dem_m is the closed form at the station (cells of 2.2 km, bilinear), Z the relief, plate fields NULL."""
    table = rows(sampled(trench))
    distance, relief = column(table, "distance_km"), column(table, "dem_m")
    np.testing.assert_allclose(relief, invented.trench(distance), atol=0.05)
    for row in table:
        assert row["geometry"].constGet().z() == pytest.approx(row["dem_m"])
        assert row["deflection_m"] is row["te_km"] is row["in_fit"] is row["predicted_m"] is None


def test_a_swath_carries_its_standard_error(folder, trench):
    """Rows that differ by a slope northward that waves along the line: the mean is the middle's, sigma the standard
    error of 2 strips.

    Strips at -2 and 2 km; relief changes by 10 m/km times a sine northward (110.574 km in a degree there, from memory),
    whose square is 1/2 on average.
    """
    cell = invented.CELL
    latitude = 4 * cell - cell * (np.arange(8) + 0.5)
    north_km = latitude[:, None] * 110.574
    waves = 10.0 * north_km * np.sin(np.arange(500) / 5.0)
    path = invented.write_grid(folder / "slope.tif", waves, 18 - cell / 2, 4 * cell, cell)
    table = rows(sampled({**trench, "DEM": path}, SWATH_KM=8, SWATH_LINES=2, OBSERVED=path))
    expected = 10.0 * np.std([-2.0, 2.0], ddof=1) / 2**0.5 * 0.5**0.5
    assert np.sqrt(np.mean(column(table, "sigma_m") ** 2)) == pytest.approx(expected, rel=0.03)
    np.testing.assert_allclose(column(table, "observed_m"), 0.0, atol=0.01)
