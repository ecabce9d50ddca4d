"""A stated plate on a profile: every station value against the closed form of the broken plate, and refusals.

    w = alpha^2 e^-s / (2 D) [(V0 alpha + M0) cos s - M0 sin s], s = x / alpha

(Turcotte & Schubert, Geodynamics, section 3.16, from memory); slope, curvature, moment and shear are its derivatives.
"""

from dataclasses import replace

import numpy as np
import pytest
from downwarp_checkout.plugin.core import plate
from downwarp_checkout.plugin.core.bend import bend_profile
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.profile import Profile
from downwarp_checkout.plugin.core.settings import BREAK_GIVEN, BROKEN, CONTINUOUS, OTHER, TRENCH, FitOptions
from scipy.integrate import simpson

X = np.arange(0.0, 700e3 + 1, 2e3)
BREAK, SHEAR, MOMENT, THICKNESS = 61e3, 1.3e12, 0.7e17, 28e3
OPTIONS = FitOptions(setting=TRENCH, plate=BROKEN, break_at=BREAK_GIVEN, break_position=BREAK, reference_level=-5500.0)


@pytest.fixture(scope="module")
def bent():
    flat = Profile("A", X, np.full(X.size, -5500.0))
    return bend_profile(flat, OPTIONS, THICKNESS, end_shear=SHEAR, end_moment=MOMENT)


@pytest.fixture(scope="module")
def exact():
    """w and its first three derivatives at the stations beyond the break, and the rigidity."""
    rigidity = 100e9 * THICKNESS**3 / (12 * (1 - 0.25**2))
    alpha = (4 * rigidity / (2270 * 9.81)) ** 0.25
    s = (X[X >= BREAK] - BREAK) / alpha
    # w = Re(C e^(m x)) with m = (-1 + i) / alpha and C = alpha^2 (V0 alpha + M0 + i M0) / 2 D
    m = (-1 + 1j) / alpha
    wave = alpha**2 * (SHEAR * alpha + MOMENT + 1j * MOMENT) / (2 * rigidity) * np.exp(m * s * alpha)
    return [np.real(m**order * wave) for order in range(4)], rigidity


def test_stations_before_the_break_carry_no_plate(bent):
    """NaN there, values from the first station beyond it."""
    before = X < BREAK
    names = ("deflection", "predicted", "slope", "moment", "shear", "curvature", "fibre_stress", "thickness", "infill")
    for name in names:
        values = getattr(bent.stations, name)
        assert np.isnan(values[before]).all(), name
        assert np.isfinite(values[~before]).all(), name


def test_deflection_and_derivatives(bent, exact):
    """w, w', w'', M = -D w'', V = dM/dx."""
    (w, slope, curvature, third), rigidity = exact
    values = bent.stations
    on = X >= BREAK
    for got, want, share in (
        (values.deflection, w, 1e-5),
        (values.slope, slope, 1e-4),
        (values.curvature, curvature, 2e-3),
        (values.moment, -rigidity * curvature, 2e-3),
        (values.shear, -rigidity * third, 4e-3),
    ):
        np.testing.assert_allclose(got[on], want, atol=share * np.abs(want).max())


def test_fibre_stress_is_tension_on_top_of_a_bulge(bent, exact):
    """E Te w'' / (2 (1 - nu^2)) at the plate's top: the bulge is arched up (w'' > 0, w down), and its top stretched."""
    (_, _, curvature, _), _ = exact
    on = X >= BREAK
    want = 100e9 * THICKNESS * curvature / (2 * (1 - 0.25**2))
    np.testing.assert_allclose(bent.stations.fibre_stress[on], want, atol=3e-3 * np.abs(want).max())
    at_bulge = int(np.argmin(np.abs(X - bent.markers.bulge.distance)))
    assert bent.stations.fibre_stress[at_bulge] > 0
    assert bent.stations.deflection[at_bulge] < 0


def test_the_predicted_surface_is_the_level_less_the_deflection(bent):
    """And Te, infill and level stand beside it."""
    on = X >= BREAK
    np.testing.assert_allclose(bent.stations.predicted[on], -5500 - bent.stations.deflection[on])
    assert (bent.stations.thickness[on] == THICKNESS).all()
    np.testing.assert_allclose(bent.stations.infill[on], 1030)
    assert bent.regional == (-5500, 0, 0)
    assert bent.break_position == BREAK


def test_restoring_force_and_end_shear_carry_the_load():
    """int k w dx = int q dx + V0, on a line so long that its continuation carries nothing."""
    relief = -5500 + 2000 * np.exp(-(((X - 200e3) / 40e3) ** 2))
    relief[np.abs(X - 200e3) > 150e3] = -5500
    options = replace(OPTIONS, setting=OTHER, break_position=20e3)
    result = bend_profile(Profile("A", X, relief), options, 10e3, end_shear=4e11)
    on = X >= 20e3
    restoring = simpson(2270 * 9.81 * result.stations.deflection[on], x=X[on])
    load = result.stations.load[on]  # linear between stations
    assert restoring == pytest.approx(0.5 * np.sum((load[1:] + load[:-1]) * np.diff(X[on])) + 4e11, rel=2e-6)


@pytest.mark.parametrize(
    ("options", "more", "words"),
    [
        (OPTIONS, {"end_shear": np.nan}, "END_SHEAR is nan"),
        (OPTIONS, {"end_moment": np.inf}, "END_MOMENT is inf"),
        (OPTIONS, {"start": plate.CONTINUES}, "START_SUPPORT is 0 .continues., but PLATE is 1"),
        (FitOptions(setting=OTHER, plate=CONTINUOUS), {"end_moment": 1e16}, "END_MOMENT acts on a broken plate only"),
        (FitOptions(setting=OTHER, plate=CONTINUOUS, in_plane=1e16), {}, "IN_PLANE"),
    ],
)
def test_refusals(options, more, words):
    """Each names its key."""
    with pytest.raises(DownwarpError, match=words):
        bend_profile(Profile("A", X, np.full(X.size, -5500.0)), options, THICKNESS, **more)
