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
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import Future, TimeoutError
from dataclasses import dataclass
from functools import partial
from typing import Any

from ..core.errors import Cancelled, DownwarpError
from ..core.profile import Profile
from .keys import tr
from .outputs import Outputs, Track
from .progress import progress_of
from .workers import FitPool

Progress = Callable[[float], None]

SAMPLING_SHARE = 0.3
"""Part of a transect's progress that sampling takes."""
WRITING_SHARE = 0.05
"""Part of a run's progress that writing takes."""
IN_FLIGHT = 3
"""Transects, for each worker, that are sampled but not yet fitted."""
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
    work: Callable[[Profile, Progress], Any] | FitPool,
    write: Callable[[Outputs, Any, Track | None], None],
) -> Finished:
    """Sample each of ``count`` items and ``work`` on it, here or in a pool, then ``write`` all into the sinks.

    Failed transects are rows of PROFILES or CHECKS, whichever is among the sinks ``names``, with the reason in their
    remarks.
    Raises DownwarpError where all fail, and Cancelled.
    """
    finished = Finished()
    clock = _Clock(feedback, count)
    pool = work if isinstance(work, FitPool) else None
    waiting: deque[tuple[str, Track | None, Future]] = deque()

    def settle(name: str, track: Track | None, answer: Callable[[], Any]) -> None:
        try:
            finished.add(track, answer())
        except DownwarpError as error:
            finished.add_failure(name, str(error))
            feedback.pushWarning(str(error))
        clock.tell(finished.count + len(finished.failures))

    for index, item in enumerate(items):
        start, end = clock.share(index), clock.share(index + 1)
        middle = start + SAMPLING_SHARE * (end - start)
        sampling = progress_of(feedback, start, middle if pool is None else start)
        sampling(0.0)
        try:
            track, profile = item.sample(sampling)
        except DownwarpError as error:
            # Through the queue, so that order is kept.
            failed: Future = Future()
            failed.set_exception(error)
            waiting.append((item.name, None, failed))
        else:
            if not isinstance(work, FitPool):
                settle(item.name, track, partial(work, profile, progress_of(feedback, middle, end)))
                continue
            waiting.append((item.name, track, work.submit(profile)))
        while waiting and (pool is None or len(waiting) >= IN_FLIGHT * pool.workers):
            name, track, future = waiting.popleft()
            settle(name, track, partial(_patient, future, feedback))
    while waiting:
        name, track, future = waiting.popleft()
        settle(name, track, partial(_patient, future, feedback))
    if not finished.count:
        raise DownwarpError(_all_failed(finished.failures))
    _write_all(finished, outputs, names, feedback, write)
    return finished


def _patient(future: Future, feedback) -> Any:
    """The future's result, with an eye on the cancel button."""
    while True:
        if feedback.isCanceled():
            raise Cancelled
        try:
            return future.result(timeout=LOOK_EVERY)
        except TimeoutError:
            continue


def _write_all(finished: Finished, outputs: Outputs, names: tuple[str, ...], feedback, write) -> None:
    progress = progress_of(feedback, 1.0 - WRITING_SHARE, 1.0)
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
            words = tr("{done} of {count} transects; about {minutes} min {seconds} s left")
            minutes, seconds = divmod(round(left), 60)
            self._feedback.setProgressText(words.format(done=done, count=self._count, minutes=minutes, seconds=seconds))


def _all_failed(failures: list[tuple[str, str]]) -> str:
    if not failures:
        return "There is no transect: the input holds no feature."
    if len(failures) == 1:
        return failures[0][1]
    return f"None of the {len(failures)} transects could be worked on; the first: {failures[0][1]}"
