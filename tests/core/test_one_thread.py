"""A fit gives the same bits however many threads linear algebra had before it."""

import numpy as np
import pytest
from downwarp_checkout.plugin.core import one_thread as module
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.fit import fit_profile
from downwarp_checkout.plugin.core.one_thread import one_thread
from downwarp_checkout.plugin.core.profile import Profile
from downwarp_checkout.plugin.core.settings import BREAK_START, TRENCH, FitOptions

MANY = 4


def numbers() -> list[int]:
    """Threads of each library in use."""
    return [switch.number() for switch in module._switches()]


@pytest.fixture
def many_threads():
    """Linear algebra on several threads, whatever the environment asked for."""
    switches = module._switches()
    if not switches:
        pytest.skip("linear algebra here is neither OpenBLAS nor MKL")
    before = numbers()
    for switch in switches:
        switch.set_number(MANY)
    if numbers() != [MANY] * len(switches):
        pytest.skip("linear algebra here knows one thread only")
    yield
    for switch, number in zip(switches, before):
        switch.set_number(number)


def profile() -> Profile:
    """A rough bulge of 301 stations."""
    x = np.arange(301) * 2e3
    noise = 20 * np.random.default_rng(7).standard_normal(x.size)
    return Profile("invented", x, -5500 - 2500 * np.exp(-x / 60e3) * np.cos(x / 60e3) + noise, resolution=2e3)


def test_there_are_as_many_threads_after_it_as_before(many_threads):
    """One inside, also inside another, and the former number afterwards, also after an error."""
    with one_thread():
        with one_thread():
            assert set(numbers()) == {1}
        assert set(numbers()) == {1}
    assert set(numbers()) == {MANY}
    with pytest.raises(DownwarpError), one_thread():
        raise DownwarpError("no")
    assert set(numbers()) == {MANY}


def test_fit_does_not_depend_on_threads(many_threads):
    """The fit begun with several threads equals the one begun with one, bit by bit in surface, band and posterior."""
    options = FitOptions(setting=TRENCH, break_at=BREAK_START)
    several = fit_profile(profile(), options, with_choices=False)
    with one_thread():
        single = fit_profile(profile(), options, with_choices=False)
    assert several.best.thickness == single.best.thickness
    assert several.best.coefficients == single.best.coefficients
    assert several.best.misfit == single.best.misfit
    for name in ("predicted", "predicted_low", "predicted_high"):
        np.testing.assert_array_equal(
            getattr(several.best.bent.stations, name), getattr(single.best.bent.stations, name)
        )
