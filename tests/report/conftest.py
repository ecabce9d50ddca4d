"""Results made by hand: a trench whose plate is known, with the posterior of a known normal distribution.

The tests of this folder need QGIS, whose translator the report asks.
"""

import importlib.util

import numpy as np
import pytest
from downwarp_checkout.plugin.core.bend import bend_problem
from downwarp_checkout.plugin.core.problem import prepare
from downwarp_checkout.plugin.core.profile import Profile
from downwarp_checkout.plugin.core.result import ChoiceRow, Estimate, Fit, FitResult, MisfitRow, Parameter
from downwarp_checkout.plugin.core.settings import BROKEN, TRENCH, FitOptions

if importlib.util.find_spec("qgis") is None:
    collect_ignore_glob = ["test_*.py"]

TRUE_THICKNESS, TRUE_BREAK = 30e3, 60e3
LOG_SPREAD = 0.2
"""Standard deviation of ln thickness in the made posterior."""


def made_misfit(searched: bool, log_spread: float = LOG_SPREAD) -> tuple[MisfitRow, ...]:
    """Trials on a coarse grid and on a finer one inside it: normal in ln thickness and, if searched, in the break."""
    rows = []
    for log_te, breaks in (
        (np.linspace(np.log(1e3), np.log(100e3), 25), np.linspace(20e3, 100e3, 9)),
        (np.log(TRUE_THICKNESS) + np.linspace(-0.7, 0.7, 29), np.linspace(48e3, 72e3, 25)),
    ):
        for at in breaks if searched else [TRUE_BREAK]:
            for value in log_te:
                distance = ((value - np.log(TRUE_THICKNESS)) / log_spread) ** 2
                if searched:
                    distance += ((at - TRUE_BREAK) / 3e3) ** 2
                likelihood = float(np.exp(-0.5 * distance))
                rows.append(MisfitRow(BROKEN, float(np.exp(value)), float(at), 30.0 + 5.0 * distance**0.5, likelihood))
    return tuple(rows)


def make_result(
    name: str = "line 7",
    *,
    stations: int = 251,
    searched: bool = False,
    thickness: Estimate = Estimate(TRUE_THICKNESS, 21.6e3, 41.7e3),  # noqa: B008 (frozen)
    choices: bool = True,
    remarks: tuple[str, ...] = (),
    seed: int = 0,
) -> FitResult:
    """A trench bent by a known plate, observed with noise."""
    distance = np.linspace(0.0, 500e3, stations)
    options = FitOptions(setting=TRENCH, break_at=2, break_position=TRUE_BREAK)
    flat = Profile(name, distance, np.full(stations, -5500.0))
    model = prepare(flat, options).model(BROKEN)
    beyond = distance >= TRUE_BREAK
    forces = {"end_shear": 0.8e12, "end_moment": 0.6e17}
    _, columns = model.columns(np.array([TRUE_THICKNESS]), TRUE_BREAK, np.maximum(distance, TRUE_BREAK))
    surface = columns[0, :, 0] * forces["end_shear"] + columns[0, :, 1] * forces["end_moment"]
    noise = np.random.default_rng(seed).normal(0.0, 25.0, stations)
    landward = np.where(beyond, 0.0, (TRUE_BREAK - distance) * 0.05)
    problem = prepare(Profile(name, distance, -5500.0 + surface + landward + noise), options)
    band = (-5500.0 + surface - 60.0, -5500.0 + surface + 60.0)
    bent = bend_problem(problem, model, TRUE_THICKNESS, TRUE_BREAK, forces, (-5500.0, 0.0, 0.0), band, beyond)
    rows = (
        ChoiceRow("as fitted", "", thickness, 25.0),
        ChoiceRow("window ends sooner", "FIT_TO 412 km", Estimate(27e3, 20e3, None), 26.0),
        ChoiceRow("other plate", "continuous", Estimate(12e3, None, 15e3), 61.0),
        ChoiceRow("more regional", "level, tilt and bow", Estimate(None), None),
    )
    forces_fitted = {"end_shear": Estimate(0.8e12, 0.5e12, 1.2e12), "end_moment": Estimate(0.6e17, 0.1e17, 1.1e17)}
    fit = Fit(
        kind=BROKEN,
        thickness=thickness,
        break_position=Estimate(TRUE_BREAK, 55e3, 65e3) if searched else Estimate(TRUE_BREAK),
        coefficients=forces_fitted,
        rms=25.0,
        count=int(beyond.sum()),
        effective=40.0,
        noise=(),
        misfit=made_misfit(searched),
        bent=bent,
    )
    parameters = (
        Parameter("te", thickness.value and thickness.value / 1e3, "km", "fitted"),
        Parameter("SETTING", 1.0, "", "given"),
        Parameter("RHO_MANTLE", 3300.0, "kg/m3", "setting"),
        Parameter("end_shear", 0.8e12, "N/m", "fitted", 0.5e12, 1.2e12),
    )
    return FitResult(fit, parameters, (fit,), rows if choices else (), remarks)


@pytest.fixture(name="make_result")
def made():
    """`make_result`: a function, for tests that need several results."""
    return make_result


@pytest.fixture(name="made_misfit")
def misfit():
    """`made_misfit`: a function."""
    return made_misfit
