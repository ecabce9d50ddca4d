"""The load as mapped as a forward model: places where a strip's model stands, exact limits, and truths given back."""

import numpy as np
import pytest
from downwarp_checkout.plugin.core import plan
from downwarp_checkout.plugin.core.bend import bend_problem
from downwarp_checkout.plugin.core.elastic import flexural_parameter
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.fit import trial_columns
from downwarp_checkout.plugin.core.mapped import mapped_model
from downwarp_checkout.plugin.core.posterior import thickness_posterior
from downwarp_checkout.plugin.core.problem import prepare
from downwarp_checkout.plugin.core.profile import Profile
from downwarp_checkout.plugin.core.settings import CONTINUOUS, FitOptions
from downwarp_checkout.plugin.core.transect import Transect
from pyproj import Geod

WGS84 = Geod(ellps="WGS84")
FLOOR = -5000.0
OPTIONS = FitOptions(reference_level=FLOOR + 1.0)
STIFFNESS = 2270.0 * 9.81


def alpha(thickness):
    return float(flexural_parameter(OPTIONS.elastic.rigidity(thickness), STIFFNESS))


def seamount(u, v, length):
    """Relief, m up: a cone of 3000 m and 50 km radius, drawn out along v by ``length`` m."""
    r = np.hypot(u, np.maximum(np.abs(v) - 0.5 * length, 0.0))
    return FLOOR + 3000.0 * np.maximum(1 - r / 50e3, 0.0)


def ground(length, thickest=60e3, thinnest=8e3, options=OPTIONS, line=700e3):
    """A problem across the seamount, its relief in plan view, and the window's remarks."""
    ends = [WGS84.fwd(-150.0, 25.0, 70.0 + turn, 0.5 * line)[:2] for turn in (180.0, 0.0)]
    stations = Transect("A", ends, WGS84).stations(5e3)
    window, remarks = plan.lay_search_window(
        stations.distance, stations.longitude, stations.latitude, WGS84, alpha(thinnest), alpha(thickest)
    )
    u, v = window.plane.from_degrees(*window.places(2))
    at, beside = window.plane.from_degrees(stations.longitude, stations.latitude)
    profile = Profile("A", stations.distance, seamount(at, beside, length), resolution=5e3)
    return prepare(profile, options), plan.PlanRelief(window, 2, seamount(u, v, length)), remarks


def test_a_long_ridge_has_the_strips_values():
    """Deflection, slope, moment and shear at the stations of a ridge 5000 km long are those of the strip (plane strain:
    w_tt = 0, hence M = -D w_ss): 0.5 % of their largest values, between three alpha before and beyond; the shear, a
    third derivative of a load in cells, 2 %."""
    problem, relief, _ = ground(5000e3)
    model, _ = mapped_model(problem, relief)
    at = slice(20, -20)
    for thickness in (10e3, 25e3, 60e3):
        mapped = bend_problem(problem, model, thickness, 0.0, {}).stations
        strip = bend_problem(problem, problem.model(CONTINUOUS), thickness, 0.0, {}).stations
        for name, share in (
            ("deflection", 5e-3),
            ("slope", 1e-2),
            ("moment", 2e-2),
            ("fibre_stress", 2e-2),
            ("shear", 4e-2),
        ):
            found, expected = getattr(mapped, name)[at], getattr(strip, name)[at]
            assert np.abs(found - expected).max() < share * np.abs(expected).max(), (thickness, name)


def test_moments_of_a_round_load_are_those_of_a_plate():
    """Across the crest of a round load both curvatures are equal, so M = -(1 + nu) D w_ss there, and V = 0."""
    problem, relief, _ = ground(0.0)
    model, _ = mapped_model(problem, relief)
    bending = model.bend(20e3, 0.0, np.zeros(0))
    middle = [0.5 * problem.profile.distance[-1]]
    moment, shear = bending.moment_and_shear_at(middle)
    rigidity = float(OPTIONS.elastic.rigidity(20e3))
    assert moment[0, 0] == pytest.approx(-1.25 * rigidity * bending.at(middle, 2)[0, 0], rel=0.01)
    along = bending.moment_and_shear_at(problem.profile.distance)[1]
    assert abs(shear[0, 0]) < 0.02 * np.abs(along).max()


def fitted(model, problem, observed):
    """Posterior of the thickness from the stations outside the load, level fitted."""
    at = problem.profile.distance

    def evaluate(thicknesses, _):
        return trial_columns(model, thicknesses, 0.0, at, None)

    return thickness_posterior(observed, at, evaluate, model.regional, 8e3, 60e3, fitted=~problem.load_surface)


def test_a_round_load_gives_its_plate_back_as_mapped_but_not_as_a_strip():
    """Te 22 km under a round seamount, in correlated noise of 5 m: as mapped the truth lies within its interval; what a
    strip says of the same stations does not hold it."""
    problem, relief, _ = ground(0.0)
    model, _ = mapped_model(problem, relief)
    random = np.random.default_rng(17)
    at = problem.profile.distance
    covariance = 25.0 * np.exp(-np.abs(at[:, None] - at) / 10e3)
    noise = np.linalg.cholesky(covariance + 1e-9 * np.eye(at.size)) @ random.standard_normal(at.size)
    observed = FLOOR - model.bend(22e3, 0.0, np.zeros(0)).deflection + noise
    mapped = fitted(model, problem, observed).te_interval
    assert mapped.low < 22e3 < mapped.high
    strip = fitted(problem.model(CONTINUOUS), problem, observed).te_interval
    assert not (strip.low or 0.0) < 22e3 < (strip.high or np.inf)


def test_a_search_gives_way_where_a_plane_does():
    """For plates up to 200 km of flexural parameter the window reaches as far as a plane takes it, and says so; for
    plates that a plane takes in full nothing is said; beyond 3 alpha it is refused."""
    _, relief, remarks = ground(0.0, thickest=100e3, thinnest=1e3)
    assert relief.window.distortion < plan.DISTORTION_LIMIT
    assert relief.window.reach < plan.REACH * relief.window.alpha
    assert relief.window.shape[0] * relief.window.shape[1] < 1.1 * plan.SEARCH_CELLS
    assert len(remarks) == 1 and "is left out: more does not lie in a plane" in remarks[0]
    assert ground(0.0)[2] == ()
    with pytest.raises(DownwarpError, match="distorts distances"):
        ground(0.0, thickest=300e3)


@pytest.mark.parametrize(
    ("options", "message"),
    [
        (FitOptions(reference_level=FLOOR + 1, end_forces=1), "takes a continuous plate"),
        (FitOptions(reference_level=FLOOR + 1, in_plane=1e12), "takes a continuous plate"),
        (FitOptions(reference_level=FLOOR + 1, rho_under_load=2000.0), "takes one infill density"),
    ],
)
def test_what_a_plan_view_does_not_have(options, message):
    """End forces, an in-plane force, two infills."""
    problem, relief, _ = ground(0.0, options=options)
    with pytest.raises(DownwarpError, match=message):
        mapped_model(problem, relief)
