"""Fits profiles in processes beside this one, for a fit keeps Python busy and threads would take turns.

A fit takes one thread of linear algebra, here as there, so that results do not depend on how many processes there are.
"""

from __future__ import annotations

import os
import pickle
import queue
import shutil
import subprocess
import sys
from concurrent.futures import Future, ThreadPoolExecutor
from contextlib import suppress
from pathlib import Path
from typing import Any

from ..core import worker
from ..core.errors import DownwarpError
from ..core.profile import Profile
from ..core.settings import FitOptions

LEAST_TRANSECTS = 6
"""Transects from which on starting workers pays."""


def python_program() -> str | None:
    """A Python like the one that runs QGIS; inside QGIS ``sys.executable`` may be QGIS itself."""
    own = Path(sys.executable or "")
    beside = Path(sys.prefix) / ("python.exe" if os.name == "nt" else "bin/python3")
    for candidate in (own, beside):
        if candidate.name.lower().startswith("python") and candidate.exists():
            return str(candidate)
    return shutil.which("python3")


class FitPool:
    """A number of worker processes; use it in a ``with`` statement."""

    def __init__(self, workers: int, options: FitOptions, with_choices: bool) -> None:
        self.workers = workers
        self._fixed = (options, None, with_choices)
        self._threads = ThreadPoolExecutor(workers)
        self._idle: queue.Queue[subprocess.Popen] = queue.Queue()
        self._all = [_start() for _ in range(workers)]
        for process in self._all:
            self._idle.put(process)

    def __enter__(self) -> FitPool:
        return self

    def __exit__(self, *error: object) -> None:
        for process in self._all:
            process.kill()
        self._threads.shutdown(wait=True, cancel_futures=True)
        for process in self._all:
            process.wait()
            for stream in (process.stdin, process.stdout):
                if stream is not None:
                    # A job that the worker will not read any more breaks the pipe as it is flushed.
                    with suppress(OSError):
                        stream.close()

    def submit(self, profile: Profile) -> Future:
        """Ask for a fit; the future yields its FitResult or raises DownwarpError, and is cancelled until it starts."""
        return self._threads.submit(self._fit, profile)

    def _fit(self, profile: Profile) -> Any:
        process = self._idle.get()
        try:
            if process.stdin is None or process.stdout is None:
                raise RuntimeError("A worker has no pipes.")
            pickle.dump((profile, *self._fixed), process.stdin, protocol=pickle.HIGHEST_PROTOCOL)
            process.stdin.flush()
            word, answer = pickle.load(process.stdout)
        finally:
            self._idle.put(process)
        if word == "failed":
            raise DownwarpError(answer)
        if word == "broken":
            raise RuntimeError(f"Transect {profile.name} broke a worker:\n{answer}")
        return answer


def _start() -> subprocess.Popen:
    program = python_program()
    if program is None:
        raise DownwarpError("No Python program was found for the workers; set WORKERS to 1.")
    package = __package__.rpartition(".plugin")[0]
    folder = Path(worker.__file__).resolve().parents[2]
    environment = {**os.environ, "OPENBLAS_NUM_THREADS": "1", "OMP_NUM_THREADS": "1", "MKL_NUM_THREADS": "1"}
    environment["PYTHONPATH"] = os.pathsep.join(path for path in sys.path if path)
    return subprocess.Popen(
        [program, str(Path(worker.__file__).resolve()), package, str(folder)],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        env=environment,
    )
