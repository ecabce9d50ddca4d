"""A run over many transects: order, failures, progress, cancel, and workers that give the same answers."""

import pickle
import subprocess
import sys
from concurrent.futures import Future
from functools import partial
from pathlib import Path

import downwarp_checkout
import numpy as np
import pytest
from downwarp_checkout.plugin.bridge.runs import IN_FLIGHT, Item, run_each
from downwarp_checkout.plugin.bridge.workers import FitPool, python_program
from downwarp_checkout.plugin.core import worker
from downwarp_checkout.plugin.core.errors import Cancelled, DownwarpError
from downwarp_checkout.plugin.core.fit import fit_profile
from downwarp_checkout.plugin.core.profile import Profile
from downwarp_checkout.plugin.core.settings import TRENCH, FitOptions
from qgis.core import QgsProcessingFeedback

ROOT = Path(downwarp_checkout.__file__).parent
X = np.arange(0.0, 400e3 + 1, 8e3)


class Sinks:
    """Stands in for Outputs and notes what is asked of it, in order."""

    def __init__(self):
        self.calls = []

    def open(self, names):
        self.calls.append(("open", names))

    def failed(self, *what):
        self.calls.append(("failed", what[-2], what[-1]))

    def flush(self):
        self.calls.append(("flush",))
        return []

    def discard(self):
        self.calls.append(("discard",))


class Told(QgsProcessingFeedback):
    """Feedback that keeps what it was told."""

    def __init__(self):
        super().__init__(False)
        self.warnings, self.fractions = [], []
        self.progressChanged.connect(self.fractions.append)

    def pushWarning(self, text):
        self.warnings.append(text)


def item(name, sampled="profile", progress_steps=3):
    def sample(progress):
        for step in range(progress_steps):
            progress(step / progress_steps)
        if isinstance(sampled, Exception):
            raise sampled
        return None, sampled

    return Item(name, sample)


def work(profile, progress):
    progress(0.5)
    if profile == "bad":
        raise DownwarpError("bad: it cannot be bent.")
    progress(1.0)
    return profile.upper()


def go(items, feedback=None, worker=work, names=("PROFILES", "STATIONS"), count=None, **more):
    sinks = Sinks()
    written = []
    finished = run_each(
        sinks, names, items, len(items) if count is None else count, feedback or Told(), worker,
        lambda outputs, result, track: (written.append(result), outputs.calls.append(("write", result)))[0],
        **more,
    )  # fmt: skip
    with_results = list(finished.results())
    finished.close()
    return sinks.calls, written, with_results


def test_order_is_kept_and_failures_stand_in_their_place():
    """Sinks are opened once all is done; then one row each, in the order of the input."""
    feedback = Told()
    items = [item("a", "one"), item("b", DownwarpError("b lies outside.")), item("c", "bad"), item("d", "two")]
    calls, written, results = go(items, feedback)
    assert written == results == ["ONE", "TWO"]
    assert calls == [
        ("open", ("PROFILES", "STATIONS")),
        ("write", "ONE"),
        ("failed", "b", "b lies outside."),
        ("failed", "c", "bad: it cannot be bent."),
        ("write", "TWO"),
        ("flush",),
        ("discard",),
    ]
    assert feedback.warnings == ["b lies outside.", "bad: it cannot be bent."]


def test_without_profiles_failures_are_only_told():
    """A run whose sinks have no place for remarks."""
    calls, _, _ = go([item("a", "one"), item("b", "bad")], names=("STATIONS",))
    assert not [call for call in calls if call[0] == "failed"]


@pytest.mark.parametrize(
    ("items", "words"),
    [
        ([], "There is no transect: the input holds no feature."),
        ([item("a", "bad")], "bad: it cannot be bent."),
        ([item("a", DownwarpError("a is short.")), item("b", "bad")],
         "None of the 2 transects could be worked on; the first: a is short."),
    ],
)  # fmt: skip
def test_where_nothing_succeeds_no_sink_is_made(items, words):
    """The reason is raised instead."""
    sinks = Sinks()
    with pytest.raises(DownwarpError) as caught:
        run_each(sinks, ("PROFILES",), items, len(items), Told(), work, lambda *ignored: None)
    assert str(caught.value) == words
    assert sinks.calls == []


def test_other_errors_are_not_swallowed():
    """A bug stops the run."""
    with pytest.raises(ZeroDivisionError):
        go([item("a", ZeroDivisionError())])


def test_progress_never_falls_and_ends_at_100():
    """Also where the layer said that it holds fewer features than it does."""
    for count in (5, 2):
        feedback = Told()
        go([item(str(number), "one") for number in range(5)], feedback, count=count)
        assert feedback.fractions == sorted(feedback.fractions)
        assert feedback.fractions[-1] == pytest.approx(100.0)
        assert all(0 <= value <= 100.000001 for value in feedback.fractions)


def test_cancel_while_sampling_and_while_working():
    """Cancelled is raised, and no sink is made."""
    for stage in ("sample", "work"):
        feedback, sinks = Told(), Sinks()

        def worker(profile, progress, feedback=feedback, stage=stage):
            if stage == "work":
                feedback.cancel()
            progress(0.5)
            return profile

        def sample(progress, feedback=feedback, stage=stage):
            if stage == "sample":
                feedback.cancel()
            progress(0.5)
            return None, "one"

        with pytest.raises(Cancelled):
            run_each(sinks, ("PROFILES",), [Item("a", sample)], 1, feedback, worker, lambda *ignored: None)
        assert sinks.calls == []


def test_items_are_closed_however_a_run_ends():
    """What reads a layer is let go at once, also where the exception that ended the run is kept."""
    for cancels in (False, True):
        feedback, closed = Told(), []

        def items(feedback=feedback, closed=closed, cancels=cancels):
            try:
                for number in range(3):
                    if number == 1 and cancels:
                        feedback.cancel()
                    yield item(str(number), "one")
            finally:
                closed.append(True)

        made = items()
        if cancels:
            with pytest.raises(Cancelled) as kept:
                go(made, feedback, count=3)
            assert kept.tb is not None
        else:
            go(made, feedback, count=3)
        assert closed == [True]


def trench(name, thickness, noise=10.0):
    """Broken plates bent by a shear at their end (closed form as in tests/core/test_fit.py), with noise."""
    rigidity = 100e9 * thickness**3 / (12 * (1 - 0.25**2))
    alpha = (4 * rigidity / (2270 * 9.81)) ** 0.25
    surface = -5000.0 - 1.5e12 * alpha**3 / (2 * rigidity) * np.exp(-X / alpha) * np.cos(X / alpha)
    rng = np.random.default_rng(int(thickness))
    return Profile(name, X, surface + noise * rng.standard_normal(X.size))


OPTIONS = FitOptions(setting=TRENCH, end_forces=1, regional=1)


def own_fit(profile, progress):
    """As the run itself fits what its workers have not begun."""
    return fit_profile(profile, OPTIONS, progress, False)


class Pool:
    """Stands in for FitPool: answers come when `answer` is called, in any order."""

    def __init__(self, workers=1, running=1):
        self.workers, self.running, self.futures = workers, running, []

    def submit(self, profile):
        future = Future()
        self.futures.append((profile, future))
        if len(self.futures) <= self.running:
            future.set_running_or_notify_cancel()
        return future

    def answer(self):
        for profile, future in self.futures:
            if future.running():
                future.set_result(f"{profile} of a worker")


@pytest.mark.parametrize("answered_after", [1, 3, IN_FLIGHT * 2])
def test_this_process_works_while_workers_are_slow(answered_after):
    """The only worker holds on to the first transect: others are worked on here until it has it, as many as there is
    room for; all are kept in order, and nothing that a worker began is done twice."""
    pool, sampled, worked = Pool(), [], []

    def sample(number, progress):
        sampled.append(number)
        return None, str(number)

    def here(profile, progress):
        worked.append(profile)
        if len(worked) == answered_after:
            assert len(sampled) <= IN_FLIGHT * (pool.workers + 1) + 1
            pool.answer()
        return f"{profile} here"

    _, written, _ = go([Item(str(number), partial(sample, number)) for number in range(20)], worker=here, pool=pool)
    assert written == ["0 of a worker", *(f"{number} here" for number in range(1, 20))]
    assert sorted(worked, key=int) == [str(number) for number in range(1, 20)]


def test_progress_of_a_pool_never_falls():
    """Neither as transects are sampled ahead nor as this process helps out."""
    feedback = Told()
    pool = Pool(running=0)
    go([item(str(number), "one") for number in range(9)], feedback, pool=pool)
    assert feedback.fractions == sorted(feedback.fractions)
    assert feedback.fractions[-1] == pytest.approx(100.0)


def test_workers_start_without_what_a_strip_does_not_need():
    """A worker that has fitted a strip has not loaded what takes longest: projections, polygons, figures, and most of
    scipy."""
    program = (
        "import pickle, runpy, sys\n"
        f"sys.argv = ['worker.py', {downwarp_checkout.__name__!r}, {str(ROOT)!r}]\n"
        "sys.path.insert(0, 'elsewhere')\n"
        f"runpy.run_path({str(Path(worker.__file__))!r}, run_name='__main__')\n"
        "print([name for name in ('pyproj', 'shapely', 'matplotlib', 'qgis', 'scipy.optimize', 'scipy.interpolate',"
        " 'scipy.spatial', 'scipy.ndimage', 'scipy.fft') if name in sys.modules], file=sys.stderr)\n"
    )
    job = pickle.dumps((trench("a", 20e3), OPTIONS, None, True))
    ran = subprocess.run([sys.executable, "-c", program], input=job, capture_output=True)
    word, result = pickle.loads(ran.stdout)
    assert word == "done"
    assert result.best.thickness.value == pytest.approx(20e3, rel=0.2)
    assert ran.stderr.decode().strip().splitlines()[-1] == "[]"


def test_workers_give_the_answers_of_this_process():
    """Six transects and a bad one, in two workers and here: the same thicknesses, to the last digits, in order."""
    thicknesses = [10e3, 15e3, 20e3, 25e3, 30e3, 35e3]
    profiles = [trench(f"line {value / 1e3:.0f}", value) for value in thicknesses]
    bad = Profile("bad", X, np.full(X.size, np.nan))
    items = [item(profile.name, profile) for profile in [*profiles[:3], bad, *profiles[3:]]]
    with FitPool(2, OPTIONS, False) as pool:
        calls, _, results = go(items, worker=own_fit, pool=pool)
    alone = [fit_profile(profile, OPTIONS, with_choices=False) for profile in profiles]
    for pooled, own in zip(results, alone):
        assert pooled.best.bent.problem.profile.name == own.best.bent.problem.profile.name
        assert pooled.best.thickness.value == pytest.approx(own.best.thickness.value, rel=1e-9)
    kinds = [call[0] for call in calls]
    assert kinds == ["open", "write", "write", "write", "failed", "write", "write", "write", "flush", "discard"]
    assert calls[4][1:] == ("bad", "bad: the DEM has no value anywhere along the line.")


def test_workers_end_with_the_pool():
    """No process is left, also after a cancel with work under way."""
    feedback = Told()
    with pytest.raises(Cancelled), FitPool(2, OPTIONS, True) as pool:
        def sample(number, progress):
            if number == 3:
                feedback.cancel()
            progress(0.0)
            return None, trench(str(number), 20e3)

        items = [Item(str(number), partial(sample, number)) for number in range(8)]
        go(items, feedback, worker=own_fit, pool=pool)
    assert all(process.poll() is not None for process in pool._all)


def test_a_python_is_found_for_workers(monkeypatch, tmp_path):
    """Inside a window sys.executable may be QGIS: then the one beside it, or on PATH, is taken."""
    assert python_program() is not None
    monkeypatch.setattr(sys, "executable", "/usr/bin/qgis")
    found = python_program()
    assert found is not None
    assert "python" in found.lower()


def test_names_of_items_may_be_anything():
    """Numbers and empty names stay text."""
    calls, _, _ = go([item("", "one"), item("7", "bad")])
    assert ("failed", "7", "bad: it cannot be bent.") in calls


@pytest.mark.parametrize("name", ["open", "failed", "flush", "discard"])
def test_the_stand_in_is_true_to_the_real_sinks(name):
    """Outputs takes the same arguments."""
    from inspect import signature

    from downwarp_checkout.plugin.bridge.outputs import Outputs

    arguments = {"open": [()], "failed": ["PROFILES", "a", "why"]}
    signature(getattr(Outputs, name)).bind(None, *arguments.get(name, []))
