"""Fits give back the plates that lines were made from: clean, noisy, with outliers, with a searched break, from picks.

The lines are made in closed form (w = alpha^2 e^-s / (2 D) [(V0 alpha + M0) cos s - M0 sin s], Turcotte & Schubert,
Geodynamics, section 3.16, from memory), not with the plugin's own solver.
"""

from dataclasses import replace

import numpy as np
import pytest
from downwarp_checkout.plugin.core.errors import Cancelled, DownwarpError
from downwarp_checkout.plugin.core.fit import fit_profile
from downwarp_checkout.plugin.core.profile import Picks, Profile
from downwarp_checkout.plugin.core.settings import (
    BREAK_GIVEN,
    BREAK_SEARCHED,
    BROKEN,
    CONTINUOUS,
    FITTED,
    FORCES_NONE,
    FORELAND,
    GIVEN,
    OTHER,
    TRENCH,
    FitOptions,
)

X = np.arange(0.0, 600e3 + 1, 6e3)
SHEAR, MOMENT, LEVEL, TILT = 1.2e12, 0.8e17, -5500.0, 2e-4
OPTIONS = FitOptions(setting=TRENCH, break_at=BREAK_GIVEN, break_position=0.0)


def end_bent(x, thickness, shear=SHEAR, moment=MOMENT, contrast=2270.0):
    rigidity = 100e9 * thickness**3 / (12 * (1 - 0.25**2))
    alpha = (4 * rigidity / (contrast * 9.81)) ** 0.25
    s = x / alpha
    return alpha**2 * np.exp(-s) / (2 * rigidity) * ((shear * alpha + moment) * np.cos(s) - moment * np.sin(s))


def line(thickness=30e3, noise=0.0, seed=0, start=0.0, **more):
    """A plate broken at ``start`` with white noise, m up; before the break, the other plate's slope."""
    beyond = np.maximum(X - start, 0.0)
    surface = LEVEL + TILT * X - end_bent(beyond, thickness) + 0.05 * np.maximum(start - X, 0.0)
    return Profile("A", X, surface + noise * np.random.default_rng(seed).standard_normal(X.size), **more)


def fit(profile, options=OPTIONS, **more):
    return fit_profile(profile, options, with_choices=False, **more)


@pytest.mark.parametrize("thickness", [4e3, 15e3, 30e3, 60e3])
def test_a_clean_line_gives_its_plate_back(thickness):
    """Thickness to 0.1 %, forces to 1 %, level and tilt."""
    best = fit(line(thickness)).best
    assert best.thickness.value == pytest.approx(thickness, rel=1e-3)
    assert best.kind == BROKEN
    found = {name: estimate.value for name, estimate in best.coefficients.items()}
    assert list(found) == ["end_shear", "end_moment", "level", "tilt"]
    assert found["end_shear"] == pytest.approx(SHEAR, rel=0.02)
    assert found["end_moment"] == pytest.approx(MOMENT, rel=0.02)
    assert found["level"] == pytest.approx(LEVEL, abs=2)
    assert found["tilt"] == pytest.approx(TILT, rel=0.02)
    assert best.rms < 0.5


@pytest.mark.parametrize("seed", range(4))
def test_a_noisy_line_holds_its_plate_within_the_interval(seed):
    """White noise of 40 m, intervals at 99 %: four draws, none outside (chance of one outside below 4 %)."""
    best = fit(line(noise=40.0, seed=seed), replace(OPTIONS, confidence=0.99)).best
    assert best.thickness.low is not None
    assert best.thickness.low < 30e3 < (best.thickness.high or np.inf)
    assert best.rms == pytest.approx(40, rel=0.25)
    for name, truth in (("end_shear", SHEAR), ("end_moment", MOMENT), ("level", LEVEL), ("tilt", TILT)):
        estimate = best.coefficients[name]
        assert estimate.low < truth < estimate.high, name


def test_more_noise_widens_the_interval():
    """Ten times the noise, a wider interval in ln Te; the band round the surface widens too."""

    def width(result):
        return np.log((result.best.thickness.high or 100e3) / (result.best.thickness.low or 1e3))

    quiet, loud = fit(line(noise=10.0, seed=2)), fit(line(noise=100.0, seed=2))
    assert width(loud) > 2 * width(quiet)
    stations = [result.best.bent.stations for result in (quiet, loud)]
    bands = [np.nanmedian(each.predicted_high - each.predicted_low) for each in stations]
    assert bands[1] > 3 * bands[0] > 0


def test_outliers_are_borne_where_asked():
    """Every twelfth station 600 m too high (seamounts): ROBUST keeps the plate within 10 %, and nearer than without."""
    profile = line(noise=15.0, seed=5)
    relief = profile.relief.copy()
    relief[5::12] += 600.0
    spoiled = replace(profile, relief=relief)
    plain, robust = (fit(spoiled, replace(OPTIONS, robust=choice)).best.thickness.value for choice in (False, True))
    assert robust == pytest.approx(30e3, rel=0.1)
    assert plain is None or abs(robust - 30e3) <= abs(plain - 30e3)


def test_a_searched_break_is_found():
    """The true break at 60 km, searched from 0 to 120 km: within 10 km and its interval; origin fitted."""
    options = replace(OPTIONS, break_at=BREAK_SEARCHED, break_from=0.0, break_to=120e3, break_position=None)
    result = fit(line(noise=5.0, seed=1, start=60e3), options)
    place = result.best.break_position
    assert (place.low or 0.0) <= 60e3 <= (place.high or np.inf)
    (row,) = (each for each in result.parameters if each.name == "break")
    assert row.origin == FITTED
    # End shear and moment at one break equal others at another: only the thickness is held by all.
    assert (result.best.thickness.low or 0) < 30e3 < (result.best.thickness.high or np.inf)
    assert len({each.break_position for each in result.best.misfit}) > 10


def test_picks_alone_give_the_plate():
    """A foreland basement known at 60 places between stations only."""
    contrast = 3300 - 2400
    places = np.random.default_rng(7).uniform(0, 600e3, 60)
    surface = 100.0 - end_bent(places, 20e3, 1.5e12, 0.0, contrast)
    profile = Profile("A", X, np.full(X.size, 100.0), picks=Picks(places, surface, np.full(60, 30.0)))
    options = FitOptions(setting=FORELAND, reference_level=100.0)
    best = fit(profile, options).best
    assert best.thickness.value == pytest.approx(20e3, rel=0.01)
    assert best.count == 60
    assert not best.bent.stations.in_fit.any()


def test_sigma_weighs_stations_against_each_other():
    """The far half raised by 300 m of bad data with a sigma of 3000 m: near stations decide."""
    bad = X > 300e3
    profile = line(noise=2.0, seed=3)
    spoiled = replace(profile, relief=profile.relief + np.where(bad, 300.0 * np.sin(X / 20e3), 0.0))
    weighed = replace(spoiled, sigma=np.where(bad, 3000.0, 2.0))
    found = fit(weighed).best.thickness
    assert found.value == pytest.approx(30e3, rel=0.05)
    assert abs(found.value - 30e3) < abs((fit(spoiled).best.thickness.value or np.inf) - 30e3)


def test_a_flat_line_resolves_no_plate():
    """White noise on a plane: no value, an open interval and a remark, never a search limit."""
    noise = np.random.default_rng(11).standard_normal(X.size) * 20.0
    best = fit(Profile("A", X, LEVEL + TILT * X + noise)).best
    assert best.thickness.value is None
    assert best.thickness.low is None or best.thickness.high is None
    assert any("not resolved" in remark for remark in best.remarks)


def test_a_range_that_leaves_the_truth_out_is_open_on_that_side():
    """Search from 1 to 12 km for a plate of 30 km: no upper bound, and a remark."""
    best = fit(line(noise=20.0, seed=1), replace(OPTIONS, te_to=12e3)).best
    assert best.thickness.high is None
    assert best.remarks


def test_a_misfit_table_covers_the_range():
    """Trials from TE_FROM to TE_TO; the likeliest is the value given, and its relative likelihood is 1."""
    best = fit(line(noise=20.0, seed=1)).best
    tried = np.array([row.thickness for row in best.misfit])
    likelihood = np.array([row.relative_likelihood for row in best.misfit])
    assert (tried.min(), tried.max()) == (pytest.approx(1e3), pytest.approx(100e3))
    assert likelihood.max() == pytest.approx(1.0)
    assert tried[likelihood.argmax()] == pytest.approx(best.thickness.value, rel=0.05)
    assert ((likelihood >= 0) & (likelihood <= 1)).all()


def test_every_value_in_use_is_listed_with_its_origin():
    """Given, setting, measured or fitted, each once, and never a value without a unit where it has one."""
    result = fit(line(noise=20.0, seed=1), replace(OPTIONS, fit_to=550e3, sigma=25.0, rho_mantle=3310))
    rows = {row.name: row for row in result.parameters}
    assert len(rows) == len(result.parameters)
    assert {row.origin for row in result.parameters} <= {"given", "setting", "measured", "fitted"}
    for name in ("te", "rigidity", "flexural_parameter", "end_shear", "end_moment", "regional_level", "regional_tilt"):
        assert rows[name].origin == FITTED, name
        assert rows[name].low < rows[name].value < rows[name].high, name
    assert (rows["FIT_TO"].value, rows["FIT_TO"].unit, rows["FIT_TO"].origin) == (550, "km", GIVEN)
    assert (rows["RHO_MANTLE"].value, rows["RHO_MANTLE"].origin) == (3310, GIVEN)
    assert rows["RHO_INFILL"].origin == "setting"
    assert rows["SIGMA_M"].value == 25
    assert rows["te"].value == pytest.approx(result.best.thickness.value / 1e3)


def test_progress_runs_up_to_1_and_a_cancel_passes_through():
    """Fractions never fall; what progress raises stops the fit."""
    told = []
    fit_profile(line(noise=20.0), OPTIONS, told.append, with_choices=True)
    assert told == sorted(told)
    assert told[-1] == pytest.approx(1.0)
    assert 0 <= told[0] < 0.5

    def stop(fraction):
        if fraction > 0.1:
            raise Cancelled

    with pytest.raises(Cancelled):
        fit_profile(line(noise=20.0), OPTIONS, stop)


def test_nothing_left_to_fit_names_the_transect():
    """A window beyond the line; and too few stations for the parameters."""
    with pytest.raises(DownwarpError, match="A: nothing is left to fit; outside the load, beyond the break and within"):
        fit(line(), replace(OPTIONS, fit_from=700e3))
    with pytest.raises(DownwarpError, match="A: There are 4 stations to fit"):
        fit(line(), replace(OPTIONS, fit_from=100e3, fit_to=120e3))


def test_too_much_compression_is_said():
    """An in-plane force above 2 sqrt(D k) of the thinnest plate tried."""
    with pytest.raises(DownwarpError, match="IN_PLANE"):
        fit(line(), replace(OPTIONS, in_plane=1e15))


def test_a_line_load_in_the_middle_of_a_continuous_plate():
    """END_FORCES shear on a continuous plate: a line load of unknown size at BREAK_KM."""
    thickness, place = 25e3, 300e3
    rigidity = 100e9 * thickness**3 / (12 * (1 - 0.25**2))
    alpha = (4 * rigidity / (2270 * 9.81)) ** 0.25
    s = np.abs(X - place) / alpha
    surface = -5000.0 - 2e12 * alpha**3 / (8 * rigidity) * np.exp(-s) * (np.cos(s) + np.sin(s))
    options = FitOptions(
        setting=TRENCH, plate=CONTINUOUS, break_at=BREAK_GIVEN, break_position=place, end_forces=1, regional=1
    )
    best = fit(Profile("A", X, surface), options).best
    assert best.thickness.value == pytest.approx(thickness, rel=5e-3)
    assert best.coefficients["end_shear"].value == pytest.approx(2e12, rel=0.01)
    # Only what lies beyond the load is fitted.
    assert best.count == int((place <= X).sum())


def test_inputs_are_left_untouched():
    """Arrays of the profile are the same after a fit."""
    profile = line(noise=20.0)
    before = profile.relief.copy(), profile.distance.copy()
    fit(profile)
    np.testing.assert_array_equal(profile.relief, before[0])
    np.testing.assert_array_equal(profile.distance, before[1])


def test_a_plate_without_unknown_forces_has_no_coefficients_but_the_regional():
    """END_FORCES 0, REGIONAL 0: thickness alone is fitted."""
    relief = np.where(np.abs(X - 300e3) < 60e3, -2000.0, -5000.0)
    options = FitOptions(setting=OTHER, end_forces=FORCES_NONE, regional=0, reference_level=-5000.0)
    best = fit(Profile("A", X, relief, observed=-1000.0 * np.exp(-(((X - 300e3) / 100e3) ** 2))), options).best
    assert best.coefficients == {}
    assert best.break_position.value is None
