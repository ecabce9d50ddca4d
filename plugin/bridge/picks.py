"""Picks of the bent surface: read once, then laid onto each transect that they are near to."""

from __future__ import annotations

import numpy as np
from qgis.core import NULL, QgsFeatureSource

from ..core.errors import DownwarpError
from ..core.profile import Picks
from ..core.transect import Transect
from ..core.wording import say
from .frames import Frame, transformed, transformer


def number_of(value, what: str) -> float:
    """A field's value as a number, NaN where it is NULL; ``what`` names it in the error."""
    if value in (None, NULL, ""):
        return float("nan")
    try:
        return float(value)
    except (TypeError, ValueError):
        raise DownwarpError("{what} holds {value!r}; it takes numbers.", what=what, value=value) from None


class PickReader:
    """The picks of a point layer."""

    def __init__(self, source: QgsFeatureSource, frame: Frame, elevation: str, sigma: str | None, reach: float) -> None:
        """``elevation``, ``sigma``: names of fields, m up and m; ``reach``: m from the line up to which picks count."""
        rows = []
        for feature in source.getFeatures():
            geometry = feature.geometry()
            if geometry.isNull() or geometry.isEmpty():
                continue
            spread = (
                number_of(feature[sigma], say("{key} field {field}", key="PICK_SIGMA", field=sigma))
                if sigma
                else float("nan")
            )
            height = number_of(feature[elevation], say("{key} field {field}", key="PICK_ELEVATION", field=elevation))
            rows += [(point.x(), point.y(), height, spread) for point in geometry.vertices()]
        if not rows:
            raise DownwarpError("PICKS holds no point.")
        x, y, self._elevation, self._sigma = np.array(rows).T
        if (self._sigma < 0).any():
            raise DownwarpError(
                "PICK_SIGMA field {sigma} holds a number below 0; a standard deviation is above it.", sigma=sigma
            )
        own = Frame.of(source.sourceCrs(), "PICKS")
        self._longitude, self._latitude = transformed(transformer(own.crs, frame.geographic, "PICKS"), x, y)
        self._reach = reach

    def on(self, transect: Transect) -> Picks:
        """The picks within reach of a transect, in the order of distance along it."""
        along, across = transect.project(self._longitude, self._latitude)
        near = np.abs(across) <= self._reach
        near &= (along >= 0) & (along <= transect.length) & np.isfinite(self._elevation)
        order = np.nonzero(near)[0][np.argsort(along[near], kind="stable")]
        return Picks(along[order], self._elevation[order], self._sigma[order])
