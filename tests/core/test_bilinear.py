"""Bilinear interpolation with missing cells, against scipy's RegularGridInterpolator and worked weights."""

import numpy as np
import pytest
from downwarp_checkout.plugin.core import bilinear
from scipy.interpolate import RegularGridInterpolator


def test_agrees_with_scipy_between_the_cell_centres():
    """Independent reference: scipy.interpolate.RegularGridInterpolator (linear)."""
    random = np.random.default_rng(1)
    window = random.normal(size=(7, 11))
    row, column = random.uniform(0, 6, 500), random.uniform(0, 10, 500)
    reference = RegularGridInterpolator((np.arange(7), np.arange(11)), window)
    np.testing.assert_allclose(
        bilinear.bilinear(window, row, column), reference(np.column_stack([row, column])), rtol=0, atol=1e-13
    )


def test_reproduces_a_bilinear_surface():
    """f = 2 + 3 r - c + 0.5 r c is bilinear, hence exact at any place between the centres."""
    rows, columns = np.mgrid[0:5, 0:6]
    random = np.random.default_rng(2)
    row, column = random.uniform(0, 4, (3, 50)), random.uniform(0, 5, (3, 50))
    values = bilinear.bilinear(2.0 + 3 * rows - columns + 0.5 * rows * columns, row, column)
    assert values.shape == (3, 50)
    np.testing.assert_allclose(values, 2 + 3 * row - column + 0.5 * row * column, rtol=1e-13)


def test_outer_half_cells_take_the_nearest_centres_and_nothing_lies_beyond():
    window = np.array([[1.0, 2.0], [3.0, 4.0]])
    row = np.array([-0.5, -0.3, 1.5, 0.5, 1.2, -0.6, 0.0, np.nan])
    column = np.array([-0.5, 0.5, 1.5, 1.4, -0.4, 0.0, 1.6, 0.0])
    np.testing.assert_allclose(
        bilinear.bilinear(window, row, column), [1.0, 1.5, 4.0, 3.0, 3.0, np.nan, np.nan, np.nan]
    )


@pytest.mark.parametrize(
    ("row", "column", "expected"),
    [
        (0.0, 0.0, np.nan),  # on the missing cell
        (0.4, 0.4, np.nan),  # the missing cell is the nearest: weights .36 .24 .24 .16
        (0.4, 0.6, (0.36 * 2 + 0.16 * 3 + 0.24 * 4) / 0.76),  # the nearest is (0, 1); .24 is shared out
        (0.5, 0.5, 3.0),  # all four weigh the same: the mean of the other three
        (0.0, 0.5, 2.0),  # half and half: the known one counts
        (1.0, 1.0, 4.0),
    ],
)
def test_one_missing_cell_of_four(row, column, expected):
    """Window [[missing, 2], [3, 4]]: no value where the missing cell is nearest, else its weight is shared out."""
    window = np.array([[np.nan, 2.0], [3.0, 4.0]])
    assert bilinear.bilinear(window, row, column) == pytest.approx(expected, nan_ok=True)


def test_no_value_where_missing_cells_hold_most_of_the_weight():
    """Nearest cell known (weight .36), the other three (.64) missing."""
    window = np.array([[1.0, np.nan], [np.nan, np.nan]])
    assert np.isnan(bilinear.bilinear(window, 0.4, 0.4))
    assert bilinear.bilinear(window, 0.2, 0.2) == 1.0


def test_closed_grid_runs_on_from_its_last_column_to_its_first():
    """Turning a closed grid and the places with it changes nothing."""
    random = np.random.default_rng(3)
    window = random.normal(size=(4, 9))
    row, column = random.uniform(0, 3, 200), random.uniform(0, 9, 200)
    values = bilinear.bilinear(window, row, column, closed=True)
    turned = bilinear.bilinear(np.roll(window, 4, axis=1), row, column + 4, closed=True)
    np.testing.assert_allclose(values, turned, rtol=0, atol=1e-13)
    assert np.isfinite(values).all()
    assert bilinear.bilinear(window, 1.0, 8.5, closed=True) == pytest.approx(0.5 * (window[1, 8] + window[1, 0]))


def test_grids_of_one_row_or_one_cell():
    assert bilinear.bilinear(np.array([[5.0]]), 0.3, -0.2) == 5.0
    np.testing.assert_allclose(bilinear.bilinear(np.array([[1.0, 3.0]]), [0.4, -0.4], [0.25, 0.5]), [1.5, 2.0])


def test_inputs_are_left_untouched():
    window, row, column = np.array([[1.0, np.nan], [3.0, 4.0]]), np.array([-0.2, 9.0]), np.array([0.7, 0.1])
    copies = window.copy(), row.copy(), column.copy()
    bilinear.bilinear(window, row, column)
    for now, before in zip((window, row, column), copies):
        np.testing.assert_array_equal(now, before)
