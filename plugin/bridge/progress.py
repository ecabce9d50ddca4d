"""QGIS feedback as the plain ``progress(fraction)`` callable that core takes."""

from __future__ import annotations

from collections.abc import Callable

from qgis.core import QgsFeedback

from ..core.errors import Cancelled


def progress_of(feedback: QgsFeedback, start: float = 0.0, end: float = 1.0) -> Callable[[float], None]:
    """A callable that reports a fraction of the stretch from ``start`` to ``end`` and raises Cancelled on request."""

    def progress(fraction: float) -> None:
        if feedback.isCanceled():
            raise Cancelled
        feedback.setProgress(100.0 * (start + (end - start) * fraction))

    return progress
