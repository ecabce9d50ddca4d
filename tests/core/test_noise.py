"""Noise families: correlations, covariances, factors, and averaging to the data's resolution."""

import numpy as np
import pytest
from downwarp_checkout.plugin.core import noise
from downwarp_checkout.plugin.core.errors import DownwarpError
from scipy.special import gamma, kv

DISTANCE = 5e3 * np.arange(40)


@pytest.mark.parametrize("family, smoothness", [(1, 0.5), (2, 1.5), (3, 2.5)])
def test_correlation_is_the_general_matern_form(family, smoothness):
    """rho = 2^(1-v) / Gamma(v) z^v K_v(z), z = sqrt(2 v) d / L, with K_v from scipy.special."""
    separation = np.linspace(0.05, 6.0, 50)
    z = np.sqrt(2.0 * smoothness) * separation
    expected = 2.0 ** (1.0 - smoothness) / gamma(smoothness) * z**smoothness * kv(smoothness, z)
    np.testing.assert_allclose(noise.correlation(family, separation), expected, rtol=1e-10)
    assert noise.correlation(family, np.zeros(1))[0] == 1.0


def test_factors_reproduce_their_covariance():
    """L L' = R for every setting, ln |R| as numpy.linalg.slogdet gives it, and whitening is the solve with L."""
    rng = np.random.default_rng(1)
    family = noise.NoiseFamily(
        DISTANCE,
        sigma=rng.uniform(0.5, 2.0, 40),
        amplitude=rng.uniform(0.5, 2.0, 40),
        extra=np.where(np.arange(40) == 7, 30.0, 0.0),
        families=(0, 1, 2, 3),
    )
    columns = rng.normal(size=(40, 3))
    for factor in family.factors():
        matrix = family.covariance(factor.setting)
        lower = np.tril(factor.lower)
        np.testing.assert_allclose(lower @ lower.T, matrix, atol=1e-10)
        assert factor.log_determinant == pytest.approx(np.linalg.slogdet(matrix)[1], rel=1e-6, abs=1e-6)
        np.testing.assert_allclose(lower @ factor.whiten(columns), columns, atol=1e-8)


def test_prior_weights_sum_to_one_and_families_count_alike():
    family = noise.NoiseFamily(DISTANCE)
    weight = np.exp([setting.log_prior for setting in family.settings])
    assert weight.sum() == pytest.approx(1.0)
    for each in range(3):
        mine = [setting.family == each for setting in family.settings]
        assert weight[mine].sum() == pytest.approx(1.0 / 3.0)


def test_factors_are_kept():
    family = noise.NoiseFamily(DISTANCE)
    first = list(family.factors())
    assert all(a is b for a, b in zip(first, family.factors()))


def test_two_stations_may_share_a_place():
    """Two picks at one distance make the correlated part singular; the least white share keeps R factorisable."""
    distance = np.concatenate([DISTANCE, DISTANCE[:3]])
    assert all(np.isfinite(factor.log_determinant) for factor in noise.NoiseFamily(distance).factors())


def test_merging_averages_within_cells():
    """Weights of a cell sum to 1, a straight line stays straight, sigma weighs by 1 / sigma^2, nothing is merged where
    stations are further apart than the resolution."""
    merge = noise.merge_matrix(DISTANCE, 10e3)
    assert merge.shape == (20, 40)
    np.testing.assert_allclose(merge.sum(axis=1), 1.0)
    np.testing.assert_allclose(merge @ (3.0 + 2.0 * DISTANCE), 3.0 + 2.0 * (merge @ DISTANCE))
    np.testing.assert_array_equal(noise.merge_matrix(DISTANCE, 5e3), np.eye(40))
    np.testing.assert_array_equal(noise.merge_matrix(DISTANCE, 0.0), np.eye(40))
    weighed = noise.merge_matrix(np.array([0.0, 1.0, 50.0]), 10.0, sigma=np.array([1.0, 2.0, 1.0]))
    np.testing.assert_allclose(weighed, [[0.8, 0.2, 0.0], [0.0, 0.0, 1.0]])


@pytest.mark.parametrize(
    "arguments, message",
    [
        (([0.0, 1.0],), "takes at least 3"),
        (([1.0, 1.0, 1.0],), "lie at one distance"),
        (([0.0, 1.0, 2.0], [1.0, 1.0]), "sigma holds 2 values; it takes 3"),
        (([0.0, 1.0, 2.0], [1.0, 0.0, 1.0]), "sigma must be above 0"),
        (([0.0, 1.0, np.nan],), "distance holds a value that is not a finite number"),
    ],
)
def test_bad_input_is_named(arguments, message):
    with pytest.raises(DownwarpError, match=message):
        noise.NoiseFamily(*arguments)
