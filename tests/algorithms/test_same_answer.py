"""The same ground told in another way gives the same answer: CRSs, seams of longitude, units, directions, densities.

The ground is invented relief in closed form (tests/tools/invented.py): a trench whose plate is broken and bent by a
shear and a moment at its end, so that the fit's truth is known without the plugin's own solver, and a ridge.
"""

import numpy as np
import pytest

pytest.importorskip("qgis")

import invented
from invented import AXIS_KM, MOMENT, SHEAR, STEP_KM, TE_KM, equator_grid, equator_line, lines_layer
from pyproj import Geod, Transformer
from running import column, refusal, run

WGS84 = Geod(ellps="WGS84")
NUMBERS = ("te_km", "break_km", "end_shear_n_per_m", "end_moment_n", "regional_level_m", "bulge_m", "bulge_km")


def fit(dem, line, crs="EPSG:4326", **keys):
    parameters = {"TRANSECTS": lines_layer([line], crs), "DEM": dem, "SETTING": 1, "STEP_KM": STEP_KM, **keys}
    return run("fittransects", parameters)


def same(one, other, rel=1e-6):
    """All numbers of the single profile agree, and so does the deflection at every station."""
    for name in NUMBERS:
        assert one["PROFILES"][0][name] == pytest.approx(other["PROFILES"][0][name], rel=rel), name
    for name in ("deflection_m", "residual_m"):
        np.testing.assert_allclose(column(one["STATIONS"], name), column(other["STATIONS"], name), rtol=rel, atol=1e-3)


@pytest.fixture(scope="module")
def dem(tmp_path_factory):
    """The trench, its line's start at 20 E."""
    return equator_grid(tmp_path_factory.mktemp("ground") / "dem.tif", 20.0, invented.trench)


@pytest.fixture(scope="module")
def answer(dem):
    return fit(dem, equator_line(20.0))


def test_the_fit_finds_the_plate_in_closed_form(answer):
    """Elastic thickness, end forces and tilt of the closed form, from relief alone, through Processing."""
    (profile,) = answer["PROFILES"]
    assert answer["TE_KM"] == pytest.approx(TE_KM, rel=5e-3)
    assert profile["te_km"] == pytest.approx(answer["TE_KM"], rel=1e-12)
    assert profile["break_km"] == pytest.approx(AXIS_KM, abs=1e-3)
    assert profile["regional_tilt_m_per_km"] == pytest.approx(1e3 * invented.TILT, rel=0.01)
    assert profile["regional_level_m"] == pytest.approx(invented.LEVEL - invented.TILT * AXIS_KM * 1e3, abs=5.0)
    assert profile["end_shear_n_per_m"] == pytest.approx(SHEAR, rel=0.02)
    assert profile["end_moment_n"] == pytest.approx(MOMENT, rel=0.02)
    assert profile["plate"] == "broken"
    assert profile["rms_m"] < 1.0


def test_bulge_and_node_lie_where_the_closed_form_has_them(answer):
    """w = 0 where tan(x / alpha) = (V0 alpha + M0) / M0, and the first minimum beyond it, found on a fine grid."""
    (profile,) = answer["PROFILES"]
    x = np.linspace(0.0, 600e3, 600_001)
    deflection = invented.bent(x)
    node = x[np.argmax(deflection < 0)]
    bulge = x[np.argmin(deflection)]
    assert profile["node_km"] == pytest.approx(AXIS_KM + node / 1e3, abs=1.0)
    assert profile["bulge_km"] == pytest.approx(AXIS_KM + bulge / 1e3, abs=1.0)
    assert profile["bulge_m"] == pytest.approx(-deflection.min(), rel=0.01)
    assert profile["deepest_m"] == pytest.approx(deflection[0], rel=0.01)


def test_a_line_in_a_projected_crs_gives_the_same_stations_and_answer(dem, answer):
    """EPSG:3395 (Mercator on the ellipsoid) draws the equator straight: same stations to a metre, same answer."""
    to_metres = Transformer.from_crs("EPSG:4326", "EPSG:3395", always_xy=True)
    projected = fit(dem, [to_metres.transform(*vertex) for vertex in equator_line(20.0)], "EPSG:3395")
    same(projected, answer)
    back = Transformer.from_crs("EPSG:3395", "EPSG:4326", always_xy=True)
    for one, other in zip(projected["STATIONS"], answer["STATIONS"]):
        here = one["geometry"].constGet()
        there = other["geometry"].constGet()
        _, _, apart = WGS84.inv(*back.transform(here.x(), here.y()), there.x(), there.y())
        assert apart < 1.0
        assert one["distance_km"] == pytest.approx(other["distance_km"], abs=1e-3)


def test_an_oblique_bent_line_has_the_same_stations_in_two_crss(dem):
    """Three vertices across the grid, in degrees and in UTM zone 34 (WGS84): stations within a metre, relief alike."""
    vertices = [(20.2, -0.06), (22.0, 0.05), (24.5, -0.03)]
    to_metres = Transformer.from_crs("EPSG:4326", "EPSG:32634", always_xy=True)
    tables = [
        run("sampletransects", {"TRANSECTS": layer, "DEM": dem}, sinks=("STATIONS",))["STATIONS"]
        for layer in (
            lines_layer([vertices]),
            lines_layer([[to_metres.transform(*vertex) for vertex in vertices]], "EPSG:32634"),
        )
    ]
    assert len(tables[0]) == len(tables[1]) > 200
    back = Transformer.from_crs("EPSG:32634", "EPSG:4326", always_xy=True)
    for one, other in zip(*tables):
        here, there = one["geometry"].constGet(), other["geometry"].constGet()
        _, _, apart = WGS84.inv(here.x(), here.y(), *back.transform(there.x(), there.y()))
        assert apart < 1.0
    np.testing.assert_allclose(column(tables[0], "dem_m"), column(tables[1], "dem_m"), atol=0.1)


@pytest.mark.parametrize("west", [0.0, -180.0])
def test_a_dem_in_either_count_of_longitude_gives_the_same_answer(tmp_path, answer, west):
    """A grid round the Earth, its first cell's centre on 0 or on -180; the line lies at 20 E."""
    world = equator_grid(tmp_path / "world.tif", 20.0, invented.trench, west=west, columns=18000)
    same(fit(world, equator_line(20.0)), answer)


@pytest.mark.parametrize("west", [0.0, -180.0, 175.0])
@pytest.mark.parametrize("turn", [0.0, -360.0])
def test_a_line_across_the_antimeridian_works(tmp_path, answer, west, turn):
    """The same trench drawn from 178 E to 184.3 E or from 182 W to 175.7 W, on three ways to count the grid."""
    columns = 18000 if west != 175.0 else 600
    world = equator_grid(tmp_path / "world.tif", 178.0, invented.trench, west=west, columns=columns)
    same(fit(world, equator_line(178.0 + turn)), answer)


def test_a_line_drawn_as_qgis_splits_it_at_the_antimeridian_works(tmp_path, answer):
    """Two parts that meet at 180 and -180 degrees are one line."""
    world = equator_grid(tmp_path / "world.tif", 178.0, invented.trench, west=-180.0, columns=18000)
    (_, _), (end, _) = equator_line(178.0)
    layer = lines_layer([f"MultiLineString ((178 0, 180 0), (-180 0, {end - 360.0!r} 0))"], kind="MultiLineString")
    same(run("fittransects", {"TRANSECTS": layer, "DEM": world, "SETTING": 1, "STEP_KM": STEP_KM}), answer)


@pytest.mark.parametrize(("unit", "factor"), [(1, 0.3048), (2, 1200 / 3937), (3, 1000.0)])
def test_relief_in_feet_and_kilometres_gives_the_same_answer(tmp_path, answer, unit, factor):
    """The international foot is 0.3048 m, the US survey foot 1200/3937 m, both by definition."""
    other = equator_grid(tmp_path / "dem.tif", 20.0, invented.trench, factor=factor)
    same(fit(other, equator_line(20.0), RELIEF_UNIT=unit), answer)


def test_a_grid_without_a_crs_takes_the_one_given(tmp_path, answer):
    """DEM_CRS serves a grid that carries none; without it, the run says which key to give."""
    bare = equator_grid(tmp_path / "dem.tif", 20.0, invented.trench, crs=None)
    same(fit(bare, equator_line(20.0), DEM_CRS="EPSG:4326"), answer)
    parameters = {"TRANSECTS": lines_layer([equator_line(20.0)]), "DEM": bare, "SETTING": 1}
    assert "DEM carries no CRS: give it as DEM_CRS." in refusal("fittransects", parameters)


def test_the_band_that_is_asked_for_is_read(tmp_path, answer, dem):
    """Band 2 holds the trench, band 1 nothing but zeros."""
    from osgeo import gdal

    relief = gdal.Open(dem).ReadAsArray()
    cell = invented.CELL
    bands = [np.zeros_like(relief), relief]
    both = invented.write_grid(tmp_path / "two.tif", bands, 18.0 - cell / 2, 4 * cell, cell)
    same(fit(both, equator_line(20.0), DEM_BAND=2), answer)


def test_scaled_densities_leave_the_thickness(dem, answer):
    """All densities doubled double k; rigidity doubles with it, so Te grows by the cube root of 2, forces double."""
    doubled = fit(dem, equator_line(20.0), RHO_MANTLE=6600, RHO_INFILL=2060, RHO_WATER=2060)
    one, other = doubled["PROFILES"][0], answer["PROFILES"][0]
    assert one["te_km"] == pytest.approx(2 ** (1 / 3) * other["te_km"], rel=2e-3)
    assert one["flexural_parameter_km"] == pytest.approx(other["flexural_parameter_km"], rel=2e-3)
    assert one["end_shear_n_per_m"] == pytest.approx(2 * other["end_shear_n_per_m"], rel=5e-3)
    assert one["end_moment_n"] == pytest.approx(2 * other["end_moment_n"], rel=5e-3)


def test_rigidity_is_what_the_relief_fixes(dem, answer):
    """Young's modulus at 65 GPa and Poisson's ratio at 0: D stays, Te goes by ((1 - nu^2) / E)^(1/3)."""
    other = fit(dem, equator_line(20.0), YOUNG_GPA=65, POISSON=0)["PROFILES"][0]
    first = answer["PROFILES"][0]
    assert other["rigidity_nm"] == pytest.approx(first["rigidity_nm"], rel=5e-3)
    assert other["te_km"] == pytest.approx(first["te_km"] * (100 / 65 / (1 - 0.25**2)) ** (1 / 3), rel=2e-3)
    assert (other["young_gpa"], other["poisson"]) == (65, 0)


@pytest.fixture(scope="module")
def ridge_dem(tmp_path_factory):
    """The ridge on a continuous plate, its line's start at 20 E."""
    return equator_grid(tmp_path_factory.mktemp("ground") / "ridge.tif", 20.0, invented.ridge)


def test_the_fit_finds_the_plate_under_a_ridge(ridge_dem):
    """Continuous plate, relief load in water, moat and bulge in the same DEM; the fit itself finds level and load."""
    answer = fit(ridge_dem, equator_line(20.0), SETTING=0)
    (profile,) = answer["PROFILES"]
    assert answer["TE_KM"] == pytest.approx(invented.RIDGE_TE_KM, rel=0.02)
    assert profile["regional_level_m"] == pytest.approx(invented.FLOOR, abs=3.0)
    assert profile["deepest_km"] == pytest.approx(invented.RIDGE_KM, abs=0.5)
    assert profile["plate"] == "continuous"
    assert profile["break_km"] is None


def test_reversing_a_line_mirrors_a_continuous_fit(ridge_dem):
    """A continuous plate knows no direction: thickness and level stay, the deflection is mirrored."""
    line = equator_line(20.0)
    forward, backward = (fit(ridge_dem, way, SETTING=0) for way in (line, line[::-1]))
    one, other = forward["PROFILES"][0], backward["PROFILES"][0]
    for name in ("te_km", "regional_level_m", "deepest_m"):
        assert one[name] == pytest.approx(other[name], rel=1e-6), name
    for name in ("te_low_km", "te_high_km", "rms_m"):
        assert one[name] == pytest.approx(other[name], rel=1e-3), name
    assert one["deepest_km"] + other["deepest_km"] == pytest.approx(invented.LENGTH_KM, abs=1e-3)
    deflection = column(forward["STATIONS"], "deflection_m")
    np.testing.assert_allclose(deflection, column(backward["STATIONS"], "deflection_m")[::-1], atol=1e-3)


def test_geometries_carry_the_predicted_surface_and_the_distance(answer):
    """PROFILES: Z the predicted surface, M the distance in km; STATIONS: Z the predicted surface, NaN without plate."""
    line = answer["PROFILES"][0]["geometry"].constGet()
    plated = [row for row in answer["STATIONS"] if row["predicted_m"] is not None]
    assert line.numPoints() == len(plated) < len(answer["STATIONS"])
    for index, row in enumerate(plated):
        vertex = line.pointN(index)
        assert (vertex.z(), vertex.m()) == pytest.approx((row["predicted_m"], row["distance_km"]))
        assert row["geometry"].constGet().z() == pytest.approx(row["predicted_m"])
    for row in answer["STATIONS"]:
        if row["distance_km"] < AXIS_KM - 1e-3:
            assert row["deflection_m"] is row["predicted_m"] is row["te_km"] is row["slope"] is row["moment_n"] is None
            assert row["in_fit"] == 0
        else:
            assert row["residual_m"] == pytest.approx(row["observed_m"] - row["predicted_m"], abs=1e-9)


def test_a_swath_of_equal_lines_is_the_line(dem, answer):
    """Relief that does not change along strike: the mean of 5 lines over 8 km is the line, their spread is nothing."""
    swath = fit(dem, equator_line(20.0), SWATH_KM=8, SWATH_LINES=5)
    np.testing.assert_allclose(column(swath["STATIONS"], "dem_m"), column(answer["STATIONS"], "dem_m"), atol=0.05)
    assert swath["TE_KM"] == pytest.approx(answer["TE_KM"], rel=0.01)


def test_inputs_are_left_untouched(dem):
    """The layer of lines has the same features after a run, and the grid's file the same bytes."""
    from pathlib import Path

    layer = lines_layer([equator_line(20.0)])
    before = Path(dem).read_bytes(), [feature.geometry().asWkt(12) for feature in layer.getFeatures()]
    run("fittransects", {"TRANSECTS": layer, "DEM": dem, "SETTING": 1, "STEP_KM": 20})
    assert before == (Path(dem).read_bytes(), [feature.geometry().asWkt(12) for feature in layer.getFeatures()])
