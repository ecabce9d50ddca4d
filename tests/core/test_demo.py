"""The invented map: the same seed gives the same map, and without noise it is the plates that it says it is.

Its gravity is checked against polygons drawn here by hand around each body, station by station.
"""

import numpy as np
import pytest
from downwarp_checkout.plugin.core import demo
from downwarp_checkout.plugin.core.constants import MILLIGAL
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.gravity import polygon_attraction


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
    """Standard deviation 40 m beside the loads, none on them; neighbours agree, cells 100 km apart do not."""
    noise = grids(40).relief - grids(0).relief
    for band, begin, end in ((0, demo.RIDGE_CENTRE - demo.RIDGE_HALF_WIDTH, demo.RIDGE_CENTRE + demo.RIDGE_HALF_WIDTH),
                             (2, 0.0, demo.FRONT_BREAK + demo.FRONT_WIDTH)):  # fmt: skip
        columns, _ = middles(begin, end)
        assert not noise[rows_of(band)][:, columns].any()
    noise = noise[:, middles(demo.RIDGE_CENTRE + demo.RIDGE_HALF_WIDTH, demo.WIDTH)[0]]
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


def gravity(noise=0.0, seed=1):
    return demo.demo_gravity(noise, np.random.default_rng(seed))


def middles(low, high):
    """Columns between two distances east, and their middles, m."""
    east = (np.arange(int(demo.WIDTH / demo.CELL)) + 0.5) * demo.CELL
    columns = np.flatnonzero((east > low) & (east < high))
    return columns, east[columns]


def trench_deflection(x):
    """Closed form of the demo's trench, m down, at distances x >= 0 from its axis."""
    rigidity = 100e9 * 34e3**3 / (12 * (1 - 0.25**2))
    alpha = (4 * rigidity / (2270 * 9.81)) ** 0.25
    s = x / alpha
    shear, moment = demo.TRENCH_SHEAR, demo.TRENCH_MOMENT
    return alpha**2 * np.exp(-s) / (2 * rigidity) * ((shear * alpha + moment) * np.cos(s) - moment * np.sin(s))


def test_gravity_of_the_trench_is_that_of_its_polygons():
    """Water in place of crust between the sea floor before bending and the bent one, crust in place of mantle 6.5 km below,
    both mirrored about the axis: two polygons, within 1 % of the largest anomaly along a transect."""
    columns, east = middles(demo.TRENCH_AXIS, 600e3)
    at = np.arange(0.0, 1500e3, 500.0)
    level = -5600.0 + demo.TRENCH_TILT * at
    sunk = level - trench_deflection(at)
    both = np.concatenate([-at[:0:-1], at])

    def body(top, bottom, density):
        upper, lower = (np.concatenate([values[:0:-1], values]) for values in (top, bottom))
        corners = np.concatenate([np.column_stack([both, upper]), np.column_stack([both, lower])[::-1]])
        # The outline crosses itself where the plate rises: the part with the larger area tells the sense.
        sense = np.sign(((upper - lower)[1:] + (upper - lower)[:-1]) @ np.diff(both))
        return sense * polygon_attraction(east - demo.TRENCH_AXIS, np.zeros(east.size), corners, density)

    expected = body(level, sunk, 1030.0 - 2800.0) + body(level - 6.5e3, sunk - 6.5e3, 2800.0 - 3300.0)
    found = gravity()[rows_of(1)][:, columns]
    assert np.abs(found - expected).max() < 0.01 * np.abs(expected).max()
    assert expected.min() < -100 * MILLIGAL.value


def test_gravity_of_the_ridge_is_that_of_its_load_far_from_compensation():
    """The ridge's own polygon (cos^2, 3.6 km high, 2800 in 1030 kg/m3), and by the plate's deflection the infill in the moat
    and the mantle: within 1 % along a transect."""
    columns, east = middles(50e3, 650e3)
    section = demo.sections()[0]
    at = section.distance
    height = demo.RIDGE_HEIGHT * np.cos(0.5 * np.pi * np.clip((at - demo.RIDGE_CENTRE) / demo.RIDGE_HALF_WIDTH, -1, 1)) ** 2
    inside = np.abs(at - demo.RIDGE_CENTRE) <= demo.RIDGE_HALF_WIDTH
    sea = np.zeros(east.size)
    foot = [(at[inside][-1], demo.SEAFLOOR), (at[inside][0], demo.SEAFLOOR)]
    crest = np.column_stack([at, demo.SEAFLOOR + height])[inside]
    expected = polygon_attraction(east, sea, np.concatenate([crest, foot]), 1770.0)
    for first in range(at.size - 1):
        # Upright slices, one at a time: infill for crust outside the ridge, crust for mantle everywhere.
        left, right = at[first], at[first + 1]
        moat = [(left, 0.0), (right, 0.0), (right, -section.deflection[first + 1]), (left, -section.deflection[first])]
        if np.ptp(np.array(moat)[2:, 1]) == 0.0 and moat[2][1] == 0.0:
            continue
        sense = -np.sign(moat[2][1] + moat[3][1])
        for depth, contrast in ((demo.SEAFLOOR, 0.0 if inside[first : first + 2].all() else -1770.0),
                                (demo.SEAFLOOR - 6.5e3, -500.0)):  # fmt: skip
            corners = np.array(moat) + np.array([0.0, depth])
            expected += sense * polygon_attraction(east, sea, corners, contrast)
    found = gravity()[rows_of(0)][:, columns]
    assert np.abs(found - expected).max() < 0.01 * np.abs(expected).max()
    assert expected.max() > 100 * MILLIGAL.value


def test_gravity_does_not_change_along_strike_within_a_band():
    """Bands are strips: in the middle of each all rows are one."""
    made = gravity()
    for band in range(3):
        assert np.ptp(made[rows_of(band)], axis=0).max() == 0.0


def test_noise_of_gravity_is_its_own():
    """3 mGal as asked; the seed fixes it; relief has none of it."""
    noise = gravity(3 * MILLIGAL.value) - gravity()
    assert noise.std() == pytest.approx(3 * MILLIGAL.value, rel=0.1)
    np.testing.assert_array_equal(gravity(1e-5, 4), gravity(1e-5, 4))
    with pytest.raises(DownwarpError, match="NOISE_MGAL is -1"):
        gravity(-1 * MILLIGAL.value)


@pytest.mark.parametrize("noise", [-1, 1001, np.nan, "loud"])
def test_bad_noise_is_refused(noise):
    """The message names the key."""
    with pytest.raises(DownwarpError, match="NOISE_M is"):
        grids(noise)
