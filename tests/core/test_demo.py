"""The invented map: the same seed gives the same map, and without noise it is the plates that it says it is."""

import numpy as np
import pytest
from downwarp_checkout.plugin.core import demo
from downwarp_checkout.plugin.core.errors import DownwarpError


def grids(noise=0.0, seed=1, **more):
    return demo.demo_grids(noise, np.random.default_rng(seed), **more)


def rows_of(band):
    """Rows in the middle of a band (0 in the north), clear of the blends."""
    count = int(3 * demo.BAND / demo.CELL)
    middle = int((band + 0.5) * demo.BAND / demo.CELL)
    assert 0 <= middle < count
    return slice(middle - 5, middle + 5)


def test_the_seed_fixes_the_map():
    """Equal seeds, equal maps; another seed, another map; no noise, no difference."""
    np.testing.assert_array_equal(grids(40).relief, grids(40).relief)
    assert np.abs(grids(40).relief - grids(40, seed=2).relief).max() > 10
    np.testing.assert_array_equal(grids(0, 1).relief, grids(0, 2).relief)


def test_the_noise_is_as_large_as_asked_and_correlated():
    """Standard deviation 40 m; neighbours agree, cells 100 km apart do not."""
    noise = grids(40).relief - grids(0).relief
    assert noise.std() == pytest.approx(40, rel=0.1)
    assert np.corrcoef(noise[:, :-1].ravel(), noise[:, 1:].ravel())[0, 1] > 0.6
    assert abs(np.corrcoef(noise[:, :-40].ravel(), noise[:, 40:].ravel())[0, 1]) < 0.1


def test_the_trench_is_the_closed_form():
    """Seaward of the axis: -5600 m, a tilt, less a broken plate of 34 km under shear and moment at its end."""
    relief = grids().relief[rows_of(1)]
    columns = (np.arange(relief.shape[1]) + 0.5) * demo.CELL
    x = columns - demo.TRENCH_AXIS
    rigidity = 100e9 * 34e3**3 / (12 * (1 - 0.25**2))
    alpha = (4 * rigidity / (2270 * 9.81)) ** 0.25
    s = x / alpha
    shear, moment = demo.TRENCH_SHEAR, demo.TRENCH_MOMENT
    bent = alpha**2 * np.exp(-s) / (2 * rigidity) * ((shear * alpha + moment) * np.cos(s) - moment * np.sin(s))
    beyond = x > 5e3
    expected = -5600 + demo.TRENCH_TILT * x - bent
    np.testing.assert_allclose(relief[:, beyond], np.tile(expected[beyond], (10, 1)), atol=1.0)


def test_the_ridge_stands_on_a_plate_that_carries_it():
    """Its crest is 3600 m above the sea floor, a moat lies beside it, a bulge beyond, and the far floor is level."""
    relief = grids().relief[rows_of(0)][0]
    assert relief.max() == pytest.approx(demo.SEAFLOOR + demo.RIDGE_HEIGHT, abs=20)
    columns = (np.arange(relief.size) + 0.5) * demo.CELL
    beside = np.abs(np.abs(columns - demo.RIDGE_CENTRE) - demo.RIDGE_HALF_WIDTH - 10e3) < 10e3
    assert relief[beside].max() < demo.SEAFLOOR - 300
    assert demo.SEAFLOOR + 10 < relief[np.abs(columns - demo.RIDGE_CENTRE) > 150e3].max() < demo.SEAFLOOR + 300
    assert relief[-1] == pytest.approx(demo.SEAFLOOR, abs=30)


def test_the_basement_lies_below_the_front_only():
    """NaN in the bands of ridge and trench; below the plain by the cover where the plate is level."""
    basement = grids().basement
    assert np.isnan(basement[rows_of(0)]).all()
    assert np.isnan(basement[rows_of(1)]).all()
    front = basement[rows_of(2)]
    assert front[0, -1] == pytest.approx(demo.PLAIN - demo.COVER, abs=20)
    assert np.nanmin(front) < demo.PLAIN - demo.COVER - 1000
    assert np.isnan(front[0, 0])


@pytest.mark.parametrize("scenario", demo.SCENARIOS, ids=lambda scenario: scenario.name)
def test_lines_lie_on_the_map_within_their_band(scenario):
    """Eastward, and farther from the neighbouring bands than these blend."""
    lines = demo.demo_lines(scenario)
    assert len(lines) == 3
    south = {0: 2, 1: 1, 2: 0}[demo.SCENARIOS.index(scenario)] * demo.BAND + demo.SOUTH
    for line in lines:
        (west, north), (east, same) = line
        assert same == north
        assert demo.WEST <= west < east <= demo.WEST + demo.WIDTH
        assert south + demo.BLEND / 2 <= north <= south + demo.BAND - demo.BLEND / 2


def test_picks_are_the_basement_with_their_error():
    """Elevation less the grid's own value has the standard deviation that the picks state."""
    made = grids()
    east, elevation, north = demo.demo_picks(made, np.random.default_rng(4), count=3000)
    assert 500 < elevation.size <= 3000
    column = ((east - demo.WEST) / demo.CELL).astype(int)
    row = ((demo.SOUTH + 3 * demo.BAND - north) / demo.CELL).astype(int)
    error = elevation - made.basement[row, column]
    assert error.std() == pytest.approx(demo.PICK_SIGMA, rel=0.05)
    assert abs(error.mean()) < 3


@pytest.mark.parametrize("noise", [-1, 1001, np.nan, "loud"])
def test_bad_noise_is_refused(noise):
    """The message names the key."""
    with pytest.raises(DownwarpError, match="NOISE_M is"):
        grids(noise)
