"""From a profile and options to a problem: what is blank, where each value came from, what is fitted."""

from dataclasses import replace

import numpy as np
import pytest
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.problem import prepare
from downwarp_checkout.plugin.core.profile import Picks, Profile
from downwarp_checkout.plugin.core.settings import (
    BREAK_GIVEN,
    BREAK_LOWEST,
    BREAK_SEARCHED,
    BREAK_START,
    BROKEN,
    CONTINUOUS,
    FITTED,
    FORELAND,
    FROM_SETTING,
    GIVEN,
    LOAD_NONE,
    LOAD_RELIEF,
    LOAD_THICKNESS,
    MEASURED,
    OTHER,
    REMOVED,
    TRENCH,
    VOLCANO,
    FitOptions,
)

X = np.arange(0.0, 500e3 + 1, 5e3)
MIDDLE = 250e3


def mount(height=3000.0, floor=-5000.0, moat=200.0, bulge=60.0):
    """A mount of 100 km on a floor, a moat beside it and a bulge farther out, m up."""
    away = np.abs(X - MIDDLE) / 1e3
    relief = np.full(X.size, floor)
    relief = np.where(away < 120, floor - moat, relief)
    relief = np.where((away >= 120) & (away < 180), floor + bulge, relief)
    return np.where(away < 50, floor + height * (1 - away / 50), relief)


def profile(relief=None, **more):
    return Profile("A", X, mount() if relief is None else relief, **more)


def test_a_mount_on_the_seafloor():
    """Level measured beside the load, water displaced, and only the mount is load: neither moat nor bulge is."""
    problem = prepare(profile(), FitOptions(setting=VOLCANO))
    assert problem.bare
    assert problem.reference_origin == MEASURED
    assert problem.reference_level == pytest.approx(-5000, abs=201)
    on_mount = np.abs(X - MIDDLE) < 50e3
    height = mount() - problem.reference_level
    expected = np.where(on_mount & (height > 0), (2800 - 1030) * 9.81 * height, 0.0)
    np.testing.assert_allclose(problem.load, expected, rtol=1e-12)
    assert set(problem.density_origins.values()) == {FROM_SETTING}
    assert (problem.densities.infill, problem.densities.under_load) == (1030, 1030)
    assert problem.remarks == ()


def test_given_values_are_kept_and_say_so():
    """A level and densities of the user's; the infill beneath the load follows the infill."""
    options = FitOptions(setting=VOLCANO, reference_level=-4900.0, rho_load=2700, rho_infill=1100)
    problem = prepare(profile(), options)
    assert (problem.reference_level, problem.reference_origin) == (-4900, GIVEN)
    assert problem.densities.load == 2700
    assert problem.densities.under_load == 1100
    assert problem.density_origins["rho_load"] == problem.density_origins["rho_infill"] == GIVEN
    assert problem.density_origins["rho_under_load"] == problem.density_origins["rho_mantle"] == FROM_SETTING


def test_the_infill_depends_on_whether_the_bent_surface_is_a_layer_of_its_own():
    """Foreland: air on a bare surface, sediment on a basement."""
    assert prepare(profile(), FitOptions(setting=FORELAND)).densities.infill == 0
    buried = profile(observed=np.full(X.size, -3000.0))
    assert prepare(buried, FitOptions(setting=FORELAND)).densities.infill == 2400
    picked = profile(picks=Picks(np.array([1e5]), np.array([-3000.0]), np.array([np.nan])))
    assert not prepare(picked, FitOptions(setting=FORELAND)).bare


def test_a_removed_load_lifts():
    """Setting 3: thickness in the DEM, counted upward, from level 0."""
    ice = np.where(np.abs(X - MIDDLE) < 100e3, 1000.0, 0.0)
    problem = prepare(profile(ice), FitOptions(setting=REMOVED))
    assert problem.reference_level == 0
    np.testing.assert_allclose(problem.load, -1000 * 9.81 * ice)


def test_a_thickness_displaces_what_it_stands_in():
    """LOAD 1 below the sea: rock in place of water up to its top."""
    thickness = np.where(np.abs(X - MIDDLE) < 100e3, 500.0, 0.0)
    options = FitOptions(setting=OTHER, load=LOAD_THICKNESS, reference_level=-3000.0)
    np.testing.assert_allclose(prepare(profile(thickness), options).load, (2700 - 1030) * 9.81 * thickness)
    with pytest.raises(DownwarpError, match=r"A: the DEM holds a load thickness below 0 \(LOAD is 1\)"):
        prepare(profile(thickness - 1), options)


def test_a_trench_has_no_relief_load():
    """Whatever rises landward of it."""
    problem = prepare(profile(), FitOptions(setting=TRENCH))
    assert not problem.load.any()
    assert not problem.under_load.any()


def test_the_load_area_and_window_limit_the_load():
    """Both together; what rises inside is load, what does not is still the load's ground and left out of the fit."""
    area = X <= 260e3
    options = FitOptions(setting=VOLCANO, load_from=220e3, load_to=400e3, reference_level=-5000.0)
    problem = prepare(profile(in_load_area=area), options)
    inside = (X >= 220e3) & (X <= 260e3)
    np.testing.assert_array_equal(problem.under_load, inside)
    np.testing.assert_array_equal(problem.load_surface, inside)
    assert not np.isin(problem.observations().station, np.flatnonzero(inside)).any()


def test_infill_beneath_the_load_fills_its_whole_ground():
    """An area of 218 to 402 km on which relief sinks below the level in places, as noise does at a load's foot: there is no
    load there, but the infill goes on beneath; intervals that the area's edge cuts count by their share."""
    relief = profile().relief.copy()
    inside = (X >= 218e3) & (X <= 402e3)
    low = np.flatnonzero(inside)[[1, 5]]
    relief[low] = -5100.0
    share = np.clip((np.minimum(X[1:], 402e3) - np.maximum(X[:-1], 218e3)) / np.diff(X), 0, 1)
    made = profile(relief, in_load_area=inside, load_area_share=share)
    problem = prepare(made, FitOptions(setting=VOLCANO, reference_level=-5000.0, rho_under_load=2800))
    assert not problem.under_load[low].any() and not problem.load[low].any()
    np.testing.assert_allclose(problem.ground_share, share)
    infill = problem.infill_density(problem.model(0))[:-1]
    np.testing.assert_allclose(infill, 1030 + share * (2800 - 1030))
    windowed = prepare(made, FitOptions(
        setting=VOLCANO, reference_level=-5000.0, rho_under_load=2800, load_from=301e3))  # fmt: skip
    assert (windowed.ground_share * np.diff(X)).sum() == pytest.approx(402e3 - 301e3)


def test_a_station_beside_the_break_mixes_both_sides():
    """In a DEM of 5 km cells that shows both sides of a trench, the readings within a cell of the break are left out; where
    the bent surface is a layer of its own, or the cell is unknown, they count."""
    relief = -5000.0 - 2000.0 * np.exp(-np.abs(X - MIDDLE) / 80e3)
    for resolution, first in ((5e3, MIDDLE + 5e3), (0.0, MIDDLE)):
        problem = prepare(profile(relief, resolution=resolution), FitOptions(setting=TRENCH))
        seen = problem.observations().distance
        assert seen.min() == pytest.approx(X[first - 1.0 <= X].min())
    options = FitOptions(setting=TRENCH, break_at=2, break_position=MIDDLE)
    problem = prepare(profile(relief, observed=relief, resolution=5e3), options)
    assert problem.observations().distance.min() == pytest.approx(X[X >= MIDDLE].min())


def test_gaps_are_bridged_with_a_remark():
    """Three stations without DEM on the mount."""
    relief = mount()
    relief[49:52] = np.nan
    problem = prepare(profile(relief), FitOptions(setting=OTHER, reference_level=-5000.0))
    assert np.isfinite(problem.load).all()
    assert problem.remarks == ("3 stations have no DEM value; the load is bridged over them",)


def test_a_load_at_the_lines_end_is_said():
    """It is held constant beyond the end; a broken plate's start is no such place."""
    relief = np.linspace(1000.0, 0.0, X.size)
    options = FitOptions(setting=OTHER, reference_level=-100.0, plate=CONTINUOUS)
    words = "the load reaches the line's {} and is held constant beyond it"
    assert prepare(profile(relief), options).remarks == (words.format("start"), words.format("end"))
    assert prepare(profile(relief), replace(options, plate=BROKEN)).remarks == (words.format("end"),)


def test_no_dem_at_all():
    """The sentence names the transect."""
    with pytest.raises(DownwarpError, match="A: the DEM has no value anywhere along the line"):
        prepare(profile(np.full(X.size, np.nan)), FitOptions())


def test_places_of_the_break():
    """Start, lowest station, given, searched; and where each came from."""
    relief = mount()
    relief[7] = -9000.0
    relief[8] = np.nan

    def breaks(**options):
        problem = prepare(profile(relief), FitOptions(setting=TRENCH, **options))
        return problem.breaks, problem.break_origin

    np.testing.assert_array_equal(breaks(break_at=BREAK_START)[0], [0.0])
    assert breaks(break_at=BREAK_LOWEST) == (pytest.approx([X[7]]), MEASURED)
    assert breaks() == (pytest.approx([X[7]]), MEASURED)
    assert breaks(break_at=BREAK_GIVEN, break_position=42e3) == (pytest.approx([42e3]), GIVEN)
    places, origin = breaks(break_at=BREAK_SEARCHED, break_from=10e3, break_to=90e3)
    assert (places[0], places[-1], origin) == (10e3, 90e3, FITTED)
    assert np.diff(places) == pytest.approx(80e3 / (places.size - 1))


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"break_at": BREAK_GIVEN, "break_position": 500e3}, "BREAK_KM must lie on the line, from 0 to below 500.0 km"),
        ({"break_at": BREAK_SEARCHED, "break_from": 10e3, "break_to": 900e3}, "BREAK_TO must lie on the line"),
        ({"break_at": BREAK_SEARCHED, "break_from": -10e3, "break_to": 90e3}, "BREAK_FROM must lie on the line"),
    ],
)
def test_a_break_off_the_line(options, words):
    """The message names key, transect and what it got."""
    with pytest.raises(DownwarpError, match=f"A: {words}.*it is"):
        prepare(profile(), FitOptions(setting=TRENCH, **options))


def test_what_is_fitted_on_a_bare_surface():
    """All stations with relief but the mount, and on a broken plate nothing before the break."""
    relief = mount()
    relief[90] = np.nan
    seen = prepare(profile(relief), FitOptions(setting=VOLCANO)).observations()
    outside = (np.abs(X - MIDDLE) >= 50e3) & np.isfinite(relief)
    np.testing.assert_array_equal(seen.station, np.flatnonzero(outside))
    np.testing.assert_array_equal(seen.elevation, relief[outside])
    assert np.isnan(seen.sigma).all()
    beyond = prepare(profile(relief), FitOptions(setting=TRENCH, break_at=BREAK_GIVEN, break_position=300e3))
    assert beyond.observations().distance.min() == 300e3
    searched = FitOptions(setting=TRENCH, break_at=BREAK_SEARCHED, break_from=100e3, break_to=333e3)
    assert prepare(profile(relief), searched).observations().distance.min() == 335e3


def test_a_window_exclusions_and_sigma():
    """FIT_FROM and FIT_TO include their ends; excluded stations are out; SIGMA_M holds for all."""
    excluded = X == 450e3
    options = FitOptions(setting=VOLCANO, fit_from=400e3, fit_to=480e3, sigma=25.0)
    seen = prepare(profile(excluded=excluded), options).observations()
    assert (seen.distance.min(), seen.distance.max(), seen.distance.size) == (400e3, 480e3, 16)
    assert 450e3 not in seen.distance
    assert (seen.sigma == 25).all()


def test_basement_under_the_load_counts_only_where_a_window_is_given():
    """A basement is seen under the load too, but by default only beside it is fitted."""
    buried = profile(observed=np.full(X.size, -6000.0))
    beside = prepare(buried, FitOptions(setting=VOLCANO)).observations()
    assert np.abs(beside.distance - MIDDLE).min() >= 45e3
    everywhere = prepare(buried, FitOptions(setting=VOLCANO, fit_from=0.0)).observations()
    assert everywhere.distance.size == X.size


def test_picks_join_the_stations_or_stand_alone():
    """After the stations, with station -1; their own sigma goes before SIGMA_M; NaN and far ones are left out."""
    elevation, sigma = np.array([-1.0, np.nan, -3.0, -4.0]), np.array([5.0, 5.0, 5.0, np.nan])
    picks = Picks(np.array([10e3, 20e3, 900e3, 30e3]), elevation, sigma)
    alone = prepare(profile(picks=picks), FitOptions(setting=FORELAND, sigma=12.0)).observations()
    np.testing.assert_array_equal(alone.distance, [10e3, 30e3])
    np.testing.assert_array_equal(alone.station, [-1, -1])
    np.testing.assert_array_equal(alone.sigma, [5.0, 12.0])
    both = profile(picks=picks, observed=np.full(X.size, -2000.0))
    together = prepare(both, FitOptions(setting=FORELAND, load=LOAD_NONE)).observations()
    assert together.distance.size == X.size + 2
    assert (together.station[-2:] == -1).all()


def test_inputs_are_left_untouched():
    """Arrays of the profile are the same after preparing."""
    relief = mount()
    relief[3] = np.nan
    before = relief.copy()
    prepare(profile(relief), FitOptions(setting=OTHER, load=LOAD_RELIEF)).observations()
    np.testing.assert_array_equal(relief, before)
