"""A plate that weakens towards its break: published matching values, limits that are known, and truths given back."""

import numpy as np
import pytest
from downwarp_checkout.plugin.core.bend import bend_problem
from downwarp_checkout.plugin.core.elastic import Elastic
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.fit import trial_columns
from downwarp_checkout.plugin.core.forward import TransectModel
from downwarp_checkout.plugin.core.markers import find_markers
from downwarp_checkout.plugin.core.posterior import compare, thickness_posterior
from downwarp_checkout.plugin.core.problem import prepare
from downwarp_checkout.plugin.core.profile import Profile
from downwarp_checkout.plugin.core.settings import BROKEN, CONTINUOUS, FitOptions
from downwarp_checkout.plugin.core.zones import ZonedModel, ZoneSearch, search_zones, varying, zoned
from scipy.integrate import solve_bvp

SEVENTY = Elastic(70e9, 0.25, 9.81)
CONTRAST = 2300.0 * 9.81


def model(kind=BROKEN, length=800e3, elastic=SEVENTY, stiffness=CONTRAST, **others):
    """A plate without relief load on a line, m."""
    distance = np.linspace(0.0, length, 201)
    return TransectModel(
        distance,
        np.zeros(201),
        np.full(200, stiffness),
        elastic,
        kind=kind,
        shear=True,
        moment=kind == BROKEN,
        **others,
    )


def test_step_in_rigidity_against_matched_half_plates():
    """(D w'')'' + k w = 0 on two half-plates of Te 15 and 40 km, welded at 1000 km where a line load of 1e12 N/m acts.

    By matching deflection, slope and moment of both closed forms, E 70 GPa, nu 0.25, contrast 2300, g 9.81: at the join
    398.970 m and a slope of 3.0206e-3; deepest 407.95 m, 6.22 km on the thin side; bulges 17.63 m at 144.2 km on the
    thin side, 20.78 m at 243.2 km on the thick one.
    """
    both = zoned(model(CONTINUOUS, 2000e3), 15.0 / 40.0, 1000e3)
    bending = both.bend(40e3, 1000e3, np.array([1e12]))
    assert bending.at([1000e3])[0, 0] == pytest.approx(398.970, abs=2e-3)
    assert abs(bending.at([1000e3], derivative=1)[0, 0]) == pytest.approx(3.0206e-3, rel=1e-4)
    marks = find_markers(bending)
    assert marks.deepest.deflection == pytest.approx(407.95, abs=0.01)
    assert 1000e3 - marks.deepest.distance == pytest.approx(6.22e3, abs=10.0)
    assert -marks.bulge.deflection == pytest.approx(20.78, abs=0.01)
    assert marks.bulge.distance - 1000e3 == pytest.approx(243.2e3, abs=100.0)
    thin = np.linspace(800e3, 950e3, 3001)
    w = bending.at(thin)[:, 0]
    assert -w.min() == pytest.approx(17.63, abs=0.01)
    assert 1000e3 - thin[w.argmin()] == pytest.approx(144.2e3, abs=100.0)


def test_two_zones_against_collocation():
    """A broken plate of 12 km up to 60 km from its break and 30 km beyond under V0 and M0, by scipy's solve_bvp.

    Unknowns w, w', M = -D w'', V = M' on both sides of the change, mapped onto 0..1; all four continue across it.
    """
    near, beyond, change, length = 12e3, 30e3, 60e3, 800e3
    shear, moment = 1.1e12, 0.9e17
    rigidity = SEVENTY.rigidity(np.array([near, beyond]))
    spans = np.array([change, length - change])
    unit = np.array([1e3, 1e-2, 1e17, 1e12])

    def derivatives(s, y):
        result = np.empty_like(y)
        for zone in (0, 1):
            w, slope, bending, force = y[4 * zone : 4 * zone + 4] * unit[:, None]
            rates = np.stack([slope, -bending / rigidity[zone], force, CONTRAST * w])
            result[4 * zone : 4 * zone + 4] = spans[zone] * rates / unit[:, None]
        return result

    def ends(start, finish):
        return np.concatenate(
            [
                [start[2] + moment / unit[2], start[3] + shear / unit[3]],
                finish[:4] - start[4:],
                finish[4:6],
            ]
        )

    found = solve_bvp(derivatives, ends, np.linspace(0, 1, 200), np.zeros((8, 200)), tol=1e-9, max_nodes=100000)
    assert found.success
    bending = zoned(model(length=length), near / beyond, change).bend(beyond, 0.0, np.array([shear, moment]))
    s = np.linspace(0, 1, 101)
    values = found.sol(s)
    w = np.concatenate([values[0], values[4]]) * unit[0]
    at = np.concatenate([s * spans[0], change + s * spans[1]])
    np.testing.assert_allclose(bending.at(at)[:, 0], w, atol=2e-5 * np.abs(w).max())


def test_equal_zones_are_one_plate():
    """A share of 1 is the uniform plate to rounding, wherever the change; so is a uniform thickness along the line; a
    change beyond the line leaves the near zone alone."""
    uniform = model()
    forces = np.array([1e12, 0.5e17])
    at = np.linspace(0, 790e3, 80)
    expected = uniform.bend(25e3, 0.0, forces).at(at)[:, 0]
    for same in (zoned(uniform, 1.0, 77e3), varying(uniform, np.ones(201)), zoned(uniform, 0.5, 900e3)):
        thickness = 50e3 if isinstance(same, ZonedModel) and same.share == 0.5 else 25e3
        found = same.bend(thickness, 0.0, forces).at(at)[:, 0]
        np.testing.assert_allclose(found, expected, atol=1e-5 * expected.max())


def test_a_given_thickness_along_the_line_approaches_the_step():
    """A thickness that rises within ever shorter ramps about the change comes to the two zones, at first order."""
    uniform = model()
    forces = np.array([1e12, 0.5e17])
    at = np.linspace(0, 790e3, 80)
    step = zoned(uniform, 0.5, 100e3).bend(30e3, 0.0, forces).at(at)[:, 0]
    errors = []
    for width in (64e3, 32e3, 16e3):
        ramp = np.interp(uniform.distance, [100e3 - 0.5 * width, 100e3 + 0.5 * width], [15e3, 30e3])
        errors.append(np.abs(varying(uniform, ramp).bend(1.0, 0.0, forces).at(at)[:, 0] - step).max() / step.max())
    assert errors[0] > errors[1] > errors[2]
    assert errors[2] < 0.01


def test_stations_of_a_bent_plate_have_their_own_thickness():
    """te_km by zone, and bending stress with the curvature of the zone: M = -D w'' on both sides of the change."""
    distance = np.linspace(0, 400e3, 81)
    options = FitOptions(setting=1, break_at=0, reference_level=-5000.0)
    problem = prepare(Profile("A", distance, np.full(81, -5000.0)), options)
    bent = bend_problem(problem, zoned(problem.model(BROKEN), 0.4, 102e3), 30e3, 0.0, {"end_shear": 1e12})
    near = distance < 102e3
    np.testing.assert_allclose(bent.stations.thickness, np.where(near, 12e3, 30e3))
    rigidity = options.elastic.rigidity(bent.stations.thickness)
    np.testing.assert_allclose(bent.stations.moment, -rigidity * bent.stations.curvature)
    stress = options.elastic.young * bent.stations.thickness * bent.stations.curvature / (2 * (1 - 0.25**2))
    np.testing.assert_allclose(bent.stations.fibre_stress, stress)


def test_places_on_the_axis_are_neighbouring_plates():
    """Every pair has its place; from one place to the next either share or change moves by one trial."""
    search = ZoneSearch.between(20e3, 180e3)
    share, change = search.pairs(search.places)
    assert (
        len({*zip(share.tolist(), change.tolist())}) == search.places.size == search.shares.size * search.changes.size
    )
    moved_share, moved_change = np.diff(np.log(share)) != 0, np.diff(change) != 0
    assert (moved_share ^ moved_change).all()
    np.testing.assert_allclose(np.abs(np.diff(change)[moved_change]), 20e3)
    assert search.pairs(3.4)[1] == search.pairs(3.0)[1]


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: zoned(model(), 0.0, 10e3), "share of the thickness is 0"),
        (lambda: zoned(model(), 0.5, -1.0), "distance of the change is -1"),
        (lambda: varying(model(), np.ones(5)), "has 5 values for 201 stations"),
        (lambda: varying(model(), np.zeros(201)), "above 0 everywhere"),
        (lambda: ZoneSearch(np.array([0.5]), np.array([1.0, 2.0])), "the shares holds 1 values"),
        (lambda: ZoneSearch(np.array([0.0, 0.5]), np.array([1.0, 2.0])), "must be above 0"),
    ],
)
def test_what_zones_refuse(make, message):
    """Shares, distances and thicknesses that are none."""
    with pytest.raises(DownwarpError, match=message):
        make()


ELASTIC = Elastic()
STIFFNESS = 2270.0 * 9.81
NEAR, BEYOND, CHANGE = 14e3, 40e3, 70e3
FORCES = np.array([0.6e12, 1.2e17])


def searched(seed, near=NEAR, noise=25.0):
    """Posteriors of two zones and of one, of an invented trench in correlated noise; level and tilt are fitted."""
    plate = model(length=600e3, elastic=ELASTIC, stiffness=STIFFNESS, regional=2)
    at = np.linspace(0, 600e3, 121)
    random = np.random.default_rng(seed)
    truth = -5000 + 1e-4 * at - zoned(plate, near / BEYOND, CHANGE).bend(BEYOND, 0.0, FORCES).at(at)[:, 0]
    covariance = noise**2 * np.exp(-np.abs(at[:, None] - at) / 12e3)
    observed = truth + np.linalg.cholesky(covariance + 1e-6 * np.eye(at.size)) @ random.standard_normal(at.size)

    def two(search):
        def evaluate(thicknesses, place):
            return trial_columns(search.model(plate, place), thicknesses, 0.0, at, None)

        return thickness_posterior(observed, at, evaluate, 2, 5e3, 100e3, breaks=search.places)

    def one(thicknesses, _):
        return trial_columns(plate, thicknesses, 0.0, at, None)

    search, zones = search_zones(two, ZoneSearch.between(20e3, 160e3))
    uniform = thickness_posterior(observed, at, one, 2, 5e3, 100e3)
    return search.summary(zones, 0.9), compare(zones, uniform).log_odds + search.log_prior


def test_two_zones_are_given_back():
    """A known plate of two zones in noise: thicknesses and change lie within their intervals, which are bounded, and
    the evidence prefers two zones."""
    zones, log_odds = searched(5)
    for interval, truth in (
        (zones.near_interval, NEAR),
        (zones.beyond_interval, BEYOND),
        (zones.change_interval, CHANGE),
    ):
        assert interval.low is not None and interval.high is not None
        assert interval.low < truth < interval.high
    assert zones.near < zones.beyond
    assert zones.reduction == pytest.approx(1 - zones.near / zones.beyond)
    assert log_odds > np.log(10)


def test_one_zone_is_not_taken_for_two():
    """A uniform plate in the same noise: the evidence does not prefer two zones."""
    _, log_odds = searched(6, near=BEYOND)
    assert log_odds < np.log(10)
