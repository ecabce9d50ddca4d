"""Works through the transects of one run: one that fails is reported and does not stop the rest.

Finished transects wait in a temporary file until all are done, and only then are the sinks made: memory does not grow
with their number, and a run that is cancelled or fails leaves no layer behind, and files of an earlier run as they
were.
"""

from __future__ import annotations

import pickle
import tempfile
import time
from collections import deque
from collections.abc import Callable, Generator, Iterable, Iterator
from concurrent.futures import Future, wait
from dataclasses import dataclass
from functools import partial
from typing import Any

from ..core.errors import Cancelled, DownwarpError
from ..core.profile import Profile
from ..core.wording import say
from ..translation import tr, translated
from .outputs import Outputs, Track
from .progress import progress_of
from .workers import FitPool

Progress = Callable[[float], None]

SAMPLING_SHARE = 0.3
"""Part of a transect's progress that sampling takes."""
WRITING_SHARE = 0.05
"""Part of a run's progress that writing takes."""
IN_FLIGHT = 3
"""Transects, for each process that fits, that are sampled but not yet kept."""
LOOK_EVERY = 0.2
"""Time, s, between looks at whether the run was cancelled."""
TELL_EVERY = 5.0
"""Time, s, between words on how long it will take."""
ROW_PER_TRANSECT = frozenset({"PROFILES", "CHECKS", "EVIDENCE", "VERDICTS", "AGES"})
"""Outputs that have a row for every transect, also for one that failed."""


@dataclass(frozen=True)
class Item:
    """A transect to be worked on."""

    name: str
    sample: Callable[[Progress], tuple[Track | None, Profile]]
    """Returns where the stations lie and what was sampled; raises DownwarpError."""


class Finished:
    """What became of each transect, in order, kept in a temporary file."""

    def __init__(self) -> None:
        # Read again after the run; it is gone with this object.
        self._file = tempfile.TemporaryFile(prefix="downwarp")  # noqa: SIM115
        self.count = 0
        """Transects that were worked on to the end."""
        self.failures: list[tuple[str, str]] = []
        """Names of those that failed, and why."""

    def close(self) -> None:
        """Give the temporary file back."""
        self._file.close()

    def add(self, track: Track | None, result: Any) -> None:
        """Keep a result."""
        self._keep((track, result, "", ""))
        self.count += 1

    def add_failure(self, name: str, why: str) -> None:
        """Keep the reason why there is no result."""
        self._keep((None, None, name, why))
        self.failures.append((name, why))

    def _keep(self, entry: tuple) -> None:
        pickle.dump(entry, self._file, protocol=pickle.HIGHEST_PROTOCOL)

    def entries(self) -> Iterator[tuple[Track | None, Any, str, str]]:
        """Track and result of each transect, or None with its name and the reason why it failed."""
        self._file.seek(0)
        for _ in range(self.count + len(self.failures)):
            yield pickle.load(self._file)

    def results(self) -> Iterator[Any]:
        """The results alone."""
        return (result for _, result, _, why in self.entries() if not why)


def run_each(
    outputs: Outputs,
    names: tuple[str, ...],
    items: Iterable[Item],
    count: int,
    feedback,
    work: Callable[[Profile, Progress], Any],
    write: Callable[[Outputs, Any, Track | None], None],
    finish: Callable[[Finished, Progress], None] | None = None,
    pool: FitPool | None = None,
) -> Finished:
    """Sample each of ``count`` items and ``work`` on it, here and in a ``pool``, which must come to the same, then
    ``write`` all into the sinks.

    Failed transects are rows of PROFILES or CHECKS, whichever is among the sinks ``names``, with the reason in their
    remarks. ``items`` that are made one by one are closed in the end. ``finish``: what is to be done when all is written
    and nothing has found its place yet.
    Raises DownwarpError where all fail, and Cancelled.
    """
    finished = Finished()
    try:
        _work_through(finished, items, count, feedback, work, pool)
        if not finished.count:
            raise DownwarpError(_all_failed(finished.failures))
        _write_all(finished, outputs, names, feedback, write, finish)
    except BaseException:
        finished.close()
        raise
    finally:
        # What reads features keeps a connection to their file, of which QGIS has few: left to the exception that ends a
        # cancelled run, they would run out.
        if isinstance(items, Generator):
            items.close()
    return finished


@dataclass
class _Waiting:
    """A transect whose result is not kept yet."""

    name: str
    track: Track | None
    profile: Profile | None
    """None where it could not be sampled."""
    answer: Future


def _work_through(
    finished: Finished,
    items: Iterable[Item],
    count: int,
    feedback,
    work: Callable[[Profile, Progress], Any],
    pool: FitPool | None,
) -> None:
    """Sample items, work on them, and keep what comes of each in order.

    With a pool this process does what it would have to wait for.
    """
    clock = _Clock(feedback, count)
    waiting: deque[_Waiting] = deque()
    room = 0 if pool is None else IN_FLIGHT * (pool.workers + 1)

    def settle() -> None:
        """Keep the results that are there, as far as none before them is missing."""
        while waiting and waiting[0].answer.done():
            first = waiting.popleft()
            try:
                finished.add(first.track, first.answer.result())
            except DownwarpError as error:
                finished.add_failure(first.name, error.message)
                feedback.pushWarning(translated(error.message))
            clock.tell(finished.count + len(finished.failures))

    def help_out() -> None:
        """Work on the transect that would come last, or wait where all are under way."""
        still = clock.share(finished.count + len(finished.failures))
        for each in reversed(waiting):
            if each.profile is not None and each.answer.cancel():
                each.answer = _here(partial(work, each.profile, progress_of(feedback, still, still)))
                return
        _patient(waiting[0].answer, feedback)

    for index, item in enumerate(items):
        done = finished.count + len(finished.failures)
        start, end = clock.share(done), clock.share(index + 1 if pool is None else done)
        middle = start + SAMPLING_SHARE * (end - start)
        sampled = _here(partial(item.sample, progress_of(feedback, start, middle)))
        if sampled.exception() is not None:
            waiting.append(_Waiting(item.name, None, None, sampled))
        else:
            track, profile = sampled.result()
            if pool is None:
                answer = _here(partial(work, profile, progress_of(feedback, middle, end)))
            else:
                answer = pool.submit(profile)
            waiting.append(_Waiting(item.name, track, profile, answer))
        settle()
        while len(waiting) > room:
            help_out()
            settle()
    while waiting:
        help_out()
        settle()


def _here(call: Callable[[], Any]) -> Future:
    """What ``call`` comes to, or the reason why it comes to nothing, as of another process; anything else is raised."""
    answer: Future = Future()
    try:
        answer.set_result(call())
    except DownwarpError as error:
        answer.set_exception(error)
    return answer


def _patient(answer: Future, feedback) -> None:
    """Wait for an answer, with an eye on the cancel button."""
    while not answer.done():
        if feedback.isCanceled():
            raise Cancelled
        wait((answer,), timeout=LOOK_EVERY)


def _write_all(finished: Finished, outputs: Outputs, names: tuple[str, ...], feedback, write, finish) -> None:
    end = 1.0 if finish is None else 1.0 - 0.5 * WRITING_SHARE
    progress = progress_of(feedback, 1.0 - WRITING_SHARE, end)
    progress(0.0)
    total = finished.count + len(finished.failures)
    try:
        outputs.open(names)
        for done, (track, result, name, why) in enumerate(finished.entries(), 1):
            if not why:
                write(outputs, result, track)
            else:
                for sink in ROW_PER_TRANSECT.intersection(names):
                    outputs.failed(sink, name, why)
            progress(done / total)
        if finish is not None:
            finish(finished, progress_of(feedback, end, 1.0))
            progress_of(feedback, end, 1.0)(1.0)
        for words in outputs.flush():
            feedback.pushWarning(words)
    finally:
        outputs.discard()


class _Clock:
    """How far a run has come, and how long it will take."""

    def __init__(self, feedback, count: int) -> None:
        self._feedback, self._count = feedback, max(count, 1)
        self._start = self._told = time.monotonic()

    def share(self, done: int) -> float:
        """The fraction of the run's progress after ``done`` transects."""
        return (1.0 - WRITING_SHARE) * min(done / self._count, 1.0)

    def tell(self, done: int) -> None:
        """Show progress, and now and then the time that is left."""
        self._feedback.setProgress(100.0 * self.share(done))
        now = time.monotonic()
        if now - self._told >= TELL_EVERY and done < self._count:
            self._told = now
            left = (now - self._start) / done * (self._count - done)
            minutes, seconds = divmod(round(left), 60)
            self._feedback.setProgressText(
                tr(
                    "{done} of {count} transects; about {minutes} min {seconds} s left",
                    done=done,
                    count=self._count,
                    minutes=minutes,
                    seconds=seconds,
                )
            )


def _all_failed(failures: list[tuple[str, str]]) -> str:
    if not failures:
        return say("There is no transect: the input holds no feature.")
    if len(failures) == 1:
        return failures[0][1]
    return say(
        "None of the {count} transects could be worked on; the first: {why}", count=len(failures), why=failures[0][1]
    )
