"""What the profile panel computes, on an invented trench over a known plate."""

from dataclasses import replace

import numpy as np
import pytest
from downwarp_checkout.plugin.core.elastic import Elastic
from downwarp_checkout.plugin.core.errors import Cancelled, DownwarpError
from downwarp_checkout.plugin.core.fit import fit_profile
from downwarp_checkout.plugin.core.profile import Profile
from downwarp_checkout.plugin.core.settings import (
    BOTH,
    BREAK_GIVEN,
    BREAK_SEARCHED,
    BREAK_START,
    BROKEN,
    CONTINUOUS,
    OTHER,
    TRENCH,
    FitOptions,
)
from downwarp_checkout.plugin.panel.session import Session, Trial

SHEAR, MOMENT, LEVEL, THICKNESS = 1.2e12, 0.8e17, -5500.0, 30e3


def deflection(x, thickness=THICKNESS, shear=SHEAR, moment=MOMENT):
    """A broken plate under end shear V0 and end moment M0, in m, positive down.

    w(x) = alpha^2 e^(-x/alpha) / (2 D) [(V0 alpha + M0) cos(x/alpha) - M0 sin(x/alpha)]:
    Turcotte & Schubert, Geodynamics,
    section 3.16, from memory.
    """
    rigidity = float(Elastic().rigidity(thickness))
    alpha = (4 * rigidity / ((3300.0 - 1030.0) * 9.81)) ** 0.25
    s = x / alpha
    return alpha**2 * np.exp(-s) / (2 * rigidity) * ((shear * alpha + moment) * np.cos(s) - moment * np.sin(s))


def trench(noise=0.0, step=2e3, count=301):
    """A profile that begins at the break."""
    x = np.arange(count) * step
    relief = LEVEL - deflection(x) + noise * np.random.default_rng(1).standard_normal(x.size)
    return Profile("invented", x, relief, resolution=step)


OPTIONS = FitOptions(setting=TRENCH, break_at=BREAK_START)


def fitted(session, **choices):
    session.job(**choices)(lambda fraction: None)()
    return session


def test_trial_at_the_true_thickness_solves_the_end_forces():
    """At the true thickness, least squares gives back the shear, the moment and the level that made the profile."""
    view = Session(trench(), OPTIONS).view(Trial(THICKNESS))
    assert view.bent.end_shear == pytest.approx(SHEAR, rel=1e-4)
    assert view.bent.end_moment == pytest.approx(MOMENT, rel=1e-4)
    assert view.bent.regional[0] == pytest.approx(LEVEL, abs=0.05)
    assert view.rms < 0.05
    # Of 301 stations the one at the break may be left out: its cell reaches across.
    assert view.count == view.bent.stations.in_fit.sum() >= 300


def test_forces_by_hand_are_used_as_they_are():
    """With the forces stated, the plate is the closed form of them; only the regional is solved."""
    session = Session(trench(), OPTIONS)
    view = session.view(Trial(40e3, forces=(2e12, -1e17)))
    expected = deflection(session.profile.distance, 40e3, 2e12, -1e17)
    np.testing.assert_allclose(view.bent.stations.deflection, expected, rtol=1e-5, atol=0.02)
    assert (view.bent.end_shear, view.bent.end_moment) == (2e12, -1e17)
    fitted_stations = view.bent.stations.in_fit
    residual = (view.bent.stations.observed - view.bent.stations.predicted)[fitted_stations]
    # Least squares over level and tilt leaves residuals that are orthogonal to both.
    assert abs(residual.mean()) < 1e-6
    assert abs(np.corrcoef(residual, session.profile.distance[fitted_stations])[0, 1]) < 1e-9


def test_a_line_load_by_hand_bends_a_continuous_plate():
    """w0 = V0 alpha^3 / (8 D) under a line load (Turcotte & Schubert, Geodynamics, section 3.16, from memory)."""
    profile = replace(trench(), relief=np.full(301, LEVEL))
    options = FitOptions(setting=OTHER, plate=CONTINUOUS, break_at=BREAK_GIVEN, break_position=300e3, reference_level=0)
    view = Session(profile, options).view(Trial(30e3, forces=(1e12, 0.0)))
    rigidity = float(Elastic().rigidity(30e3))
    alpha = (4 * rigidity / ((3300.0 - 1030.0) * 9.81)) ** 0.25
    assert view.bent.markers.deepest.deflection == pytest.approx(1e12 * alpha**3 / (8 * rigidity), rel=1e-3)
    assert view.bent.break_position == 300e3


def test_least_residual_is_near_the_true_thickness():
    """The first look is a thickness of the grid next to the true one, and every other trial fits worse."""
    session = Session(trench(), OPTIONS)
    first = session.first_trial()
    assert abs(np.log(first.thickness / THICKNESS)) <= np.log(100) / 24
    rms = session.view(first).rms
    assert all(session.view(Trial(first.thickness * factor)).rms > rms for factor in (0.5, 0.8, 1.25, 2.0))


@pytest.mark.parametrize("plate", [BROKEN, BOTH])
def test_fit_is_core_s_own(plate):
    """The panel's fit is `fit_profile` of the same profile and options, and its view is the fit's own plate."""
    session = fitted(Session(trench(20.0), replace(OPTIONS, plate=plate)))
    expected = fit_profile(trench(20.0), replace(OPTIONS, plate=plate), with_choices=False)
    assert session.result.best.thickness == expected.best.thickness
    assert session.result.best.coefficients == expected.best.coefficients
    view = session.view(session.fitted_trial())
    assert view.result is session.result
    np.testing.assert_array_equal(view.bent.stations.predicted, expected.best.bent.stations.predicted)
    assert view.rms == expected.best.rms


def test_leaving_the_fitted_thickness_changes_the_curve_little():
    """A trial a hair beside the fit lies within half the residuals of the fit: nothing jumps under the hand."""
    session = fitted(Session(trench(20.0), OPTIONS))
    answer = session.view(session.fitted_trial())
    beside = session.view(Trial(session.fitted_trial().thickness * 1.0001))
    assert beside.result is None
    apart = np.abs(answer.bent.stations.predicted - beside.bent.stations.predicted)
    assert np.nanmax(apart) < 0.5 * answer.rms
    assert beside.rms <= answer.rms * (1 + 1e-6)


def test_searched_break_can_be_tried_anywhere():
    """Where the break is searched, a trial states its own; the fit's trial is the fit's break."""
    x = np.arange(301) * 2e3
    relief = LEVEL - deflection(np.maximum(x - 60e3, 0.0)) + 0.05 * np.maximum(60e3 - x, 0.0)
    relief += 10 * np.random.default_rng(2).standard_normal(x.size)
    options = FitOptions(setting=TRENCH, break_at=BREAK_SEARCHED, break_from=40e3, break_to=90e3)
    session = Session(Profile("invented", x, relief, resolution=2e3), options)
    assert session.view(Trial(30e3, 70e3)).bent.break_position == 70e3
    assert session.view(Trial(30e3)).bent.break_position == 65e3
    fitted(session)
    trial = session.fitted_trial()
    assert trial.break_position == session.result.best.break_position.value
    assert session.view(trial).result is session.result


def test_stations_left_out_do_not_count():
    """A planted error outside what is fitted changes nothing; taking the stations back restores the first answer."""
    clean = fitted(Session(trench(20.0), OPTIONS))
    spoilt = trench(20.0)
    spoilt.relief[(spoilt.distance >= 200e3) & (spoilt.distance <= 240e3)] += 900.0
    session = Session(spoilt, OPTIONS)
    before = session.view(Trial(THICKNESS))
    assert session.leave_out(240e3, 200e3) == 21
    assert session.leave_out(200e3, 210e3) == 0
    view = session.view(Trial(THICKNESS))
    assert view.count == before.count - 21
    assert view.rms < 0.2 * before.rms
    assert not view.bent.stations.in_fit[100:121].any()
    fitted(session)
    assert session.result.best.thickness.value == pytest.approx(clean.result.best.thickness.value, rel=0.1)
    assert session.leave_out(0.0, 600e3, leave=False) == 21
    assert session.view(Trial(THICKNESS)).rms == before.rms


def test_a_fit_is_current_only_for_what_it_was_made_of():
    """Options or stations that change make the fit an old one; coming back makes it current again."""
    session = fitted(Session(trench(20.0), OPTIONS))
    assert session.is_current
    session.options = replace(OPTIONS, rho_infill=1100.0)
    assert not session.is_current
    assert session.fitted_trial() is None
    session.options = OPTIONS
    assert session.is_current
    session.leave_out(0.0, 10e3)
    assert not session.is_current


def test_level_that_the_fit_settled_on_stays_in_use():
    """A volcanic load whose level the fit moves: trials beside the fit carry the same load as the fit."""
    x = np.arange(301) * 2e3
    height = 3000.0 * np.clip(1 - np.abs(x - 300e3) / 80e3, 0, None)
    moat = 400.0 * np.exp(-(((x - 300e3) / 120e3) ** 2))
    profile = Profile("ridge", x, -5000.0 + height - moat * (height == 0), resolution=2e3)
    session = fitted(Session(profile, FitOptions()))
    level = session.result.best.bent.problem.reference_level
    beside = session.view(Trial(session.fitted_trial().thickness * 1.01))
    assert beside.bent.problem.reference_level == level
    np.testing.assert_array_equal(beside.bent.stations.load, session.result.best.bent.stations.load)


def test_cancelling_leaves_the_last_fit():
    """A fit that is stopped by its progress callable changes nothing."""
    session = fitted(Session(trench(20.0), OPTIONS))
    result = session.result

    def stop(fraction: float) -> None:
        raise Cancelled

    with pytest.raises(Cancelled):
        session.job()(stop)
    assert session.result is result


def test_nothing_left_to_fit_is_said():
    """With nearly all stations left out, or all, a trial names the transect, what is left and what it takes."""
    session = Session(trench(), OPTIONS)
    session.leave_out(0.0, 595e3)
    with pytest.raises(DownwarpError, match="invented: 3 observed stations are left to fit; it takes at least 5"):
        session.view(Trial(THICKNESS))
    session.leave_out(0.0, 600e3)
    with pytest.raises(DownwarpError, match="invented: 0 observed stations are left to fit; it takes at least 3"):
        session.view(Trial(THICKNESS, forces=(1e12, 0.0)))
