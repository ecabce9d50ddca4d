"""The shared checks: what passes, and the sentence that stops the rest."""

import numpy as np
import pytest
from downwarp_checkout.plugin.core import check
from downwarp_checkout.plugin.core.errors import DownwarpError


@pytest.mark.parametrize("value", [3, 3.0, "3", np.float32(3.0), np.int64(3), np.array(3.0)])
def test_number_takes_whatever_is_a_number(value):
    """A number in any dress comes back as a plain float."""
    result = check.number("TE_KM", value, above=0, at_most=3)
    assert type(result) is float
    assert result == 3.0


@pytest.mark.parametrize(
    ("value", "bounds", "message"),
    [
        ("abc", {}, "TE_KM is 'abc'; it takes a number."),
        (None, {}, "TE_KM is None; it takes a number."),
        (True, {}, "TE_KM is True; it takes a number."),
        (np.bool_(False), {}, "it takes a number."),
        ([1.0, 2.0], {}, r"TE_KM is \[1.0, 2.0\]; it takes a number."),
        (float("nan"), {}, "TE_KM is nan; it takes a number."),
        (float("inf"), {"above": 0}, "TE_KM is inf; it takes a number above 0."),
        (0, {"above": 0}, "TE_KM is 0; it takes a number above 0."),
        (-1, {"at_least": 0}, "TE_KM is -1; it takes a number from 0."),
        (5, {"below": 5}, "TE_KM is 5; it takes a number below 5."),
        (6, {"at_least": 1, "at_most": 5}, "TE_KM is 6; it takes a number from 1 up to 5."),
    ],
)
def test_number_refuses(value, bounds, message):
    """Text, nothing, truth values, NaN and numbers out of bounds: named, with what is wanted."""
    with pytest.raises(DownwarpError, match=message):
        check.number("TE_KM", value, **bounds)


@pytest.mark.parametrize(("bound", "value"), [("at_least", 2.0), ("at_most", 2.0)])
def test_closed_bounds_let_their_own_value_pass(bound, value):
    """`at_least` and `at_most` include the bound (that `above` and `below` do not is tested above)."""
    assert check.number("x", value, **{bound: value}) == value


@pytest.mark.parametrize(
    ("values", "ndim", "message"),
    [
        (["a", "b"], None, "depths must hold numbers only."),
        ([[1.0], [2.0, 3.0]], None, "depths must hold numbers only."),
        ([1.0, 2.0], 2, "depths has 1 dimensions; it takes 2."),
        ([1.0, float("nan")], 1, "depths holds a value that is not a finite number."),
        ([1.0, -float("inf")], None, "depths holds a value that is not a finite number."),
    ],
)
def test_finite_array_refuses(values, ndim, message):
    """Text, ragged lists, wrong dimensions, NaN and infinity."""
    with pytest.raises(DownwarpError, match=message):
        check.finite_array("depths", values, ndim)


def test_finite_array_gives_floats():
    """Whole numbers come back as floats of the same shape."""
    array = check.finite_array("depths", [[1, 2], [3, 4]], ndim=2)
    assert array.dtype == float
    np.testing.assert_array_equal(array, [[1.0, 2.0], [3.0, 4.0]])


@pytest.mark.parametrize(
    ("values", "least", "message"),
    [
        ([1.0], 2, "distance holds 1 values; it takes at least 2."),
        ([0.0, 1.0], 3, "distance holds 2 values; it takes at least 3."),
        ([0.0, 2.0, 2.0], 2, "distance must increase from each value to the next."),
        ([3.0, 2.0, 1.0], 2, "distance must increase from each value to the next."),
        ([[0.0, 1.0]], 2, "distance has 2 dimensions; it takes 1."),
        ([0.0, float("nan"), 1.0], 2, "distance holds a value that is not a finite number."),
    ],
)
def test_increasing_refuses(values, least, message):
    """Too few, repeated, falling, two-dimensional or NaN positions."""
    with pytest.raises(DownwarpError, match=message):
        check.increasing("distance", values, least)


def test_increasing_passes_uneven_steps():
    """Steps need not be equal."""
    np.testing.assert_array_equal(check.increasing("distance", (0, 1, 5)), [0.0, 1.0, 5.0])
