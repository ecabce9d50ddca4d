"""One thread of linear algebra while a fit runs, so that its answer does not depend on how many the machine offers.

A library that shares a product or a factorisation out among threads adds in another order and rounds otherwise: the
same fit then differs from the tenth digit on between two machines, and between this process and a worker.
"""

from __future__ import annotations

import contextlib
import ctypes
import functools
import threading
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import NamedTuple

import numpy as np
import scipy.linalg.lapack

_NAMES = (
    *(
        (f"{prefix}openblas_set_num_threads{suffix}", f"{prefix}openblas_get_num_threads{suffix}")
        for prefix in ("", "scipy_")
        for suffix in ("", "64_")
    ),
    ("MKL_Set_Num_Threads", "MKL_Get_Max_Threads"),
)
"""What sets the number of threads and what tells it, as OpenBLAS and MKL may call them."""


class _Switch(NamedTuple):
    set_number: Callable[[int], None]
    number: Callable[[], int]


class _State:
    """How many fits run, and the numbers of threads from before the first of them."""

    lock = threading.Lock()
    running = 0
    before: tuple[int, ...] = ()


@contextlib.contextmanager
def one_thread() -> Iterator[None]:
    """Let numpy and scipy use one thread of linear algebra; what was before comes back with the last to leave.

    Does nothing where the library is neither OpenBLAS nor MKL.
    """
    switches = _switches()
    with _State.lock:
        if not _State.running:
            _State.before = tuple(switch.number() for switch in switches)
        _State.running += 1
        for switch in switches:
            switch.set_number(1)
    try:
        yield
    finally:
        with _State.lock:
            _State.running -= 1
            if not _State.running:
                for switch, number in zip(switches, _State.before):
                    switch.set_number(number)


@functools.cache
def _switches() -> tuple[_Switch, ...]:
    """One for each library of linear algebra in use: numpy and scipy may have brought their own."""
    found: dict[int | None, _Switch] = {}
    for path in _places():
        try:
            library = ctypes.CDLL(path)
        except OSError:
            continue
        for set_name, get_name in _NAMES:
            if hasattr(library, set_name) and hasattr(library, get_name):
                set_number, number = library[set_name], library[get_name]
                set_number.argtypes, set_number.restype = [ctypes.c_int], None
                number.argtypes, number.restype = [], ctypes.c_int
                found[ctypes.cast(set_number, ctypes.c_void_p).value] = _Switch(set_number, number)
    return tuple(found.values())


def _places() -> Iterator[str]:
    """Files in which to look: modules that were linked with the library, whose names are found through them, and on
    Windows, where they are not, the libraries that lie beside the packages."""
    for module in (np.linalg._umath_linalg, scipy.linalg.lapack._flapack):
        if module.__file__ is not None:
            yield module.__file__
    for package in (np, scipy):
        beside = Path(package.__file__).parent.with_suffix(".libs")
        yield from (str(each) for each in sorted(beside.glob("*openblas*.dll")))
