"""The load of relief by hand arithmetic, and which stations carry it."""

import numpy as np
import pytest
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.load import fill_gaps, level_outside_load, load_mask, relief_load
from downwarp_checkout.plugin.core.settings import Densities

ROCK = Densities(load=2800, infill=1030, under_load=1030, mantle=3300, water=1030)
G = 9.81


def test_relief_below_the_sea_displaces_water():
    """q = g (rho_load - rho_water)(z - z0) for z0 < z < 0."""
    assert relief_load(-2000.0, -5000.0, ROCK, G) == pytest.approx(G * (2800 - 1030) * 3000)


def test_relief_above_the_sea_displaces_air():
    """From a level on land, q = g rho_load (z - z0): air weighs nothing here."""
    assert relief_load(1200.0, 200.0, ROCK, G) == pytest.approx(G * 2800 * 1000)


def test_an_island_displaces_water_up_to_sea_level_only():
    """From z0 = -5000 m to z = 1000 m: g [rho_load 6000 - rho_water 5000]."""
    assert relief_load(1000.0, -5000.0, ROCK, G) == pytest.approx(G * (2800 * 6000 - 1030 * 5000))


def test_nothing_at_or_below_the_level_loads():
    """A moat is no negative load."""
    assert (relief_load(np.array([-5000.0, -6000.0, -9000.0]), -5000.0, ROCK, G) == 0).all()


def test_the_load_is_continuous_and_rises_with_the_relief():
    """No jump at the level or at sea level."""
    relief = np.linspace(-6000, 2000, 80_001)
    load = relief_load(relief, -5000.0, ROCK, G)
    assert (np.diff(load) >= 0).all()
    assert np.diff(load).max() == pytest.approx(G * 2800 * 0.1, rel=1e-6)


def test_a_level_that_is_no_number_is_refused():
    """The message names the key."""
    with pytest.raises(DownwarpError, match="REFERENCE_LEVEL is nan"):
        relief_load(0.0, np.nan, ROCK, G)


def test_a_bulge_is_no_load_but_a_second_mount_is():
    """Runs above the level count where their crest reaches a quarter of the highest one's."""
    relief = np.array([0, 100, 0, -50, 1000, 4000, 900, -200, 0, 150, 200, -1, 999, 1000, 0.0])
    expected = [0, 0, 0, 0, 1, 1, 1, 0, 0, 0, 0, 0, 1, 1, 0]
    np.testing.assert_array_equal(load_mask(relief, 0.0), np.array(expected, dtype=bool))


def test_gaps_and_lows_are_no_load():
    """NaN separates runs; relief that nowhere rises above the level gives an empty mask."""
    np.testing.assert_array_equal(load_mask([10.0, np.nan, 10.0], 0.0), [True, False, True])
    assert not load_mask([-1.0, -2.0, np.nan], 0.0).any()


def test_the_mask_is_mirrored_with_the_line():
    """Direction of the line does not matter."""
    relief = np.random.default_rng(3).normal(size=300).cumsum()
    np.testing.assert_array_equal(load_mask(relief, 1.0)[::-1], load_mask(relief[::-1], 1.0))


def test_the_level_is_found_beside_the_load():
    """A sea floor at -5000 m with a ridge over a third of the line and a moat: the floor, to the moat's effect."""
    x = np.linspace(-1, 1, 601)
    relief = np.where(np.abs(x) < 0.3, -5000 + 4000 * (1 - np.abs(x) / 0.3), -5000.0)
    assert level_outside_load(relief) == pytest.approx(-5000.0)
    assert level_outside_load(np.where(np.abs(x) < 0.5, relief - 300 * (np.abs(x) > 0.3), relief)) < -5000 + 1e-9


def test_the_level_outside_a_given_area_is_its_median():
    """The user's area says what is outside."""
    relief = np.array([1.0, 2.0, 3.0, 900.0, 800.0])
    assert level_outside_load(relief, np.array([False, False, False, True, True])) == 2.0


def test_no_level_without_relief_or_outside():
    """Sentences that say what is wrong."""
    with pytest.raises(DownwarpError, match="The DEM has no value along the line"):
        level_outside_load(np.full(5, np.nan))
    with pytest.raises(DownwarpError, match="No station lies outside the load: give REFERENCE_LEVEL"):
        level_outside_load(np.ones(5), np.ones(5, dtype=bool))


def test_gaps_are_bridged_and_ends_held():
    """Linear inside, the given value beyond; the input is left untouched."""
    values = np.array([np.nan, 1.0, np.nan, 3.0, np.nan])
    before = values.copy()
    np.testing.assert_allclose(fill_gaps(np.arange(5.0), values, -7.0), [-7, 1, 2, 3, -7])
    np.testing.assert_array_equal(values, before)
