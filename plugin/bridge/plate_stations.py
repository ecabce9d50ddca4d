"""Bent plates read back from the STATIONS of an earlier run: a point layer, or a plain table."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import Any

import numpy as np
from qgis.core import QgsFeatureSource

from ..core.errors import DownwarpError
from ..core.stated import PlateStations
from ..core.wording import say
from .keys import Values
from .outputs import Track
from .picks import number_of
from .runs import Item, Progress
from .stations import fields_in_use, has_places

COLUMNS = {
    "deflection_m": "deflection", "te_km": "thickness", "curvature_per_m": "curvature", "dem_m": "relief",
    "predicted_m": "predicted", "observed_m": "observed", "sigma_m": "sigma", "in_fit": "in_fit", "load_mpa": "load",
    "infill_kg_m3": "infill", "slope": "slope", "moment_n": "moment", "shear_n_per_m": "shear",
}  # fmt: skip
"""Fields of STATIONS and what core calls them."""
UNITS = {"te_km": 1e3, "load_mpa": 1e6}
"""Factors to SI units, where they are not 1."""


def plate_fields(values: Values, source: QgsFeatureSource, needed: tuple[str, ...]) -> tuple[str, str | None]:
    """Fields of the distance and of the transect's name (None without); ``needed``: fields that INPUT must have."""
    found = fields_in_use(values, source, ("DISTANCE", "TRANSECT_FIELD"))
    for name in needed:
        if source.fields().lookupField(name) < 0:
            raise DownwarpError(
                "INPUT has no field {name!r}; it takes the STATIONS of fittransects or bendtransects.", name=name
            )
    return found["DISTANCE"], found.get("TRANSECT_FIELD")


def plate_items(
    source: QgsFeatureSource,
    fields: tuple[str, str | None],
    wrap: Callable[[PlateStations, Track | None, Progress], Any],
) -> list[Item]:
    """The transects of INPUT in order of appearance; ``wrap`` makes of each what is to be worked on."""
    distance, transect = fields
    names = [name for name in COLUMNS if source.fields().lookupField(name) >= 0]
    located = has_places(source)
    groups: dict[str, list[list[float]]] = {}
    reasons: dict[str, str] = {}
    for feature in source.getFeatures():
        name = str(feature[transect]) if transect is not None else "1"
        group = groups.setdefault(name, [])
        try:
            row = [
                number_of(feature[each], say("Transect {name}: field {field}", name=name, field=each))
                for each in (distance, *names)
            ]
        except DownwarpError as error:
            reasons.setdefault(name, error.message)
            continue
        point = next(feature.geometry().vertices(), None) if located and feature.hasGeometry() else None
        group.append([*row, point.x(), point.y()] if point is not None else [*row, np.nan, np.nan])
    return [Item(name, partial(_read, name, names, group, reasons.get(name), wrap)) for name, group in groups.items()]


def _read(name: str, names: list[str], group: list[list[float]], reason: str | None, wrap, progress: Progress):
    progress(0.0)
    if reason is not None:
        raise DownwarpError(reason)
    table = np.array(group)
    table = table[np.isfinite(table[:, 0])]
    table = table[np.argsort(table[:, 0], kind="stable")]
    if len(table) < 2:
        raise DownwarpError(
            "Transect {name} has {count} stations with a distance; it takes at least 2.", name=name, count=len(table)
        )
    distance = table[:, 0] * 1e3
    repeated = table[1:, 0][np.diff(distance) <= 0]
    if repeated.size:
        raise DownwarpError(
            "Transect {name} has two stations at distance {distance:g} km (DISTANCE); it takes one each, and "
            "TRANSECT_FIELD where INPUT holds several transects.",
            name=name,
            distance=repeated[0],
        )
    nowhere = np.full(distance.shape, np.nan)
    columns = dict.fromkeys(COLUMNS.values(), nowhere)
    for place, each in enumerate(names, 1):
        columns[COLUMNS[each]] = table[:, place] * UNITS.get(each, 1.0)
    track = Track(distance, table[:, -2], table[:, -1]) if np.isfinite(table[:, -2:]).all() else None
    return track, wrap(PlateStations(name, distance, **columns), track, progress)
