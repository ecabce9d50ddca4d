"""Choices: the fit repeated under one reasonable alternative at a time; and the two kinds of plate compared."""

from dataclasses import replace

import numpy as np
import pytest
from downwarp_checkout.plugin.core.elastic import Elastic
from downwarp_checkout.plugin.core.fit import fit_profile
from downwarp_checkout.plugin.core.forward import TransectModel
from downwarp_checkout.plugin.core.noise import correlation
from downwarp_checkout.plugin.core.profile import Picks, Profile
from downwarp_checkout.plugin.core.settings import BOTH, BROKEN, CONTINUOUS, FORELAND, OTHER, TRENCH, FitOptions

STATIONS = np.arange(0.0, 500.1e3, 4e3)
THICKNESS = 25e3


def trench(noise: float, seed: int = 3, shear: float = 1.2e12, moment: float = 0.8e17) -> Profile:
    """A plate of 25 km broken at the line's start, with white noise."""
    stiffness = np.full(STATIONS.size - 1, (3300 - 1030) * 9.81)
    model = TransectModel(STATIONS, np.zeros(STATIONS.size), stiffness, Elastic(), shear=True, moment=True)
    deflection = model.bend(THICKNESS, 0.0, np.array([shear, moment])).at(STATIONS)[:, 0]
    rng = np.random.default_rng(seed)
    return Profile("made", STATIONS, -5500.0 - deflection + noise * rng.standard_normal(STATIONS.size))


@pytest.fixture(scope="module")
def answer():
    """A trench fitted with its choices."""
    return fit_profile(trench(30.0), FitOptions(setting=TRENCH))


def test_rows_name_choice_option_and_answer(answer):
    """The first row is the answer; window, regional, other plate and modulus follow; a trench has no load to vary."""
    rows = {row.choice: row for row in answer.choices}
    assert answer.choices[0].thickness == answer.best.thickness
    assert {"window ends sooner", "window begins later", "more regional", "less regional", "other plate"} <= set(rows)
    assert not any("load" in choice or "infill" in choice for choice in rows)
    assert rows["less regional"].option == "level"
    assert rows["window ends sooner"].option == "FIT_TO 400 km"


def test_another_modulus_scales_the_thickness_by_its_cube_root(answer):
    """The data fix D = E Te^3 / 12 (1 - nu^2): a fit at 70 GPa gives what the row says."""
    row = answer.choices[-1]
    assert (row.choice, row.option) == ("Young's modulus", "70 GPa")
    assert row.thickness.value == pytest.approx(answer.best.thickness.value * (100 / 70) ** (1 / 3), rel=1e-12)
    options = FitOptions(setting=TRENCH, elastic=Elastic(young=70e9))
    refitted = fit_profile(trench(30.0), options, with_choices=False).best.thickness
    assert refitted.value == pytest.approx(row.thickness.value, rel=0.02)


def test_a_shorter_window_is_the_fit_with_that_window(answer):
    """Each row is what a run with that one key changed gives."""
    row = next(row for row in answer.choices if row.choice == "window ends sooner")
    direct = fit_profile(trench(30.0), FitOptions(setting=TRENCH, fit_to=400e3), with_choices=False)
    assert direct.best.thickness.value == pytest.approx(row.thickness.value, rel=1e-9)
    assert direct.best.rms == pytest.approx(row.rms, rel=1e-9)


def test_a_choice_that_moves_the_thickness_outside_its_interval_is_named(answer):
    """A plate bent at its broken end does not look like a continuous one."""
    words = [remark for remark in answer.remarks if remark.startswith("choices that move the thickness")]
    assert len(words) == 1 and "other plate, continuous" in words[0]


def test_a_window_that_the_user_ended_is_lengthened_too():
    """FIT_TO given and the line longer: a row with a later end."""
    answer = fit_profile(trench(30.0), FitOptions(setting=TRENCH, fit_to=350e3))
    assert "FIT_TO 418 km" in {row.option for row in answer.choices if row.choice == "window ends later"}


def test_densities_vary_where_they_matter():
    """A foreland basin under mountains: infill and load, up and down by 100 kg/m3."""
    relief = np.where(STATIONS < 80e3, 2000.0, 200.0)
    below = trench(20.0).relief
    profile = Profile("made", STATIONS, relief, observed=below)
    answer = fit_profile(profile, FitOptions(setting=FORELAND, reference_level=200.0))
    options = {row.choice: row.option for row in answer.choices}
    assert options["denser infill"] == "2500 kg/m3" and options["lighter infill"] == "2300 kg/m3"
    assert options["denser load"] == "2770 kg/m3" and options["lighter load"] == "2570 kg/m3"


def test_the_right_kind_of_plate_wins_where_the_bulge_is_clear():
    """Both kinds are fitted to the same stations; the odds stand in the remarks and among the parameters."""
    answer = fit_profile(trench(30.0), FitOptions(setting=TRENCH, plate=BOTH), with_choices=False)
    assert [fit.kind for fit in answer.fits] == [BROKEN, CONTINUOUS]
    assert answer.fits[0].count == answer.fits[1].count
    assert any("preferred" in remark for remark in answer.remarks)
    odds = next(row.value for row in answer.parameters if row.name == "log_odds_of_continuous_plate")
    assert odds < -3.0


def test_kinds_of_plate_that_the_noise_hides_are_undecided():
    """A bulge far below the noise: no kind is preferred."""
    profile = trench(200.0, shear=2e10, moment=0.0)
    answer = fit_profile(profile, FitOptions(setting=TRENCH, plate=BOTH), with_choices=False)
    assert any("undecided" in remark.lower() for remark in answer.remarks)


def test_picks_and_raster_agree_within_their_intervals():
    """The same bent surface as a raster, as picks with errors of their own, and as both: intervals overlap, and hold
    the truth."""
    rng = np.random.default_rng(8)
    profile = trench(25.0)
    at = np.sort(rng.uniform(0.0, 500e3, 60))
    exact = np.interp(at, STATIONS, trench(0.0).relief)
    picks = Picks(at, exact + 40.0 * rng.standard_normal(60), np.full(60, 40.0))
    flat = np.full(STATIONS.size, -4000.0)
    options = FitOptions(setting=TRENCH, break_at=0)
    answers = [
        fit_profile(each, options, with_choices=False).best.thickness
        for each in (
            Profile("raster", STATIONS, flat, observed=profile.relief),
            Profile("picks", STATIONS, flat, picks=picks),
            Profile("both", STATIONS, flat, observed=profile.relief, picks=picks),
        )
    ]
    for one in answers:
        for other in answers:
            assert (one.low or 0.0) < (other.high or np.inf)
    assert all((one.low or 0.0) < THICKNESS < (one.high or np.inf) for one in answers)


def test_outliers_move_a_robust_fit_less_than_its_interval():
    """Twenty of 125 stations raised by 300 to 900 m, as by seamounts."""
    clean = trench(30.0)
    rng = np.random.default_rng(11)
    raised = clean.relief.copy()
    raised[rng.choice(np.arange(10, STATIONS.size), 20, replace=False)] += rng.uniform(300.0, 900.0, 20)
    options = FitOptions(setting=TRENCH, robust=True)
    straight = fit_profile(clean, options, with_choices=False).best.thickness
    spoilt = fit_profile(replace(clean, relief=raised), options, with_choices=False).best.thickness
    width = np.log((spoilt.high or options.te_to) / (spoilt.low or options.te_from))
    assert abs(np.log(spoilt.value / straight.value)) < width


@pytest.mark.parametrize(
    "relief",
    [np.full(STATIONS.size, -5000.0), -5000.0 + 30.0 * np.random.default_rng(0).standard_normal(STATIONS.size)],
    ids=["flat", "noise"],
)
def test_a_line_without_a_bend_is_not_resolved(relief):
    """Nothing but the regional: no thickness, or an open side, and a remark in plain words."""
    result = fit_profile(Profile("level", STATIONS, relief), FitOptions(setting=TRENCH, break_at=0), with_choices=False)
    thickness = result.best.thickness
    assert thickness.value is None or thickness.low is None or thickness.high is None
    assert any("not resolved" in remark or "open" in remark for remark in result.remarks)


def test_a_load_too_small_to_see_is_not_resolved():
    """A hill of 20 m under 40 m of noise bends nothing that can be seen."""
    rng = np.random.default_rng(5)
    hill = 20.0 * np.exp(-(((STATIONS - 250e3) / 20e3) ** 2))
    profile = Profile("hill", STATIONS, hill, observed=-1000.0 + 40.0 * rng.standard_normal(STATIONS.size))
    options = FitOptions(setting=OTHER, reference_level=0.0)
    thickness = fit_profile(profile, options, with_choices=False).best.thickness
    assert thickness.value is None or thickness.low is None or thickness.high is None


def test_a_line_too_short_for_its_plate_is_open():
    """30 km of line next to the break of a plate whose flexural parameter is 70 km."""
    whole = trench(30.0)
    short = STATIONS <= 40e3
    profile = Profile("short", STATIONS[short], whole.relief[short])
    thickness = fit_profile(profile, FitOptions(setting=TRENCH), with_choices=False).best.thickness
    assert thickness.value is None or thickness.low is None or thickness.high is None


@pytest.mark.parametrize(("family", "length"), [(0, 1.0), (1, 15e3), (2, 15e3)], ids=["white", "Matern 1/2", "Matern 3/2"])
def test_the_right_kind_wins_in_clear_cases_and_never_wrongly(family, length):
    """A line load at a break or on a continuous plate, the bulge 3 to 30 times the noise: at least nine of ten right."""
    rng = np.random.default_rng(family)
    separation = np.abs(STATIONS[:, None] - STATIONS) / length
    covariance = correlation(family, separation) if family else np.eye(STATIONS.size)
    lower = np.linalg.cholesky(covariance + 1e-8 * np.eye(STATIONS.size))
    stiffness = np.full(STATIONS.size - 1, (3300 - 1030) * 9.81)
    options = FitOptions(setting=TRENCH, break_at=0, plate=BOTH, end_forces=1)
    right = 0
    for _ in range(10):
        kind, thickness = int(rng.integers(2)), np.exp(rng.uniform(*np.log([12e3, 50e3])))
        model = TransectModel(STATIONS, np.zeros(STATIONS.size), stiffness, Elastic(), kind=kind, shear=True)
        surface = -model.bend(thickness, 0.0, np.array([1e12])).at(STATIONS)[:, 0]
        noise = surface.max() / np.exp(rng.uniform(*np.log([3.0, 30.0]))) * (lower @ rng.standard_normal(STATIONS.size))
        answer = fit_profile(Profile("made", STATIONS, surface + noise - 5000.0), options, with_choices=False)
        undecided = any("undecided" in remark.lower() for remark in answer.remarks)
        right += answer.best.kind == kind
        assert answer.best.kind == kind or undecided
    assert right >= 9
