"""Elastic constants: arithmetic against published conversions, and what is refused."""

import numpy as np
import pytest
from downwarp_checkout.plugin.core import elastic
from downwarp_checkout.plugin.core.errors import DownwarpError


@pytest.mark.parametrize(("young_gpa", "thickness_km"), [(65, 34.2), (70, 33.4), (80, 31.9), (100, 29.6)])
def test_thickness_of_one_flexural_parameter_depends_on_young(young_gpa, thickness_km):
    """alpha = 80 km, k from 2300 kg/m3 and 9.81 m/s2, nu = 0.25: D = k alpha^4 / 4, Te = (12 (1 - nu^2) D / E)^(1/3).

    Source: the formulas of Turcotte & Schubert, Geodynamics, section 3.16, evaluated apart from this code.
    """
    stiffness = elastic.restoring_stiffness(3300.0, 1000.0, 9.81)
    rigidity = stiffness * 80e3**4 / 4.0
    thickness = elastic.Elastic(young=young_gpa * 1e9).thickness(rigidity)
    assert round(float(thickness) / 1e3, 1) == thickness_km


def test_rigidity_by_hand():
    """E = 96 GPa, nu = 0: D = E Te^3 / 12 = 8e9 Te^3."""
    constants = elastic.Elastic(young=96e9, poisson=0.0)
    assert constants.rigidity(10e3) == pytest.approx(8e21, rel=1e-14)


@pytest.mark.parametrize("shape", [(), (3,), (2, 4)])
def test_thickness_is_the_inverse_of_rigidity_in_any_shape(shape):
    """Te -> D -> Te gives the thickness back, shape and all."""
    thickness = np.random.default_rng(1).uniform(1e3, 100e3, shape)
    constants = elastic.Elastic(young=70e9, poisson=0.3, gravity=10.0)
    back = constants.thickness(constants.rigidity(thickness))
    assert np.shape(back) == shape
    np.testing.assert_allclose(back, thickness, rtol=1e-14)


def test_rigidity_grows_with_the_cube_of_thickness():
    """D(2 Te) = 8 D(Te)."""
    constants = elastic.Elastic()
    assert constants.rigidity(40e3) == pytest.approx(8.0 * constants.rigidity(20e3), rel=1e-14)


def test_flexural_parameter_obeys_its_definition():
    """k alpha^4 = 4 D, element by element."""
    rigidity, stiffness = np.array([1e21, 1e23, 1e25]), np.array([5e3, 2e4, 3e4])
    alpha = elastic.flexural_parameter(rigidity, stiffness)
    np.testing.assert_allclose(stiffness * alpha**4, 4.0 * rigidity, rtol=1e-13)


def test_restoring_stiffness_takes_a_density_per_station():
    """k = (rho_mantle - rho_infill) g, station by station."""
    stiffness = elastic.restoring_stiffness(3300.0, np.array([1030.0, 2300.0]), 10.0)
    np.testing.assert_allclose(stiffness, [22700.0, 10000.0], rtol=1e-14)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"young": 0.0}, "YOUNG_GPA is 0; it takes a number above 0"),
        ({"young": float("nan")}, "YOUNG_GPA is nan"),
        ({"poisson": 0.6}, "POISSON is 0.6; it takes a number above -1 below 0.5"),
        ({"poisson": -1.0}, "POISSON is -1;"),
        ({"gravity": -9.81}, "GRAVITY is -9.81; it takes a number above 0"),
    ],
)
def test_constants_out_of_bounds_are_refused(arguments, message):
    """The message names the key, the value and what it takes."""
    with pytest.raises(DownwarpError, match=message):
        elastic.Elastic(**arguments)


@pytest.mark.parametrize("infill", [3300.0, 3400.0, [1000.0, 3300.0]])
def test_densities_that_restore_nothing_are_refused(infill):
    """An infill as dense as the mantle leaves no restoring force anywhere, or at one station."""
    with pytest.raises(DownwarpError, match=r"RHO_MANTLE \(3300 kg/m3\) must exceed the infill density"):
        elastic.restoring_stiffness(3300.0, infill, 9.81)
