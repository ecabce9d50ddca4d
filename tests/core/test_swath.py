"""Strips brought together: mean, sigma and alignment on each strip's own lowest point."""

import warnings

import numpy as np
import pytest
from downwarp_checkout.plugin.core import swath
from downwarp_checkout.plugin.core.errors import DownwarpError


def trench(distance, axis):
    """An invented trench profile, m up: a smooth low 5 km deep on a regional slope, lowest near ``axis``."""
    return -4000.0 - 5000.0 * np.exp(-(((distance - axis) / 30e3) ** 2))


def test_offsets_are_the_centre_lines_of_equal_strips():
    np.testing.assert_allclose(swath.offsets(100e3, 4), [-37.5e3, -12.5e3, 12.5e3, 37.5e3])
    np.testing.assert_allclose(swath.offsets(100e3, 1), [0.0])


def test_mean_and_sigma_agree_with_numpy():
    """Independent reference: numpy.nanmean; numpy.nanstd(ddof=1) of independent strips, pooled over the line, to 3 %."""
    random = np.random.default_rng(4)
    values = random.normal(-3000, 100, (9, 400))
    values[random.random(values.shape) < 0.2] = np.nan
    result = swath.combine(values)
    count = np.isfinite(values).sum(axis=0)
    np.testing.assert_array_equal(result.count, count)
    np.testing.assert_allclose(result.mean, np.nanmean(values, axis=0))
    spread = np.nanstd(values, axis=0, ddof=1)
    assert np.sqrt(np.mean(result.spread**2)) == pytest.approx(np.sqrt(np.mean(spread**2)), rel=0.03)
    assert np.sqrt(np.mean(result.sigma**2)) == pytest.approx(np.sqrt(np.mean(spread**2 / count)), rel=0.05)


def test_spread_follows_the_relief_and_not_the_strips_levels():
    """A spread of 20 m that grows to 100 m half way along, on strips whose levels differ by hundreds of metres."""
    random = np.random.default_rng(6)
    size = np.where(np.arange(400) < 200, 20.0, 100.0)
    values = np.linspace(-500.0, 500.0, 15)[:, None] + size * random.standard_normal((15, 400))
    result = swath.combine(values)
    assert np.median(result.spread[10:190]) == pytest.approx(20.0, rel=0.05)
    assert np.median(result.spread[210:390]) == pytest.approx(100.0, rel=0.05)


def test_sigma_is_what_the_mean_of_independent_strips_scatters_by():
    """16 strips of noise with standard deviation 80 m: the mean scatters by 80 / 4 = 20 m about the truth."""
    result = swath.combine(np.random.default_rng(5).normal(0.0, 80.0, (16, 20_000)))
    assert np.std(result.mean) == pytest.approx(20.0, rel=0.02)
    assert np.sqrt(np.mean(result.sigma**2)) == pytest.approx(20.0, rel=0.02)


def test_stations_with_one_strip_or_none():
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        result = swath.combine(np.array([[1.0, np.nan, np.nan], [3.0, 5.0, np.nan]]))
    np.testing.assert_allclose(result.mean, [2.0, 5.0, np.nan])
    np.testing.assert_allclose(result.sigma, [1.0, np.nan, np.nan])


def test_alignment_gives_the_profile_back_from_strips_shifted_by_whole_steps():
    """Strips are one profile moved by -3, 0, 5 and 10 stations: aligned, all are that profile moved by the mean, 3."""
    distance = np.arange(201) * 1e3
    moves = np.array([-3.0, 0.0, 5.0, 10.0])
    values = trench(distance, 80e3 + 1e3 * moves[:, None])
    alignment = swath.align(values, distance)
    assert alignment.common == pytest.approx(83e3)
    np.testing.assert_allclose(alignment.shift, moves - 3.0)
    aligned = swath.shifted(values, alignment)
    known = np.isfinite(aligned)
    np.testing.assert_allclose(aligned[known], np.broadcast_to(trench(distance, 83e3), values.shape)[known])
    np.testing.assert_array_equal(known.sum(axis=1), 201 - np.abs(moves - 3.0))
    result = swath.combine(aligned)
    assert np.nanmax(result.sigma) < 1e-9
    assert swath.combine(values).sigma.max() > 100.0


def test_fractional_shifts_interpolate_at_second_order():
    """Two strips a whole odd number of steps apart meet halfway between stations; the error of linear interpolation,
    (step / 2)^2 / 2 times the curvature, falls fourfold with half the step."""
    errors = []
    for step in (2e3, 1e3):
        distance = np.arange(int(200e3 / step) + 1) * step
        values = trench(distance, np.array([[80e3], [80e3 + 5 * step]]))
        alignment = swath.align(values, distance)
        np.testing.assert_allclose(alignment.shift, [-2.5, 2.5])
        exact = trench(distance, 80e3 + 2.5 * step)
        errors.append(np.nanmax(np.abs(swath.combine(swath.shifted(values, alignment)).mean - exact)))
        curvature = 2 * 5000.0 / 30e3**2
        assert errors[-1] <= step**2 / 8 * curvature * 1.01
    assert np.log2(errors[0] / errors[1]) == pytest.approx(2.0, abs=0.05)


def test_reversing_the_line_mirrors_the_aligned_swath():
    random = np.random.default_rng(6)
    distance = np.arange(150) * 2e3
    values = trench(distance, random.integers(60, 80, (7, 1)) * 2e3) + random.normal(0, 20, (7, 150))
    values[2, 10:14] = np.nan
    there = swath.combine(swath.shifted(values, swath.align(values, distance)))
    values = values[:, ::-1]
    back = swath.combine(swath.shifted(values, swath.align(values, distance)))
    np.testing.assert_allclose(back.mean[::-1], there.mean, rtol=1e-12)
    np.testing.assert_allclose(back.sigma[::-1], there.sigma, rtol=1e-9)


def test_the_search_keeps_a_low_elsewhere_from_being_taken_for_the_axis():
    """One strip has a deeper hole at 250 km; searched between 40 and 160 km, it aligns on the axis with the others."""
    distance = np.arange(301) * 1e3
    values = trench(distance, np.array([[95e3], [105e3]]))
    values[0] -= 9000.0 * np.exp(-(((distance - 250e3) / 5e3) ** 2))
    assert swath.align(values, distance).position[0] == 250e3
    np.testing.assert_allclose(swath.align(values, distance, 40e3, 160e3).position, [95e3, 105e3])


def test_a_strip_still_falling_at_an_end_is_left_out():
    """Axes at -10, 30 and 40 km: the first lies before the start, and the mean is over the other two."""
    distance = np.arange(101) * 1e3
    values = trench(distance, np.array([[-10e3], [30e3], [40e3]]))
    alignment = swath.align(values, distance)
    np.testing.assert_array_equal(alignment.used, [False, True, True])
    assert alignment.common == 35e3
    aligned = swath.shifted(values, alignment)
    assert np.isnan(aligned[0]).all()
    np.testing.assert_array_equal(swath.combine(aligned).count[10:90], 2)


def test_missing_stations_at_the_start_do_not_hide_that_a_strip_is_falling_there():
    distance = np.arange(101) * 1e3
    values = trench(distance, np.array([[5e3], [40e3]]))
    values[0, :10] = np.nan
    np.testing.assert_array_equal(swath.align(values, distance).used, [False, True])


def test_a_flat_floor_counts_at_its_middle_when_it_is_searched_symmetrically():
    distance = np.arange(11) * 1e3
    values = np.array([[9, 8, 7, 1, 1, 1, 1, 1, 7, 8, 9.0]])
    assert swath.align(values, distance).position[0] == 5e3


def test_shifting_carries_missing_values_along():
    alignment = swath.Alignment(np.array([1.0, 2.0]), 1.5, np.array([0.5, -1.0]))
    shifted = swath.shifted(np.array([[0.0, 1.0, np.nan, 3.0, 4.0], [0.0, 1.0, 2.0, np.nan, 4.0]]), alignment)
    np.testing.assert_allclose(shifted, [[0.5, np.nan, np.nan, 3.5, np.nan], [np.nan, 0.0, 1.0, 2.0, np.nan]])


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: swath.align(-np.ones((2, 5)) * np.arange(5), np.arange(5.0)), "SWATH_ALIGN finds no lowest point"),
        (lambda: swath.align(np.full((2, 5), np.nan), np.arange(5.0)), "SWATH_ALIGN finds no lowest point"),
        (lambda: swath.align(np.ones((2, 4)), np.arange(5.0)), "values hold 4 stations and distance 5"),
        (lambda: swath.align(np.ones((2, 5)), np.arange(5.0), 3.0, 2.0), "from 3 to 2 m"),
        (lambda: swath.combine(np.ones(4)), r"values have shape \(4,\)"),
        (lambda: swath.offsets(-1.0, 3), "SWATH_KM is -0.001"),
        (lambda: swath.offsets(1.0, 0), "SWATH_LINES is 0"),
        (lambda: swath.offsets(1.0, 2.5), "SWATH_LINES is 2.5"),
        (lambda: swath.shifted(np.ones((3, 5)), swath.Alignment(np.ones(2), 1.0, np.zeros(2))), "values hold 3 strips"),
    ],
)
def test_rejections(call, message):
    with pytest.raises(DownwarpError, match=message):
        call()


@pytest.mark.parametrize("likeness", [0.0, 0.5, 0.8])
def test_sigma_allows_for_strips_that_repeat_each_other(likeness):
    """Strips with a correlation r between neighbours: the mean of 21 scatters as sigma says, to 15 %; as if the strips
    were independent, sigma would be three times too small at r = 0.8."""
    rng = np.random.default_rng(4)
    noise = rng.standard_normal((21, 4000))
    strips = np.empty_like(noise)
    strips[0] = noise[0]
    for strip in range(1, 21):
        strips[strip] = likeness * strips[strip - 1] + np.sqrt(1 - likeness**2) * noise[strip]
    combined = swath.combine(strips)
    assert np.sqrt(np.mean(combined.sigma**2)) == pytest.approx(np.std(combined.mean), rel=0.15)
    assert combined.likeness == pytest.approx(likeness, abs=0.08)
