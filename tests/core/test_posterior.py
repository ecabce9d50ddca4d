"""Posterior of elastic thickness and break. Plates here are closed forms, not the project's elements:

    broken, from x = b:  w = alpha^2 e^-u / (2 D) [(V0 alpha + M0) cos u - M0 sin u],  u = (x - b) / alpha
    continuous, line load V at x = 0:  w = V alpha^3 / (8 D) e^-u (cos u + sin u)

with alpha = (4 D / k)^(1/4) (Turcotte & Schubert, Geodynamics, section 3.16 and 3.17, from memory).
"""

import numpy as np
import pytest
from downwarp_checkout.plugin.core import noise, posterior
from downwarp_checkout.plugin.core.elastic import Elastic, flexural_parameter
from downwarp_checkout.plugin.core.errors import Cancelled, DownwarpError

STIFFNESS = 2270.0 * 9.81
X = 5e3 * np.arange(100)
TE_RANGE = 1e3, 100e3


def regional(x, terms):
    return ((x - x[0]) / 1e5)[:, None] ** np.arange(terms)


def trench(x=X, terms=2):
    """Broken plate at 0 with both end forces free, in units of 1e12 N/m and 1e17 N."""

    def model(te, break_at):
        rigidity = Elastic().rigidity(te)[:, None]
        alpha = flexural_parameter(rigidity, STIFFNESS)
        u = x / alpha
        shear = alpha**3 / (2 * rigidity) * np.exp(-u) * np.cos(u) * 1e12
        moment = alpha**2 / (2 * rigidity) * np.exp(-u) * (np.cos(u) - np.sin(u)) * 1e17
        base = np.broadcast_to(regional(x, terms), (te.size, x.size, terms))
        return np.zeros((te.size, x.size)), np.concatenate([-shear[..., None], -moment[..., None], base], axis=2)

    return model


def ridge(x, force=8e12, terms=2, broken=False):
    """Known line load at 0 on a continuous plate, or on the end of a broken one (half the load on each side)."""

    def model(te, break_at):
        rigidity = Elastic().rigidity(te)[:, None]
        alpha = flexural_parameter(rigidity, STIFFNESS)
        u = x / alpha
        form = 2.0 * np.cos(u) if broken else np.cos(u) + np.sin(u)
        base = np.broadcast_to(regional(x, terms), (te.size, x.size, terms))
        return -force * alpha**3 / (8 * rigidity) * np.exp(-u) * form, base

    return model


def basin(x):
    """Known load that falls off as e^(-s / 60 km) from the break, plus a free end shear; particular solution of
    D w'''' + k w = q0 e^(-s/c) is q0 e^(-s/c) / (D / c^4 + k), its moment and shear at the end taken off
    by end forces."""

    def model(te, break_at):
        rigidity = Elastic().rigidity(te)[:, None]
        alpha = flexural_parameter(rigidity, STIFFNESS)
        c, s = 60e3, x - break_at
        size = 5e7 / (rigidity / c**4 + STIFFNESS)
        u = s / alpha
        moment, shear = rigidity * size / c**2, -rigidity * size / c**3

        def end(v0, m0):
            return alpha**2 / (2 * rigidity) * np.exp(-u) * ((v0 * alpha + m0) * np.cos(u) - m0 * np.sin(u))

        offset = -(size * np.exp(-s / c) + end(shear, -moment))
        columns = np.stack([-end(1e12, 0.0), np.ones((te.size, x.size))], axis=2)
        return offset, columns

    return model


def surface(model, te, parameters, break_at=None):
    offset, columns = model(np.array([te]), break_at)
    return offset[0] + columns[0] @ np.array(parameters)


def correlated(x, family, length, size, rng):
    matrix = noise.correlation(family, np.abs(x[:, None] - x) / length) + 1e-9 * np.eye(x.size)
    return size * np.linalg.cholesky(matrix) @ rng.normal(size=x.size)


def covers(interval, truth):
    return (interval.low is None or interval.low <= truth) and (interval.high is None or truth <= interval.high)


def test_marginal_likelihood_is_the_integral_over_parameters_and_size():
    """n = 7, one regional and one plate parameter: the integral of N(y; b1 x1 + b0 x0, s^2 R) p(b1) ds^2 / s^2 over b0,
    b1 and s^2, done by brute force on a grid, where x0 is the level at unit length (1 / sqrt 7) and p(b1) the prior's
    central density |x1' Q x1 / (2 pi n v)|^1/2."""
    rng = np.random.default_rng(3)
    x = np.linspace(0.0, 6.0, 7)
    y = 2.0 * np.sin(x) + 1.0 + 0.3 * rng.normal(size=7)
    column = np.sin(x)
    columns = np.stack([column, np.ones(7)], axis=1)[None]
    line = posterior._line(y, x, np.arange(7), None, 0.0, columns[0], 1)
    grid = posterior._grid(line, np.zeros(1), np.array([np.nan]), np.zeros((1, 7)), columns)
    family = noise.NoiseFamily(x, families=(2,), lengths=[2.0], white_shares=(0.2,))
    posterior._weigh(line, family, grid, family.settings)

    inverse = np.linalg.inv(family.covariance(family.settings[0]))
    log_size = np.linspace(np.log(0.03), np.log(20.0), 141)
    b1 = np.linspace(-14.0, 18.0, 321)
    b0 = np.linspace(-16.0, 18.0, 341)
    left = y - b1[:, None, None] * column - b0[None, :, None]
    squares = np.einsum("abi,ij,abj->ab", left, inverse, left)
    height = [
        np.exp(-7 * s - 3.5 * np.log(2 * np.pi) - 0.5 * squares / np.exp(2 * s)).sum()
        * (b1[1] - b1[0])
        * (b0[1] - b0[0])
        for s in log_size
    ]
    integral = 2.0 * np.sqrt(7.0) * sum(height) * (log_size[1] - log_size[0])
    variance = np.mean((y - y.mean()) ** 2)
    prior = np.sqrt(np.sum((column - column.mean()) ** 2) / (2 * np.pi * 7 * variance))
    determinant = -0.5 * np.linalg.slogdet(family.covariance(family.settings[0]))[1]
    assert grid.log_likelihood[0, 0] == pytest.approx(np.log(integral * prior) + determinant, abs=2e-3)


def test_a_clean_line_gives_its_plate_back():
    model, parameters = trench(), [1.0, 0.8, -4000.0, 12.0]
    rng = np.random.default_rng(2)
    observed = surface(model, 28e3, parameters) + 0.01 * rng.normal(size=X.size)
    fit = posterior.thickness_posterior(observed, X, model, 2, *TE_RANGE)
    assert fit.te == pytest.approx(28e3, rel=1e-4)
    np.testing.assert_allclose(fit.linear, parameters, rtol=1e-3)
    assert fit.resolved and covers(fit.te_interval, fit.te)


def test_white_noise_alone_gives_ordinary_least_squares():
    """With the white family alone, parameters at the mode are those of numpy.linalg.lstsq with weights 1 / sigma."""
    rng = np.random.default_rng(5)
    model, sigma = trench(), rng.uniform(20.0, 80.0, X.size)
    observed = surface(model, 25e3, [1.0, 1.0, -4000.0, 0.0]) + sigma * rng.normal(size=X.size)
    fit = posterior.thickness_posterior(observed, X, model, 2, *TE_RANGE, sigma=sigma, families=(0,))
    columns = model(np.array([fit.te]), None)[1][0]
    expected = np.linalg.lstsq(columns / sigma[:, None], observed / sigma, rcond=None)[0]
    assert (fit.search.noise.amplitude == 1.0).all()  # nothing uneven was found along this line
    np.testing.assert_allclose(fit.linear, expected, rtol=1e-5, atol=1e-6)
    np.testing.assert_allclose(fit.predicted, columns @ fit.linear, atol=1e-6)


def test_scaling_and_mixing_plate_columns_changes_nothing():
    """End shear and end moment in other units, and their sums, are one model: thickness, interval and odds stay."""
    rng = np.random.default_rng(7)
    model = trench()
    observed = surface(model, 30e3, [1.0, 1.0, -4000.0, 0.0]) + correlated(X, 2, 15e3, 60.0, rng)

    def mixed(te, break_at):
        offset, columns = model(te, break_at)
        columns = columns.copy()
        size = (te / 10e3)[:, None] ** 2
        columns[:, :, 0], columns[:, :, 1] = (
            size * (columns[:, :, 0] + 0.3 * columns[:, :, 1]),
            7.0 * columns[:, :, 1] - columns[:, :, 0],
        )
        return offset, columns

    one = posterior.thickness_posterior(observed, X, model, 2, *TE_RANGE)
    two = posterior.thickness_posterior(observed, X, mixed, 2, *TE_RANGE)
    assert two.te == pytest.approx(one.te, rel=1e-5)
    assert two.te_interval.low == pytest.approx(one.te_interval.low, rel=1e-4)
    assert two.log_odds_bent == pytest.approx(one.log_odds_bent, abs=1e-3)


def test_order_of_stations_and_unit_of_height_do_not_matter():
    rng = np.random.default_rng(8)
    model = trench()
    observed = surface(model, 30e3, [1.0, 1.0, -4000.0, 0.0]) + correlated(X, 1, 15e3, 60.0, rng)
    kept = observed.copy()
    one = posterior.thickness_posterior(observed, X, model, 2, *TE_RANGE)
    two = posterior.thickness_posterior(10.0 * observed, X, model, 2, *TE_RANGE)
    order = rng.permutation(X.size)

    def shuffled(te, break_at):
        offset, columns = model(te, break_at)
        return offset[:, order], columns[:, order]

    three = posterior.thickness_posterior(observed[order], X[order], shuffled, 2, *TE_RANGE)
    np.testing.assert_array_equal(observed, kept)
    for other in (two, three):
        assert other.te == pytest.approx(one.te, rel=1e-4)
        assert other.te_interval.high == pytest.approx(one.te_interval.high, rel=1e-3)
    np.testing.assert_allclose(two.linear, 10.0 * one.linear, rtol=1e-3)


@pytest.mark.parametrize("family, length", [(0, 1.0), (1, 15e3), (2, 40e3)])
def test_intervals_cover(family, length):
    """60 lines with known noise, thickness drawn: 90 % intervals hold in at least 47 (fewer than 47 of 60 has a chance
    of 0.2 % when the coverage is 90 %, by the binomial distribution)."""
    rng = np.random.default_rng([9, family])
    model, hits, band = trench(), 0, []
    for _ in range(60):
        te = float(np.exp(rng.uniform(np.log(12e3), np.log(50e3))))
        clean = surface(model, te, [1.0, 1.0, -4000.0, 0.0])
        disturbed = rng.normal(0.0, 80.0, X.size) if family == 0 else correlated(X, family, length, 80.0, rng)
        fit = posterior.thickness_posterior(clean + disturbed, X, model, 2, *TE_RANGE)
        hits += covers(fit.te_interval, te)
        band.append(np.mean((fit.predicted_low <= clean) & (clean <= fit.predicted_high)))
    assert hits >= 47
    assert np.mean(band) > 0.8


def test_a_flat_line_is_not_resolved():
    """No load, no forces: noise about a tilted level, closed answers would be made up."""
    for seed in range(12):
        rng = np.random.default_rng([10, seed])
        observed = -4000.0 + 1e-4 * X + correlated(X, 1 + seed % 2, 15e3, 80.0, rng)
        fit = posterior.thickness_posterior(observed, X, trench(), 2, *TE_RANGE)
        assert not fit.resolved
        assert fit.te_interval.low is None and fit.te_interval.high is None
        assert "not resolved" in fit.remarks[0]


def test_a_load_too_small_to_see_is_not_resolved():
    """A line load that bends the plate by less than a tenth of the noise."""
    x = X + 60e3
    model = ridge(x, force=1e11)
    rng = np.random.default_rng(11)
    observed = surface(model, 25e3, [-4000.0, 0.0]) + correlated(x, 2, 15e3, 100.0, rng)
    fit = posterior.thickness_posterior(observed, x, model, 2, *TE_RANGE)
    assert not fit.resolved and fit.te_interval == posterior.Interval(None, None)


def test_a_line_too_short_for_the_plate_leaves_a_side_open():
    """60 km of a plate whose flexural parameter is 90 km."""
    x = 1e3 * np.arange(61)
    model = trench(x)
    rng = np.random.default_rng(12)
    observed = surface(model, 40e3, [1.0, 1.0, -4000.0, 0.0]) + correlated(x, 2, 8e3, 60.0, rng)
    fit = posterior.thickness_posterior(observed, x, model, 2, *TE_RANGE)
    assert fit.te_interval.low is None or fit.te_interval.high is None
    assert fit.remarks


def test_twenty_outliers_move_the_thickness_by_less_than_its_interval():
    """150 stations, 20 of them off by 400 m to 2 km: the robust fit stays within the interval of the line without them,
    finds them, and the plain fit is worse."""
    x = 4e3 * np.arange(150)
    model = trench(x)
    robust, plain = [], []
    for seed in range(6):
        rng = np.random.default_rng([13, seed])
        observed = surface(model, 25e3, [1.0, 1.0, -4000.0, 0.0]) + correlated(x, 1 + seed % 2, 15e3, 60.0, rng)
        clean = posterior.thickness_posterior(observed, x, model, 2, *TE_RANGE)
        bad = rng.choice(150, 20, replace=False)
        observed[bad] += rng.uniform(400.0, 2000.0, 20)
        fit = posterior.thickness_posterior(observed, x, model, 2, *TE_RANGE, robust=True)
        assert covers(clean.te_interval, fit.te)
        assert covers(fit.te_interval, 25e3)
        assert (fit.station_weights[bad] < 0.2).sum() >= 17
        robust.append(abs(np.log(fit.te / 25e3)))
        plain.append(abs(np.log(posterior.thickness_posterior(observed, x, model, 2, *TE_RANGE).te / 25e3)))
    assert np.mean(robust) < np.mean(plain)


def test_stations_finer_than_the_data_add_no_information():
    """Data of 10 km cells interpolated to 2 km stations: told the resolution, the interval is that of the cells."""
    cells = 10e3 * np.arange(50)
    fine = 2e3 * np.arange(246)
    rng = np.random.default_rng(14)
    clean = surface(trench(cells), 25e3, [1.0, 1.0, -4000.0, 0.0])
    observed = clean + correlated(cells, 1, 15e3, 60.0, rng)
    between = np.interp(fine, cells, observed)
    one = posterior.thickness_posterior(observed, cells, trench(cells), 2, *TE_RANGE)
    two = posterior.thickness_posterior(between, fine, trench(fine), 2, *TE_RANGE, resolution=10e3)
    width = [np.log(fit.te_interval.high / fit.te_interval.low) for fit in (one, two)]
    assert 0.6 < width[1] / width[0] < 1.6
    assert covers(one.te_interval, two.te)


def test_only_fitted_stations_count_but_all_are_predicted():
    rng = np.random.default_rng(15)
    model = trench()
    observed = surface(model, 25e3, [1.0, 1.0, -4000.0, 0.0]) + correlated(X, 1, 15e3, 50.0, rng)
    fitted = (X < 200e3) | (X > 260e3)
    gappy = np.where(fitted, observed, np.nan)
    wrong = np.where(fitted, observed, 9999.0)
    one = posterior.thickness_posterior(gappy, X, model, 2, *TE_RANGE, fitted=fitted)
    two = posterior.thickness_posterior(wrong, X, model, 2, *TE_RANGE, fitted=fitted)
    assert one.te == two.te
    assert one.predicted.shape == X.shape and np.isfinite(one.predicted_low).all()
    assert one.station_weights.shape == (fitted.sum(),)
    assert (one.predicted_low <= one.predicted).mean() > 0.95


def test_break_and_thickness_together():
    """Basin load on a plate broken at 12 km, break searched from -40 to 60 km: both come back within their intervals,
    the grid is refined, and every trial is in the misfit surface."""
    x = 70e3 + 5e3 * np.arange(90)
    model = basin(x)
    rng = np.random.default_rng(16)
    observed = surface(model, 22e3, [1.5, -3000.0], 12e3) + correlated(x, 1, 10e3, 10.0, rng)
    fit = posterior.thickness_posterior(observed, x, model, 1, *TE_RANGE, breaks=np.linspace(-40e3, 60e3, 21))
    assert covers(fit.te_interval, 22e3) and covers(fit.break_interval, 12e3)
    assert abs(fit.break_at - 12e3) < 20e3
    assert fit.surface.te.size == fit.surface.break_at.size == fit.surface.rms.size
    assert fit.surface.relative_likelihood.max() == pytest.approx(1.0)
    best = np.argmin(fit.surface.rms)
    assert fit.surface.rms[best] <= fit.rms * 1.001
    assert fit.break_density.sum() == pytest.approx(1.0) and fit.te_density.sum() == pytest.approx(1.0)


def test_the_right_plate_kind_wins_where_it_is_clear_and_is_undecided_where_not():
    """Continuous against broken under a line load seen from 40 km on; noise of 5 m, then of 300 m."""
    x = 40e3 + 5e3 * np.arange(90)
    models = ridge(x), ridge(x, broken=True)
    for which in (0, 1):
        for size, expected in ((5.0, which), (300.0, None)):
            rng = np.random.default_rng([17, which])
            observed = surface(models[which], 25e3, [-4000.0, 0.0]) + correlated(x, 1, 15e3, size, rng)
            fits = [posterior.thickness_posterior(observed, x, model, 2, *TE_RANGE) for model in models]
            verdict = posterior.compare(*fits, names=("continuous", "broken"))
            assert verdict.preferred == expected
            assert ("Undecided" in verdict.remark) == (expected is None)
            assert posterior.compare(*fits[::-1]).log_odds == pytest.approx(-verdict.log_odds, abs=1e-6)


def test_a_spare_parameter_costs():
    """A plate parameter that the data do not need lowers the evidence."""
    x = 40e3 + 5e3 * np.arange(90)
    model = ridge(x)
    rng = np.random.default_rng(18)
    observed = surface(model, 25e3, [-4000.0, 0.0]) + rng.normal(0.0, 30.0, x.size)

    def spare(te, break_at):
        offset, columns = model(te, break_at)
        wave = np.sin(x / 30e3)[None, :, None] * (te / 10e3)[:, None, None]
        return offset, np.concatenate([wave, columns], axis=2)

    fits = [posterior.thickness_posterior(observed, x, each, 2, *TE_RANGE) for each in (model, spare)]
    assert posterior.compare(*fits).log_odds > 1.0


def test_a_surface_without_any_relief_is_not_resolved():
    """Everything observed is 0: the regional alone has nothing to explain, and no plate is told from it."""
    fit = posterior.thickness_posterior(np.zeros(X.size), X, trench(), 2, *TE_RANGE)
    assert not fit.resolved and (fit.te_interval.low, fit.te_interval.high) == (None, None)
    assert np.isfinite(fit.log_odds_bent)


def test_models_of_different_stations_are_not_compared():
    rng = np.random.default_rng(19)
    model = trench()
    fits = [
        posterior.thickness_posterior(
            surface(model, 25e3, [1.0, 1.0, -4000.0, 0.0]) + rng.normal(0.0, 30.0, X.size), X, model, 2, *TE_RANGE
        )
        for _ in range(2)
    ]
    with pytest.raises(DownwarpError, match="only on the same stations"):
        posterior.compare(*fits)


@pytest.mark.parametrize("terms", [0, 1, 3])
def test_any_number_of_regional_terms(terms):
    """No regional, a level, a bow: a clean trench and a clean ridge give their thickness back."""
    x = X + 40e3
    rng = np.random.default_rng(21)
    for model, forces in ((trench(x, terms), [1.0, 0.8]), (ridge(x, terms=terms), [])):
        observed = surface(model, 28e3, [*forces, *([-4000.0, 10.0, 2.0][:terms])]) + rng.normal(0.0, 0.5, x.size)
        fit = posterior.thickness_posterior(observed, x, model, terms, *TE_RANGE)
        assert fit.te == pytest.approx(28e3, rel=0.03)
        assert fit.linear.shape == (len(forces) + terms,)


def test_progress_is_told_and_may_cancel():
    model = trench()
    rng = np.random.default_rng(20)
    observed = surface(model, 25e3, [1.0, 1.0, -4000.0, 0.0]) + rng.normal(0.0, 30.0, X.size)
    told = []
    posterior.thickness_posterior(observed, X, model, 2, *TE_RANGE, progress=told.append)
    assert told == sorted(told) and told[0] > 0.0 and told[-1] <= 1.0

    def stop(fraction):
        raise Cancelled

    with pytest.raises(Cancelled):
        posterior.thickness_posterior(observed, X, model, 2, *TE_RANGE, progress=stop)


@pytest.mark.parametrize(
    "change, message",
    [
        ({"te_from": 0.0}, "TE_FROM is 0; it takes a number above 0"),
        ({"te_to": 500.0}, "TE_TO is 500; it takes a number above 1000"),
        ({"confidence": 90}, "CONFIDENCE is 90"),
        ({"observed": np.full(100, np.nan)}, "observed holds a value that is not a finite number"),
        ({"observed": np.zeros(3)}, "one value for each station"),
        ({"sigma": np.zeros(100)}, "sigma must be above 0"),
        ({"fitted": np.arange(100) < 5}, "5 stations to fit"),
        ({"fitted": np.arange(100) < 1}, "cannot tell the regional's terms apart"),
        ({"breaks": [2.0, 1.0]}, "breaks must increase"),
        ({"breaks": [1.0, 2.0, 4.0]}, "breaks must be evenly spaced"),
        ({"model": trench(terms=1)}, "must not depend on the trial"),
    ],
)
def test_bad_input_is_named(change, message):
    arguments = {
        "observed": np.linspace(-4000.0, -3900.0, 100),
        "distance": X,
        "model": trench(),
        "common": 2,
        "te_from": TE_RANGE[0],
        "te_to": TE_RANGE[1],
        **change,
    }
    with pytest.raises(DownwarpError, match=message):
        posterior.thickness_posterior(**arguments)
