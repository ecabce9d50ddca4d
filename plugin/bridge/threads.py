"""What a thread of QGIS must do before it uses pyproj."""

from __future__ import annotations

from pyproj.crs import Ellipsoid

_KEPT: list[Ellipsoid] = []


def ready_pyproj() -> None:
    """Keep the current thread's PROJ context alive: call this first in whatever runs off the main thread.

    pyproj 3.7 has one context per thread of the operating system, but destroys it when Python's own state of the thread
    ends. A thread of QGIS lives on in its pool while each task gets a new Python state, so that the next task to use
    pyproj there would meet a destroyed context and crash QGIS. An ellipsoid, which is small, holds on to the context.
    """
    _KEPT.append(Ellipsoid.from_epsg(7030))
